"""Do generalized skews come with honest errors? Simulated station sets, and regenerated regions of known skew.

    python tests/benchmarks/coverage_skew.py --g3                     simulated station sets, 1,000 of each kind
    python tests/benchmarks/coverage_skew.py --regions 30             regenerated example regions
    python tests/benchmarks/coverage_skew.py --regions 30 --one-level the same, true skews about one level
    python tests/benchmarks/coverage_skew.py --records 24             errors of station skews at their gauges

Station sets: 60 random sites on 400 by 400 km with 25 to 100 years that end together, Pearson III logarithms,
true skews normal about one constant. The analysis knows the true correlation of floods, so that what is judged is the
regression. Acceptable: 88 to 93 % of the 90 % intervals of the constant hold it; its reported variance within
15 % of the simulated one; bias below 0.01; the mean posterior model-error variance between the truth and
the truth plus 0.02 (where the truth is 0.06 or more); the average variance of prediction 0 to 20 % above
the actual one, never more than 5 % below it.

Regions: each is drawn by the example's generator and taken through fits, choice of model and prediction at
its ungauged sites. Printed: how often the true skew of an ungauged site lies within 1.645 root mean square errors (85 to
95 % is acceptable), and the mean interval score over that of intervals of the same estimates whose width comes
from the true errors (at most 1.2). With ``--one-level`` the question is how often another model than the constant
is chosen in vain.

Records: over the gauges of 25 years or more, squared errors of station skews over their variances at the pseudo
record length (1 is right), and their mean error; with the test for low floods and without.

Measured, seeds as they stand: all acceptances of the station sets are met, but that the variance of the constant is reported
18 % too large where true skews do not differ at all (there the posterior mean of the model-error variance, 0.017, cannot
reach zero). Regions: 86 % inside, score 1.11; models other than the constant in 17 of 30. With one level in none, and
99 % inside: true skews that differ by 0.05 only are below what the posterior can resolve. Records: 0.97 and +0.04 with the test
for low floods, which sets small floods apart where there are none to find, 1.03 and 0.00 without.
"""

from __future__ import annotations

import argparse
import sys
from concurrent.futures import ProcessPoolExecutor
from dataclasses import dataclass
from pathlib import Path

import numpy as np

sys.path.insert(0, str(Path(__file__).parents[2]))

from example_region import truth
from example_region.region import generate_region
from wrackline.hydrology.at_site import fit_records
from wrackline.hydrology.dependence import fit_dependence
from wrackline.hydrology.distances import great_circle_km
from wrackline.hydrology.generalized_skew import fit_skew_model, prepare_station_skews
from wrackline.hydrology.index_flood import count_common_years
from wrackline.hydrology.skew_candidates import Stations, compare_candidates, plan_candidates
from wrackline.hydrology.skew_diagnostics import diagnose_skew_model
from wrackline.hydrology.station_skews import measure_skew_records
from wrackline.stats.gls import estimate_model_variance
from wrackline.stats.pearson3 import frequency_factor
from wrackline.stats.streams import random_stream

Z90 = 1.6448536269514722
SITES, SIDE_KM, NEAR = 60, 400.0, 0.95
MINIMUM_YEARS = 25
REGION_ATTRIBUTES = ("precipitation", "elevation", "slope", "forest", "baseflow_index")
LOGARITHMIC = ("area_km2", "precipitation", "slope")


@dataclass(frozen=True)
class Setting:
    """A kind of station set: range of the correlation of floods, model-error variance and mean of true skews."""

    range_km: float
    variance: float
    mean: float


SETTINGS = (
    Setting(100.0, 0.06, -0.1),
    Setting(300.0, 0.06, -0.1),
    Setting(100.0, 0.0, -0.1),
    Setting(100.0, 0.15, 0.2),
    Setting(1.0, 0.06, -0.1),
)
COLUMNS = (
    "mean correlation", "posterior mean s2", "moments GLS", "moments WLS", "REML GLS", "b", "reported var b",
    "covered GLS", "covered WLS", "AVP new", "AVP old", "actual old", "MBV",
)  # fmt: skip


