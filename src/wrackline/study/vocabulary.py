"""The words of a study's input tables: their columns, what they mean, and which values they take."""

from __future__ import annotations

import difflib
from collections.abc import Iterable
from dataclasses import dataclass
from typing import Literal

KINDS = ("systematic", "historic")
CAUSES = ("rain", "snowmelt", "rain_on_snow", "tropical_storm", "ice_jam", "other", "unknown")
STATES = ("natural", "regulated", "urbanised", "moved", "area_changed", "other")
BOOLEANS = ("true", "false")
LEDGER_ACTIONS: dict[str, tuple[str, ...]] = {
    "peak": ("exclude", "keep", "set_flow", "set_interval"),
    "threshold": ("set",),
    "gauge": ("exclude", "keep", "low_flood_threshold"),
    "pool": ("move",),
    "region": ("move",),
    "model": (),
    "estimate": (),
}
"""Actions of the analyst's ledger by subject; an empty tuple leaves the wording to the analyst."""
SUBJECTS = tuple(LEDGER_ACTIONS)

EARLIEST_YEAR, LATEST_YEAR = 1000, 2200
"""Water years outside this span are mistakes; today's date plays no part, so a study reads the same for ever."""
LARGEST_FLOW, LARGEST_AREA = 1e9, 2e8
"""In any unit that a study may declare: beyond the outburst floods of the ice ages, and the Earth's land."""


@dataclass(frozen=True)
class InputColumn:
    """A column of an input table, as the tables' description and the templates print it."""

    name: str
    meaning: str
    required: bool = True


@dataclass(frozen=True)
class InputTable:
    """An input table: what a row is, its columns, and what a header without rows means."""

    name: str
    row_is: str
    columns: tuple[InputColumn, ...]
    when_empty: Literal["problem", "warning", "fine"] = "problem"
    takes_attributes: bool = False

    @property
    def required(self) -> tuple[str, ...]:
        return tuple(column.name for column in self.columns if column.required)

    @property
    def names(self) -> tuple[str, ...]:
        return tuple(column.name for column in self.columns)


def _optional(name: str, meaning: str) -> InputColumn:
    return InputColumn(name, meaning, required=False)


_CENTROID = (
    _optional(
        "centroid_latitude",
        "Latitude of the basin's centroid, degrees; taken from its polygon where there is one.",
    ),
    _optional("centroid_longitude", "Longitude of the basin's centroid, degrees."),
    _optional("region", "Region of the site, as text (used with `pooling.regions: column`)."),
)

