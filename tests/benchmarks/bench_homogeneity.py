"""Heterogeneity simulation of a pool against drawing and sorting its variates, and against a loop over regions.

Run: python tests/benchmarks/bench_homogeneity.py
"""

import sys
from itertools import count
from pathlib import Path

sys.path.insert(0, str(Path(__file__).parent))

from timing import compare  # isort: skip  (before numpy: it asks for one BLAS thread)

import numpy as np
from scipy.special import ndtr

from wrackline.hydrology.homogeneity import (
    PresortedDraws,
    fit_parent,
    measure_dispersion,
    simulate_concurrent,
    simulate_independent,
)
from wrackline.stats.distributions import kappa

GAUGES, YEARS, REGIONS = 50, 60, 1000
LOOPED_REGIONS = 50
LENGTHS = np.full(GAUGES, YEARS)
CALENDAR = [np.arange(YEARS)] * GAUGES
RAGGED = [np.arange(15 * (i % 3), YEARS) for i in range(GAUGES)]
RAGGED_LENGTHS = np.array([len(years) for years in RAGGED])
PARENT = fit_parent(0.3, 0.22, 0.17)
LOWER = np.linalg.cholesky(np.full((GAUGES, GAUGES), 0.5) + 0.5 * np.eye(GAUGES))
WEIGHTS = np.array(
    [
        [np.prod([(j - m) / (YEARS - m) for m in range(1, r + 1)]) / YEARS for r in range(4)]
        for j in range(1, YEARS + 1)
    ]
)


def measure() -> list[dict]:
    """Return one row a kernel: its ratios to the floor and to what a user would otherwise write."""
    seeds = count(1)
    shared = PresortedDraws(0, REGIONS)

    def draw_and_sort() -> None:
        np.sort(np.random.Generator(np.random.Philox(next(seeds))).random((GAUGES, REGIONS, YEARS)), axis=-1)

    def correlate_and_sort() -> None:
        z = np.random.Generator(np.random.Philox(next(seeds))).standard_normal((GAUGES, REGIONS * YEARS))
        np.sort((LOWER @ z).reshape(GAUGES, REGIONS, YEARS), axis=-1)

    def fresh() -> None:
        analyse_one_pool(PresortedDraws(next(seeds), REGIONS))

    def shared_by_pools() -> None:
        analyse_one_pool(shared)

    def concurrent() -> None:
        rng = np.random.Generator(np.random.Philox(next(seeds)))
        found = simulate_concurrent(rng, CALENDAR, LOWER, PARENT, REGIONS)
        measure_dispersion(LENGTHS, found.lcv, found.lskew, found.lkurtosis)

    def concurrent_ragged() -> None:
        rng = np.random.Generator(np.random.Philox(next(seeds)))
        found = simulate_concurrent(rng, RAGGED, LOWER, PARENT, REGIONS)
        measure_dispersion(RAGGED_LENGTHS, found.lcv, found.lskew, found.lkurtosis)

    size = f"{REGIONS} regions of {GAUGES} gauges and {YEARS} years"
    numpy_loop = f"numpy loop over regions and gauges ({LOOPED_REGIONS} regions, scaled)"
    library_loop = (
        f"loop with multivariate_normal and lmoments3.lmom_ratios ({LOOPED_REGIONS} regions, scaled)"
    )
    kernels = (
        ("3 heterogeneity simulation, fresh draws", draw_and_sort, fresh, loop_independent, numpy_loop, "5 x, 15 x"),
        ("3b the same, draws shared by pools", draw_and_sort, shared_by_pools, loop_independent, numpy_loop, "4 x, 50 x"),
        ("7 correlated simulation to V1-V3", correlate_and_sort, concurrent, loop_correlated, library_loop, "2.5 x, 60 x"),
        ("7 the same, ragged records", correlate_and_sort, concurrent_ragged, loop_correlated, library_loop, "2.5 x, 60 x"),
    )  # fmt: skip
    rows = []
    for name, floor, kernel, loop, peer, target in kernels:
        ratios = compare(floor, kernel, rounds=5)
        looped = compare(kernel, loop, rounds=3)
        rows.append(
            {
                "kernel": name,
                "size": size,
                "floor": "drawing (correlating) and sorting the variates",
                "ratio": ratios.median,
                "ratio_min": ratios.lowest,
                "ratio_max": ratios.highest,
                "peer": peer,
                "peer_ratio": looped.median * REGIONS / LOOPED_REGIONS,
                "target": "at most, at least faster than the peer: " + target,
            }
        )
    return rows


def analyse_one_pool(draws: PresortedDraws) -> None:
    """One pool's heterogeneity simulation: sample ratios of all regions and their dispersion."""
    found = simulate_independent(LENGTHS, PARENT, draws)
    measure_dispersion(LENGTHS, found.lcv, found.lskew, found.lkurtosis)


def loop_independent() -> None:
    """What a careful user writes: a loop over regions and gauges, each sample sorted and weighted by numpy."""
    rng = np.random.default_rng(1)
    for _ in range(LOOPED_REGIONS):
        _measure_region([rng.random(YEARS) for _ in range(GAUGES)])


def loop_correlated() -> None:
    """What a user writes with the libraries at hand: multivariate normals per region, L-moments per gauge."""
    import lmoments3

    rng = np.random.default_rng(1)
    correlation = LOWER @ LOWER.T
    for _ in range(LOOPED_REGIONS):
        z = rng.multivariate_normal(np.zeros(GAUGES), correlation, size=YEARS)
        ratios = []
        for u in ndtr(z.T):
            l1, l2, t3, t4 = lmoments3.lmom_ratios(kappa.quantile(PARENT.parameters, u), nmom=4)
            ratios.append((l2 / l1, t3, t4))
        measure_dispersion(LENGTHS, *np.array(ratios).T)


def _measure_region(uniforms: list[np.ndarray]) -> None:
    ratios = []
    for u in uniforms:
        b = np.sort(kappa.quantile(PARENT.parameters, u)) @ WEIGHTS
        l2 = 2 * b[1] - b[0]
        ratios.append(
            (l2 / b[0], (6 * b[2] - 6 * b[1] + b[0]) / l2, (20 * b[3] - 30 * b[2] + 12 * b[1] - b[0]) / l2)
        )
    measure_dispersion(LENGTHS, *np.array(ratios).T)


if __name__ == "__main__":
    for row in measure():
        print(
            f"{row['kernel']}: {row['ratio']:.2f} x floor ({row['ratio_min']:.2f} to {row['ratio_max']:.2f}), "
            f"{row['peer_ratio']:.0f} x faster than the loop; wanted {row['target']}"
        )
