"""Estimate floods at new sites from a finished study, from Python."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd

from wrackline.study.config import StudyConfig
from wrackline.study.csv_files import read_sheet
from wrackline.study.faults import Fault, FaultLog
from wrackline.study.loading import UnreadableStudy
from wrackline.study.saved_models import read_saved_models
from wrackline.study.single_record import UNREADABLE
from wrackline.study.sites import read_targets
from wrackline.study.target_estimates import estimate_targets
from wrackline.study.vocabulary import TARGETS, nearest_word

REGION_LAYER = "maps/study.gpkg"


@dataclass(frozen=True)
class TargetEstimates:
    """Floods at new sites.

    Attributes
    ----------
    table : DataFrame
        One row per site, route and annual exceedance probability, columns as in a study's table
        ``target_estimates``; flows in ``flow_unit``.
    flow_unit : str
    confidence : float
        Probability content of the intervals.
    edition : str
        Of the study whose models were used.
    warnings : tuple of Fault
        What is odd about the table of sites.
    """

    table: pd.DataFrame
    flow_unit: str
    confidence: float
    edition: str
    warnings: tuple[Fault, ...]

    @property
    def adopted(self) -> pd.DataFrame:
        """The rows that are the study's answer."""
        return self.table[self.table["adopted"]].reset_index(drop=True)

    def to_dict(self) -> dict[str, Any]:
        """Everything, unrounded; what is not finite is None."""
        rows = [
            {
                key: None if isinstance(value, float) and not np.isfinite(value) else value
                for key, value in row.items()
            }
            for row in self.table.to_dict("records")
        ]
        return {
            "edition": self.edition,
            "flow_unit": self.flow_unit,
            "confidence": self.confidence,
            "estimates": rows,
            "warnings": [str(fault) for fault in self.warnings],
        }


def estimate(results: str | Path, targets: str | Path) -> TargetEstimates:
    """Estimate floods at new ungauged sites from the saved models of a finished study.

    Parameters
    ----------
    results : path
        The study's results folder.
    targets : path
        A CSV with the columns of a study's targets table.

    Raises
    ------
    UnreadableStudy
        When there are no saved models, or the table cannot be read at all.
    StudyFaults
        With every problem of the table.
    """
    results, path = Path(results), Path(targets)
    config, models = read_saved_models(results)
    log = FaultLog()
    regions = sorted(models["growth"]) if models["pooling_method"] == "regions" else []
    sites = _read_sites(path, config, sorted(models["gauges"]), results, regions, log)
    log.stop_on_problems()
    table = estimate_targets(config, models, sites)
    return TargetEstimates(
        table, config.units.flow, config.confidence, models["edition"], tuple(log.warnings)
    )


def _read_sites(
    path: Path, config: StudyConfig, gauge_ids: list[str], results: Path, pools: list[str], log: FaultLog
) -> pd.DataFrame:
    """Read and check the table of new sites as intake checks a study's own."""
    if not path.is_file():
        beside = [p.name for p in path.parent.iterdir() if p.is_file()] if path.parent.is_dir() else []
        near = nearest_word(path.name, beside)
        what = "This is a folder; a file is expected." if path.is_dir() else "There is no such file."
        log.problem("missing_file", str(path), what, f"Did you mean '{near}'?" if near else "")
        raise UnreadableStudy(log.problems, log.warnings)
    in_use = config.attributes_in_use
    sheet = read_sheet(path, path.name, TARGETS, {name: name in in_use for name in config.attributes}, log)
    if sheet is None:
        if any(fault.code in UNREADABLE for fault in log.problems):
            raise UnreadableStudy(log.problems, log.warnings)
        log.stop_on_problems()
        raise AssertionError("a table is unusable and no problem was reported")
    sites = read_targets(sheet, gauge_ids, config, log)
    if config.pooling.regions == "one":
        sites["region"] = "all"
    elif config.pooling.regions == "polygons":
        sites["region"] = _regions_of(sites, results, path.name, log)
    elif pools:
        _check_regions(sites, pools, path.name, log)
    return sites.drop(columns="row")


def _regions_of(sites: pd.DataFrame, results: Path, file: str, log: FaultLog) -> np.ndarray:
    """The region whose polygon, as the study published it, holds each site."""
    from wrackline.study.geodata import read_polygons, region_of_sites

    regions = read_polygons(results / REGION_LAYER, REGION_LAYER, "regions", "region", log)
    if regions is None:
        return np.full(len(sites), "", dtype=object)
    return np.asarray(
        region_of_sites(regions.dissolve("region").reset_index(), sites, "target_id", file, log)
    )


def _check_regions(sites: pd.DataFrame, pools: list[str], file: str, log: FaultLog) -> None:
    """Every site needs a region that has a growth curve."""
    for target_id, region, row in zip(sites["target_id"], sites["region"], sites["row"], strict=True):
        if region == "":
            log.problem(
                "target_without_region", file, f"Target {target_id} has no region.",
                f"Regions of the study: {', '.join(pools)}.", row=row, column="region",
            )  # fmt: skip
        elif region not in pools:
            near = nearest_word(region, pools)
            log.problem(
                "unknown_region", file, f"The study has no growth curve for the region of target {target_id}.",
                f"Did you mean '{near}'?" if near else f"Regions of the study: {', '.join(pools)}.",
                row=row, column="region", value=region,
            )  # fmt: skip