def simulate_set(job: tuple[int, Setting]) -> np.ndarray:
    """Draw one station set, fit the constant model, and return a row of `COLUMNS`."""
    seed, setting = job
    stream = random_stream(seed, "station set", f"{setting}")
    place = stream.uniform(0, SIDE_KM, (SITES, 2))
    km = np.hypot(*(place[:, None] - place).transpose(2, 0, 1))
    correlation = NEAR * np.exp(-km / setting.range_km)
    np.fill_diagonal(correlation, 1.0)
    years = stream.integers(25, 101, SITES)
    true = setting.mean + np.sqrt(setting.variance) * stream.standard_normal(SITES)
    normal = np.linalg.cholesky(correlation) @ stream.standard_normal((SITES, 100))
    from scipy.special import ndtr

    flow = frequency_factor(1 - ndtr(normal), np.broadcast_to(true[:, None], normal.shape))
    station = np.array([sample_skew(flow[i, : years[i]]) for i in range(SITES)])

    design = np.ones((SITES, 1))
    stations = prepare_station_skews(station, years, design, correlation, np.minimum(years[:, None], years))
    model = fit_skew_model(stations, design)
    found = diagnose_skew_model(model, model)
    b, se = model.coefficients[0], np.sqrt(model.coefficient_covariance[0, 0])
    se_weighted = (1 / (model.model_variance_weighted + stations.variance)).sum() ** -0.5
    return np.array(
        [
            correlation[~np.eye(SITES, dtype=bool)].mean(),
            model.model_variance,
            estimate_model_variance(stations.skew, design, stations.covariance, "moments"),
            estimate_model_variance(stations.skew, design, stations.variance, "moments"),
            estimate_model_variance(stations.skew, design, stations.covariance, "reml"),
            b,
            se**2,
            abs(b - setting.mean) < Z90 * se,
            abs(b - setting.mean) < Z90 * se_weighted,
            found.average_prediction_variance_new,
            found.average_prediction_variance_old,
            np.mean((b - true) ** 2),
            found.beta_variance_misrepresentation,
        ]
    )


def sample_skew(values: np.ndarray) -> float:
    """Sample skew with the usual factor ``n / ((n - 1)(n - 2))`` on sums over the cubed standard deviation."""
    n, d = len(values), values - values.mean()
    return float(n * (d**3).sum() / ((n - 1) * (n - 2) * (d @ d / (n - 1)) ** 1.5))


def run_station_sets(pool: ProcessPoolExecutor, replicates: int) -> None:
    for setting in SETTINGS:
        jobs = [(seed, setting) for seed in range(replicates)]
        rows = np.array(list(pool.map(simulate_set, jobs, chunksize=25)))
        mean = dict(zip(COLUMNS, rows.mean(axis=0), strict=True))
        b = rows[:, COLUMNS.index("b")]
        print(f"\n{setting}, {replicates} sets")
        for name, value in mean.items():
            print(f"  {name:<20} {value:8.4f}   (sd {rows[:, COLUMNS.index(name)].std(ddof=1):.4f})")
        actual_new = setting.variance + np.mean((b - setting.mean) ** 2)
        print(f"  {'simulated var b':<20} {b.var(ddof=1):8.5f}\n  {'actual new':<20} {actual_new:8.4f}")
        checks = {
            "coverage .88 to .93": 0.88 <= mean["covered GLS"] <= 0.93,
            "reported variance within 15 %": abs(mean["reported var b"] / b.var(ddof=1) - 1) <= 0.15,
            "bias below .01": abs(mean["b"] - setting.mean) < 0.01,
        }
        if setting.variance >= 0.06:
            over = mean["posterior mean s2"] - setting.variance
            checks["posterior mean from 0 to .02 above the truth"] = 0 <= over <= 0.02
            checks["AVP at most 20 % above, 5 % below"] = 0.95 <= mean["AVP new"] / actual_new <= 1.20
        for name, kept in checks.items():
            print(f"  {'kept  ' if kept else 'MISSED'} {name}")


