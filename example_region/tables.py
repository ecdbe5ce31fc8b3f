"""The example's peaks, thresholds, periods and decisions, with what is awkward in them on purpose."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Any

import numpy as np
import pandas as pd

from example_region.region import LAST_YEAR, LATER_YEAR, Region
from example_region.seasons import date_floods
from wrackline.stats.streams import random_stream

PEAK_COLUMNS = ("gauge_id", "water_year", "flow", "date", "low", "high", "kind", "cause", "flags")
FOR_GOOD = 2040
AUTHOR = "Vell Water Survey, flood section"
# Annual exceedance probabilities of what people remember, and of what a crest-stage gauge starts at.
REMEMBERED_AEP, BASE_AEP, LATER_BASE_AEP = 0.04, 0.72, 0.80


@dataclass
class Study:
    """Rows of the study's tables while they are made; ``peaks`` by gauge number and water year."""

    identifiers: list[str]
    peaks: dict[tuple[int, int], dict[str, Any]] = field(default_factory=dict)
    thresholds: list[dict[str, Any]] = field(default_factory=list)
    periods: list[dict[str, Any]] = field(default_factory=list)
    redundancy: list[dict[str, Any]] = field(default_factory=list)
    ledger: list[dict[str, Any]] = field(default_factory=list)

    def peak_table(self, last_year: int) -> pd.DataFrame:
        rows = [row for (_, year), row in self.peaks.items() if year <= last_year]
        frame = pd.DataFrame(rows, columns=list(PEAK_COLUMNS))
        for name in ("flow", "low", "high"):
            frame[name] = frame[name].astype(float)
        return frame.sort_values(["gauge_id", "water_year"], kind="stable").reset_index(drop=True)

    def years_of(self, gauge: int) -> list[int]:
        """Water years of a gauge up to the last one of the study, in order."""
        return sorted(year for number, year in self.peaks if number == gauge and year <= LAST_YEAR)

    def flag(self, gauge: int, year: int, name: str) -> None:
        row = self.peaks[gauge, year]
        row["flags"] = " ".join(sorted({*str(row["flags"]).split(), name}))

    def scale(self, gauge: int, year: int, factor: float) -> None:
        row = self.peaks[gauge, year]
        row["flow"] = round_flow(row["flow"] * factor)

    def bound(self, gauge: int, year: int, low: float | None, high: float | None) -> None:
        """Put bounds in the place of a flow."""
        rounded = {
            "low": None if low is None else round_flow(low),
            "high": None if high is None else round_flow(high),
        }
        self.peaks[gauge, year].update(flow=None, **rounded)

    def add_period(self, gauge: int, first: int, last: int, state: str, use: bool, why: str) -> None:
        names = ("gauge_id", "first_year", "last_year", "state", "use", "why")
        self.periods.append(
            dict(zip(names, (self.identifiers[gauge], first, last, state, use, why), strict=True))
        )

    def add_threshold(self, gauge: int, first: int, last: int, low: float, why: str) -> None:
        names = ("gauge_id", "first_year", "last_year", "low", "high", "why")
        self.thresholds.append(
            dict(zip(names, (self.identifiers[gauge], first, last, low, None, why), strict=True))
        )


def round_flow(flow: float, digits: int = 3) -> float:
    """Round to significant digits, as peaks are published."""
    return float(f"{flow:.{digits}g}")


def write_down(region: Region, identifiers: list[str]) -> Study:
    """Return the tables that the agency of the example keeps."""
    study = Study(identifiers)
    _gauged_peaks(region, study)
    _changed_basins(region, study)
    _historic_floods(region, study)
    _crest_stage_gauges(region, study)
    _known_gaps(region, study)
    _ranges_and_daily_means(region, study)
    _single_events(region, study)
    _nested_pairs(region, study)
    _decisions(region, study)
    return study


def _gauged_peaks(region: Region, study: Study) -> None:
    for gauge, identifier in enumerate(study.identifiers):
        stream = random_stream(region.seed, "example flags", str(gauge))
        for number, occasion in enumerate(date_floods(region, gauge)):
            draw = stream.random()
            if not region.gauged[gauge, number]:
                continue
            year = int(region.years[number])
            flags = occasion.flags
            flags += ("estimated",) if draw < 0.03 else ("revised",) if draw > 0.99 else ()
            flow = round_flow(float(region.flow[gauge, number]))
            values = (
                identifier,
                year,
                flow,
                occasion.date,
                None,
                None,
                "",
                occasion.cause,
                " ".join(sorted(flags)),
            )
            study.peaks[gauge, year] = dict(zip(PEAK_COLUMNS, values, strict=True))


