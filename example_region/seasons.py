"""When the floods came and what caused them: storms that whole regions share, and records that forgot the day."""

from __future__ import annotations

import datetime
from dataclasses import dataclass

import numpy as np

from example_region.region import Region
from wrackline.stats.streams import random_stream

WATER_YEAR_STARTS = 10
# Middle and spread of the season in days after 1 October, by cause; rain has a season by region.
_SEASONS = {
    "snowmelt": (222, 18),
    "rain_on_snow": (120, 25),
    "ice_jam": (166, 9),
    "tropical_storm": (345, 10),
}
_RAIN_SEASON = ((75, 32), (55, 38), (290, 30))


@dataclass(frozen=True)
class Occasion:
    """Date (whole, partial or blank), cause (or blank) and the flags that speak of them."""

    date: str
    cause: str
    flags: tuple[str, ...]


def date_floods(region: Region, gauge: int) -> list[Occasion]:
    """Return the occasion of the flood of every year of one gauge."""
    stream = random_stream(region.seed, "example occasions", str(gauge))
    elevation = float(region.sites.attributes["elevation"][gauge])
    region_number = int(region.sites.region[gauge])
    says_cause = stream.random() < 0.65
    occasions = []
    for year in region.years.tolist():
        draws = stream.random(6)
        cause = _cause(elevation, region_number, draws[0])
        day = _day(region.seed, region_number, year, cause, draws[1], int(stream.integers(0, 2)))
        date, uncertain = _as_remembered(year, day, draws[2], draws[3])
        flags: tuple[str, ...] = ("date_uncertain",) if uncertain else ()
        if says_cause and draws[4] < 0.01:
            flags += ("cause_unspecified",)
        told = says_cause and draws[4] >= 0.03 and (year > 1950 or draws[5] < 0.5)
        occasions.append(Occasion(date, cause if told else "", flags))
    return occasions


def _cause(elevation: float, region: int, draw: float) -> str:
    melt = float(np.clip((elevation - 500) / 1500, 0, 0.45))
    on_snow = 0.15 if elevation > 450 else 0.0
    ice = 0.02 if region == 2 else 0.004
    storm = 0.03 if region == 1 else 0.0
    limits = np.cumsum([melt, on_snow, ice, storm])
    number = int(np.searchsorted(limits, draw, side="right"))
    return ("snowmelt", "rain_on_snow", "ice_jam", "tropical_storm", "rain")[number]


def _day(seed: int, region: int, year: int, cause: str, draw: float, late: int) -> datetime.date:
    """Return the day of one of the two storms that a region had of a cause in a water year."""
    middle, spread = _RAIN_SEASON[region] if cause == "rain" else _SEASONS[cause]
    storms = random_stream(seed, "example storms", f"{region} {year} {cause}").normal(middle, spread, 2)
    after = int(np.clip(round(float(storms[int(draw < 0.3)])) + late, 0, 364))
    return datetime.date(year - 1, WATER_YEAR_STARTS, 1) + datetime.timedelta(days=after)


def _as_remembered(year: int, day: datetime.date, draw: float, doubt: float) -> tuple[str, bool]:
    """Return the date as the record has it, and whether it is flagged as uncertain."""
    old, historic = year < 1950, year < 1915
    year_only, month_only = (0.6, 0.9) if historic else (0.05, 0.15) if old else (0.001, 0.005)
    if draw < year_only:
        return str(day.year), doubt < 0.3
    if draw < month_only:
        return f"{day.year}-{day.month:02d}", doubt < 0.3
    if draw > 0.992:
        return "", False
    return day.isoformat(), old and doubt < 0.03