@dataclass(frozen=True)
class RegionTrial:
    """Ungauged sites of one region: true skews, estimates and mean square errors; and the model chosen."""

    truth: np.ndarray
    estimate: np.ndarray
    mse: np.ndarray
    model: str


def run_region(job: tuple[int, bool]) -> RegionTrial:
    """Draw a region, choose a skew model by the rule and predict the skews of its ungauged sites."""
    seed, one_level = job
    if one_level:
        truth.REGION_SKEW_LOG10 = (0.0, 0.0, 0.0)
    region = generate_region(seed, "lp3", awkward=False)
    gauges, targets = region.gauges, region.targets
    place = [gauges[f"centroid_{axis}"].to_numpy() for axis in ("latitude", "longitude")]
    dependence = fit_dependence(region.records, *place).model
    fits = fit_records(region.records, aeps=[0.5])
    moments = fits.station.moments
    measured = measure_skew_records(
        region.records, fits.low_floods.threshold, moments.mean, moments.sd, moments.skew
    )
    serve = np.flatnonzero(measured.record_length >= MINIMUM_YEARS - 1e-6)
    latitude, longitude = (axis[serve] for axis in place)
    distance = great_circle_km(latitude[:, None], longitude[:, None], latitude, longitude)
    names = ("area_km2", *REGION_ATTRIBUTES)
    regions = tuple(sorted(set(gauges["region"])))
    stations = Stations(
        skew=moments.skew[serve],
        record_length=measured.record_length[serve],
        correlation=dependence.correlation(distance),
        common_years=count_common_years(region.records)[np.ix_(serve, serve)],
        distance_km=distance,
        attributes={name: gauges[name].to_numpy()[serve] for name in names},
        regions=regions,
        shares=shares_of(gauges["region"].to_numpy()[serve], regions),
    )
    transforms = {name: "log10" if name in LOGARITHMIC else "none" for name in names}
    plans, refused = plan_candidates(stations, [(name,) for name in names], transforms)
    chosen = compare_candidates(stations, plans, refused).chosen
    design = chosen.plan.design(
        {name: targets[name].to_numpy() for name in names},
        shares_of(targets["region"].to_numpy(), regions),
        regions,
    )
    to_gauges = great_circle_km(
        targets["centroid_latitude"].to_numpy()[:, None],
        targets["centroid_longitude"].to_numpy()[:, None],
        latitude,
        longitude,
    )
    estimate, mse = chosen.predict(design, to_gauges)
    return RegionTrial(region.parents.skew_log10[len(gauges) :], estimate, mse, chosen.plan.name)


def shares_of(membership: np.ndarray, regions: tuple[str, ...]) -> np.ndarray:
    return np.array([[name == known for known in regions] for name in membership], dtype=float)


def run_regions(pool: ProcessPoolExecutor, seeds: range, one_level: bool) -> None:
    trials = list(pool.map(run_region, [(seed, one_level) for seed in seeds]))
    error = [t.estimate - t.truth for t in trials]
    reach = [Z90 * np.sqrt(t.mse) for t in trials]
    inside = [np.abs(e) <= r for e, r in zip(error, reach, strict=True)]
    every = np.concatenate(error)
    oracle = Z90 * np.sqrt(np.mean(every**2))
    ratio = mean_score(every, np.concatenate(reach)) / mean_score(every, np.full(len(every), oracle))
    share = np.concatenate(inside).mean()
    by_region = np.array([i.mean() for i in inside])
    models = sorted({t.model for t in trials})
    print(f"\n{len(trials)} regions, {len(every)} ungauged sites")
    print("  models chosen: " + ", ".join(f"{m} {sum(t.model == m for t in trials)}" for m in models))
    print(
        f"  true skew within 1.645 root mean square errors {share:.3f} (standard error {by_region.std(ddof=1) / np.sqrt(len(trials)):.3f})"
    )
    print(
        f"  root mean square of actual errors {np.sqrt(np.mean(every**2)):.3f}, of stated ones {np.sqrt(np.mean(np.concatenate(reach) ** 2)) / Z90:.3f}"
    )
    print(f"  mean error {every.mean():+.3f}; interval score over the oracle's {ratio:.3f}")
    if one_level:
        return
    for name, kept in {"85 to 95 % inside": 0.85 <= share <= 0.95, "score at most 1.2": ratio <= 1.2}.items():
        print(f"  {'kept  ' if kept else 'MISSED'} {name}")


