"""Generalized skew: posterior and diagnostics against one Cholesky factoring, growth with sites, memory at 5,000."""

from __future__ import annotations

import resource
from typing import Any

import numpy as np
import timing  # first: sets one BLAS thread

from wrackline.hydrology.generalized_skew import StationSkews, fit_skew_model, prepare_station_skews
from wrackline.hydrology.skew_diagnostics import diagnose_skew_model

SITES = 1000
MANY = 5000
MEMORY_GB = 4.0


def make_stations(n: int, seed: int = 1) -> tuple[StationSkews, np.ndarray]:
    """Random sites with 25 to 100 years on a square that grows with their number; constant and one attribute."""
    rng = np.random.default_rng(seed)
    place = rng.uniform(0, 40.0 * np.sqrt(n), (n, 2))
    years = rng.integers(25, 101, n).astype(float)
    squares = (place**2).sum(axis=1)
    correlation = squares[:, None] + squares - 2 * place @ place.T
    np.sqrt(np.maximum(correlation, 0.0, out=correlation), out=correlation)
    np.exp(correlation / -100.0, out=correlation)
    correlation *= 0.95
    np.fill_diagonal(correlation, 1.0)
    design = np.column_stack([np.ones(n), rng.normal(size=n)])
    skew = rng.normal(-0.1, 0.45, n)
    return prepare_station_skews(skew, years, design, correlation, np.minimum(years[:, None], years)), design


def measure() -> list[dict[str, Any]]:
    """Ratios of process times; the last row is the peak memory of this process after a fit of 5,000 sites."""
    stations, design = make_stations(SITES)
    constant = fit_skew_model(stations, design[:, :1])

    def fit() -> object:
        return diagnose_skew_model(fit_skew_model(stations, design), constant)

    ratios = timing.compare(lambda: np.linalg.cholesky(stations.covariance), fit)
    rows: list[dict[str, Any]] = [
        {
            "kernel": "skew model: posteriors, leave-one-out, diagnostics",
            "size": f"{SITES} sites",
            "floor": "one Cholesky",
            "ratio": ratios.median,
            "ratio_min": ratios.lowest,
            "ratio_max": ratios.highest,
            "target": "<= 40",
        }
    ]
    half, half_design = make_stations(SITES // 2)
    growth = timing.compare(
        lambda: fit_skew_model(half, half_design), lambda: fit_skew_model(stations, design)
    )
    rows.append(
        {
            "kernel": "skew model, growth exponent",
            "size": f"{SITES // 2} to {SITES} sites",
            "floor": "half the sites",
            "ratio": float(np.log2(growth.median)),
            "ratio_min": float(np.log2(growth.lowest)),
            "ratio_max": float(np.log2(growth.highest)),
            "target": "<= 3",
        }
    )
    many, many_design = make_stations(MANY)
    fit_skew_model(many, many_design)
    peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024**2
    rows.append(
        {
            "kernel": "skew model, peak memory in GB",
            "size": f"{MANY} sites",
            "floor": "",
            "ratio": peak,
            "target": f"<= {MEMORY_GB:g}",
        }
    )
    return rows


if __name__ == "__main__":
    for row in measure():
        print(row)
