"""What the page says first, and what it lists last: counts, pools, adopted floods, peaks, ledger."""

from __future__ import annotations

import math
from collections.abc import Mapping

import numpy as np
import pandas as pd

from wrackline.hydrology.records import PeakRecords
from wrackline.report.page import Count, GaugePeaks, plain
from wrackline.report.rounding import format_aep, format_flow, format_interval, format_percent, format_unit
from wrackline.study.config import StudyConfig
from wrackline.study.contribution import PageTable
from wrackline.study.tables import Table

SHOWN_AEPS = (0.1, 0.02, 0.01)
SHOWN_ROWS = 15


def count_study(tables: Mapping[str, Table], n_gauges: int, n_targets: int) -> tuple[Count, ...]:
    """Count gauges, peaks, pools and targets: how many were used of how many were read."""
    counts = []
    screening = tables.get("gauge_screening")
    if screening is not None:
        counts.append(Count("Gauges used", int(screening.frame["used"].eq(True).sum()), n_gauges))
    else:
        counts.append(Count("Gauges read", n_gauges))
    accounting = tables.get("record_accounting")
    if accounting is not None:
        fates = accounting.frame["fate"].value_counts()
        intervals = int(fates.get("interval", 0))
        remark = f"{intervals} as intervals" if intervals else ""
        counts.append(Count("Peaks used", int(fates.get("used", 0)) + intervals, int(fates.sum()), remark))
    tests = tables.get("pool_tests")
    if tests is not None:
        verdicts = tests.frame["verdict"].map(_short_verdict).value_counts()
        words = ", ".join(
            f"{count} {verdict}".replace(" ", "\u00a0") for verdict, count in sorted(verdicts.items())
        )
        counts.append(Count("Pools", len(tests.frame), None, words))
    if "target_estimates" in tables and n_targets:
        counts.append(Count("Ungauged sites estimated", _count_estimated(tables), n_targets))
    elif n_targets:
        counts.append(Count("Ungauged sites", n_targets))
    return tuple(counts)


def summarise(
    config: StudyConfig, tables: Mapping[str, Table], targets: pd.DataFrame
) -> tuple[PageTable, ...]:
    """The study's answers in two small tables: the pools with their verdicts, the adopted floods."""
    found = (_pools(tables), _adopted(config, tables, targets))
    return tuple(table for table in found if table is not None)


def list_ledger(tables: Mapping[str, Table]) -> PageTable | None:
    """The analyst's ledger as it was written, with the effect of each line; None where it is empty."""
    ledger = tables.get("ledger")
    if ledger is None or ledger.frame.empty:
        return None
    frame = ledger.frame
    kept = [name for name in frame.columns if any(_text(value) for value in frame[name])]
    return PageTable(
        caption="Decisions of the analysts, with their effect",
        head=tuple(plain(name) for name in kept),
        rows=tuple(tuple(_text(value) for value in row) for row in frame[kept].itertuples(index=False)),
        source="tables/ledger.csv",
    )


def list_peaks(records: PeakRecords, gauges: pd.DataFrame, flow_in_m3s: float) -> tuple[GaugePeaks, ...]:
    """Word every gauge's peaks in the declared unit, oldest first; gauges without a peak are left out."""
    names = dict(zip(gauges["gauge_id"], gauges["name"], strict=True))
    low, high = records.flow_low / flow_in_m3s, records.flow_high / flow_in_m3s
    found = []
    for number, gauge_id in enumerate(records.gauge_ids):
        rows = np.arange(records.offsets[number], records.offsets[number + 1])
        peaks = tuple(
            (str(records.water_year[i]), _peak(low[i], high[i], bool(records.historic[i])))
            for i in rows[records.observed[rows]]
        )
        if peaks:
            found.append(GaugePeaks(gauge_id, _text(names.get(gauge_id, "")), peaks))
    return tuple(found)


