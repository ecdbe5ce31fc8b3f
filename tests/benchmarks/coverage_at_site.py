"""Measure how often the 90 % limits of at-site flood quantiles hold the true quantile, by simulation.

The whole chain runs inside each replicate: low-flood test, expected moments, weighted skew, limits. The generalized
skew of a replicate is the true skew plus an error with the stated mean square error. A share `below` of the
systematic years is known only as below a gauge base; `historic` adds 100 years in which a flood above the
5 % level would have been noticed.

Run: ``python tests/benchmarks/coverage_at_site.py --replicates 2000 --out coverage.csv``
"""

from __future__ import annotations

import argparse
import csv
import itertools
import sys
from pathlib import Path

import numpy as np

from wrackline.hydrology.at_site import SkewFit, fit_records
from wrackline.hydrology.records import PeakRecords
from wrackline.stats.pearson3 import frequency_factor
from wrackline.stats.streams import random_stream

SKEWS = (-0.7, -0.3, 0.0, 0.4, 1.0)
YEARS = (25, 40, 60, 100)
SHARES_BELOW = (0.0, 0.3)
HISTORIC_YEARS = (0, 100)
AEPS = np.array([0.1, 0.01, 0.002])
MEAN, SD = 2.0, 0.3


def simulate_records(
    skew: float, years: int, below: float, historic: int, replicates: int, seed: int
) -> PeakRecords:
    """Draw replicates of one gauge as gauges of one batch."""
    stream = random_stream(seed, "coverage", f"{skew} {years} {below} {historic}")
    total = years + historic
    peaks = 10 ** (MEAN + SD * frequency_factor(stream.random((replicates, total)), skew))
    base = 10 ** (MEAN + SD * frequency_factor(1 - below, skew)) if below else 0.0
    notice = 10 ** (MEAN + SD * frequency_factor(0.05, skew))
    is_historic = np.arange(total) < historic
    level = np.broadcast_to(np.where(is_historic, notice, base), peaks.shape)
    known = peaks >= level
    low = np.where(known, peaks, 0.0).ravel()
    high = np.where(known, peaks, level).ravel()
    m = low.size
    return PeakRecords(
        gauge_ids=tuple(str(i) for i in range(replicates)),
        offsets=np.arange(replicates + 1) * total,
        water_year=np.tile(np.arange(total), replicates),
        flow_low=low,
        flow_high=high,
        perception_low=level.ravel().copy(),
        perception_high=np.full(m, np.inf),
        historic=np.tile(is_historic, replicates),
        observed=(known | ~is_historic).ravel(),
        cause=np.full(m, "unknown"),
    )


def measure_misses(fit: SkewFit, skew: float) -> tuple[np.ndarray, np.ndarray, int]:
    """Shares of replicates whose lower limit lies above, and upper limit below, the truth; and fits made."""
    truth = MEAN + SD * frequency_factor(AEPS, skew)
    made = np.isfinite(fit.log10_quantile).all(axis=1)
    above = (fit.log10_lower[made] > truth).mean(axis=0)
    under = (fit.log10_upper[made] < truth).mean(axis=0)
    return above, under, int(made.sum())


def measure(
    replicates: int, generalized_mse: float, seed: int = 1, cells: object = None
) -> list[dict[str, object]]:
    """Coverage table: a row per skew, record, kind of skew and probability."""
    rows: list[dict[str, object]] = []
    for skew, years, below, historic in cells or itertools.product(
        SKEWS, YEARS, SHARES_BELOW, HISTORIC_YEARS
    ):
        records = simulate_records(skew, years, below, historic, replicates, seed)
        stream = random_stream(seed, "generalized_skew", f"{skew} {years} {below} {historic}")
        generalized = skew + np.sqrt(generalized_mse) * stream.standard_normal(replicates)
        fits = fit_records(records, generalized, generalized_mse, aeps=AEPS)
        for kind, fit in (("station", fits.station), ("weighted", fits.weighted)):
            above, under, made = measure_misses(fit, skew)
            for j, aep in enumerate(AEPS):
                rows.append(
                    {
                        "skew": skew,
                        "years": years,
                        "share_below": below,
                        "historic_years": historic,
                        "kind": kind,
                        "aep": aep,
                        "fits": made,
                        "truth_below_lower_pct": round(100 * above[j], 2),
                        "truth_above_upper_pct": round(100 * under[j], 2),
                        "coverage_pct": round(100 * (1 - above[j] - under[j]), 2),
                    }
                )
    return rows


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--replicates", type=int, default=2000)
    parser.add_argument("--generalized-mse", type=float, default=0.15)
    parser.add_argument("--out", type=Path)
    options = parser.parse_args()
    rows = measure(options.replicates, options.generalized_mse)
    target = options.out.open("w", newline="") if options.out else sys.stdout
    writer = csv.DictWriter(target, fieldnames=list(rows[0]))
    writer.writeheader()
    writer.writerows(rows)


if __name__ == "__main__":
    main()
