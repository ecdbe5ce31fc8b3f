"""The four map layers of every study, put together from its sites, polygons and published tables."""

from __future__ import annotations

from collections.abc import Mapping
from decimal import Decimal
from pathlib import Path

import pandas as pd

from wrackline.study.config import StudyConfig
from wrackline.study.gis import Layer, line_layer, point_layer, polygon_layer, read_polygons
from wrackline.study.published import declared_unit
from wrackline.study.tables import Column, Table, read_table

SITE_COLUMNS = (
    Column("name", "text", "name"),
    Column("longitude", "degrees", "longitude, EPSG:4326"),
    Column("latitude", "degrees", "latitude, EPSG:4326"),
    Column("area", "area", "drainage area"),
    Column("region", "text", "region"),
)
GAUGE_TABLES = {
    "gauge_screening": ("n_peaks", "first_year", "last_year", "used", "reasons"),
    "gauge_moments": ("station_skew", "generalized_skew", "generalized_skew_mse", "weighted_skew"),
    "gauge_lmoments": ("n", "mean", "lcv", "lskew", "lkurtosis"),
}
SKEW_CELLS = (
    Column("cell", "text", "row and column in the raster skew.tif, from the north-west corner"),
    Column("skew", "1", "generalized skew of log10 annual peaks"),
    Column("mse", "1", "its mean square error"),
)
SKEW_CONTOURS = (
    Column("skew", "1", "generalized skew along the line; no lines where the map has steps or one level"),
)
STANDING = Column("standing", "text", "used or not used, as the styles read it")


def study_layers(
    config: StudyConfig,
    intake: Path,
    gauges: pd.DataFrame,
    targets: pd.DataFrame,
    tables: Mapping[str, Table],
) -> dict[str, Layer]:
    """Return the layers ``gauges``, ``targets``, ``basins`` and ``regions``; later stages may add others.

    Parameters
    ----------
    intake : Path
        Folder with ``basins.csv`` and ``regions.csv``, where the study has polygons.
    gauges, targets : DataFrame
        Sites as the intake wrote them (areas in km2).
    tables : mapping of str to Table
        Published tables by name; what is absent is left out of the layers.
    """
    return {
        "gauges": _gauges(config, gauges, tables),
        "targets": _targets(config, targets, tables),
        "basins": polygon_layer(
            read_polygons(intake / "basins.csv", "site_id").sort_values("site_id", ignore_index=True),
            (Column("site_id", "text", "gauge or target at the basin's outlet"),),
        ),
        "regions": polygon_layer(
            read_polygons(intake / "regions.csv", "region").sort_values("region", ignore_index=True),
            (Column("region", "text", "name of the region"),),
        ),
    }


def skew_layers(folder: Path) -> dict[str, Layer]:
    """Return the layers ``skew_contours`` and ``skew_cells`` that the stage of generalized skew left, or none."""
    if not (folder / "skew_cells.csv").is_file():
        return {}
    cells = read_table(folder / "skew_cells.csv", text=("cell", "wkt"))
    contours = read_table(folder / "skew_contours.csv", text=("wkt",))
    return {
        "skew_cells": polygon_layer(cells, SKEW_CELLS),
        "skew_contours": line_layer(contours, SKEW_CONTOURS),
    }


def _gauges(config: StudyConfig, sites: pd.DataFrame, tables: Mapping[str, Table]) -> Layer:
    frame, columns = _sites(config, sites, "gauge_id", "gauge")
    for name, wanted in GAUGE_TABLES.items():
        if name in tables:
            frame, columns = _add(frame, columns, tables[name], wanted)
    index = next((t for t in tables.values() if _holds(t, "gauge_id", "index_flood")), None)
    if index is not None:
        frame, columns = _add(frame, columns, index, ("index_flood",))
    if "pools" in tables:
        frame["pool"] = frame["gauge_id"].map(pools_of_gauges(tables)).fillna("")
        columns += (Column("pool", "text", "pool of the gauge; several are parted by spaces"),)
    used = frame["used"].eq(True) if "used" in frame else pd.Series(True, index=frame.index)
    frame["standing"] = used.map({True: "used", False: "not used"})
    return point_layer(frame, _declared((*columns, STANDING), config))


