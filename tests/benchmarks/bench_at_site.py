"""Cost of the at-site kernels as ratios to a floor, or to what a careful user would write, within one run.

Run: ``OPENBLAS_NUM_THREADS=1 python tests/benchmarks/bench_at_site.py`` (about two minutes). Variants are interleaved,
process CPU time, median of the repeats with the smallest and largest ratio.
"""

from __future__ import annotations

import time
import warnings
from collections.abc import Callable

import numpy as np
from scipy.integrate import quad
from scipy.special import betaincinv, gammainc, gammaln, ndtr, ndtri
from scipy.stats import CensoredData, nct
from scipy.stats import pearson3 as scipy_pearson3

from wrackline.hydrology.at_site import fit_records
from wrackline.hydrology.at_site_bootstrap import bootstrap_fit, draw_samples
from wrackline.hydrology.records import exact_records
from wrackline.stats.censored_sample import CensoredSample, compress_sample
from wrackline.stats.expected_moments import fit_expected_moments
from wrackline.stats.low_outliers import approximate_low_outlier_p
from wrackline.stats.moment_covariance import group_thresholds
from wrackline.stats.pearson3 import frequency_factor
from wrackline.stats.streams import random_stream


def cpu(work: Callable[[], object]) -> float:
    start = time.process_time()
    work()
    return time.process_time() - start


def ratios(
    work: Callable[[], object], floor: Callable[[], object], repeats: int = 7
) -> tuple[float, float, float]:
    """Median, smallest and largest ratio of CPU times, the two interleaved."""
    work(), floor()
    found = sorted(cpu(work) / max(np.mean([cpu(floor) for _ in range(3)]), 1e-7) for _ in range(repeats))
    return float(np.median(found)), found[0], found[-1]


def say(name: str, found: tuple[float, float, float], target: str) -> None:
    print(f"{name:62s} {found[0]:9.2f}  ({found[1]:.2f} to {found[2]:.2f})   target {target}", flush=True)


def censored_records(gauges: int) -> tuple[CensoredSample, np.ndarray, tuple[np.ndarray, ...]]:
    """Logarithms of records of 20-100 years, 10-30 % below a base; the sample, its skews, and the rows."""
    stream = random_stream(1, "bench_at_site", str(gauges))
    n, skew = stream.integers(20, 101, gauges), stream.uniform(-0.7, 0.9, gauges)
    own = np.repeat(np.arange(gauges), n)
    x = 3 + 0.3 * frequency_factor(stream.random(len(own)), skew[own])
    base = (3 + 0.3 * frequency_factor(1 - stream.uniform(0.1, 0.3, gauges), skew))[own]
    rows = (own, np.where(x < base, -np.inf, x), np.maximum(x, base))
    return compress_sample(*rows, gauges), skew, rows


def incomplete_gammas(sample: CensoredSample, skew: np.ndarray) -> Callable[[], object]:
    c = 0.5 * skew[sample.class_gauge]
    alpha = c**-2
    y = np.maximum(alpha * (1 - 0.8 * c), 0.0)
    return lambda: gammainc(alpha, y)


def loop_fit(low: np.ndarray, high: np.ndarray) -> tuple[float, float, float]:
    """Expected moments of one gauge as a careful user would write them, with scipy's gamma functions."""
    exact, base = low[np.isfinite(low)], high[np.isinf(low)]
    n, e = len(low), len(exact)
    mu, s, g = exact.mean(), exact.std(ddof=1), 0.1
    for _ in range(2000):
        alpha, beta, xi = 4 / g**2, s * g / 2, mu - 2 * s / g
        sums = np.zeros(3)
        if len(base):
            y = (base[0] - xi) / beta
            p0 = gammainc(alpha, y) if g > 0 else 1 - gammainc(alpha, y)
            raw = [1.0]
            for k in (1, 2, 3):
                rise = np.exp(gammaln(alpha + k) - gammaln(alpha))
                part = gammainc(alpha + k, y)
                raw.append(rise * (part if g > 0 else 1 - part) / p0)
            m1 = xi + beta * raw[1]
            m2 = xi**2 + 2 * xi * beta * raw[1] + beta**2 * raw[2]
            m3 = xi**3 + 3 * xi**2 * beta * raw[1] + 3 * xi * beta**2 * raw[2] + beta**3 * raw[3]
            sums = len(base) * np.array([m1, m2, m3])
        new_mu = (exact.sum() + sums[0]) / n
        second = sums[1] - 2 * new_mu * sums[0] + len(base) * new_mu**2
        third = sums[2] - 3 * new_mu * sums[1] + 3 * new_mu**2 * sums[0] - len(base) * new_mu**3
        var = (e / (e - 1) * ((exact - new_mu) ** 2).sum() + second) / n
        new_g = (e**2 / ((e - 1) * (e - 2)) * ((exact - new_mu) ** 3).sum() + third) / n / var**1.5
        new_s = np.sqrt(var)
        moved = abs(new_mu - mu) + abs(new_s - s) + abs(new_g - g)
        mu, s, g = new_mu, new_s, new_g
        if moved < 1e-10:
            break
    return mu, s, g