def _peak(low: float, high: float, historic: bool) -> str:
    text = format_flow(low) if low == high else format_interval(low, high)
    return f"{text} h" if historic else text


def _short_verdict(verdict: str) -> str:
    return plain(verdict.partition(";")[0])


def _count_estimated(tables: Mapping[str, Table]) -> int:
    frame = tables["target_estimates"].frame
    return int(frame.loc[frame["adopted"].eq(True), "target_id"].nunique())


def _pools(tables: Mapping[str, Table]) -> PageTable | None:
    if "pool_tests" not in tables:
        return None
    chosen: dict[str, str] = {}
    if "pool_distributions" in tables:
        fits = tables["pool_distributions"].frame
        fits = fits[fits["chosen"].eq(True)]
        chosen = dict(zip(fits["pool"].astype(str), fits["distribution"].astype(str), strict=True))
    tests = (
        tables["pool_tests"].frame.assign(pool=lambda frame: frame["pool"].astype(str)).sort_values("pool")
    )
    rows = tuple(
        (
            str(row["pool"]),
            _text(row["n_gauges"]),
            _text(row["station_years"]),
            _decimal(row["h1"]),
            plain(_text(row["verdict"])),
            chosen.get(str(row["pool"]), ""),
        )
        for _, row in tests.iterrows()
    )
    return PageTable(
        "Pools of gauges, their homogeneity (H1) and the distribution chosen",
        ("pool", "gauges", "station-years", "H1", "verdict", "distribution"),
        rows[:SHOWN_ROWS],
        "tables/pool_tests.csv",
    )


def _adopted(config: StudyConfig, tables: Mapping[str, Table], targets: pd.DataFrame) -> PageTable | None:
    if "target_estimates" not in tables:
        return None
    frame = tables["target_estimates"].frame
    adopted = frame[frame["adopted"].eq(True)]
    if adopted.empty:
        return None
    aeps = [aep for aep in SHOWN_AEPS if aep in config.aeps.targets] or list(config.aeps.targets[-3:])
    names = dict(zip(targets["target_id"], targets["name"], strict=True))
    by_site = {(str(row["target_id"]), float(row["aep"])): row for _, row in adopted.iterrows()}
    sites = sorted(adopted["target_id"].unique())
    rows = []
    for site in sites[:SHOWN_ROWS]:
        cells = [site, _text(names.get(site, ""))]
        for aep in aeps:
            row = by_site.get((site, aep))
            cells.append("" if row is None else format_flow(row["flow"]))
        last = by_site.get((site, aeps[-1]))
        cells.append("" if last is None else format_interval(last["lower"], last["upper"]))
        cells.append(
            "see warnings"
            if any(_text(w) for w in adopted.loc[adopted["target_id"] == site, "warnings"])
            else ""
        )
        rows.append(tuple(cells))
    if not any(row[-1] for row in rows):
        rows = [row[:-1] for row in rows]
    unit = format_unit(config.units.flow)
    head = ("site", "name", *(f"{format_aep(aep)} AEP, {unit}" for aep in aeps))
    head += (f"{format_percent(config.confidence)} interval at {format_aep(aeps[-1])} AEP, {unit}",)
    caption = "Adopted floods at the ungauged sites"
    if len(sites) > SHOWN_ROWS:
        caption += f" (the first {SHOWN_ROWS} of {len(sites)})"
    head += ("remark",) if len(rows[0]) > len(head) else ()
    return PageTable(caption, head, tuple(rows), "tables/target_estimates.csv")


def _text(value: object) -> str:
    """A cell as text: blank for missing, whole numbers without a decimal point."""
    if value is None or (isinstance(value, float) and math.isnan(value)):
        return ""
    return str(int(value)) if isinstance(value, float) and value.is_integer() else str(value)


def _decimal(value: object) -> str:
    return (
        f"{float(value):.2f}".replace("-", "\u2212")
        if isinstance(value, (int, float)) and math.isfinite(value)
        else ""
    )
