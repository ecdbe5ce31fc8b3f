"""Checks of the tables of gauges and targets: identifiers, coordinates, areas, attributes, regions."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
import pandas as pd

from wrackline.study.cells import (
    BoolArray,
    FloatArray,
    blank,
    booleans,
    identifiers,
    numbers,
    positive,
    references,
    report,
)
from wrackline.study.config import Attribute, StudyConfig
from wrackline.study.csv_files import Sheet
from wrackline.study.faults import FaultLog

FAR = 15.0
"""Degrees from the middle of the study at which a site is suspected of swapped or mis-signed coordinates."""
NEAR = 5.0


def read_gauges(sheet: Sheet, config: StudyConfig, log: FaultLog) -> pd.DataFrame:
    """Check the table of gauges; return its rows with SI units, sorted, with column ``row``.

    Rows whose identifier stands are all there, so that other files can be compared; bad cells are NaN.
    """
    return _read_sites(sheet, "gauge_id", config, log)


def read_targets(
    sheet: Sheet, gauge_ids: list[str] | None, config: StudyConfig, log: FaultLog
) -> pd.DataFrame:
    """Check the table of targets; return its rows with SI units, sorted, with column ``row``."""
    for column in ("upstream_gauge", "downstream_gauge"):
        references(sheet, column, gauge_ids, log, required=False)
    is_gauge = np.isin(sheet.text("target_id").astype(str), gauge_ids or [])
    report(
        log,
        sheet,
        is_gauge,
        "target_id",
        "target_is_gauge",
        "A gauge has this identifier.",
        "Name the target otherwise; estimates at gauges come without it.",
    )
    return _read_sites(sheet, "target_id", config, log)


def _read_sites(sheet: Sheet, id_column: str, config: StudyConfig, log: FaultLog) -> pd.DataFrame:
    stands = identifiers(sheet, id_column, log)
    _warn_of_twins(sheet, id_column, stands, log)
    name = sheet.text("name")
    report(log, sheet, blank(name), "name", "blank", "The site has no name.", "Name it.", warn=True)
    latitude, longitude = _coordinates(sheet, "", log, required=True)
    centroid_latitude, centroid_longitude = _coordinates(sheet, "centroid_", log, required=False)
    area, _ = positive(sheet, "area", log, required=True)
    columns: dict[str, object] = {
        id_column: sheet.text(id_column),
        "name": np.where(blank(name), sheet.text(id_column), name),
        "latitude": latitude,
        "longitude": longitude,
        "area_km2": area * config.area_in_km2,
    }
    if id_column == "gauge_id":
        columns["contributing_area_km2"] = _contributing_area(sheet, area, log) * config.area_in_km2
    columns |= {
        "centroid_latitude": centroid_latitude,
        "centroid_longitude": centroid_longitude,
        "centroid_source": "",
        "region": sheet.text("region"),
    }
    if id_column == "gauge_id":
        columns["regulated"] = booleans(sheet, "regulated", log, default=False)[0]
    else:
        columns |= {name: sheet.text(name) for name in ("upstream_gauge", "downstream_gauge", "remark")}
    for attribute_name, attribute in config.attributes.items():
        in_use = attribute_name in config.attributes_in_use
        columns[attribute_name] = _attribute(sheet, attribute_name, attribute, in_use, log)
    columns["row"] = sheet.rows
    frame = pd.DataFrame(columns)
    return frame[stands].sort_values(id_column, kind="stable").reset_index(drop=True)


def _warn_of_twins(sheet: Sheet, id_column: str, stands: BoolArray, log: FaultLog) -> None:
    """Warn of identifiers that differ in leading zeros alone: one of them may have lost its own."""
    rows_of: dict[str, list[int]] = {}
    for at in np.flatnonzero(stands):
        if sheet.text(id_column)[at].isdigit():
            rows_of.setdefault(sheet.text(id_column)[at].lstrip("0"), []).append(int(at))
    for first, *others in rows_of.values():
        for twin in others:
            log.warning(
                "leading_zero_twins",
                sheet.file,
                f"The identifier differs from that of row {sheet.rows[first]} in leading zeros alone.",
                "Are they two sites? If not, take one out.",
                row=sheet.rows[twin],
                column=id_column,
                value=sheet.text(id_column)[twin],
            )


def _contributing_area(sheet: Sheet, area: FloatArray, log: FaultLog) -> FloatArray:
    contributing, good = positive(sheet, "contributing_area", log, required=False)
    larger = good & (contributing > area)
    report(
        log,
        sheet,
        larger,
        "contributing_area",
        "contributing_area_larger",
        "The contributing area is larger than the area.",
        "Correct one of them.",
    )
    return np.where(larger, np.nan, contributing)


def _coordinates(
    sheet: Sheet, prefix: str, log: FaultLog, *, required: bool
) -> tuple[FloatArray, FloatArray]:
    lat_name, lon_name = f"{prefix}latitude", f"{prefix}longitude"
    latitude, lat_good = numbers(sheet, lat_name, log, required=required)
    longitude, lon_good = numbers(sheet, lon_name, log, required=required)
    lone = lat_good & lon_good & (np.isnan(latitude) != np.isnan(longitude))
    report(
        log,
        sheet,
        lone,
        lat_name,
        "lone_coordinate",
        "Latitude and longitude go together.",
        "Give both or none.",
    )
    lat_off, lon_off = np.abs(latitude) > 90, np.abs(longitude) > 180
    swapped = lat_off & (np.abs(latitude) <= 180) & (np.abs(longitude) <= 90)
    mirrored = np.zeros(len(sheet), dtype=bool)
    within = lat_good & lon_good & ~lat_off & ~lon_off & ~np.isnan(latitude) & ~np.isnan(longitude)
    if within.sum() >= 3:
        middle = np.median(latitude[within]), np.median(longitude[within])
        far = within & (_apart(latitude, longitude, *middle) > FAR)
        swapped |= far & (_apart(longitude, latitude, *middle) < NEAR)
        mirrored = far & ~swapped & (_apart(latitude, -longitude, *middle) < NEAR)
        mirrored |= far & ~swapped & (_apart(-latitude, longitude, *middle) < NEAR)
    report(
        log,
        sheet,
        swapped,
        lat_name,
        "coordinates_swapped",
        "Latitude and longitude seem to be swapped.",
        "Swap them.",
    )
    report(
        log,
        sheet,
        mirrored,
        lon_name,
        "coordinates_mirrored",
        "The site lies far from all others, and among them with the other sign.",
        "North and east are positive, south and west negative.",
    )
    for column, off, limit in ((lat_name, lat_off & ~swapped, 90), (lon_name, lon_off, 180)):
        report(
            log,
            sheet,
            off,
            column,
            "coordinates_out_of_range",
            f"Degrees between -{limit} and {limit} are expected.",
            "Give decimal degrees (WGS 84), not metres or degrees and minutes.",
        )
    bad = lat_off | lon_off | swapped | mirrored
    return np.where(bad, np.nan, latitude), np.where(bad, np.nan, longitude)


def _apart(
    latitude: FloatArray, longitude: FloatArray, middle_latitude: float, middle_longitude: float
) -> FloatArray:
    around = np.abs((longitude - middle_longitude + 180) % 360 - 180)
    return np.asarray(np.maximum(np.abs(latitude - middle_latitude), around))


_INVALID: dict[str, tuple[Callable[[FloatArray], BoolArray], str]] = {
    "log10": (lambda x: x <= 0, "The attribute is taken as its logarithm and must be above zero."),
    "sqrt": (lambda x: x < 0, "The attribute is taken as its square root and cannot be negative."),
    "log10_plus_1": (lambda x: x <= -1, "The attribute is taken as log10(x + 1) and must be above -1."),
}


def _attribute(sheet: Sheet, name: str, attribute: Attribute, in_use: bool, log: FaultLog) -> FloatArray:
    if name not in sheet:
        return np.full(len(sheet), np.nan)
    values, good = numbers(sheet, name, log)
    missing = blank(sheet.text(name))
    if in_use:
        report(
            log,
            sheet,
            missing,
            name,
            "missing_attribute",
            "The attribute is used by the study and missing here.",
            "Fill it in, or take the attribute out of the study.",
        )
    elif missing.any():
        log.warning(
            "missing_attribute",
            sheet.file,
            f"{missing.sum()} sites lack this attribute, which no regression uses.",
            column=name,
        )
    constant = in_use and len(values) > 1 and not missing.any() and good.all() and np.ptp(values) == 0
    if constant and "gauge_id" in sheet:
        log.problem(
            "constant_attribute",
            sheet.file,
            "All gauges have the same value, from which no regression can learn.",
            "Correct the column, or take the attribute out of the study.",
            row=1,
            column=name,
        )
    lower = -np.inf if attribute.lower is None else attribute.lower
    upper = np.inf if attribute.upper is None else attribute.upper
    outside = good & ((values < lower) | (values > upper))
    limits = f"from {lower:g} to {upper:g}".replace("from -inf to", "up to").replace(" to inf", " upwards")
    report(
        log,
        sheet,
        outside,
        name,
        "attribute_outside_limits",
        f"The study declares values {limits}{' ' + attribute.unit if attribute.unit else ''} as possible.",
        "Correct the value or its unit, or the limits under `attributes`.",
    )
    if in_use and attribute.transform in _INVALID:
        invalid, problem = _INVALID[attribute.transform]
        report(
            log,
            sheet,
            good & ~outside & invalid(values),
            name,
            "attribute_invalid_for_transform",
            problem,
            "Correct the value, or choose the transformation `log10_plus_1` or `none`.",
        )
    return values
