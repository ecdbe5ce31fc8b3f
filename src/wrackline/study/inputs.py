"""A whole study read at once: every file, every check, every problem told together."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any, TypeVar

import numpy as np
import pandas as pd

from wrackline.hydrology.records import PeakRecords
from wrackline.study.config import StudyConfig
from wrackline.study.csv_files import Sheet, read_sheet
from wrackline.study.faults import Fault, FaultLog
from wrackline.study.ledger import Ledger, Standing, empty_ledger, read_ledger, read_redundancy
from wrackline.study.loading import line_of, load_config
from wrackline.study.peaks import Peaks, read_peaks
from wrackline.study.record_building import BuiltRecords, build_records
from wrackline.study.sites import read_gauges, read_targets
from wrackline.study.spans import YEAR_STEP, Periods, no_periods, no_thresholds, read_periods, read_thresholds
from wrackline.study.vocabulary import INPUT_TABLES, REDUNDANCY, nearest_word

if TYPE_CHECKING:
    from geopandas import GeoDataFrame

FEWEST_GAUGES = 5
"""With fewer usable gauges nothing regional can be said."""

TABLES = {table.name: table for table in INPUT_TABLES}
T = TypeVar("T")


@dataclass(frozen=True)
class Study:
    """A study's inputs, checked and in SI units.

    Attributes
    ----------
    config, folder : StudyConfig, Path
    records : PeakRecords
        For all gauges, in the order of ``gauges``.
    gauges, targets : DataFrame
        One row a site, sorted by identifier; areas in km2, coordinates in degrees.
    periods, redundancy : DataFrame
    ledger : DataFrame
        The ledger's columns and ``effect`` in words.
    basins, regions : GeoDataFrame or None
        Polygons in EPSG:4326, with ``site_id`` and ``region``.
    accounting : DataFrame
        One line for every row of the peaks table, in its order.
    warnings : tuple of Fault
    """

    config: StudyConfig
    folder: Path
    records: PeakRecords
    gauges: pd.DataFrame
    targets: pd.DataFrame
    periods: pd.DataFrame
    redundancy: pd.DataFrame
    ledger: pd.DataFrame
    basins: GeoDataFrame | None
    regions: GeoDataFrame | None
    accounting: pd.DataFrame
    warnings: tuple[Fault, ...]


def read_study(study_file: str | Path) -> Study:
    """Read all files of a study, check them, and build the records; writes nothing.

    Raises
    ------
    UnreadableStudy
        When the study file itself cannot be read.
    StudyFaults
        When there are problems: all problems of all files.
    """
    study_file = Path(study_file)
    return _Reading(study_file, load_config(study_file)).study()


class _Reading:
    """One pass over a study's files; what is unusable stays None, so that other files are still checked."""

    def __init__(self, study_file: Path, config: StudyConfig) -> None:
        self.study_file, self.folder, self.config = study_file, study_file.parent, config
        self.log = FaultLog()

    def study(self) -> Study:
        config, log = self.config, self.log
        gauges = self._table("gauges", lambda sheet: read_gauges(sheet, config, log))
        gauge_ids = None if gauges is None else gauges["gauge_id"].tolist()
        targets = self._table("targets", lambda sheet: read_targets(sheet, gauge_ids, config, log))
        peaks = self._table(
            "peaks",
            lambda sheet: read_peaks(sheet, gauge_ids, config.flow_in_m3s, config.water_year_starts, log),
        )
        thresholds = self._table(
            "thresholds",
            lambda sheet: read_thresholds(sheet, gauge_ids, config.flow_in_m3s, log),
            no_thresholds,
        )
        periods = self._table("periods", lambda sheet: read_periods(sheet, gauge_ids, log), no_periods)
        redundancy = self._table("redundancy", lambda sheet: read_redundancy(sheet, gauge_ids, log))
        basins = self._basins(gauges, targets)
        regions = self._regions(gauges, targets)
        standing = Standing(
            gauge_ids=gauge_ids,
            peak_keys=None if peaks is None or gauges is None or not peaks.rows_read else peaks.every_key,
            threshold_keys=None if thresholds is None or gauges is None else thresholds.every_year()[0],
            regions=set() if gauges is None else set(gauges["region"]) - {""},
        )
        ledger = self._table(
            "ledger", lambda sheet: read_ledger(sheet, standing, config.flow_in_m3s, log), empty_ledger
        )
        self._check_names_in_configuration(gauge_ids)
        self._check_output()
        built = None
        if (
            gauge_ids is not None
            and peaks is not None
            and thresholds is not None
            and periods is not None
            and ledger
        ):
            built = build_records(gauge_ids, peaks, thresholds, periods, ledger, config, log)
            if not any(fault.file == peaks.file for fault in log.problems):
                self._check_enough(built, peaks, ledger)
        log.stop_on_problems()
        if gauges is None or gauge_ids is None or built is None or periods is None:
            raise AssertionError("a table is unusable and no problem was reported")
        return Study(
            config=config,
            folder=self.folder,
            records=built.records,
            gauges=gauges.drop(columns="row"),
            targets=_no_targets(config) if targets is None else targets.drop(columns="row"),
            periods=_periods_table(periods, gauge_ids),
            redundancy=pd.DataFrame(columns=REDUNDANCY.names, dtype=object)
            if redundancy is None
            else redundancy,
            ledger=built.ledger,
            basins=basins,
            regions=regions,
            accounting=built.accounting,
            warnings=tuple(log.warnings),
        )

    def _table(
        self, name: str, check: Callable[[Sheet], T], absent: Callable[[], T] | None = None
    ) -> T | None:
        """Read and check one CSV; a file that the study does not name gives ``absent``."""
        file: str = getattr(self.config.inputs, name)
        if not file:
            if name in ("gauges", "peaks"):
                self.log.problem(
                    "missing_file",
                    self.study_file.name,
                    "The study must name this file.",
                    f"Write `{name}: {name}.csv`.",
                    row=line_of(self.study_file, ("inputs", name)),
                    column=f"inputs.{name}",
                )
            return absent() if absent else None
        in_use = self.config.attributes_in_use
        attributes = {attribute: attribute in in_use for attribute in self.config.attributes}
        sheet = read_sheet(self.folder / file, file, TABLES[name], attributes, self.log)
        return None if sheet is None else check(sheet)

    def _basins(self, gauges: pd.DataFrame | None, targets: pd.DataFrame | None) -> GeoDataFrame | None:
        from wrackline.study.geodata import (
            check_basins,
            compare_areas,
            compare_outlets,
            measure_basins,
            read_polygons,
        )

        config, log = self.config, self.log
        tables = [(gauges, "gauge_id", config.inputs.gauges), (targets, "target_id", config.inputs.targets)]
        basins = measures = None
        if config.inputs.basins:
            basins = read_polygons(
                self.folder / config.inputs.basins, config.inputs.basins, "basins", "site_id", log
            )
        if basins is not None and gauges is not None:
            names = [name for table, column, _ in tables if table is not None for name in table[column]]
            basins = check_basins(basins, config.inputs.basins, names, log)
            measures = measure_basins(basins) if len(basins) else None
        for table, id_column, file in tables:
            if table is not None:
                if measures is not None and basins is not None:
                    compare_outlets(basins, table, id_column, file, log)
                    compare_areas(measures, table, id_column, file, config.units.area, log)
                _place_centroids(table, id_column, measures, file, log)
        return basins

    def _regions(self, gauges: pd.DataFrame | None, targets: pd.DataFrame | None) -> GeoDataFrame | None:
        config, log = self.config, self.log
        regions = None
        if config.inputs.regions:
            regions = self._region_polygons()
        elif config.pooling.regions == "polygons":
            log.problem(
                "missing_file",
                self.study_file.name,
                "`pooling.regions: polygons` needs a file of regions.",
                "Write `regions: regions.gpkg` under `inputs`.",
                row=line_of(self.study_file, ("pooling", "regions")),
                column="inputs.regions",
            )
        tables = [(gauges, "gauge_id", config.inputs.gauges), (targets, "target_id", config.inputs.targets)]
        for table, id_column, file in tables:
            if table is None:
                continue
            if config.pooling.regions == "one":
                table["region"] = "all"
            elif config.pooling.regions == "polygons":
                if regions is None:
                    continue
                from wrackline.study.geodata import region_of_sites

                table["region"] = region_of_sites(regions, table, id_column, file, log)
            self._check_regions(table, id_column, file, gauges)
        return regions

    def _region_polygons(self) -> GeoDataFrame | None:
        from wrackline.study.geodata import read_polygons

        file = self.config.inputs.regions
        regions = read_polygons(self.folder / file, file, "regions", "region", self.log)
        return None if regions is None else regions.dissolve("region").reset_index()

    def _check_regions(
        self, table: pd.DataFrame, id_column: str, file: str, gauges: pd.DataFrame | None
    ) -> None:
        by_column = self.config.pooling.regions == "column"
        if by_column and id_column == "gauge_id" and not (table["region"] != "").any() and len(table):
            self.log.problem(
                "missing_column",
                file,
                "No gauge has a region, and `pooling.regions` says that this column holds them.",
                "Fill in the column, or set `pooling.regions` to `polygons` or `one`.",
                row=1,
                column="region",
            )
            return
        lack = "has no region" if by_column else "lies in no region's polygon"
        known = set() if gauges is None else set(gauges["region"])
        placed = table[table["latitude"].notna() & table["longitude"].notna()]
        told = table if by_column else placed
        for site, region, row in zip(told[id_column], told["region"], told["row"], strict=True):
            place: dict[str, Any] = {"row": row, "column": "region" if by_column else id_column}
            if region == "" and id_column == "gauge_id":
                mend = "Give it a region if it should be pooled."
                self.log.warning(
                    "gauge_without_region", file, f"Gauge {site} {lack} and is in no pool.", mend, **place
                )
            elif region == "":
                mend = "Give it a region, or move it or the polygons."
                self.log.problem("target_without_region", file, f"Target {site} {lack}.", mend, **place)
            elif region not in known and gauges is not None:
                near = nearest_word(region, known - {""})
                mend = f"Did you mean '{near}'?" if near else "Use the name of a region with gauges."
                problem = f"No gauge is in the region of target {site}."
                self.log.problem("unknown_region", file, problem, mend, value=region, **place)

    def _check_names_in_configuration(self, gauge_ids: list[str] | None) -> None:
        for number, move in enumerate(self.config.pooling.moves):
            if gauge_ids is not None and move.gauge_id not in gauge_ids:
                near = nearest_word(move.gauge_id, gauge_ids) if len(gauge_ids) <= 5000 else None
                self.log.problem(
                    "unknown_gauge",
                    self.study_file.name,
                    f"No such gauge is in {self.config.inputs.gauges}.",
                    f"Did you mean '{near}'?" if near else "Take the move out.",
                    row=line_of(self.study_file, ("pooling", "moves", number, "gauge_id")),
                    column=f"pooling.moves.{number}.gauge_id",
                    value=move.gauge_id,
                )

    def _check_output(self) -> None:
        """Results lie in a folder of their own: what a run publishes there takes the place of an earlier run's."""
        folder, results = self.folder.resolve(), (self.folder / self.config.output).resolve()
        try:
            is_file = results.exists() and not results.is_dir()
        except OSError as error:
            problem = f"The folder for the results cannot be made: {error.strerror}."
        else:
            if is_file:
                problem = "The folder for the results is a file."
            elif folder.is_relative_to(results):
                problem = "The results need a folder of their own, not the study's or one that holds it."
            elif results.is_relative_to(folder / "work"):
                problem = "The folder `work` is for intermediates, which may be deleted at any time."
            else:
                return
        self.log.problem(
            "bad_output",
            self.study_file.name,
            problem,
            "Name a folder such as `results`.",
            row=line_of(self.study_file, ("output",)),
            column="output",
            value=self.config.output,
        )

    def _check_enough(self, built: BuiltRecords, peaks: Peaks, ledger: Ledger) -> None:
        records, log = built.records, self.log
        with_rows = np.zeros(records.n_gauges, dtype=bool)
        with_rows[peaks.every_key // YEAR_STEP] = True
        silent = [name for name, has in zip(records.gauge_ids, with_rows, strict=True) if not has]
        if silent:
            log.warning(
                "gauges_without_peaks",
                self.config.inputs.gauges,
                f"{len(silent)} gauges have no row in {peaks.file}: {_few(silent)}.",
                "Add their peaks, or list them among the targets.",
            )
        fewest = self.config.screening.minimum_peaks if "short_record" in self.config.screening.exclude else 3
        exact = np.bincount(records.gauge_index[records.systematic_exact], minlength=records.n_gauges)
        for line in ledger.lines("gauge"):
            if ledger.frame["action"].iloc[line] == "exclude":
                exact[ledger.gauge[line]] = 0
        usable = int((exact >= fewest).sum())
        if usable < FEWEST_GAUGES and records.n_gauges:
            log.problem(
                "too_few_gauges",
                peaks.file,
                f"Only {usable} of {records.n_gauges} gauges have {fewest} usable systematic peaks or more; "
                f"a regional study needs {FEWEST_GAUGES}.",
                "Add gauges from a wider region, or fit a single gauge with `wrackline fit`.",
            )


def _place_centroids(
    sites: pd.DataFrame, id_column: str, measures: pd.DataFrame | None, file: str, log: FaultLog
) -> None:
    """Fill in the basin's centroid: from its polygon, else the columns, else the site's own position."""
    latitude, longitude = (
        sites["centroid_latitude"].to_numpy(copy=True),
        sites["centroid_longitude"].to_numpy(copy=True),
    )
    given = ~np.isnan(latitude) & ~np.isnan(longitude)
    source = np.where(given, "column", "site").astype(object)
    if measures is not None:
        at = measures.index.get_indexer(pd.Index(sites[id_column]))
        drawn = at >= 0
        latitude[drawn] = measures["centroid_latitude"].to_numpy()[at[drawn]]
        longitude[drawn] = measures["centroid_longitude"].to_numpy()[at[drawn]]
        source[drawn] = "polygon"
    own = source == "site"
    latitude[own], longitude[own] = sites["latitude"].to_numpy()[own], sites["longitude"].to_numpy()[own]
    sites["centroid_latitude"], sites["centroid_longitude"], sites["centroid_source"] = (
        latitude,
        longitude,
        source,
    )
    if own.any():
        log.warning(
            "centroid_from_site",
            file,
            f"{own.sum()} of {len(sites)} sites have neither a basin polygon nor a centroid, and their own position "
            f"is used: {_few(sites.loc[own, id_column].tolist())}.",
            "Distances between basins are then distances between outlets; give `basins` or the centroid columns.",
        )


def _few(names: list[str]) -> str:
    """Name up to ten sites and count the rest."""
    return ", ".join(names[:10]) + (f" and {len(names) - 10} more" if len(names) > 10 else "")


def _no_targets(config: StudyConfig) -> pd.DataFrame:
    text = ("target_id", "name", "centroid_source", "region", "upstream_gauge", "downstream_gauge", "remark")
    columns = [
        "target_id",
        "name",
        "latitude",
        "longitude",
        "area_km2",
        "centroid_latitude",
        "centroid_longitude",
    ]
    columns += [
        "centroid_source",
        "region",
        "upstream_gauge",
        "downstream_gauge",
        "remark",
        *config.attributes,
    ]
    return pd.DataFrame({name: pd.Series(dtype=object if name in text else float) for name in columns})


def _periods_table(periods: Periods, gauge_ids: list[str]) -> pd.DataFrame:
    return pd.DataFrame(
        {
            "gauge_id": np.array(gauge_ids, dtype=object)[periods.gauge],
            "first_year": periods.first_year,
            "last_year": periods.last_year,
            "state": periods.state,
            "use": periods.use,
            "why": periods.why,
        }
    )