def _changed_basins(region: Region, study: Study) -> None:
    roles, begins = region.roles, region.roles.change_year
    for number, gauge in enumerate(roles.regulated):
        for year in range(begins[gauge], LATER_YEAR + 1):
            if (gauge, year) in study.peaks:
                study.flag(gauge, year, "regulated" if number else "regulated_or_diverted")
    for gauge in roles.dam_by_period:
        study.add_period(gauge, begins[gauge], FOR_GOOD, "regulated", False, "reservoir upstream filled")
    bypassed, kept = roles.urbanising[:2]
    why = "suburbs and storm sewers cover a fifth of the basin"
    study.add_period(bypassed, begins[bypassed], FOR_GOOD, "urbanised", False, why)
    study.add_period(
        kept, begins[kept], FOR_GOOD, "urbanised", True, "building began; left in until its effect is shown"
    )
    for gauge in roles.moved:
        first = study.years_of(gauge)[0]
        study.add_period(
            gauge, first, begins[gauge] - 1, "moved", False, "former site 2 km upstream of a tributary"
        )
    for gauge in roles.area_changed:
        why = "canal takes the headwaters to the next basin"
        study.add_period(gauge, begins[gauge], FOR_GOOD, "area_changed", False, why)


def _historic_floods(region: Region, study: Study) -> None:
    """Before the gauge people recorded every flood above a mark, and none below it."""
    mark = region.true_gauge_quantile(REMEMBERED_AEP)[:, 0]
    for number, gauge in enumerate(region.roles.historic):
        stream = random_stream(region.seed, "example historic", str(gauge))
        first, last = int(stream.integers(1878, 1899)), study.years_of(gauge)[0] - 1
        threshold = round_flow(mark[gauge], 2)
        study.add_threshold(
            gauge, first, last, threshold, "parish records and flood marks name every flood above the mill"
        )
        occasions = date_floods(region, gauge)
        for year in range(first, last + 1):
            at = int(np.searchsorted(region.years, year))
            flow = round_flow(float(region.flow[gauge, at]))
            if flow < threshold:
                continue
            values = (
                study.identifiers[gauge],
                year,
                flow,
                occasions[at].date,
                None,
                None,
                "historic",
                "",
                "",
            )
            study.peaks[gauge, year] = dict(zip(PEAK_COLUMNS, values, strict=True))
            if number % 2 and stream.random() < 0.6:
                study.bound(gauge, year, max(threshold, 0.85 * flow), 1.2 * flow)
            else:
                study.flag(gauge, year, "estimated")


def _crest_stage_gauges(region: Region, study: Study) -> None:
    """One gauge leaves years below its base out, the other writes them down as bounds; its base was lowered once."""
    base, later = region.true_gauge_quantile([BASE_AEP, LATER_BASE_AEP]).T
    silent, spoken = region.roles.crest_stage
    years = study.years_of(silent)
    low = round_flow(base[silent], 2)
    study.add_threshold(silent, years[0], LAST_YEAR, low, "crest-stage gauge: lowest readable crest")
    for year in [*years, LATER_YEAR]:
        if study.peaks[silent, year]["flow"] < low:
            if year == LATER_YEAR:
                study.bound(silent, year, None, low)
            else:
                del study.peaks[silent, year]
    years, lowered = study.years_of(spoken), region.roles.change_year[spoken]
    spans = (
        (years[0], lowered - 1, round_flow(base[spoken], 2)),
        (lowered, LAST_YEAR, round_flow(later[spoken], 2)),
    )
    for first, last, low in spans:
        study.add_threshold(spoken, first, last, low, "crest-stage gauge: lowest readable crest")
        for year in [
            y for y in [*years, LATER_YEAR] if first <= y <= (LATER_YEAR if last == LAST_YEAR else last)
        ]:
            if study.peaks[spoken, year]["flow"] < low:
                study.bound(spoken, year, None, low)


def _known_gaps(region: Region, study: Study) -> None:
    """While the gauge was out of use, no flood reached a height that would have been noticed."""
    notable = region.true_gauge_quantile(0.1)[:, 0]
    for gauge in region.roles.known_gap:
        years = study.years_of(gauge)
        widest = int(np.argmax(np.diff(years)))
        first, last = years[widest] + 1, years[widest + 1] - 1
        missed = (region.years >= first) & (region.years <= last)
        low = round_flow(1.05 * max(float(region.flow[gauge, missed].max()), notable[gauge]), 2)
        study.add_threshold(
            gauge, first, last, low, "station out of use; the road, flooded from this flow, stayed dry"
        )


