"""One draw of the invented region: sites, truth and records, for the example study and for experiments."""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
import pandas as pd
from numpy.typing import ArrayLike

from example_region.awkward import REDUNDANT_RATIOS, Roles, assign_roles, impose_on_flows
from example_region.sites import Sites, choose_sites
from example_region.terrain import REGION_NAMES, FloatArray, IntArray, Terrain, make_terrain
from example_region.truth import Parents, draw_flows, draw_parents, draw_years
from wrackline.hydrology.records import BoolArray, PeakRecords, exact_records
from wrackline.stats.streams import random_stream

FIRST_YEAR, FIRST_GAUGED_YEAR, LAST_YEAR, LATER_YEAR = 1870, 1915, 2024, 2025


@dataclass(frozen=True)
class Region:
    """A drawn region.

    Attributes
    ----------
    kind, seed
        ``lp3`` or ``misspecified``; the seed of all draws.
    gauges, targets : DataFrame
        ``gauge_id`` / ``target_id``, name, latitude, longitude, area_km2, contributing_area_km2 (gauges),
        centroid_latitude, centroid_longitude, centroid_source, region, regulated (gauges),
        upstream_gauge, downstream_gauge, remark (targets), and the attributes: SI, sorted by identifier.
    records : PeakRecords
        The gauged floods up to water year 2024, exact and systematic, m3/s.
    sites, parents : Sites, Parents
        All sites, gauges first; their parent distributions.
    years : int array (y,)
    flow : float array (gauges, y), m3/s
        Floods of every year, gauged or not, with what `awkward` imposes on them.
    gauged : bool array (gauges, y)
    roles : Roles
        Which gauges play which awkward part; nobody does in a tame region.
    """

    kind: str
    seed: int
    gauges: pd.DataFrame
    targets: pd.DataFrame
    records: PeakRecords
    terrain: Terrain
    sites: Sites
    parents: Parents
    years: IntArray
    flow: FloatArray
    gauged: BoolArray
    roles: Roles = field(default_factory=Roles)

    def true_quantile(self, aep: ArrayLike) -> FloatArray:
        """Return the targets' true flows in m3/s, shape (targets, aeps)."""
        return self.true_quantile_of_sites(aep)[self.sites.n_gauges :]

    def true_gauge_quantile(self, aep: ArrayLike) -> FloatArray:
        """Return the gauges' true flows in m3/s, shape (gauges, aeps)."""
        return self.true_quantile_of_sites(aep)[: self.sites.n_gauges]

    def true_quantile_of_sites(self, aep: ArrayLike) -> FloatArray:
        """Return true flows in m3/s of gauges, then targets, shape (sites, aeps)."""
        wanted = 1 - np.atleast_1d(np.asarray(aep, dtype=float))
        return 10 ** self.parents.log10_quantile(np.tile(wanted, (len(self.sites), 1)))


def generate_region(
    seed: int, kind: str = "lp3", n_gauges: int = 120, n_targets: int = 24, awkward: bool = True
) -> Region:
    """Draw a region: the same island, other gauges, other truth, other floods for every seed.

    Parameters
    ----------
    seed : int
    kind : {"lp3", "misspecified"}
        Whether the study's models can hold or cannot (see `truth`).
    n_gauges, n_targets : int
        Up to about 150 gauges find room. An awkward region needs at least 60.
    awkward : bool
        Whether trends, dams, zeros, short records and the like are imposed on some gauges.

    Raises
    ------
    ValueError
        For an unknown kind, or more gauges than there is room for.
    """
    terrain = make_terrain()
    sites = choose_sites(terrain, seed, n_gauges, n_targets, REDUNDANT_RATIOS if awkward else ())
    parents = draw_parents(sites, kind, seed)
    years = np.arange(FIRST_YEAR, LATER_YEAR + 1)
    flow = draw_flows(parents, draw_years(sites, seed, len(years)))[:n_gauges]
    gauged = draw_gauged_years(seed, n_gauges, years)
    roles = Roles()
    if awkward:
        roles = assign_roles(sites, gauged, years, seed)
        flow, gauged = impose_on_flows(roles, sites, parents, flow, gauged, years)
    identifiers = identify_gauges(sites)
    return Region(
        kind=kind,
        seed=seed,
        gauges=_gauge_table(sites, identifiers, roles),
        targets=_target_table(terrain, sites, identifiers),
        records=_records(identifiers, years, flow, gauged),
        terrain=terrain,
        sites=sites,
        parents=parents,
        years=years,
        flow=flow,
        gauged=gauged,
        roles=roles,
    )


