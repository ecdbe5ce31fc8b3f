"""Cost of the at-site kernels as ratios to a floor, or to what a careful user would write, within one run.

Run: ``OPENBLAS_NUM_THREADS=1 python tests/benchmarks/bench_at_site.py`` (about two minutes). Variants are interleaved,
process CPU time, median of the repeats with the smallest and largest ratio.
"""

from __future__ import annotations

import time
import warnings
from collections.abc import Callable, Iterator
from typing import Any

import numpy as np
from scipy.integrate import quad
from scipy.special import betaincinv, gammainc, gammaln, ndtr, ndtri
from scipy.stats import CensoredData, nct
from scipy.stats import pearson3 as scipy_pearson3

from wrackline.hydrology.at_site import fit_records
from wrackline.hydrology.at_site_bootstrap import draw_samples
from wrackline.hydrology.records import exact_records
from wrackline.stats.censored_sample import CensoredSample, compress_sample
from wrackline.stats.expected_moments import fit_expected_moments
from wrackline.stats.low_outliers import _nodes, approximate_low_outlier_p
from wrackline.stats.moment_covariance import group_thresholds
from wrackline.stats.pearson3 import frequency_factor
from wrackline.stats.streams import random_stream

Row = dict[str, Any]


def cpu(work: Callable[[], object]) -> float:
    start = time.process_time()
    work()
    return time.process_time() - start


def ratios(work: Callable[[], object], floor: Callable[[], object], repeats: int = 7) -> list[float]:
    """Median, smallest and largest ratio of CPU times, the two interleaved."""
    work(), floor()
    found = sorted(cpu(work) / max(np.mean([cpu(floor) for _ in range(3)]), 1e-7) for _ in range(repeats))
    return [float(np.median(found)), found[0], found[-1]]


def row(kernel: str, size: str, floor: str, found: list[float], target: str, scale: float = 1.0) -> Row:
    """One line of the table."""
    median, low, high = (scale * x for x in found)
    return {
        "kernel": kernel,
        "size": size,
        "floor": floor,
        "ratio": median,
        "ratio_min": low,
        "ratio_max": high,
        "target": target,
    }


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


def measure_fits() -> Iterator[Row]:
    thousand, skew, rows = censored_records(1000)
    floor = incomplete_gammas(thousand, skew)
    found = ratios(lambda: fit_expected_moments(thousand), floor)
    yield row("expected moments", "1,000 gauges", "one incomplete gamma a threshold", found, "at most 100")
    own, low, high = rows
    cut = np.searchsorted(own, np.arange(51))

    def loop() -> None:
        for i in range(50):
            loop_fit(low[cut[i] : cut[i + 1]], high[cut[i] : cut[i + 1]])

    found = ratios(loop, lambda: fit_expected_moments(thousand), 5)
    yield row("loop over gauges", "50, scaled to 1,000", "expected moments", found, "at least 50", 20)
    batch, skew, _ = censored_records(10_000)
    found = ratios(lambda: fit_expected_moments(batch), lambda: fit_expected_moments(thousand))
    exponent = [float(np.log10(x)) for x in found]
    yield row("growth exponent", "10,000 gauges", "1,000 gauges", exponent, "at most 1.05")
    first, known = slice(0, cut[1]), np.isfinite(low[: cut[1]])
    data = CensoredData(uncensored=low[first][known], left=high[first][~known])
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        found = ratios(lambda: scipy_pearson3.fit(data), lambda: fit_expected_moments(thousand), 3)
    yield row(
        "likelihood fit of scipy", "1, scaled to 1,000", "expected moments", found, "at least 5,000", 1000
    )
    settled = int(fit_expected_moments(batch).converged.sum())
    yield row("fits that settled", "10,000 gauges", "all", [settled / 10_000] * 3, "1")


def measure_low_outliers() -> Iterator[Row]:
    def ours() -> None:
        for k in range(10, 20):
            approximate_low_outlier_p(60, k, -2.1)

    def ours_afresh() -> None:
        _nodes.cache_clear()
        ours()

    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        found = ratios(lambda: careful_p(60, 10, -2.1), ours, 5)
        afresh = ratios(lambda: careful_p(60, 10, -2.1), ours_afresh, 5)
    yield row("adaptive quadrature", "one p-value", "ours, sample size seen before", found, "at least 15", 10)
    yield row("adaptive quadrature", "one p-value", "ours, first of its size", afresh, "at least 15", 10)
    eta = -np.geomspace(0.2, 100, 40)
    bad = sum(
        not np.isfinite(approximate_low_outlier_p(n, k, eta)).all()
        for n in range(10, 201)
        for k in range(1, n // 2 + 1, 3)
    )
    yield row("p-values not a number", "10 to 200 years", "none", [float(bad)] * 3, "0")


def measure_bootstrap() -> Iterator[Row]:
    stream = random_stream(1, "bench_bootstrap")
    n, replicates = 60, 1000
    x = 3 + 0.3 * frequency_factor(stream.random(n), 0.4)
    base = float(np.quantile(x, 0.2))
    classes = group_thresholds(np.zeros(n, dtype=int), np.full(n, base), np.full(n, np.inf), 1)

    def ours() -> object:
        samples = draw_samples(classes, 3.0, 0.3, 0.4, replicates, stream)
        return fit_expected_moments(samples, tolerance=1e-4, parent=(3.0, 0.3, 0.4))

    found = ratios(ours, lambda: stream.standard_gamma(25.0, size=(replicates, n)), 11)
    yield row("bootstrap, 20 % censored", "1,000 replicates", "drawing the gammas", found, "at most 6")

    def loop() -> None:
        for _ in range(25):
            y = 3 + 0.06 * (stream.standard_gamma(25.0, size=n) - 25)
            loop_fit(np.where(y < base, -np.inf, y), np.maximum(y, base))

    found = ratios(loop, ours, 5)
    yield row("loop over replicates", "25, scaled to 1,000", "bootstrap", found, "at least 40", 40)


def measure_chain() -> Iterator[Row]:
    def chain(gauges: int) -> Callable[[], object]:
        stream = random_stream(1, "bench_chain", str(gauges))
        offsets = np.concatenate([[0], np.cumsum(stream.integers(20, 101, gauges))])
        x = 10 ** (3 + 0.3 * frequency_factor(stream.random(offsets[-1]), 0.1))
        records = exact_records([str(i) for i in range(gauges)], offsets, np.arange(len(x)), x)
        return lambda: fit_records(records, 0.1, 0.15)

    found = ratios(chain(4000), chain(500), 3)
    exponent = [float(np.log(x) / np.log(8)) for x in found]
    yield row("whole chain, growth exponent", "4,000 gauges", "500 gauges", exponent, "at most 1.05")


def measure() -> list[Row]:
    """Rows of all at-site kernels."""
    return [*measure_fits(), *measure_low_outliers(), *measure_bootstrap(), *measure_chain()]


if __name__ == "__main__":
    for line in measure():
        print(
            f"{line['kernel']} ({line['size']}): {line['ratio']:.2f} x {line['floor']} "
            f"[{line['ratio_min']:.2f}, {line['ratio_max']:.2f}], target {line['target']}"
        )
