"""Which gauges each pool of a study has, by the configured way of pooling, and which pool every site uses."""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
import pandas as pd

from wrackline.hydrology.attributes import TRANSFORMS
from wrackline.hydrology.pool_forming import (
    Clusters,
    SiteSpace,
    choose_clusters,
    choose_influence,
    distances,
    form_clusters,
    place_sites,
)
from wrackline.hydrology.pool_material import PoolMaterial
from wrackline.hydrology.pool_weights import PairSums, sum_pairs
from wrackline.hydrology.pools import Membership
from wrackline.hydrology.records import FloatArray, IntArray
from wrackline.study.config import StudyConfig
from wrackline.study.faults import FaultLog


@dataclass(frozen=True)
class PoolPlan:
    """Pools before anything is tested.

    Attributes
    ----------
    method : str
    members : dict of pool to int array
        Numbers of the gauges.
    membership : dict of pool to Membership
        How the gauges stand to the pool's site.
    home : dict
        Site (gauge or target) to the pool it uses; blank: none.
    moves : dict
        Gauge to words on how the analyst moved it.
    before_moves : dict of pool to int array
        Members before the analyst's moves, of the pools that these touch.
    notes : tuple of str
        How the pools came about, for the report.
    clusters : Clusters or None
    """

    method: str
    members: dict[str, IntArray]
    membership: dict[str, Membership]
    home: dict[str, str]
    moves: dict[str, str] = field(default_factory=dict)
    before_moves: dict[str, IntArray] = field(default_factory=dict)
    notes: tuple[str, ...] = ()
    clusters: Clusters | None = None


@dataclass(frozen=True)
class Likeness:
    """How alike the sites of a study are, and what that means for their growth curves.

    Attributes
    ----------
    space : SiteSpace
    among : (g, g), to_targets : (m, g)
        Distances in attributes.
    pairs : PairSums
        Over gauges with usable records.
    usable : int array
        Numbers of those gauges; rows of ``pairs`` in this order.
    """

    space: SiteSpace
    among: FloatArray
    to_targets: FloatArray
    pairs: PairSums
    usable: IntArray


def lay_out(
    config: StudyConfig, gauges: pd.DataFrame, targets: pd.DataFrame, faults: FaultLog
) -> SiteSpace | None:
    """Place all sites by the attributes and distances that pooling uses; None where nothing is left to use."""
    named = config.pooling.attributes or ("area", *sorted(config.attributes))
    names, columns, others = [], [], []
    for name in named:
        column = "area_km2" if name == "area" else name
        transform = TRANSFORMS["log10" if name == "area" else config.attributes[name].transform]
        if column not in gauges or (len(targets) and column not in targets):
            continue
        with np.errstate(divide="ignore", invalid="ignore"):
            own = transform(gauges[column].to_numpy(dtype=float))
            other = transform(targets[column].to_numpy(dtype=float)) if len(targets) else np.empty(0)
        if np.isfinite(own).all() and np.isfinite(other).all():
            names.append(name)
            columns.append(own)
            others.append(other)
        elif config.pooling.attributes:
            faults.warning(
                "attribute_not_known_everywhere", "pool",
                f"attribute {name} is not known at every gauge and target and does not enter pooling",
                "Fill it in, or take it out of pooling.attributes.",
            )  # fmt: skip
    given = {entry.attribute: entry.weight for entry in config.pooling.attribute_weights}
    weights = [given.get(name, 1.0) for name in names]
    if not len(gauges) or not (sum(weights) or config.pooling.distance_weight):
        return None
    return place_sites(
        names,
        np.column_stack(columns) if columns else np.empty((len(gauges), 0)),
        np.column_stack(others) if columns else np.empty((len(targets), 0)),
        weights,
        _places(gauges),
        _places(targets),
        config.pooling.distance_weight,
    )


def measure_likeness(space: SiteSpace, material: PoolMaterial) -> Likeness:
    """Measure distances between sites and how the ratios of gauges differ with them."""
    among = distances(space.gauges, space.gauges)
    np.fill_diagonal(among, 0.0)
    lm, usable = material.lmoments, material.numbers
    pairs = sum_pairs(lm.t, lm.t3, lm.n, among[np.ix_(usable, usable)], material.sampling)
    return Likeness(space, among, distances(space.targets, space.gauges), pairs, usable)


