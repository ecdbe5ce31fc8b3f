"""Which causes moved a flood estimate, and by how much: shares that do not depend on an order of the causes."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from itertools import combinations
from math import factorial

import numpy as np

from wrackline.hydrology.records import FloatArray


def share_change(
    causes: Sequence[str], evaluate: Callable[[frozenset[str]], FloatArray]
) -> dict[str, FloatArray]:
    """Share a change among its causes (Shapley, 1953): the mean effect of each over all orders of applying them.

    Parameters
    ----------
    causes : sequence of n names
        Few: ``evaluate`` is called once for each of the 2**n sets.
    evaluate : function
        Estimates of all sites, in any shape, when the causes of the set have acted and the others have not.

    Returns
    -------
    dict of arrays
        By cause, in the shape and unit of the estimates. The shares sum to ``evaluate(all) - evaluate(none)``; a
        cause that alone or with others changes nothing at a site has a share of exactly zero there.

    Examples
    --------
    >>> shares = share_change(["rain", "snow"], lambda acted: np.array([2.0 * ("rain" in acted)]))
    >>> float(shares["rain"][0]), float(shares["snow"][0])
    (2.0, 0.0)
    """
    n = len(causes)
    values = {
        frozenset(chosen): np.asarray(evaluate(frozenset(chosen)), dtype=float)
        for size in range(n + 1)
        for chosen in combinations(causes, size)
    }
    shares = {}
    for cause in causes:
        others = [one for one in causes if one != cause]
        share = np.zeros_like(values[frozenset()])
        for size in range(n):
            weight = factorial(size) * factorial(n - 1 - size) / factorial(n)
            for chosen in combinations(others, size):
                before = frozenset(chosen)
                share += weight * (values[before | {cause}] - values[before])
        shares[cause] = share
    return shares
