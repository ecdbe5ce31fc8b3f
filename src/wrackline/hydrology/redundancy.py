"""Nested pairs of gauges that tell the same flood twice, and which of the two goes."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike

from wrackline.hydrology.distances import EARTH_RADIUS_KM, great_circle_km
from wrackline.hydrology.records import BoolArray, FloatArray, IntArray


@dataclass(frozen=True)
class NestedPairs:
    """Pairs of gauges near enough and alike enough in area to be redundant; arrays have one entry per pair.

    Attributes
    ----------
    first, second : int arrays
        Gauge numbers, ``first < second``; sorted.
    distance_km : float array
        Between basin centroids.
    standardized_distance : float array
        Distance over the root of the mean of the two areas.
    area_ratio : float array
        Larger area over smaller.
    """

    first: IntArray
    second: IntArray
    distance_km: FloatArray
    standardized_distance: FloatArray
    area_ratio: FloatArray

    def __len__(self) -> int:
        return len(self.first)


@dataclass(frozen=True)
class PairDecision:
    """What the analyst decided on a pair: the number of the gauge that stays, or None for both."""

    first: int
    second: int
    keep: int | None
    why: str


@dataclass(frozen=True)
class RedundantPairs:
    """Candidate and decided pairs with what becomes of them; sequences have one entry per pair.

    Attributes
    ----------
    pairs : NestedPairs
    overlap_share : float array
        Shared area over the smaller basin; NaN where a polygon is lacking.
    dropped : int array
        Number of the gauge that goes; -1 where both stay.
    decided_by : tuple of str
        ``redundancy.csv``, ``ledger``, ``screening``.
    why : tuple of str
    drop_reasons : dict of int to str
        Reason in words for every dropped gauge.
    """

    pairs: NestedPairs
    overlap_share: FloatArray
    dropped: IntArray
    decided_by: tuple[str, ...]
    why: tuple[str, ...]
    drop_reasons: dict[int, str]


def standardized_distance(distance_km: ArrayLike, area_1_km2: ArrayLike, area_2_km2: ArrayLike) -> FloatArray:
    """Return distance over the root of the mean area (Veilleux, 2009; after Gruber and Stedinger, 2008).

    Examples
    --------
    >>> round(float(standardized_distance(4.0, 100.0, 150.0)), 6)
    0.357771
    """
    mean_area = (np.asarray(area_1_km2, dtype=float) + np.asarray(area_2_km2, dtype=float)) / 2
    return np.asarray(np.asarray(distance_km, dtype=float) / np.sqrt(mean_area))


def find_nested_pairs(
    latitude: ArrayLike,
    longitude: ArrayLike,
    area_km2: ArrayLike,
    largest_distance: float = 0.5,
    largest_area_ratio: float = 5.0,
) -> NestedPairs:
    """Find pairs with a standardized distance and an area ratio at or below the given limits.

    Parameters
    ----------
    latitude, longitude : float arrays (g,), degrees
        Of the basin centroids.
    area_km2 : float array (g,)
    largest_distance, largest_area_ratio : float

    Notes
    -----
    A gauge can only pair with areas up to the ratio times its own, so it only looks as far as the limit allows
    for the two areas; a tree of centroids makes that near-linear in the number of gauges.
    """
    from scipy.spatial import cKDTree

    latitude, longitude = np.asarray(latitude, dtype=float), np.asarray(longitude, dtype=float)
    area = np.asarray(area_km2, dtype=float)
    if len(area) < 2:
        none = np.zeros(0, dtype=np.int64)
        return NestedPairs(none, none, np.zeros(0), np.zeros(0), np.zeros(0))
    phi, lam = np.radians(latitude), np.radians(longitude)
    place = np.column_stack([np.cos(phi) * np.cos(lam), np.cos(phi) * np.sin(lam), np.sin(phi)])
    reach_km = largest_distance * np.sqrt((1 + largest_area_ratio) / 2 * area) * (1 + 1e-6) + 1e-3
    chord = 2 * np.sin(np.minimum(reach_km / EARTH_RADIUS_KM, np.pi) / 2)
    near = cKDTree(place).query_ball_point(place, chord)
    smaller = np.repeat(np.arange(len(area)), [len(found) for found in near])
    other = np.concatenate([np.asarray(found, dtype=np.int64) for found in near])
    pair = np.unique(np.sort(np.column_stack([smaller, other])[smaller != other], axis=1), axis=0)
    return _within(
        _measure(pair[:, 0], pair[:, 1], latitude, longitude, area), largest_distance, largest_area_ratio
    )


def resolve_redundancy(
    gauge_ids: Sequence[str],
    latitude: ArrayLike,
    longitude: ArrayLike,
    area_km2: ArrayLike,
    record_years: ArrayLike,
    candidates: NestedPairs,
    overlap_share: ArrayLike,
    smallest_overlap: float = 0.5,
    decisions: Sequence[PairDecision] = (),
    eligible: ArrayLike | None = None,
    protected: ArrayLike | None = None,
) -> RedundantPairs:
    """Decide which gauge of every nested pair goes.

    The analyst's decisions come first. Of the pairs that remain, those with polygons must share at least
    ``smallest_overlap`` of the smaller basin; those without are taken as nested. Then gauges are accepted from the
    longest record to the shortest (equal ones by identifier), and a gauge goes when it is nested with one that was
    accepted before it: a gauge that goes itself takes no other with it.

    Parameters
    ----------
    gauge_ids : sequence of str, length g
    latitude, longitude, area_km2, record_years : arrays (g,)
    candidates : NestedPairs
        From `find_nested_pairs`.
    overlap_share : float array, one entry per candidate
        NaN where a polygon is lacking.
    smallest_overlap : float
    decisions : sequence of PairDecision
        They hold for pairs that are no candidates too.
    eligible : bool array (g,), optional
        Gauges that are in use so far; others neither stay nor take another with them.
    protected : bool array (g,), optional
        Gauges that the analyst keeps whatever the screening says.
    """
    g = len(gauge_ids)
    alive = np.ones(g, dtype=bool) if eligible is None else np.array(eligible, dtype=bool)
    safe = np.zeros(g, dtype=bool) if protected is None else np.asarray(protected, dtype=bool)
    pairs, overlap = _with_decided_pairs(
        candidates, np.asarray(overlap_share, dtype=float), decisions, latitude, longitude, area_km2
    )
    decided = {(min(d.first, d.second), max(d.first, d.second)): d for d in decisions}
    keys = list(zip(pairs.first.tolist(), pairs.second.tolist(), strict=True))
    ruling = _Ruling.none_yet(len(keys))
    undecided = []
    for at, key in enumerate(keys):
        decision = decided.get(key)
        if not (alive[key[0]] and alive[key[1]]):
            out = " and ".join(gauge_ids[i] for i in key if not alive[i])
            ruling.why[at] = f"no conflict: {out} is not used for other reasons"
        elif decision is not None:
            ruling.decided_by[at] = "redundancy.csv"
            ruling.why[at] = decision.why
            if decision.keep is not None:
                goes = key[1] if decision.keep == key[0] else key[0]
                stays = gauge_ids[decision.keep]
                ruling.drop(at, goes, f"redundant with {stays}, decided by the analyst: {decision.why}")
        elif overlap[at] < smallest_overlap:
            ruling.why[at] = f"not nested: the basins share {100 * overlap[at]:.0f} % of the smaller one"
        elif safe[key[0]] and safe[key[1]]:
            ruling.decided_by[at], ruling.why[at] = "ledger", "the ledger keeps both"
        else:
            undecided.append(at)
    _accept_longest_first(gauge_ids, np.asarray(record_years), safe, overlap, keys, undecided, ruling)
    return RedundantPairs(
        pairs, overlap, ruling.dropped, tuple(ruling.decided_by), tuple(ruling.why), ruling.drop_reasons
    )


@dataclass
class _Ruling:
    """What is decided on every pair so far, and why gauges go."""

    dropped: IntArray
    decided_by: list[str]
    why: list[str]
    drop_reasons: dict[int, str]

    @classmethod
    def none_yet(cls, n_pairs: int) -> _Ruling:
        return cls(np.full(n_pairs, -1, dtype=np.int64), ["screening"] * n_pairs, [""] * n_pairs, {})

    def drop(self, at: int, gauge: int, reason: str) -> None:
        self.dropped[at] = gauge
        self.why[at] = self.why[at] or reason
        self.drop_reasons.setdefault(gauge, reason)


def _accept_longest_first(
    gauge_ids: Sequence[str],
    years: np.ndarray,
    safe: BoolArray,
    overlap: FloatArray,
    keys: list[tuple[int, int]],
    undecided: list[int],
    ruling: _Ruling,
) -> None:
    """Rule on the pairs that nobody has decided."""

    def rank(i: int) -> tuple[bool, int, str]:
        return not safe[i], -int(years[i]), gauge_ids[i]

    pairs_of: dict[int, list[int]] = {}
    for at in undecided:
        for i in keys[at]:
            pairs_of.setdefault(i, []).append(at)
    accepted: set[int] = set()
    for i in sorted(pairs_of, key=rank):
        if i in ruling.drop_reasons:
            continue
        takers = [(rank(j), j, at) for at in pairs_of[i] for j in keys[at] if j in accepted]
        if not takers:
            accepted.add(i)
            continue
        _, j, at = min(takers)
        if safe[j]:
            ruling.decided_by[at] = "ledger"
            record = "kept by the ledger"
        elif years[j] > years[i]:
            record = f"longer record, {years[j]} peaks against {years[i]}"
        else:
            record = f"equal record of {years[i]} peaks, first by identifier"
        shared = f"{100 * overlap[at]:.0f} % of the smaller basin shared"
        nested = "no polygons to tell whether nested" if np.isnan(overlap[at]) else shared
        ruling.drop(at, i, f"redundant with {gauge_ids[j]} ({record}; {nested})")
    for at in undecided:
        if ruling.dropped[at] < 0:
            gone = " and ".join(gauge_ids[i] for i in keys[at] if i in ruling.drop_reasons)
            ruling.why[at] = f"no conflict: {gone} goes for another pair"


def _with_decided_pairs(
    candidates: NestedPairs,
    overlap: FloatArray,
    decisions: Sequence[PairDecision],
    latitude: ArrayLike,
    longitude: ArrayLike,
    area_km2: ArrayLike,
) -> tuple[NestedPairs, FloatArray]:
    """Candidates together with the pairs that the analyst decided on and that are none."""
    known = set(zip(candidates.first.tolist(), candidates.second.tolist(), strict=True))
    added = sorted({(min(d.first, d.second), max(d.first, d.second)) for d in decisions} - known)
    first = np.concatenate([candidates.first, np.array([a for a, _ in added], dtype=np.int64)])
    second = np.concatenate([candidates.second, np.array([b for _, b in added], dtype=np.int64)])
    share = np.concatenate([overlap, np.full(len(added), np.nan)])
    order = np.lexsort((second, first))
    places = [np.asarray(a, dtype=float) for a in (latitude, longitude, area_km2)]
    return _measure(first[order], second[order], *places), share[order]


def _measure(
    first: IntArray, second: IntArray, latitude: FloatArray, longitude: FloatArray, area: FloatArray
) -> NestedPairs:
    distance = great_circle_km(latitude[first], longitude[first], latitude[second], longitude[second])
    ratio = np.maximum(area[first], area[second]) / np.minimum(area[first], area[second])
    return NestedPairs(
        first, second, distance, standardized_distance(distance, area[first], area[second]), ratio
    )


def _within(pairs: NestedPairs, largest_distance: float, largest_area_ratio: float) -> NestedPairs:
    keep = (pairs.standardized_distance <= largest_distance) & (pairs.area_ratio <= largest_area_ratio)
    return NestedPairs(*(getattr(pairs, name)[keep] for name in NestedPairs.__dataclass_fields__))