def _ranges_and_daily_means(region: Region, study: Study) -> None:
    for number, gauge in enumerate(region.roles.crest_range):
        stream = random_stream(region.seed, "example ranges", str(gauge))
        years = study.years_of(gauge)
        for year in stream.choice(years[: len(years) // 2], 3, replace=False).tolist():
            flow = study.peaks[gauge, year]["flow"]
            study.bound(gauge, year, 0.9 * flow, 1.15 * flow)
        if number == 0:
            known = [year for year in years if study.peaks[gauge, year]["flow"] is not None]
            largest = max(known, key=lambda year: study.peaks[gauge, year]["flow"])
            study.bound(gauge, largest, 0.85 * study.peaks[gauge, largest]["flow"], None)
    for gauge in region.roles.daily_means:
        for year in study.years_of(gauge)[:6]:
            study.scale(gauge, year, 1 / 1.25)
            study.flag(gauge, year, "daily_mean")


def _single_events(region: Region, study: Study) -> None:
    burst, _, unsystematic, diverted, unknown, doubtful = region.roles.single_events
    years = study.years_of(burst)
    study.scale(burst, years[len(years) // 2], 5.0)
    study.flag(burst, years[len(years) // 2], "dam_break")
    first = study.years_of(unsystematic)[0]
    year = first - 2
    flow = round_flow(float(region.true_gauge_quantile(0.03)[unsystematic, 0]))
    values = (
        study.identifiers[unsystematic],
        year,
        flow,
        str(year),
        None,
        None,
        "",
        "",
        "estimated unsystematic",
    )
    study.peaks[unsystematic, year] = dict(zip(PEAK_COLUMNS, values, strict=True))
    years = study.years_of(diverted)
    for year in years[len(years) // 2 : len(years) // 2 + 5]:
        study.scale(diverted, year, 0.85)
        study.flag(diverted, year, "diverted")
    for year in study.years_of(unknown)[:10]:
        study.flag(unknown, year, "regulation_unknown")
    for year in study.years_of(doubtful)[-3:]:
        study.flag(doubtful, year, "basin_changed")


def _nested_pairs(region: Region, study: Study) -> None:
    """The most alike pair is decided, the least alike one kept; the one between is left to the rule."""
    area = region.sites.area_km2
    pairs = sorted(region.roles.redundant, key=lambda pair: area[pair[1]] / area[pair[0]])
    upper, lower = pairs[0]
    longer = upper if len(study.years_of(upper)) >= len(study.years_of(lower)) else lower
    decided = [
        (pairs[0], study.identifiers[longer], "same floods twice; the longer record stays"),
        (pairs[-1], "both", "a large tributary with floods of its own joins between the two"),
    ]
    for (one, other), keep, why in decided:
        values = (study.identifiers[one], study.identifiers[other], keep, why)
        study.redundancy.append(dict(zip(("gauge_id", "other_id", "keep", "why"), values, strict=True)))


def _decisions(region: Region, study: Study) -> None:
    roles = region.roles
    burst = roles.single_events[1]
    years = study.years_of(burst)
    year = years[len(years) // 3]
    study.scale(burst, year, 6.0)
    why = "a landslide lake burst; the peak is not a flood of the basin"
    _decide(
        study,
        "2025-02-11",
        "peak",
        "exclude",
        burst,
        year,
        "",
        why,
        "district letter 14, February of that year",
    )
    gauge = roles.historic[0]
    low = next(row["low"] for row in study.thresholds if row["gauge_id"] == study.identifiers[gauge])
    historic = [
        row["flow"]
        for (number, _), row in study.peaks.items()
        if number == gauge and row["kind"] == "historic" and row["flow"] is not None
    ]
    raised = min([1.1 * low, *(0.5 * (low + flow) for flow in historic)])
    raised = max(low, round_flow(raised))
    why = "levelling puts the sill of the mill higher than the parish book says"
    _decide(study, "2025-03-04", "threshold", "set", gauge, None, f"{raised:g}", why, "levelling sheet 7")
    why = "the record before the dam is natural and long enough; later peaks are flagged"
    _decide(
        study, "2025-03-18", "gauge", "keep", roles.regulated[1], None, "", why, "register of dams, sheet 2"
    )
    gauge = roles.crest_range[1]
    known = [year for year in study.years_of(gauge) if study.peaks[gauge, year]["flow"] is not None]
    year = max(known, key=lambda y: study.peaks[gauge, y]["flow"])
    flow = study.peaks[gauge, year]["flow"]
    bounds = f"{round_flow(0.8 * flow):g}..{round_flow(1.25 * flow):g}"
    why = "slope-area measurement rated poor; taken as a range"
    _decide(study, "2025-04-01", "peak", "set_interval", gauge, year, bounds, why, "field book 31")


def _decide(
    study: Study,
    date: str,
    subject: str,
    action: str,
    gauge: int,
    year: int | None,
    value: str,
    why: str,
    evidence: str,
) -> None:
    names = ("date", "by", "subject", "action", "why", "gauge_id", "water_year", "pool", "value", "evidence")
    values = (date, AUTHOR, subject, action, why, study.identifiers[gauge], year, "", value, evidence)
    study.ledger.append(dict(zip(names, values, strict=True)))