GAUGES = InputTable(
    "gauges",
    "gauge",
    (
        InputColumn("gauge_id", "Identifier: letters, digits, `-`, `_`, `.`; leading zeros count."),
        InputColumn("name", "Name, in any script."),
        InputColumn("latitude", "Latitude of the gauge, decimal degrees, north positive."),
        InputColumn("longitude", "Longitude of the gauge, decimal degrees, east positive."),
        InputColumn("area", "Drainage area in the declared unit."),
        _optional("contributing_area", "Part of the area that contributes to floods, in the declared unit."),
        *_CENTROID,
        _optional("regulated", "true where the whole record is regulated, else false."),
    ),
    takes_attributes=True,
)
PEAKS = InputTable(
    "peaks",
    "gauge and water year",
    (
        InputColumn("gauge_id", "A gauge of gauges.csv."),
        InputColumn("water_year", "Named by the calendar year in which it ends."),
        InputColumn(
            "flow", "Largest flow of the year in the declared unit; blank where `low` or `high` say it."
        ),
        _optional("date", "Day of the peak: 1936-03-18, or what is known of it: 1936-03, 1936."),
        _optional("low", "The flood was at least this; blank: 0."),
        _optional("high", "The flood was at most this; blank: unbounded."),
        _optional("kind", "systematic or historic; blank: systematic."),
        _optional("cause", "What caused the flood: " + ", ".join(CAUSES) + "."),
        _optional(
            "flags", "Qualifications, separated by spaces; what each does is set under `flags` in study.yaml."
        ),
    ),
)
THRESHOLDS = InputTable(
    "thresholds",
    "gauge and span of years",
    (
        InputColumn("gauge_id", "A gauge of gauges.csv."),
        InputColumn("first_year", "First water year of the span."),
        InputColumn("last_year", "Last water year of the span."),
        InputColumn(
            "low", "A flood of that span would be on record with its size only from this flow upwards."
        ),
        _optional("high", "... and only up to this flow; blank: unbounded."),
        _optional("why", "How that is known."),
    ),
    when_empty="warning",
)
PERIODS = InputTable(
    "periods",
    "gauge and span of years",
    (
        InputColumn("gauge_id", "A gauge of gauges.csv."),
        InputColumn("first_year", "First water year of the span."),
        InputColumn("last_year", "Last water year of the span."),
        InputColumn("state", "State of the basin: " + ", ".join(STATES) + "."),
        InputColumn(
            "use", "true: use these years even where a flag would exclude them; false: leave them out."
        ),
        InputColumn("why", "The reason."),
    ),
    when_empty="fine",
)
TARGETS = InputTable(
    "targets",
    "ungauged site",
    (
        InputColumn("target_id", "Identifier: letters, digits, `-`, `_`, `.`; leading zeros count."),
        InputColumn("name", "Name, in any script."),
        InputColumn("latitude", "Latitude of the site, decimal degrees, north positive."),
        InputColumn("longitude", "Longitude of the site, decimal degrees, east positive."),
        InputColumn("area", "Drainage area in the declared unit."),
        *_CENTROID,
        _optional("upstream_gauge", "A gauge upstream on the same stream."),
        _optional("downstream_gauge", "A gauge downstream on the same stream."),
        _optional("remark", "Anything the reader of the estimate should know."),
    ),
    when_empty="warning",
    takes_attributes=True,
)
REDUNDANCY = InputTable(
    "redundancy",
    "pair of nested gauges",
    (
        InputColumn("gauge_id", "A gauge of gauges.csv."),
        InputColumn("other_id", "The other gauge of the pair."),
        InputColumn("keep", "The gauge that stays, or `both`."),
        InputColumn("why", "The reason."),
    ),
    when_empty="fine",
)
LEDGER = InputTable(
    "ledger",
    "decision of the analyst",
    (
        InputColumn("date", "Day of the decision, 2025-11-03."),
        InputColumn("by", "Who decided."),
        InputColumn("subject", "What it is about: " + ", ".join(SUBJECTS) + "."),
        InputColumn(
            "action",
            "What is done: "
            + "; ".join(f"{s}: {', '.join(a)}" for s, a in LEDGER_ACTIONS.items() if a)
            + ".",
        ),
        InputColumn("why", "The reason; printed in the report."),
        _optional("gauge_id", "The gauge it is about."),
        _optional("water_year", "The water year it is about."),
        _optional("pool", "The pool it is about."),
        _optional(
            "value",
            "set_flow: the flow; set_interval: low..high; threshold set: the new low; low_flood_threshold: floods "
            "below this flow count as below it (0: none); move: the region.",
        ),
        _optional("evidence", "Where the evidence can be found."),
    ),
    when_empty="fine",
)
INPUT_TABLES = (GAUGES, PEAKS, THRESHOLDS, PERIODS, TARGETS, REDUNDANCY, LEDGER)


def nearest_word(word: str, valid: Iterable[str]) -> str | None:
    """Return the valid word most like ``word``, or None when none is alike.

    Examples
    --------
    >>> nearest_word("snow_melt", CAUSES)
    'snowmelt'
    >>> nearest_word("lava", CAUSES) is None
    True
    """
    by_lower = {w.lower(): w for w in valid}
    found = difflib.get_close_matches(word.lower(), list(by_lower), n=1, cutoff=0.6)
    return by_lower[found[0]] if found else None


def did_you_mean(word: str, valid: Iterable[str]) -> str:
    """Return a mend that names the nearest valid word, or lists them all where none is near."""
    valid = tuple(valid)
    found = nearest_word(word, valid)
    return f"Did you mean '{found}'?" if found else f"Valid are: {', '.join(valid)}."
