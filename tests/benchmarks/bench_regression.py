"""Regression kernels against one Cholesky factoring of the same size, and against refits.

Run: python tests/benchmarks/bench_regression.py
"""

import sys
import time
from itertools import combinations
from pathlib import Path

sys.path.insert(0, str(Path(__file__).parent))

from timing import Ratios, compare  # isort: skip  (before numpy: it asks for one BLAS thread)

import numpy as np
from scipy.linalg import cho_factor, cho_solve
from scipy.optimize import brentq

from wrackline.stats.gls import fit_gls
from wrackline.stats.gls_leave_one_out import leave_one_out, leave_one_out_refitted
from wrackline.stats.subset_search import rank_subsets

Region = tuple[np.ndarray, np.ndarray, np.ndarray]


def make_region(sites: int, attributes: int) -> Region:
    """Log10 floods of invented sites in a square, on a constant and attributes; sampling errors shared by distance."""
    rng = np.random.default_rng(20_241)
    place = rng.uniform(0, 400, (sites, 2))
    distance = np.hypot(*(place[:, None] - place).transpose(2, 0, 1))
    variance = 0.28**2 / rng.integers(10, 80, sites) * 2.5
    sampling = 0.9 * np.exp(-distance / 100) * np.sqrt(np.outer(variance, variance))
    np.fill_diagonal(sampling, variance)
    columns = rng.normal(size=(sites, attributes))
    design = np.column_stack([np.ones(sites), columns])
    slope = np.r_[2.3, 0.65, 0.2, np.zeros(attributes)][: attributes + 1]
    y = design @ slope + rng.normal(0, 0.12, sites) + np.linalg.cholesky(sampling) @ rng.normal(size=sites)
    return y, design, sampling


def fit_by_root_finder(
    y: np.ndarray, design: np.ndarray, sampling: np.ndarray, method: str = "moments"
) -> float:
    """What one would write otherwise: a bracketing root finder with a Cholesky per trial variance."""
    n, k = design.shape

    def excess(variance: float) -> float:
        cover = cho_factor(sampling + variance * np.eye(n), lower=True)
        scores = cho_solve(cover, design)
        residual = y - design @ np.linalg.solve(design.T @ scores, scores.T @ y)
        weighted = cho_solve(cover, residual)
        if method == "moments":
            return float(residual @ weighted) - (n - k)
        inverse = cho_solve(cover, np.eye(n))
        hat = np.linalg.solve(design.T @ scores, scores.T @ scores)
        return float(weighted @ weighted - np.trace(inverse) + np.trace(hat))

    return float(brentq(excess, 0.0, 1.0, xtol=1e-12))


def _row(kernel: str, size: str, ratios: Ratios, peer: str, peer_ratio: float, target: str) -> dict:
    return {
        "kernel": kernel,
        "size": size,
        "floor": "one Cholesky",
        "ratio": ratios.median,
        "ratio_min": ratios.lowest,
        "ratio_max": ratios.highest,
        "peer": peer,
        "peer_ratio": peer_ratio,
        "target": target,
    }


def measure() -> list[dict]:
    """Return one row a kernel: its ratios to the floor and to what a user would otherwise write."""
    rows = []
    y, design, sampling = make_region(2000, 3)
    cover = sampling + 0.0144 * np.eye(2000)
    for method in ("moments", "reml"):
        ratios = compare(lambda: np.linalg.cholesky(cover), lambda m=method: fit_gls(y, design, sampling, m))
        peer = compare(
            lambda m=method: fit_gls(y, design, sampling, m),
            lambda m=method: fit_by_root_finder(y, design, sampling, m),
            rounds=3,
        )
        rows.append(
            _row(
                f"6 GLS with unknown model-error variance, {method}",
                "2,000 sites",
                ratios,
                "a root finder with a Cholesky per trial",
                peer.median,
                "at most 7 x the floor, at least 3.5 x faster than the peer",
            )
        )
    y, design, sampling = make_region(1000, 12)
    cover = sampling + 0.0144 * np.eye(1000)
    ratios = compare(
        lambda: np.linalg.cholesky(cover), lambda: rank_subsets(y, design[:, :1], design[:, 1:], sampling, 12)
    )
    some = [subset for size in (2, 6, 10) for subset in list(combinations(range(12), size))[:7]]
    seconds = _seconds(
        lambda: [fit_by_root_finder(y, design[:, [0, *(j + 1 for j in s)]], sampling) for s in some]
    )
    rows.append(
        _row(
            "6b all 4,095 subsets of 12 attributes",
            "1,000 sites",
            ratios,
            "refits (timed on 21)",
            seconds / len(some) * 4095 / ratios.candidate_seconds,
            "at most 30 x the floor, at least 1,000 x faster than refits",
        )
    )
    y, design, sampling = make_region(1000, 4)
    fit = fit_gls(y, design, sampling)
    fixed = compare(lambda: np.linalg.cholesky(cover), lambda: leave_one_out(y, design, sampling, fit))
    anew = compare(
        lambda: np.linalg.cholesky(cover), lambda: leave_one_out_refitted(y, design, sampling), rounds=5
    )
    some_sites = range(0, 1000, 100)
    refits = _seconds(
        lambda: [_refit_without(i, y, design, sampling, fit.model_variance) for i in some_sites]
    )
    searched = _seconds(lambda: [_refit_without(i, y, design, sampling, None) for i in some_sites])
    rows.append(
        _row(
            "8 leave-one-out, model variance fixed",
            "1,000 sites",
            fixed,
            "refits (timed on 10)",
            refits * 100 / fixed.candidate_seconds,
            "at most 5 x the floor, at least 300 x faster than refits",
        )
    )
    rows.append(
        _row(
            "8 leave-one-out, model variance re-estimated",
            "1,000 sites",
            anew,
            "refits (timed on 10)",
            searched * 100 / anew.candidate_seconds,
            "at most 40 x the floor, at least 500 x faster than refits",
        )
    )
    return rows


def _refit_without(
    site: int, y: np.ndarray, design: np.ndarray, sampling: np.ndarray, variance: float | None
) -> float:
    kept = np.arange(len(y)) != site
    y, design, sampling = y[kept], design[kept], sampling[np.ix_(kept, kept)]
    if variance is None:
        variance = fit_by_root_finder(y, design, sampling)
    cover = cho_factor(sampling + variance * np.eye(len(y)), lower=True)
    scores = cho_solve(cover, design)
    return float(np.linalg.solve(design.T @ scores, scores.T @ y)[0])


def _seconds(call: object) -> float:
    started = time.process_time()
    call()  # type: ignore[operator]
    return time.process_time() - started


if __name__ == "__main__":
    for row in measure():
        print(f"{row['kernel']} ({row['size']})")
        print(f"  {row['ratio']:.2f} x {row['floor']} [{row['ratio_min']:.2f}, {row['ratio_max']:.2f}]")
        print(f"  {row['peer_ratio']:.1f} x faster than {row['peer']}")
        print(f"  target: {row['target']}")
