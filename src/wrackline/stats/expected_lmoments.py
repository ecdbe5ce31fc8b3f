"""Fits by L-moments to records in which some values are known only to lie in an interval."""

from __future__ import annotations

from types import ModuleType

import numpy as np
from numpy.typing import ArrayLike, NDArray

from wrackline.stats.lmoments import sample_lmoments

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]
BoolArray = NDArray[np.bool_]

FEWEST_EXACT = 3
_LARGEST_PROBABILITY = 1 - 1e-13


def fit_expected_lmoments(
    law: ModuleType,
    low: ArrayLike,
    high: ArrayLike,
    offsets: ArrayLike,
    lskew: float | None = None,
    tolerance: float = 1e-8,
    most_iterations: int = 1000,
    start: ArrayLike | None = None,
) -> tuple[FloatArray, BoolArray]:
    """Fit a law to ragged records of values and intervals.

    Parameters
    ----------
    law : module
        One of `wrackline.stats.distributions` with three parameters.
    low, high : float arrays (m,)
        The value lies in ``[low, high]``; equal where it is known exactly, minus or plus infinity where unbounded.
    offsets : int array (g + 1,)
        Record i has rows ``offsets[i]:offsets[i + 1]``.
    lskew : float, optional
        L-skewness of the law where its shape is not to be fitted.
    tolerance : float
        Iteration of a record ends when its first three L-moments change by less than this times its L-scale.
    most_iterations : int
    start : float array (g, 3), optional
        Parameters to begin with, where something better than the ends of the intervals is known.

    Returns
    -------
    parameters : float array (g, 3)
        NaN where fewer than three values are exact, or all are equal.
    converged : bool array (g,)

    Notes
    -----
    The counterpart in L-moments (Hosking, 1990) of the expected moments algorithm (Cohn, Lane and Baier, 1997): the
    n values known to lie in one interval are replaced by their conditional quantiles at (i - 0.5) / n under
    the current fit, the L-moments of all are taken, the law is fitted to them, and so on until nothing
    moves. A record without intervals gets the plain L-moment fit.

    Examples
    --------
    >>> from wrackline.stats.distributions import gev
    >>> x = np.array([3.0, 1.0, 4.0, 1.5, 9.0])
    >>> fit_expected_lmoments(gev, x, x, [0, 5])[0].round(4)
    array([[ 1.7945,  1.536 , -0.4065]])
    """
    low, high = np.asarray(low, dtype=float), np.asarray(high, dtype=float)
    offsets = np.asarray(offsets, dtype=np.int64)
    g = len(offsets) - 1
    own = np.repeat(np.arange(g), np.diff(offsets))
    exact = low == high
    usable = np.bincount(own[exact], minlength=g) >= FEWEST_EXACT
    hidden = np.flatnonzero(~exact & usable[own])
    hidden = hidden[np.lexsort((high[hidden], low[hidden], own[hidden]))]
    position = _middles_of_equal_shares(own[hidden], low[hidden], high[hidden])
    values = np.where(exact, low, 0.0)
    if start is None:
        values[hidden] = np.where(np.isfinite(high[hidden]), high[hidden], low[hidden])
    else:
        begin = np.asarray(start, dtype=float)[own[hidden]]
        values[hidden] = _conditional_quantiles(law, begin, low[hidden], high[hidden], position)
    parameters, converged = np.full((g, 3), np.nan), np.zeros(g, dtype=bool)
    last = np.full((g, 3), np.inf)
    iterated = np.zeros(g, dtype=bool)
    iterated[own[hidden]] = True
    active = np.flatnonzero(usable)
    for _ in range(most_iterations if len(active) else 0):
        l1, l2, t3 = _lmoments_of(values, offsets, own, active)
        t3 = t3 if lskew is None else np.where(l2 > 0, lskew, np.nan)
        parameters[active] = law.fit(l1, l2, t3)
        now = np.stack([l1, l2, t3 * l2], axis=-1)
        change = np.max(np.abs(now - last[active]), axis=1) / l2
        last[active] = now
        fitted = np.isfinite(parameters[active]).all(axis=1)
        done = ~iterated[active] | (change < tolerance) | ~fitted
        converged[active[done]] = fitted[done]
        active = active[~done]
        if not len(active):
            break
        chosen = np.isin(own[hidden], active)
        rows = hidden[chosen]
        values[rows] = _conditional_quantiles(
            law, parameters[own[rows]], low[rows], high[rows], position[chosen]
        )
    return parameters, converged


def _middles_of_equal_shares(own: IntArray, low: FloatArray, high: FloatArray) -> FloatArray:
    """Return (i - 0.5) / n within every run of equal intervals of a record."""
    if not len(own):
        return np.zeros(0)
    starts = np.flatnonzero(
        np.concatenate([[True], (np.diff(own) != 0) | (low[1:] != low[:-1]) | (high[1:] != high[:-1])])
    )
    counts = np.diff(np.append(starts, len(own)))
    rank = np.arange(len(own)) - np.repeat(starts, counts)
    return np.asarray((rank + 0.5) / np.repeat(counts, counts))


def _lmoments_of(
    values: FloatArray, offsets: IntArray, own: IntArray, active: IntArray
) -> tuple[FloatArray, FloatArray, FloatArray]:
    """L-moments l1, l2, t3 of the active records."""
    if len(active) < len(offsets) - 1:
        chosen = np.zeros(len(offsets) - 1, dtype=bool)
        chosen[active] = True
        values = values[chosen[own]]
        offsets = np.concatenate([[0], np.cumsum(np.diff(offsets)[active])])
    lmoments = sample_lmoments(values, offsets)
    return lmoments.l1, lmoments.l2, lmoments.t3


def _conditional_quantiles(
    law: ModuleType, parameters: FloatArray, low: FloatArray, high: FloatArray, position: FloatArray
) -> FloatArray:
    """Quantiles of the law between `low` and `high`; where it gives the interval no room, the nearer end."""
    # The members of a run of equal intervals lie side by side and share their ends.
    first = np.ones(len(low), dtype=bool)
    first[1:] = (
        (low[1:] != low[:-1]) | (high[1:] != high[:-1]) | np.any(np.diff(parameters, axis=0) != 0, axis=1)
    )
    run = np.cumsum(first) - 1
    p_low, p_high = (_probability(law, parameters[first], end[first])[run] for end in (low, high))
    p = p_low + (p_high - p_low) * position
    inside = law.quantile(parameters, np.clip(p, 1e-300, _LARGEST_PROBABILITY))
    return np.clip(inside, low, high)


def _probability(law: ModuleType, parameters: FloatArray, end: FloatArray) -> FloatArray:
    """Probability below an end of an interval, which may be infinite."""
    finite = np.isfinite(end)
    return np.where(finite, law.cdf(parameters, np.where(finite, end, 0.0)), np.where(end > 0, 1.0, 0.0))
