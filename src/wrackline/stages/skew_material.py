"""What the stage `skew` works on: gauges that serve, sites that want a skew, and the study's geography."""

from __future__ import annotations

import json
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import pandas as pd

from wrackline.hydrology.dependence import DistanceModel
from wrackline.hydrology.distances import great_circle_km
from wrackline.hydrology.index_flood import count_common_years
from wrackline.hydrology.records import BoolArray, FloatArray, IntArray, PeakRecords
from wrackline.hydrology.skew_candidates import Stations
from wrackline.hydrology.station_skews import SkewRecords, measure_skew_records, tell_who_serves
from wrackline.stages.running import StudyFiles
from wrackline.study.config import StudyConfig
from wrackline.study.gis import read_polygons
from wrackline.study.handover import read_records, read_sites
from wrackline.study.skew_map import region_shares, unwrap
from wrackline.study.tables import read_table


@dataclass(frozen=True)
class SkewMaterial:
    """All inputs of the stage, read once.

    Attributes
    ----------
    sites : DataFrame
        Gauges, then targets: ``site_id``, ``gauge`` (true/false), ``name``, ``region``, ``latitude`` and
        ``longitude`` of the basin's centroid (longitudes unwrapped), and attributes (``area`` in km2).
    moments : DataFrame
        Station fits, a row per gauge in the order of the sites.
    records : PeakRecords of all gauges
    measured : SkewRecords
    reasons : list of str
        Why a gauge does not serve; blank where it does.
    regions : tuple of str
    shares : (sites, regions)
    basins, region_polygons : DataFrame
        With ``wkt``; no rows where the study has none.
    dependence : DistanceModel
    """

    sites: pd.DataFrame
    moments: pd.DataFrame
    records: PeakRecords
    measured: SkewRecords
    reasons: list[str]
    regions: tuple[str, ...]
    shares: FloatArray
    basins: pd.DataFrame
    region_polygons: pd.DataFrame
    dependence: DistanceModel

    @property
    def n_gauges(self) -> int:
        return len(self.moments)

    @property
    def serve(self) -> IntArray:
        """Numbers of the gauges that serve, which are also their rows in `sites`."""
        return np.flatnonzero([not reason for reason in self.reasons])

    @property
    def about(self) -> float:
        """Longitude about which the study's longitudes are unwrapped."""
        return float(self.sites["longitude"].mean()) if len(self.sites) else 0.0

    def attributes(self, names: Sequence[str]) -> dict[str, FloatArray]:
        """Attributes of all sites by name."""
        return {name: self.sites[name].to_numpy(dtype=float) for name in names}

    def distance_to_serving(self, latitude: FloatArray, longitude: FloatArray) -> FloatArray:
        """Distances in km from places (m,) to the gauges that serve, (m, n)."""
        at = self.sites.iloc[self.serve]
        return great_circle_km(
            np.asarray(latitude)[:, None],
            np.asarray(longitude)[:, None],
            at["latitude"].to_numpy(),
            at["longitude"].to_numpy(),
        )