def _targets(config: StudyConfig, sites: pd.DataFrame, tables: Mapping[str, Table]) -> Layer:
    frame, columns = _sites(config, sites, "target_id", "ungauged site")
    if "target_estimates" in tables:
        rows = tables["target_estimates"].frame
        rows = rows[rows["adopted"].eq(True)]
        once = rows.drop_duplicates("target_id").set_index("target_id")
        for name, meaning in (
            ("route", "route of the adopted estimates"),
            ("warnings", "what to know before use"),
        ):
            frame[name] = frame["target_id"].map(once[name]).fillna("")
            columns += (Column(name, "text", meaning),)
        for aep in config.aeps.targets:
            at = rows[rows["aep"] == aep].set_index("target_id")
            for ending, value, meaning in (
                ("", "flow", "adopted flood"),
                ("_lower", "lower", "lower end of the interval of the adopted flood"),
                ("_upper", "upper", "upper end of the interval of the adopted flood"),
            ):
                column = name_aep_column(aep) + ending
                frame[column] = frame["target_id"].map(at[value]).astype(float)
                columns += (Column(column, "flow", f"{meaning}, annual exceedance probability {aep:g}"),)
    return point_layer(frame, _declared(columns, config))


def name_aep_column(aep: float) -> str:
    """Name a column for an annual exceedance probability.

    >>> name_aep_column(0.01), name_aep_column(0.002), name_aep_column(1e-5)
    ('aep_0_01', 'aep_0_002', 'aep_0_00001')
    """
    return "aep_" + format(Decimal(repr(float(aep))), "f").replace(".", "_")


def pools_of_gauges(tables: Mapping[str, Table]) -> dict[str, str]:
    """Pool of every pooled gauge; names of several pools are parted by spaces."""
    members = tables["pools"].frame.sort_values(["gauge_id", "pool"])
    return {
        str(gauge): " ".join(dict.fromkeys(map(str, pools)))
        for gauge, pools in members.groupby("gauge_id")["pool"]
    }


def _sites(
    config: StudyConfig, sites: pd.DataFrame, key: str, meaning: str
) -> tuple[pd.DataFrame, tuple[Column, ...]]:
    """Columns that gauges and targets share, sorted by identifier, with the declared attributes."""
    frame = sites.sort_values(key, ignore_index=True).copy()
    frame["area"] = frame["area_km2"] / config.area_in_km2
    columns: tuple[Column, ...] = (Column(key, "text", meaning), *SITE_COLUMNS)
    columns += tuple(
        Column(name, attribute.unit, attribute.meaning or "catchment attribute")
        for name, attribute in config.attributes.items()
        if name in frame and name not in {column.name for column in columns}
    )
    return frame[[column.name for column in columns]].copy(), columns


def _add(
    frame: pd.DataFrame, columns: tuple[Column, ...], table: Table, wanted: tuple[str, ...]
) -> tuple[pd.DataFrame, tuple[Column, ...]]:
    taken = {column.name for column in columns}
    new = tuple(column for column in table.columns if column.name in wanted and column.name not in taken)
    rows = table.frame.set_index("gauge_id")
    for column in new:
        frame[column.name] = frame["gauge_id"].map(rows[column.name])
    return frame, columns + new


def _holds(table: Table, *names: str) -> bool:
    return set(names) <= set(table.frame.columns) and table.frame["gauge_id"].is_unique


def _declared(columns: tuple[Column, ...], config: StudyConfig) -> tuple[Column, ...]:
    return tuple(Column(c.name, declared_unit(c.unit, config), c.meaning) for c in columns)
