"""What is awkward in the example on purpose: which gauges play which part, and what it does to their floods."""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np

from example_region.sites import Sites
from example_region.terrain import FloatArray, IntArray
from example_region.truth import Parents
from wrackline.hydrology.records import BoolArray
from wrackline.stats.streams import random_stream

# Downstream gauges whose basins are that much larger than their neighbour's.
REDUNDANT_RATIOS = (1.06, 1.5, 2.2)


@dataclass(frozen=True)
class Roles:
    """Numbers of the gauges that play an awkward part, none twice, and the year in which it begins."""

    regulated: tuple[int, ...] = ()
    dam_by_period: tuple[int, ...] = ()
    urbanising: tuple[int, ...] = ()
    moved: tuple[int, ...] = ()
    area_changed: tuple[int, ...] = ()
    short: tuple[int, ...] = ()
    zero_flow: tuple[int, ...] = ()
    low_outliers: tuple[int, ...] = ()
    historic: tuple[int, ...] = ()
    crest_stage: tuple[int, ...] = ()
    discordant: tuple[int, ...] = ()
    known_gap: tuple[int, ...] = ()
    crest_range: tuple[int, ...] = ()
    daily_means: tuple[int, ...] = ()
    single_events: tuple[int, ...] = ()
    redundant: tuple[tuple[int, int], ...] = ()
    change_year: dict[int, int] = field(default_factory=dict)

    def parts(self) -> list[str]:
        """Names of the parts that single gauges play."""
        return [name for name in self.__dataclass_fields__ if name not in ("redundant", "change_year")]

    def taken(self) -> set[int]:
        """Every gauge that plays a part."""
        single = {gauge for part in self.parts() for gauge in getattr(self, part)}
        return single | {gauge for pair in self.redundant for gauge in pair}


# Part, number of gauges, shortest record, longest record, region (-1: any), needs a running gauge.
_CASTING = (
    ("historic", 6, 35, 95, -1, False),
    ("regulated", 3, 40, 110, -1, True),
    ("dam_by_period", 2, 45, 110, -1, True),
    ("urbanising", 3, 45, 110, -1, True),
    ("moved", 1, 45, 110, -1, True),
    ("area_changed", 1, 45, 110, -1, True),
    ("known_gap", 1, 40, 110, -1, False),
    ("zero_flow", 4, 30, 80, 2, False),
    ("low_outliers", 6, 30, 110, -1, False),
    ("crest_range", 4, 25, 110, -1, False),
    ("daily_means", 2, 40, 110, -1, False),
    ("discordant", 1, 25, 60, 1, False),
    ("crest_stage", 2, 20, 60, -1, True),
    ("single_events", 6, 30, 110, -1, False),
    ("short", 4, 12, 40, -1, True),
)


def assign_roles(sites: Sites, gauged: BoolArray, years: IntArray, seed: int) -> Roles:
    """Give every awkward part to gauges whose records suit it.

    Raises
    ------
    ValueError
        When a part finds no gauge: the region is too small to be awkward.
    """
    stream = random_stream(seed, "example roles")
    pairs = redundant_pairs(sites)
    taken = {gauge for pair in pairs for gauge in pair}
    length = gauged[:, :-1].sum(axis=1)
    span = np.array([np.ptp(years[row]) + 1 for row in gauged])
    parts: dict[str, tuple[int, ...]] = {}
    change: dict[int, int] = {}
    for part, count, shortest, longest, region, running in _CASTING:
        suits = (length >= shortest) & (length <= longest)
        suits &= (gauged[:, -1] if running else True) & (
            (sites.region[: len(length)] == region) | (region < 0)
        )
        suits[list(taken)] = False
        if part == "crest_stage":
            suits &= length >= span - 2
        if part == "known_gap":
            suits &= span - length >= 5
        if suits.sum() < count:
            raise ValueError(f"only {suits.sum()} gauges suit the part '{part}'; ask for more gauges")
        chosen = sorted(stream.choice(np.flatnonzero(suits), count, replace=False).tolist())
        parts[part] = tuple(chosen)
        taken |= set(chosen)
        for gauge in chosen:
            own = years[gauged[gauge]]
            early, late = (0.3, 0.45) if part == "urbanising" else (0.35, 0.6)
            change[gauge] = int(own[int(stream.uniform(early, late) * len(own))])
    return Roles(**parts, redundant=tuple(pairs), change_year=change)


def redundant_pairs(sites: Sites) -> list[tuple[int, int]]:
    """Return the nested pairs of gauges (upper, lower) whose basins are nearly the same."""
    n = sites.n_gauges
    area, apart = sites.area_km2[:n], sites.distances_km()[:n, :n]
    scale = np.sqrt(0.5 * (area[:, None] + area[None, :]))
    ratio = area[None, :] / area[:, None]
    alike = (sites.shared[:n, :n] > 0) & (ratio > 1) & (ratio < 5) & (apart < 0.5 * scale)
    return [(int(upper), int(lower)) for upper, lower in np.argwhere(alike)]


def impose_on_flows(
    roles: Roles, sites: Sites, parents: Parents, flow: FloatArray, gauged: BoolArray, years: IntArray
) -> tuple[FloatArray, BoolArray]:
    """Return flows and gauged years with dams, growth of towns, droughts and the like imposed."""
    flow, gauged = flow.copy(), gauged.copy()
    for gauge in (*roles.regulated, *roles.dam_by_period):
        flow[gauge, years >= roles.change_year[gauge]] *= 0.45
    for gauge in roles.urbanising:
        flow[gauge] *= 10 ** (0.015 * np.maximum(years - roles.change_year[gauge], 0))
    for gauge in roles.moved:
        flow[gauge, years < roles.change_year[gauge]] *= 0.80
    for gauge in roles.area_changed:
        flow[gauge, years >= roles.change_year[gauge]] *= 0.62
    for number, gauge in enumerate(roles.short):
        running = np.flatnonzero(gauged[gauge, :-1])
        gauged[gauge, running[: -(6 + number)]] = False
    for gauge in roles.crest_stage:
        running = np.flatnonzero(gauged[gauge])
        gauged[gauge, running[0] : running[-1] + 1] = True
    probability = np.array([[0.06, 0.15]])
    small = 10 ** parents.log10_quantile(np.tile(probability, (len(sites), 1)))
    for gauge in roles.zero_flow:
        flow[gauge, flow[gauge] < small[gauge, 1]] = 0.0
    for gauge in roles.low_outliers:
        dry = flow[gauge] < small[gauge, 0]
        flow[gauge, dry] *= (flow[gauge, dry] / small[gauge, 0]) ** 4 / 4
    for gauge in roles.discordant:
        own = np.flatnonzero(gauged[gauge])
        largest = own[np.argsort(flow[gauge, own])[-2:]]
        flow[gauge, largest] *= 5.0
    return flow, gauged