def gather_material(study: StudyFiles) -> SkewMaterial:
    """Read what intake, screen, dependence and atsite left, and find out which gauges serve."""
    config, intake = study.config, study.work("intake")
    gauges = read_sites(intake / "gauges.csv").sort_values("gauge_id", ignore_index=True)
    targets = read_sites(intake / "targets.csv").sort_values("target_id", ignore_index=True)
    screened = read_table(study.work("screen") / "gauges.csv", text=("flags", "reasons"))
    screened = screened.set_index("gauge_id").loc[gauges["gauge_id"]]
    moments = read_table(study.work("atsite") / "moments.csv").set_index("gauge_id")
    moments = moments.loc[gauges["gauge_id"]].reset_index()
    records = read_records(intake / "records.csv", gauges["gauge_id"].tolist())
    records = records.keep_rows(moments["fitted"].to_numpy(dtype=bool)[records.gauge_index])
    measured = measure_skew_records(
        records,
        moments["low_outlier_threshold_m3s"].to_numpy(dtype=float),
        *(moments[name].to_numpy(dtype=float) for name in ("mean_log10", "sd_log10", "station_skew")),
    )
    used = screened["used"].to_numpy(dtype=bool)
    reasons = tell_who_serves(
        measured,
        used,
        screened["flags"].tolist(),
        screened["reasons"].tolist(),
        config.skew.minimum_record_years,
        config.skew.exclude,
    )
    sites = site_table(config, gauges, targets)
    served = {
        region for region, reason in zip(sites["region"], reasons, strict=False) if not reason and region
    }
    regions = tuple(sorted(served))
    basins = read_polygons(intake / "basins.csv", "site_id")
    region_polygons = read_polygons(intake / "regions.csv", "region")
    about = float(sites["longitude"].mean()) if len(sites) else 0.0
    return SkewMaterial(
        sites=sites,
        moments=moments,
        records=records,
        measured=measured,
        reasons=reasons,
        regions=regions,
        shares=region_shares(
            sites["site_id"].tolist(), sites["region"].tolist(), regions, basins, region_polygons, about
        ),
        basins=basins.sort_values("site_id", ignore_index=True),
        region_polygons=region_polygons.sort_values("region", ignore_index=True),
        dependence=DistanceModel.from_dict(
            json.loads((study.work("dependence") / "model.json").read_text(encoding="utf-8"))
        ),
    )


def site_table(config: StudyConfig, gauges: pd.DataFrame, targets: pd.DataFrame) -> pd.DataFrame:
    """Put gauges and targets one below the other, with the regions that the pools use."""
    moves = {move.gauge_id: move.to for move in config.pooling.moves}
    parts = []
    for frame, key in ((gauges, "gauge_id"), (targets, "target_id")):
        part = pd.DataFrame({"site_id": frame[key].astype(str), "gauge": key == "gauge_id"})
        part["name"] = frame["name"]
        part["region"] = [
            moves.get(site, region) for site, region in zip(part["site_id"], frame["region"], strict=True)
        ]
        if config.pooling.regions == "one":
            part["region"] = "all"
        part["latitude"] = frame["centroid_latitude"].astype(float)
        part["longitude"] = frame["centroid_longitude"].astype(float)
        part["area"] = frame["area_km2"].astype(float)
        for name in config.attributes:
            part[name] = frame[name].astype(float) if name in frame else np.nan
        parts.append(part)
    sites = pd.concat(parts, ignore_index=True)
    if len(sites):
        angle = np.radians(sites["longitude"])
        middle = float(np.degrees(np.arctan2(np.sin(angle).mean(), np.cos(angle).mean())))
        sites["longitude"] = unwrap(sites["longitude"].to_numpy(), middle)
    return sites


def stations_of(material: SkewMaterial, names: Sequence[str]) -> Stations:
    """Return what all candidates are fitted to; ``names`` are the attributes that they may use."""
    serve = material.serve
    at = material.sites.iloc[serve]
    distance = material.distance_to_serving(at["latitude"].to_numpy(), at["longitude"].to_numpy())
    return Stations(
        skew=material.moments["station_skew"].to_numpy(dtype=float)[serve],
        record_length=material.measured.record_length[serve],
        correlation=material.dependence.correlation(distance),
        common_years=count_common_years(material.records.keep_gauges(serve)),
        distance_km=distance,
        attributes={name: at[name].to_numpy(dtype=float) for name in names},
        regions=material.regions,
        shares=material.shares[serve],
    )


def tried_regressions(config: StudyConfig) -> tuple[tuple[str, ...], ...]:
    """Sets of attributes to try: those named, else ``area`` and every declared attribute by itself."""
    if config.skew.regressions:
        return config.skew.regressions
    return (("area",), *((name,) for name in config.attributes))


def transforms_of(config: StudyConfig) -> dict[str, str]:
    """Transformation of every attribute; ``area`` enters as log10."""
    return {"area": "log10", **{name: attribute.transform for name, attribute in config.attributes.items()}}


def outside_ranges(values: FloatArray, lower: FloatArray, upper: FloatArray, room: float = 1e-9) -> BoolArray:
    """Tell which rows (m, k) lie outside the ranges of the gauges in any column; NaN is outside."""
    slack = room * (1 + np.abs(upper - lower))
    return np.asarray(~((values >= lower - slack) & (values <= upper + slack)).all(axis=1), dtype=bool)