def draw_gauged_years(seed: int, n_gauges: int, years: IntArray) -> BoolArray:
    """Draw ragged records of 12 to 110 years, most of them still running, some with gaps."""
    stream = random_stream(seed, "example records")
    length = np.clip(np.round(np.exp(stream.normal(np.log(44), 0.55, n_gauges))), 12, 110).astype(int)
    closed = stream.random(n_gauges) < 0.14
    last = np.where(closed, stream.integers(1965, LAST_YEAR, n_gauges), LATER_YEAR)
    first = np.maximum(np.minimum(last, LAST_YEAR) - length + 1, FIRST_GAUGED_YEAR)
    gauged = (years >= first[:, None]) & (years <= last[:, None])
    for gauge in range(n_gauges):
        has_gap, gap_length = stream.random() < 0.3, int(stream.integers(2, 12))
        where = stream.random()
        span = int(min(last[gauge], LAST_YEAR) - first[gauge]) + 1
        lost = stream.random(len(years)) < 0.012
        if has_gap and span - gap_length >= 20:
            start = first[gauge] + 3 + int(where * (span - gap_length - 6))
            lost |= (years >= start) & (years < start + gap_length)
        kept = gauged[gauge] & ~lost
        kept[-1] = gauged[gauge, -1]
        if kept[:-1].sum() >= 12:
            gauged[gauge] = kept
    return gauged


def identify_gauges(sites: Sites) -> list[str]:
    """Return seven-digit identifiers: part 04, region, then running downstream in steps of 25."""
    identifiers, running = [], {0: 0, 1: 0, 2: 0}
    for region in sites.region[: sites.n_gauges].tolist():
        running[region] += 25
        identifiers.append(f"04{region + 1}{running[region]:04d}")
    return identifiers


def _records(identifiers: list[str], years: IntArray, flow: FloatArray, gauged: BoolArray) -> PeakRecords:
    use = gauged & (years <= LAST_YEAR)
    offsets = np.concatenate([[0], np.cumsum(use.sum(axis=1))])
    return exact_records(identifiers, offsets, np.broadcast_to(years, use.shape)[use], flow[use])


def _site_columns(sites: Sites, rows: slice) -> dict[str, object]:
    return {
        "latitude": sites.latitude[0, rows],
        "longitude": sites.longitude[0, rows],
        "area_km2": sites.area_km2[rows],
        "centroid_latitude": sites.latitude[1, rows],
        "centroid_longitude": sites.longitude[1, rows],
        "centroid_source": "polygon",
        "region": [REGION_NAMES[r] for r in sites.region[rows]],
    }


def _gauge_table(sites: Sites, identifiers: list[str], roles: Roles) -> pd.DataFrame:
    rows = slice(0, sites.n_gauges)
    columns: dict[str, object] = {"gauge_id": identifiers, "name": [f"Gauge {name}" for name in identifiers]}
    columns |= _site_columns(sites, rows)
    frame = pd.DataFrame(columns | {name: values[rows] for name, values in sites.attributes.items()})
    frame.insert(5, "contributing_area_km2", np.nan)
    frame.insert(10, "regulated", np.isin(np.arange(sites.n_gauges), roles.regulated))
    return frame


def _target_table(terrain: Terrain, sites: Sites, identifiers: list[str]) -> pd.DataFrame:
    rows = slice(sites.n_gauges, len(sites))
    names = [f"T{number:02d}" for number in range(1, len(sites) - sites.n_gauges + 1)]
    columns: dict[str, object] = {"target_id": names, "name": [f"Target {name}" for name in names]}
    columns |= _site_columns(sites, rows)
    frame = pd.DataFrame(columns)
    pairs = [nearest_on_river(terrain, sites, target) for target in range(sites.n_gauges, len(sites))]
    frame["upstream_gauge"] = [identifiers[up] if up >= 0 else "" for up, _ in pairs]
    frame["downstream_gauge"] = [identifiers[down] if down >= 0 else "" for _, down in pairs]
    frame["remark"] = ""
    return frame.assign(**{name: values[rows] for name, values in sites.attributes.items()})


def nearest_on_river(terrain: Terrain, sites: Sites, target: int) -> tuple[int, int]:
    """Return the gauges next upstream and downstream on the target's river, areas within a factor 2; -1: none."""
    gauges = sites.cell[: sites.n_gauges]
    cell, area = sites.cell[target], sites.area_km2[target]
    same = (terrain.stem[gauges] == terrain.stem[cell]) & (
        np.abs(np.log(sites.area_km2[: len(gauges)] / area)) < np.log(2)
    )
    above = np.flatnonzero(same & terrain.drains_through(gauges, int(cell)))
    below = np.flatnonzero(
        same & np.array([terrain.drains_through(np.array([cell]), int(g))[0] for g in gauges])
    )
    up = int(above[np.argmax(terrain.size[gauges[above]])]) if len(above) else -1
    down = int(below[np.argmin(terrain.size[gauges[below]])]) if len(below) else -1
    return up, down
