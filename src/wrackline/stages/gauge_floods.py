"""What the regional stages take from the fits at gauges: floods, moments and the errors of the generalized skew."""

from __future__ import annotations

import json
from dataclasses import dataclass
from typing import Any

import numpy as np
import pandas as pd

from wrackline.hydrology.at_site import fit_records
from wrackline.hydrology.dependence import DistanceModel
from wrackline.hydrology.distances import great_circle_km
from wrackline.hydrology.index_flood import count_common_years
from wrackline.hydrology.record_fits import RecordFits
from wrackline.hydrology.records import BoolArray, FloatArray, PeakRecords
from wrackline.stages.running import StudyFiles
from wrackline.study.config import StudyConfig
from wrackline.study.handover import read_records, read_sites
from wrackline.study.tables import read_table

FEWEST_YEARS = 10
"""Years of record behind a gauge's flood in a regression, at least."""


@dataclass(frozen=True)
class UsedGauges:
    """The gauges of the regional analysis, in order of identifier.

    Attributes
    ----------
    sites : table of g rows
    records : PeakRecords of g gauges
    distance, correlation, common_years : (g, g)
        Between basin centroids, km; of concurrent log peaks; years that both gauged.
    """

    sites: pd.DataFrame
    records: PeakRecords
    distance: FloatArray
    correlation: FloatArray
    common_years: FloatArray

    @property
    def gauge_ids(self) -> list[str]:
        return list(self.records.gauge_ids)


@dataclass(frozen=True)
class GaugeFloods:
    """Log-Pearson III fits at gauges with the weighted skew, and how sure the generalized skew is.

    Attributes
    ----------
    aeps : (p,)
    fits : RecordFits of g gauges
    years : (g,)
        Exactly known systematic peaks: the length of record behind a flood.
    generalized_skew : (g,)
    generalized_covariance : (g, g)
        Covariance of its errors at the gauges.
    """

    aeps: FloatArray
    fits: RecordFits
    years: FloatArray
    generalized_skew: FloatArray
    generalized_covariance: FloatArray

    @property
    def log10_flow(self) -> FloatArray:
        """log10 floods (g, p), m3/s; NaN where a gauge has no fit."""
        assert self.fits.weighted is not None
        return self.fits.weighted.log10_quantile

    @property
    def log10_se(self) -> FloatArray:
        """Their standard errors (g, p)."""
        assert self.fits.weighted is not None
        return self.fits.weighted.log10_se

    @property
    def sd(self) -> FloatArray:
        """Standard deviation of log10 peaks (g,)."""
        assert self.fits.weighted is not None
        return self.fits.weighted.moments.sd

    @property
    def usable(self) -> BoolArray:
        """Gauges whose floods can enter a regression (g,)."""
        return (
            np.isfinite(self.log10_flow).all(axis=1)
            & np.isfinite(self.log10_se).all(axis=1)
            & np.isfinite(self.generalized_skew)
            & (self.years >= FEWEST_YEARS)
        )


def all_aeps(config: StudyConfig) -> tuple[float, ...]:
    """The probabilities of gauges and targets, from often to rare."""
    return tuple(sorted({*config.aeps.gauges, *config.aeps.targets}, reverse=True))


def pools_of_sites(growth: dict[str, Any], site_ids: list[str]) -> list[str]:
    """Name the pool that every gauge or target takes its growth curve from; blank for a site in none."""
    home = growth.get("home")
    if home is None:
        home = {gauge: name for name in sorted(growth["pools"]) for gauge in growth["pools"][name]["gauges"]}
    return [name if (name := home.get(site, "")) in growth["pools"] else "" for site in site_ids]


def intercept_groups(growth: dict[str, Any], sites: pd.DataFrame, pools: list[str]) -> list[str]:
    """Name the group of every site where regions have intercepts of their own: its pool, where pools are regions."""
    return pools if growth.get("method", "regions") == "regions" else sites["region"].tolist()


def read_used_gauges(study: StudyFiles) -> UsedGauges:
    """Read the used gauges, their records, and how they depend on each other."""
    sites = read_sites(study.work("intake") / "gauges.csv")
    screened = read_sites(study.work("screen") / "gauges.csv")
    used_ids = screened.loc[screened["used"], "gauge_id"]
    sites = sites[sites["gauge_id"].isin(used_ids)].sort_values("gauge_id", kind="stable")
    sites = sites.reset_index(drop=True)
    records = read_records(study.work("screen") / "records.csv", sites["gauge_id"].tolist())
    model = DistanceModel.from_dict(
        json.loads((study.work("dependence") / "model.json").read_text(encoding="utf-8"))
    )
    distance = distances_between(sites, sites)
    correlation = model.correlation(distance)
    np.fill_diagonal(correlation, 1.0)
    return UsedGauges(sites, records, distance, correlation, count_common_years(records))


def distances_between(some: pd.DataFrame, others: pd.DataFrame) -> FloatArray:
    """Distances (m, n) between basin centroids, km."""
    latitude, longitude = (some[f"centroid_{axis}"].to_numpy(float) for axis in ("latitude", "longitude"))
    other_latitude, other_longitude = (
        others[f"centroid_{axis}"].to_numpy(float) for axis in ("latitude", "longitude")
    )
    return great_circle_km(
        latitude[:, None], longitude[:, None], other_latitude[None, :], other_longitude[None, :]
    )


def read_gauge_floods(study: StudyFiles, gauges: UsedGauges) -> GaugeFloods:
    """Fit the used gauges for all probabilities of the study, with the generalized skew that the stage `skew` left."""
    config, aeps = study.config, all_aeps(study.config)
    sites = read_table(study.work("skew") / "sites.csv")
    ids = sites.loc[sites["gauge"], "site_id"].tolist()
    row = {gauge_id: i for i, gauge_id in enumerate(ids)}
    at = np.array([row[gauge_id] for gauge_id in gauges.gauge_ids], dtype=np.int64)
    covariance = np.load(study.work("skew") / "error_covariance.npy")[np.ix_(at, at)]
    skew = sites["generalized_skew"].to_numpy(dtype=float)[at]
    mse = sites["generalized_skew_mse"].to_numpy(dtype=float)[at]
    moments = read_table(study.work("atsite") / "moments.csv").set_index("gauge_id").loc[gauges.gauge_ids]
    fits = fit_records(
        gauges.records,
        skew,
        mse,
        aeps,
        config.confidence,
        moments["low_outlier_threshold_set_m3s"].to_numpy(dtype=float),
        np.inf if config.at_site.skew_bound is None else config.at_site.skew_bound,
    )
    records = gauges.records
    years = np.diff(records.keep_rows(records.systematic_exact).offsets).astype(float)
    return GaugeFloods(np.array(aeps), fits, years, skew, covariance)
