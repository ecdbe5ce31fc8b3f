"""What a look at a pool's gauges suggests: never done, only said."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from wrackline.hydrology.pools import PoolAnalysis
from wrackline.hydrology.records import FloatArray

SHORT_RECORD = 20
DRIVING_DROP = 0.5
"""Fall of H1 without a gauge from which the gauge is said to drive it, in a pool whose H1 is 1 or more."""
UNLIKELY = 0.01
"""Probability, under the pool's curve, that the largest flood of a record is as large as it was."""


@dataclass(frozen=True)
class Suggestion:
    """One gauge that asks for a look.

    Attributes
    ----------
    gauge_id : str
    kinds : tuple of {"discordant", "second_look", "drives_h", "short", "suspicious_flood"}
    h1, h1_without : float
        Of the pool, and of the pool without the gauge; NaN where there is no test.
    words : str
    """

    gauge_id: str
    kinds: tuple[str, ...]
    h1: float
    h1_without: float
    words: str


def suggest(pool: PoolAnalysis) -> tuple[Suggestion, ...]:
    """List the gauges of a pool that ask for a look at their data or their membership, in order of identifier."""
    found = []
    h1 = float(pool.heterogeneity.h[0])
    chance = chance_of_largest(pool)
    for i, gauge in enumerate(pool.gauge_ids):
        without = float(pool.h1_without[i])
        said: dict[str, str] = {}
        if pool.discordancy.discordant[i]:
            said["discordant"] = (
                f"D is {pool.discordancy.measure[i]:.2f}, above {pool.discordancy.critical:.2f}"
            )
        elif pool.discordancy.robust_discordant[i]:
            said["second_look"] = (
                f"its distance from the robust centre is {pool.discordancy.robust_distance[i]:.2f}"
            )
        if h1 >= 1 and h1 - without >= DRIVING_DROP:
            said["drives_h"] = f"H1 is {h1:.2f} with it and {without:.2f} without it"
        if pool.lmoments.n[i] < SHORT_RECORD:
            said["short"] = f"its record has {pool.lmoments.n[i]} peaks"
        if chance[i] < UNLIKELY:
            said["suspicious_flood"] = (
                f"its largest flood has a chance of {chance[i]:.1g} in a record of its length under the pool's curve"
            )
        if said:
            found.append(Suggestion(gauge, tuple(said), h1, without, "; ".join(said.values())))
    return tuple(found)


def chance_of_largest(pool: PoolAnalysis) -> FloatArray:
    """Chance that the largest of as many floods is at least as large as each gauge's was, by the pool's curve, (g,)."""
    aep = np.geomspace(1e-7, 0.5, 400)
    factor = pool.curve.factor(aep)
    rising = np.maximum.accumulate(factor[::-1])
    exceeded = np.exp(np.interp(pool.largest_scaled, rising, np.log(aep[::-1])))
    exceeded = np.where(pool.largest_scaled > rising[-1], 0.0, exceeded)
    return np.asarray(-np.expm1(pool.lmoments.n * np.log1p(-exceeded)))
