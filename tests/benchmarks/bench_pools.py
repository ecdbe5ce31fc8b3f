"""Pools at 1,000 targets of a study with 1,000 gauges, against the simulation behind their heterogeneity alone.

Run: python tests/benchmarks/bench_pools.py
"""

import sys
from pathlib import Path

sys.path.insert(0, str(Path(__file__).parent))

import timing  # isort: skip  # noqa: F401  (before numpy: it asks for one BLAS thread)

import time

import numpy as np

from wrackline.hydrology.homogeneity import PresortedDraws, simulate_independent
from wrackline.hydrology.pool_forming import choose_influence, distances
from wrackline.hydrology.pool_material import gather_material
from wrackline.hydrology.pool_weights import sum_pairs
from wrackline.hydrology.pools import Membership, PoolSettings, analyse_pool
from wrackline.hydrology.records import exact_records
from wrackline.stats.distributions import gev
from wrackline.stats.streams import random_stream

GAUGES, TARGETS, STATION_YEARS = 1000, 1000, 500


def made_region(seed: int = 1):
    """A made region of gauges with 20 to 80 years whose L-CV rises along one of three attributes."""
    rng = np.random.default_rng(seed)
    sites = rng.standard_normal((GAUGES + TARGETS, 3))
    n = rng.integers(20, 81, GAUGES)
    laws = gev.fit(np.ones(GAUGES), 0.3 + 0.03 * sites[:GAUGES, 0], np.full(GAUGES, 0.2))
    flow = np.concatenate([gev.quantile(law, rng.random(k)) for law, k in zip(laws, n, strict=True)])
    years = np.concatenate([np.arange(2020 - k, 2020) for k in n])
    offsets = np.concatenate([[0], np.cumsum(n)])
    records = exact_records([f"{i:04}" for i in range(GAUGES)], offsets, years, np.maximum(flow, 0.01))
    return records, sites[:GAUGES], sites[GAUGES:]


def analyse_all(targets: int = TARGETS) -> tuple[float, float, dict[str, float]]:
    """CPU seconds of all pools and of their H simulation alone, and what they were like."""
    records, gauges, places = made_region()
    settings = PoolSettings()
    started = time.process_time()
    draws = PresortedDraws(7, settings.simulations)
    material = gather_material(records, settings.minimum_peaks, draws)
    lm = material.lmoments
    away = distances(gauges, gauges)
    np.fill_diagonal(away, 0.0)
    unlike = sum_pairs(lm.t, lm.t3, lm.n, away, material.sampling).fit()
    to_targets = distances(places, gauges)
    pools, chosen = [], []
    for j in range(targets):
        members = choose_influence(to_targets[j], lm.n, STATION_YEARS, 8, None)
        correlation = np.exp(-away[np.ix_(members, members)])
        membership = Membership(unlike.square(to_targets[j][members]), material.sampling)
        pools.append(
            analyse_pool(
                records.keep_gauges(members), correlation, settings, random_stream(1, "pool", str(j)),
                draws=draws, membership=membership,
            )
        )  # fmt: skip
        chosen.append(members)
    whole = time.process_time() - started
    started = time.process_time()
    for pool, members in zip(pools, chosen, strict=True):
        simulate_independent(lm.n[members], pool.parent, draws)
    floor = time.process_time() - started
    facts = {
        "gauges": float(np.mean([len(p.gauge_ids) for p in pools])),
        "close calls": float(np.mean([p.heterogeneity.n_simulations > settings.simulations for p in pools])),
    }
    return whole, floor, facts


def measure() -> list[dict]:
    """Return one row: the CPU of all pools over that of their H simulation alone."""
    whole, floor, facts = analyse_all()
    return [
        {
            "kernel": f"pools at {TARGETS} targets: membership, weights, tests, laws, curves with intervals ({whole:.0f} s CPU)",
            "size": f"{GAUGES} gauges, {facts['gauges']:.0f} in a pool, {100 * facts['close calls']:.0f} % close calls",
            "floor": "simulating their independent regions from shared draws",
            "ratio": whole / floor,
            "ratio_min": whole / floor,
            "ratio_max": whole / floor,
            "peer": "none",
            "peer_ratio": float("nan"),
            "target": "under 60 s CPU",
        }
    ]


if __name__ == "__main__":
    for row in measure():
        print(f"{row['kernel']}; {row['size']}: {row['ratio']:.1f} x {row['floor']}; wanted {row['target']}")