def judge_records(seed: int) -> np.ndarray:
    """Mean of squared error over variance and mean error of a region's station skews, with low floods and without."""
    region = generate_region(seed, "lp3", awkward=False)
    g = len(region.gauges)
    true, found = region.parents.skew_log10[:g], []
    for thresholds in (None, np.zeros(g)):
        fits = fit_records(region.records, aeps=[0.5], low_flood_thresholds=thresholds)
        moments = fits.station.moments
        measured = measure_skew_records(
            region.records, fits.low_floods.threshold, moments.mean, moments.sd, moments.skew
        )
        at = (fits.n_peaks >= MINIMUM_YEARS) & (measured.record_length >= 10)
        length = measured.record_length[at]
        stations = prepare_station_skews(
            moments.skew[at], length, np.ones((at.sum(), 1)), np.eye(at.sum()), np.zeros((at.sum(), at.sum()))
        )
        error = stations.skew - true[at]
        found += [np.mean(error**2 / stations.variance), error.mean()]
    return np.array(found)


def run_records(pool: ProcessPoolExecutor, seeds: range) -> None:
    rows = np.array(list(pool.map(judge_records, seeds)))
    se = rows.std(axis=0, ddof=1) / np.sqrt(len(rows))
    print(
        f"\nstation skews in {len(rows)} regions: squared error over variance, mean error (standard errors)"
    )
    for name, at in (("low floods by test", 0), ("no low floods", 2)):
        ratio, error = rows.mean(axis=0)[at : at + 2]
        print(f"  {name:<20} {ratio:.3f} ({se[at]:.3f})  {error:+.3f} ({se[at + 1]:.3f})")


def mean_score(error: np.ndarray, reach: np.ndarray) -> float:
    """Mean interval score of 90 % intervals (Gneiting and Raftery, 2007) of half-width ``reach``."""
    return float(np.mean(2 * reach + 2 / 0.10 * np.maximum(np.abs(error) - reach, 0)))


def main() -> None:
    parser = argparse.ArgumentParser(
        description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter
    )
    parser.add_argument("--g3", action="store_true", help="simulated station sets")
    parser.add_argument("--replicates", type=int, default=1000, help="station sets of each kind")
    parser.add_argument("--regions", type=int, default=0, help="regenerated regions")
    parser.add_argument("--first-seed", type=int, default=3000)
    parser.add_argument("--cores", type=int, default=2)
    parser.add_argument("--one-level", action="store_true", help="regions whose true skews have one level")
    parser.add_argument("--records", type=int, default=0, help="regions whose station skews are judged")
    arguments = parser.parse_args()

    def first_of(count: int) -> range:
        return range(arguments.first_seed, arguments.first_seed + count)

    with ProcessPoolExecutor(arguments.cores) as pool:
        if arguments.g3:
            run_station_sets(pool, arguments.replicates)
        if arguments.regions:
            run_regions(pool, first_of(arguments.regions), arguments.one_level)
        if arguments.records:
            run_records(pool, first_of(arguments.records))


if __name__ == "__main__":
    main()