def careful_p(n: int, k: int, eta: float) -> float:
    """The approximate low-outlier p-value with adaptive quadrature and scipy's noncentral t."""
    larger = n - k

    def given(u: float) -> float:
        z = ndtri(betaincinv(k, n + 1 - k, u))
        h = np.exp(-0.5 * z * z) / np.sqrt(2 * np.pi) / ndtr(-z)
        e2, e3, e4 = 1 + z * h, (z * z + 2) * h, 3 + (z**3 + 3 * z) * h
        v = e2 - h * h
        mu3 = e3 - 3 * h * e2 + 2 * h**3
        mu4 = e4 - 4 * h * e3 + 6 * h * h * e2 - 3 * h**4
        var_s2 = (mu4 - v * v * (larger - 3) / (larger - 1)) / larger
        shape, scale = v * v / var_s2, var_s2 / v
        es = np.sqrt(scale) * np.exp(gammaln(shape + 0.5) - gammaln(shape))
        var_s = v - es**2
        cov = mu3 / larger / (2 * es)
        lam = cov / var_s
        sigma = np.sqrt(v / larger - cov**2 / var_s)
        return nct.cdf((eta + lam) * np.sqrt(v) / sigma, 2 * shape, (z - h + lam * es) / sigma)

    return quad(given, 0, 1, limit=100)[0]


def bench_fits() -> None:
    thousand, skew, rows = censored_records(1000)
    floor = incomplete_gammas(thousand, skew)
    say(
        "4  1,000 censored fits / one incomplete gamma each",
        ratios(lambda: fit_expected_moments(thousand), floor),
        "<= 100",
    )
    own, low, high = rows
    cut = np.searchsorted(own, np.arange(51))

    def loop() -> None:
        for i in range(50):
            loop_fit(low[cut[i] : cut[i + 1]], high[cut[i] : cut[i + 1]])

    fifty = ratios(loop, lambda: fit_expected_moments(thousand), 5)
    say("4  user's loop (scaled from 50 gauges) / ours", tuple(20 * x for x in fifty), ">= 50")
    batch, skew, _ = censored_records(10_000)
    growth = ratios(lambda: fit_expected_moments(batch), lambda: fit_expected_moments(thousand))
    say("4b growth exponent from 1,000 to 10,000 fits", tuple(np.log10(x) for x in growth), "<= 1.05")
    data = CensoredData(
        uncensored=low[: cut[1]][np.isfinite(low[: cut[1]])], left=high[: cut[1]][np.isinf(low[: cut[1]])]
    )
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        once = ratios(lambda: scipy_pearson3.fit(data), lambda: fit_expected_moments(thousand), 3)
    say(
        "4b scipy's censored likelihood fit (one gauge x 1,000) / ours",
        tuple(1000 * x for x in once),
        ">= 5,000",
    )
    fit = fit_expected_moments(batch)
    print(
        f"   evaluations: median {np.median(fit.iterations):.0f}, largest {fit.iterations.max()}; settled {fit.converged.sum()} of 10,000"
    )


def bench_low_outliers() -> None:
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        found = ratios(
            lambda: careful_p(60, 10, -2.1),
            lambda: [approximate_low_outlier_p(60, 10, -2.1) for _ in range(20)],
            5,
        )
    say("5  careful quadrature with scipy's noncentral t / ours", tuple(20 * x for x in found), ">= 15")
    eta = -np.geomspace(0.2, 100, 40)
    bad = sum(
        int(~np.isfinite(approximate_low_outlier_p(n, k, eta)).all())
        for n in range(10, 201)
        for k in range(1, n // 2 + 1, 3)
    )
    print(f"   p-values that are not numbers, n = 10 to 200: {bad}")


def bench_bootstrap() -> None:
    stream = random_stream(1, "bench_bootstrap")
    n, replicates = 60, 1000
    x = 3 + 0.3 * frequency_factor(stream.random(n), 0.4)
    base = float(np.quantile(x, 0.2))
    classes = group_thresholds(np.zeros(n, dtype=int), np.full(n, base), np.full(n, np.inf), 1)

    def ours() -> object:
        return fit_expected_moments(
            draw_samples(classes, 3.0, 0.3, 0.4, replicates, stream), tolerance=1e-5, parent=(3.0, 0.3, 0.4)
        )

    gammas = ratios(ours, lambda: stream.standard_gamma(25.0, size=(replicates, n)))
    say("9  bootstrap of one censored gauge / drawing its gammas", gammas, "<= 6")

    def loop() -> None:
        for _ in range(25):
            y = 3 + 0.06 * (stream.standard_gamma(25.0, size=n) - 25)
            loop_fit(np.where(y < base, -np.inf, y), np.maximum(y, base))

    say(
        "9  user's loop (scaled from 25 replicates) / ours",
        tuple(40 * x for x in ratios(loop, ours, 5)),
        ">= 40",
    )
    records = exact_records(["g"], np.array([0, n]), np.arange(n), 10**x)
    fits = fit_records(records, 0.1, 0.15)
    print(
        f"   whole bootstrap of one gauge with weighted skew: {1000 * cpu(lambda: bootstrap_fit(fits, 0, 1000, stream)):.0f} ms of CPU"
    )


def bench_chain() -> None:
    stream = random_stream(1, "bench_chain")
    for gauges in (1000, 5000):
        n = stream.integers(20, 101, gauges)
        offsets = np.concatenate([[0], np.cumsum(n)])
        x = 10 ** (3 + 0.3 * frequency_factor(stream.random(offsets[-1]), 0.1))
        records = exact_records([str(i) for i in range(gauges)], offsets, np.arange(len(x)), x)
        print(
            f"   whole chain with weighted skew and limits, {gauges} gauges: {cpu(lambda r=records: fit_records(r, 0.1, 0.15)):.2f} s of CPU"
        )


if __name__ == "__main__":
    bench_fits()
    bench_low_outliers()
    bench_bootstrap()
    bench_chain()