def plan_regions(
    config: StudyConfig, gauges: pd.DataFrame, targets: pd.DataFrame, moves: list[Move], faults: FaultLog
) -> PoolPlan:
    """Take the given regions; a target uses its region's pool, or the one pool of all."""
    ids = gauges["gauge_id"].tolist()
    one = config.pooling.regions == "one"
    home = dict.fromkeys(ids, "all") if one else dict(zip(ids, gauges["region"], strict=True))
    regions = ["all"] * len(targets) if one else targets["region"].tolist() if len(targets) else []
    plan = _plan_groups("regions", home, moves, faults)
    for site, region in zip(targets["target_id"] if len(targets) else [], regions, strict=True):
        plan.home[site] = region if region in plan.members else "all" if "all" in plan.members else ""
    _warn_of_homeless(plan, ids, faults)
    return plan


def plan_clusters(
    config: StudyConfig,
    gauges: pd.DataFrame,
    targets: pd.DataFrame,
    likeness: Likeness,
    material: PoolMaterial,
    moves: list[Move],
    faults: FaultLog,
) -> PoolPlan:
    """Form clusters of attributes; targets and gauges without usable records join the nearest one."""
    pooling, usable, space = config.pooling, likeness.usable, likeness.space
    points = space.gauges[usable]
    if pooling.clusters is not None:
        label, centre = form_clusters(points, min(pooling.clusters, len(points)))
        clusters = Clusters(label, centre, (), f"{len(centre)} clusters, as configured", False)
    else:
        clusters = choose_clusters(
            points, material.lmoments.n, pooling.cluster_gauges, pooling.cluster_years, material.h1_of_rows
        )
    names = [f"cluster {k + 1}" for k in range(len(clusters.centre))]
    home = {g: names[k] for g, k in zip(gauges["gauge_id"], clusters.nearest(space.gauges), strict=True)}
    plan = _plan_groups("clusters", home, moves, faults, clusters.after_selection)
    if len(targets):
        nearest = clusters.nearest(space.targets)
        plan.home.update({t: names[k] for t, k in zip(targets["target_id"], nearest, strict=True)})
    notes = (f"Clusters of {', '.join(space.names)}: {clusters.reason}.",)
    return PoolPlan(
        "clusters", plan.members, plan.membership, plan.home, plan.moves, plan.before_moves, notes, clusters
    )


def plan_influence(
    config: StudyConfig,
    gauges: pd.DataFrame,
    targets: pd.DataFrame,
    likeness: Likeness,
    material: PoolMaterial,
    moves: list[Move],
    faults: FaultLog,
) -> PoolPlan:
    """Put a pool around every gauge and target; a gauge moved to no region is a member of none."""
    ids = gauges["gauge_id"].tolist()
    allowed = np.zeros(len(ids), dtype=bool)
    allowed[likeness.usable] = True
    told = {}
    for move in moves:
        if move.gauge_id in ids and not move.to:
            allowed[ids.index(move.gauge_id)] = False
            told[move.gauge_id] = f"taken out of all pools: {move.why}"
        elif move.gauge_id in ids:
            faults.warning(
                "move_without_meaning", "pool",
                f"gauge {move.gauge_id} is moved to '{move.to}', but every site has its own pool",
                "Only a move to no region counts with regions of influence.",
            )  # fmt: skip
    members, membership, home = {}, {}, {}
    for i, gauge in enumerate(ids):
        include = config.pooling.own_record == "include" and bool(allowed[i])
        chosen, stands = surround(config, likeness, material, likeness.among[i], allowed, i, include)
        members[gauge], membership[gauge], home[gauge] = chosen, stands, gauge
    for j, target in enumerate(targets["target_id"] if len(targets) else []):
        chosen, stands = surround(config, likeness, material, likeness.to_targets[j], allowed, None, False)
        members[target], membership[target], home[target] = chosen, stands, target
    note = (
        f"Every site has its own pool: the gauges most like it in {', '.join(likeness.space.names)}, until they have "
        f"{config.pooling.influence_years} station-years."
    )
    return PoolPlan("influence", members, membership, home, told, {}, (note,))


