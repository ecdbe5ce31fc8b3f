"""A first table of gauges from what retrievals say of them; what they do not say stays blank and is told."""

from __future__ import annotations

from dataclasses import fields

import numpy as np
import pandas as pd

from wrackline.study.faults import FaultLog
from wrackline.study.import_findings import Findings, FoundSite

STUB_COLUMNS = ("gauge_id", "name", "latitude", "longitude", "area", "contributing_area", "region")
_TOLD = ("name", "latitude", "longitude", "area", "contributing_area")
_NEEDED = {
    "name": "the name",
    "latitude": "the latitude in decimal degrees, north positive",
    "longitude": "the longitude in decimal degrees, east positive",
    "area": "the drainage area in {}",
}

SiteFates = dict[tuple[str, int], tuple[str, str]]


def build_gauges(findings: Findings, area_unit: str, log: FaultLog) -> tuple[pd.DataFrame, SiteFates]:
    """Return a row per gauge with peaks, or per listed site where no peaks are read; and what became of every site row."""
    with_peaks = {peak.gauge_id for peak in findings.peaks}
    sites: dict[str, FoundSite] = {}
    fates: SiteFates = {}
    for site in findings.sites:
        place = site.file, site.row
        if with_peaks and site.gauge_id not in with_peaks:
            fates[place] = ("left out", "no row of peaks in these files is of this site")
        elif site.gauge_id in sites:
            first = sites[site.gauge_id]
            _warn_of_differences(first, site, log)
            sites[site.gauge_id] = _joined(first, site)
            fates[place] = ("merged", f"the site stands in {first.file} row {first.row} too")
        else:
            sites[site.gauge_id] = site
            fates[place] = ("gauge", "row of gauges.csv")
    rows = [_row(gauge_id, sites.get(gauge_id), findings) for gauge_id in sorted(with_peaks or sites)]
    frame = pd.DataFrame(rows, columns=list(STUB_COLUMNS))
    _tell_blanks(frame, area_unit, log)
    return frame, fates


def _row(gauge_id: str, site: FoundSite | None, findings: Findings) -> tuple[object, ...]:
    site = site or FoundSite("", 0, gauge_id)
    name = site.name or findings.names.get(gauge_id, "")
    numbers = (site.latitude, site.longitude, site.area, site.contributing_area)
    return (gauge_id, name, *(np.nan if number is None else number for number in numbers), "")


def _joined(first: FoundSite, other: FoundSite) -> FoundSite:
    values = {field.name: getattr(first, field.name) for field in fields(first)}
    for name in _TOLD:
        if values[name] in (None, ""):
            values[name] = getattr(other, name)
    return FoundSite(**values)


def _warn_of_differences(first: FoundSite, other: FoundSite, log: FaultLog) -> None:
    for name in _TOLD:
        kept, left = getattr(first, name), getattr(other, name)
        if kept not in (None, "") and left not in (None, "") and kept != left:
            log.warning(
                "sites_differ",
                other.file,
                f"Gauge {other.gauge_id}: {name} is {kept} in {first.file} row {first.row}, and that is kept.",
                "Correct gauges.csv where the other is right.",
                row=other.row,
                column=name,
                value=left,
            )


def _tell_blanks(frame: pd.DataFrame, area_unit: str, log: FaultLog) -> None:
    for column, what in _NEEDED.items():
        lacking = frame["gauge_id"][(frame[column] == "") | frame[column].isna()].tolist()
        if lacking:
            few = ", ".join(lacking[:8]) + (" ..." if lacking[8:] else "")
            log.warning(
                "to_fill_in",
                "gauges.csv",
                f"Blank for {len(lacking)} of {len(frame)} gauges: {few}.",
                f"Fill in {what.format(area_unit)}; a site list given beside the peaks would tell it where it has the column.",
                column=column,
            )
