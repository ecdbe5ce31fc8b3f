"""Do generalized skews come with honest errors? Simulated station sets, and regenerated regions of known skew.

    python tests/benchmarks/coverage_skew.py --g3                     simulated station sets, 1,000 of each kind
    python tests/benchmarks/coverage_skew.py --regions 30             regenerated example regions

Station sets: 60 random sites on 400 by 400 km with 25 to 100 years that end together, Pearson III logarithms,
true skews normal about one constant. The analysis knows the true correlation of floods, so that what is judged is the
regression. Acceptable: 88 to 93 % of the 90 % intervals of the constant hold it; its reported variance within
15 % of the simulated one; bias below 0.01; the mean posterior model-error variance between the truth and
the truth plus 0.02 (where the truth is 0.06 or more); the average variance of prediction 0 to 20 % above
the actual one, never more than 5 % below it.

Regions: each is drawn by the example's generator and taken through fits, choice of model and prediction at
its ungauged sites. Printed: how often the true skew of an ungauged site lies within 1.645 root mean square errors (85 to
95 % is acceptable), and the mean interval score over that of intervals of the same estimates whose width comes
from the true errors (at most 1.2).
"""

from __future__ import annotations

import argparse
import sys
from concurrent.futures import ProcessPoolExecutor
from dataclasses import dataclass
from pathlib import Path

import numpy as np

sys.path.insert(0, str(Path(__file__).parents[2]))

from wrackline.hydrology.generalized_skew import fit_skew_model, prepare_station_skews
from wrackline.hydrology.skew_diagnostics import diagnose_skew_model
from wrackline.stats.gls import estimate_model_variance, turn_system
from wrackline.stats.pearson3 import frequency_factor
from wrackline.stats.streams import random_stream

Z90 = 1.6448536269514722
SITES, SIDE_KM, NEAR = 60, 400.0, 0.95


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
    full = turn_system(stations.skew, design, stations.covariance)
    diagonal = turn_system(stations.skew, design, stations.variance)
    b, se = model.coefficients[0], np.sqrt(model.coefficient_covariance[0, 0])
    se_weighted = (1 / (model.model_variance_weighted + stations.variance)).sum() ** -0.5
    return np.array(
        [
            correlation[~np.eye(SITES, dtype=bool)].mean(),
            model.model_variance,
            estimate_model_variance(full, "moments"),
            estimate_model_variance(diagonal, "moments"),
            estimate_model_variance(full, "reml"),
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


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--g3", action="store_true", help="simulated station sets")
    parser.add_argument("--replicates", type=int, default=1000, help="station sets of each kind")
    parser.add_argument("--regions", type=int, default=0, help="regenerated regions")
    parser.add_argument("--first-seed", type=int, default=3000)
    parser.add_argument("--cores", type=int, default=2)
    arguments = parser.parse_args()
    with ProcessPoolExecutor(arguments.cores) as pool:
        if arguments.g3:
            run_station_sets(pool, arguments.replicates)


if __name__ == "__main__":
    main()