def surround(
    config: StudyConfig,
    likeness: Likeness,
    material: PoolMaterial,
    away: FloatArray,
    allowed: np.ndarray,
    own: int | None,
    include_own: bool,
) -> tuple[IntArray, Membership]:
    """Choose the gauges around one site and say how they stand to it; a gauge left out leaves no trace."""
    distance = np.where(allowed, away, np.inf)
    if own is not None:
        distance[own] = 0.0 if include_own else np.inf
    years = material.years_of_gauges
    chosen = choose_influence(
        distance,
        years,
        config.pooling.influence_years,
        config.pooling.influence_gauges,
        own if include_own else None,
    )
    row = None
    if own is not None and not include_own and own in likeness.usable:
        row = int(np.flatnonzero(likeness.usable == own)[0])
    departure = likeness.pairs.fit(without=row).square(distance[chosen])
    if include_own:
        departure[:, chosen == own] = 0.0
    name = material.gauge_ids[own] if include_own and own is not None else ""
    return chosen, Membership(departure, material.sampling, name)


@dataclass(frozen=True)
class Move:
    """A gauge that the analyst puts elsewhere, by the configuration or by the ledger."""

    gauge_id: str
    to: str
    why: str


def gather_moves(config: StudyConfig, ledger: pd.DataFrame | None) -> list[Move]:
    """Return the analyst's moves: pools put together by hand, then single moves, then the ledger's in order of date."""
    moves = [Move(gauge, pool.pool, pool.why) for pool in config.pooling.pools for gauge in pool.gauges]
    moves += [Move(move.gauge_id, move.to, move.why) for move in config.pooling.moves]
    if ledger is not None and len(ledger):
        lines = ledger[
            ledger["subject"].isin(["pool", "region"])
            & (ledger["action"] == "move")
            & ~ledger["effect"].astype(str).str.startswith("superseded")
        ]
        for line in lines.sort_values("date", kind="stable").itertuples():
            to = next((str(v) for v in (line.value, line.pool) if isinstance(v, str) and v), "")
            moves.append(Move(str(line.gauge_id), to, f"{line.why} (ledger, {line.date})"))
    return moves


def _plan_groups(
    method: str, home: dict[str, str], moves: list[Move], faults: FaultLog, after_selection: bool = False
) -> PoolPlan:
    """Apply the moves to pools that share no gauge."""
    ids, before, told = list(home), dict(home), {}
    for move in moves:
        if move.gauge_id not in home:
            faults.warning(
                "move_without_gauge", "pool",
                f"gauge {move.gauge_id} is to be moved to '{move.to}' but is not among the used gauges",
                "Check its identifier in pooling.moves and whether the screening left it out.",
            )  # fmt: skip
            continue
        told[move.gauge_id] = f"moved from '{before[move.gauge_id]}' to '{move.to}': {move.why}"
        home[move.gauge_id] = move.to
    names = sorted({name for name in home.values() if name})
    touched = {g for g in told if before[g] != home[g]}
    pools_before = sorted({before[g] for g in touched} | {home[g] for g in touched})
    return PoolPlan(
        method,
        {name: _numbers(ids, home, name) for name in names},
        {name: Membership(after_selection=after_selection) for name in names},
        home,
        told,
        {name: _numbers(ids, before, name) for name in pools_before if name},
    )


def _numbers(ids: list[str], home: dict[str, str], name: str) -> IntArray:
    return np.array([i for i, gauge in enumerate(ids) if home[gauge] == name], dtype=np.int64)


def _warn_of_homeless(plan: PoolPlan, ids: list[str], faults: FaultLog) -> None:
    homeless = sorted(gauge for gauge in ids if not plan.home[gauge])
    if homeless:
        faults.warning(
            "gauge_in_no_pool", "pool",
            f"{len(homeless)} used gauges are in no region and so in no pool: {', '.join(homeless[:12])}"
            + (" ..." if len(homeless) > 12 else ""),
            "Give them a region, draw the region's polygon around them, or set pooling.regions to one.",
        )  # fmt: skip


def _places(sites: pd.DataFrame) -> FloatArray:
    if not len(sites):
        return np.empty((0, 2))
    return sites[["centroid_latitude", "centroid_longitude"]].to_numpy(dtype=float)
