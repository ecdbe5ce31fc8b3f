"""Do the intervals at ungauged sites cover the truth? Regenerates regions whose floods are known.

    python tests/benchmarks/coverage_targets.py --regions 50

Each region is drawn by the example's generator, or by its misspecified twin (parents outside the candidate
distributions, a curved attribute relation, uneven heterogeneity), and taken through the regional analysis in
one process. Printed by AEP and basin size: coverage of the intervals, its standard error (regions, not sites,
are the independent units) and the mean interval score over that of intervals of the same estimates whose
width comes from the true error variance.
"""

from __future__ import annotations

import argparse
import sys
from concurrent.futures import ProcessPoolExecutor
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from scipy.special import ndtri

sys.path.insert(0, str(Path(__file__).parents[2]))

from example_region.region import generate_region
from wrackline.hydrology.attributes import DesignPlan
from wrackline.hydrology.dependence import fit_dependence
from wrackline.hydrology.distances import great_circle_km
from wrackline.hydrology.index_flood import (
    count_common_years,
    fit_index_regression,
    index_sampling_covariance,
    sample_index_floods,
)
from wrackline.hydrology.pools import PoolSettings, analyse_pool
from wrackline.hydrology.ungauged import scale_growth_curve
from wrackline.stats.streams import random_stream

AEPS = (0.5, 0.1, 0.01)
CONFIDENCE = 0.90
PLAN = DesignPlan(("area_km2", "precipitation"), ("log10", "log10"))


@dataclass(frozen=True)
class Trial:
    """One region's targets: arrays (targets, AEPs) of log10 flows, and the targets' areas."""

    truth: np.ndarray
    estimate: np.ndarray
    lower: np.ndarray
    upper: np.ndarray
    area: np.ndarray


def run_trial(job: tuple[int, str]) -> Trial:
    """Draw a region and estimate its targets by index flood and growth curve."""
    seed, kind = job
    region = generate_region(seed, kind, awkward=False)
    gauges, targets, records = region.gauges, region.targets, region.records
    latitude, longitude = gauges["centroid_latitude"].to_numpy(), gauges["centroid_longitude"].to_numpy()
    dependence = fit_dependence(records, latitude, longitude).model
    distance = great_circle_km(latitude[:, None], longitude[:, None], latitude, longitude)
    correlation = dependence.correlation(distance)
    np.fill_diagonal(correlation, 1.0)

    settings = PoolSettings(aep=AEPS, confidence=CONFIDENCE)
    pool_of = gauges["region"].to_numpy()
    relative_sd = np.full(len(gauges), np.nan)
    growth, growth_sd = (np.full((len(targets), len(AEPS)), np.nan) for _ in range(2))
    for name in sorted(set(pool_of)):
        members = np.flatnonzero(pool_of == name)
        pool = analyse_pool(
            records.keep_gauges(members),
            correlation[np.ix_(members, members)],
            settings,
            random_stream(seed, "coverage", name),
        )
        relative_sd[members] = pool.index_relative_sd
        here = (targets["region"] == name).to_numpy()
        growth[here], growth_sd[here] = pool.growth.factor, pool.growth.ln_sd_new_site

    index = sample_index_floods(records, relative_sd)
    covariance = index_sampling_covariance(
        index.log10_variance, count_common_years(records), np.maximum(index.n, 1), correlation
    )
    fit, _ = fit_index_regression(index, PLAN.design(gauges, pool_of), covariance)
    index_log10, index_variance = fit.predict(PLAN.design(targets, targets["region"]))
    estimates = scale_growth_curve(
        index_log10, index_variance, fit.degrees_of_freedom, growth, growth_sd, CONFIDENCE
    )
    return Trial(
        truth=np.log10(region.true_quantile(AEPS)),
        estimate=np.log10(estimates.flow),
        lower=np.log10(estimates.lower),
        upper=np.log10(estimates.upper),
        area=targets["area_km2"].to_numpy(),
    )


def interval_score(truth: np.ndarray, lower: np.ndarray, upper: np.ndarray) -> np.ndarray:
    """Interval score of Gneiting and Raftery (2007, J. Am. Stat. Assoc. 102): width plus penalty for misses."""
    alpha = 1 - CONFIDENCE
    miss = np.maximum(lower - truth, 0) + np.maximum(truth - upper, 0)
    return (upper - lower) + 2 / alpha * miss


def summarise(trials: list[Trial], kind: str) -> None:
    """Print coverage and scores by AEP, for all targets and by thirds of basin size."""
    edges = np.quantile(np.concatenate([t.area for t in trials]), [1 / 3, 2 / 3])
    classes = [("all", lambda a: np.full(len(a), True))] + [
        (name, lambda a, i=i: np.digitize(a, edges) == i) for i, name in enumerate(("small", "middle", "large"))
    ]
    print(f"{kind}: {len(trials)} regions, {sum(len(t.area) for t in trials)} targets; 90 % intervals")
    print(f"  size thirds at {edges[0]:.0f} and {edges[1]:.0f} km2")
    print("  AEP    size    coverage  (s.e.)   bias log10  rmse log10  mean half-width  score / oracle")
    for a, aep in enumerate(AEPS):
        for name, chosen in classes:
            errors = [(t.estimate - t.truth)[chosen(t.area), a] for t in trials]
            pooled = np.concatenate(errors)
            hits = [((t.lower <= t.truth) & (t.truth <= t.upper))[chosen(t.area), a] for t in trials]
            coverage = np.concatenate(hits).mean()
            by_region = np.array([h.sum() - coverage * len(h) for h in hits])
            se = np.sqrt((by_region**2).sum()) / len(pooled)
            reach = -ndtri((1 - CONFIDENCE) / 2) * np.sqrt((pooled**2).mean())
            score, oracle, width = [], [], []
            for t in trials:
                at = chosen(t.area)
                truth, estimate = t.truth[at, a], t.estimate[at, a]
                score.append(interval_score(truth, t.lower[at, a], t.upper[at, a]))
                oracle.append(interval_score(truth, estimate - reach, estimate + reach))
                width.append((t.upper - t.lower)[at, a] / 2)
            ratio = np.concatenate(score).mean() / np.concatenate(oracle).mean()
            print(
                f"  {aep:<6g} {name:<7} {coverage:8.3f}  ({se:.3f})  {pooled.mean():+10.4f}  {pooled.std():10.4f}"
                f"  {np.concatenate(width).mean():15.4f}  {ratio:14.3f}"
            )


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--regions", type=int, default=50, help="regions of each kind")
    parser.add_argument("--cores", type=int, default=2)
    parser.add_argument("--first-seed", type=int, default=1000)
    arguments = parser.parse_args()
    for kind in ("lp3", "misspecified"):
        jobs = [(arguments.first_seed + i, kind) for i in range(arguments.regions)]
        with ProcessPoolExecutor(arguments.cores) as pool:
            summarise(list(pool.map(run_trial, jobs)), kind)


if __name__ == "__main__":
    main()
