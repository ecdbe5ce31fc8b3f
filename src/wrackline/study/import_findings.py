"""What imported files say, before it becomes a study's tables: peaks, sites, names and units."""

from __future__ import annotations

import math
import re
from dataclasses import dataclass, field

from wrackline.study.retrieval_codes import Bound

_NUMBER = re.compile(r"([0-9]{1,15}(\.[0-9]{0,15})?|\.[0-9]{1,15})([eE][+-]?[0-9]{1,2})?")


@dataclass(frozen=True)
class FoundPeak:
    """One data row that gives, or should give, a peak.

    Attributes
    ----------
    file : str
    row : int
        Line of the file, from 1.
    gauge_id : str
    value : str
        The flow as the file writes it, in the file's unit; blank where `left_out` says why.
    date : str
        What is known of it: ``1936-03-18``, ``1936-03``, ``1936`` or blank.
    water_year : int
        0 where unknown.
    bound : {"", "below", "above"}
    historic : bool
    flags : tuple of str
    cause, words : str
        `words` says what became of the row's codes.
    codes : tuple of str
    stage : str
        Gauge height as the file writes it, feet.
    left_out : str
        Why the row gives no peak.
    highest_since : str
        Year since which the file calls this peak the highest, where it does.
    """

    file: str
    row: int
    gauge_id: str
    value: str = ""
    date: str = ""
    water_year: int = 0
    bound: Bound = ""
    historic: bool = False
    flags: tuple[str, ...] = ()
    cause: str = ""
    words: str = ""
    codes: tuple[str, ...] = ()
    stage: str = ""
    left_out: str = ""
    highest_since: str = ""

    @property
    def low(self) -> float:
        return 0.0 if self.bound == "below" else float(self.value)

    @property
    def high(self) -> float:
        return math.inf if self.bound == "above" else float(self.value)


@dataclass(frozen=True)
class FoundSite:
    """What one row of a site list says of a gauge; None or blank where it says nothing. Areas as in the file, mi2."""

    file: str
    row: int
    gauge_id: str
    name: str = ""
    latitude: float | None = None
    longitude: float | None = None
    area: float | None = None
    contributing_area: float | None = None


@dataclass
class Findings:
    """All that the files of one import say, in the order of reading.

    ``names`` holds the names of gauges from the comments above the tables; ``units`` and ``area_units``
    say the unit of every file that gives flows or areas.
    """

    peaks: list[FoundPeak] = field(default_factory=list)
    sites: list[FoundSite] = field(default_factory=list)
    names: dict[str, str] = field(default_factory=dict)
    units: dict[str, str] = field(default_factory=dict)
    area_units: dict[str, str] = field(default_factory=dict)

    @property
    def everything(self) -> list[FoundPeak | FoundSite]:
        return [*self.peaks, *self.sites]


def is_flow(text: str) -> bool:
    return bool(_NUMBER.fullmatch(text))


def is_identifier(word: str) -> bool:
    return bool(word) and word[0] not in "-." and all(c.isalnum() or c in "-_." for c in word)
