"""Do residuals of neighbouring sites go together? Moran's I with a permutation test."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from wrackline.stats.gls import FloatArray


@dataclass(frozen=True)
class MoranTest:
    """Moran's I of values at places: its value, its expectation without structure, and the p-value."""

    statistic: float
    expected: float
    p_value: float


def measure_spatial_structure(
    values: FloatArray,
    distance: FloatArray,
    rng: np.random.Generator,
    neighbours: int = 6,
    permutations: int = 999,
) -> MoranTest:
    """Test whether values (n,) at places with distances (n, n) go together among nearest neighbours.

    Moran (1950, Biometrika 37), weights one for each site's nearest ``neighbours`` and zero elsewhere; one-sided
    p-value by random permutations of the values over the places.
    """
    n = len(values)
    count = min(neighbours, n - 1)
    apart = distance + np.where(np.eye(n, dtype=bool), np.inf, 0.0)
    near = np.argsort(apart, axis=1, kind="stable")[:, :count]
    deviation = values - values.mean()
    total = float(deviation @ deviation)
    if total == 0:
        return MoranTest(0.0, -1.0 / (n - 1), 1.0)

    def statistic(z: FloatArray) -> float:
        return float((z[:, None] * z[near]).sum() / (count * total))

    found = statistic(deviation)
    higher = sum(statistic(rng.permutation(deviation)) >= found for _ in range(permutations))
    return MoranTest(found, -1.0 / (n - 1), (1 + higher) / (1 + permutations))
