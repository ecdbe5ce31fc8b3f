"""Sample L-moments of many records at once, and their averages over a pool.

The unbiased estimators are those of Hosking (1990). Each L-moment of a sorted record is a fixed linear
combination of its values, so records of one length share one sort and one matrix product.
"""

from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from numpy.lib.stride_tricks import as_strided
from numpy.typing import ArrayLike, NDArray

FloatArray = NDArray[np.float64]

# Rows of (-1)^(r-k) C(r,k) C(r+k,k): probability-weighted moments b_0..b_4 to l_1..l_5.
_PWM_TO_LMOMENTS = np.array(
    [[1, 0, 0, 0, 0], [-1, 2, 0, 0, 0], [1, -6, 6, 0, 0], [-1, 12, -30, 20, 0], [1, -20, 90, -140, 70]],
    dtype=float,
)
ORDERS = 5


@dataclass(frozen=True)
class SampleLMoments:
    """L-moments of a set of records; every array has one entry a record.

    Attributes
    ----------
    n : int array
        Number of values used.
    l1, l2 : float array
        Mean and L-scale, in the unit of the values.
    t : float array
        L-CV, l2 / l1. NaN where the mean is not positive.
    t3, t4, t5 : float array
        L-skewness, L-kurtosis and the fifth ratio. NaN where the record has fewer than 3, 4, 5 values
        or all its values are equal.
    """

    n: NDArray[np.int64]
    l1: FloatArray
    l2: FloatArray
    t: FloatArray
    t3: FloatArray
    t4: FloatArray
    t5: FloatArray


@dataclass(frozen=True)
class PoolLMoments:
    """Weighted averages of the L-moment ratios of a pool (or of several pools)."""

    t: FloatArray
    t3: FloatArray
    t4: FloatArray
    t5: FloatArray


@lru_cache(maxsize=1024)
def order_weights(n: int) -> FloatArray:
    """Return the weights, shape (n, 5), that turn a sorted record of `n` values into l1..l5.

    Columns that need more than `n` values are zero. The array is cached and read-only.

    Examples
    --------
    >>> order_weights(2)[:, 1]
    array([-0.5,  0.5])
    """
    pwm_weights = np.zeros((n, ORDERS))
    rank = np.arange(1, n + 1, dtype=float)
    weight = np.full(n, 1.0 / n) if n else np.zeros(0)
    for order in range(min(ORDERS, n)):
        if order:
            weight = weight * (rank - order) / (n - order)
        pwm_weights[:, order] = weight
    weights = pwm_weights @ _PWM_TO_LMOMENTS.T
    weights[:, n:] = 0.0
    weights.flags.writeable = False
    return weights


def sample_lmoments(values: ArrayLike, offsets: ArrayLike) -> SampleLMoments:
    """Compute the L-moments of ragged records.

    Parameters
    ----------
    values : array, shape (total,)
        All records one after another, in any order within a record.
    offsets : int array, shape (g + 1,)
        Record i is ``values[offsets[i]:offsets[i + 1]]``; empty records are allowed.

    Returns
    -------
    SampleLMoments
        Arrays of shape (g,).

    Raises
    ------
    ValueError
        If a value is not finite (leave missing years out) or the offsets do not cover the values.

    Examples
    --------
    >>> lm = sample_lmoments([3.0, 1.0, 2.0, 10.0, 10.0], [0, 3, 5])
    >>> lm.l1, lm.t
    (array([ 2., 10.]), array([0.33333333, 0.        ]))

    Notes
    -----
    Source: Hosking (1990), unbiased probability-weighted moments. Ties need no special care.
    """
    flat = np.ascontiguousarray(values, dtype=float)
    starts = np.asarray(offsets, dtype=np.int64)
    lengths = np.diff(starts)
    if flat.ndim != 1 or starts.ndim != 1 or starts.size == 0:
        raise ValueError("values and offsets must be one-dimensional, with at least one offset")
    if starts[0] != 0 or starts[-1] != flat.size or np.any(lengths < 0):
        raise ValueError("offsets must rise from 0 to the number of values")
    _require_finite(flat)

    lmoments = np.full((lengths.size, ORDERS), np.nan)
    by_length = np.argsort(lengths, kind="stable")
    distinct, first = np.unique(lengths[by_length], return_index=True)
    last = np.append(first[1:], by_length.size)
    for n, begin, end in zip(distinct.tolist(), first.tolist(), last.tolist(), strict=True):
        if n == 0:
            continue
        gauges = by_length[begin:end]
        # Every window of n values as a view: picking rows from it copies whole records at a time.
        windows = as_strided(flat, shape=(flat.size - n + 1, n), strides=flat.strides * 2, writeable=False)
        block = windows[starts[gauges]]
        block.sort(axis=1)
        lmoments[gauges] = _lmoments_of_sorted(block)
    return _ratios(lengths, lmoments)


def sample_lmoments_of_rows(array: ArrayLike, is_sorted: bool = False) -> SampleLMoments:
    """Compute the L-moments of records that all have the same length.

    Parameters
    ----------
    array : array, shape (..., n)
        One record along the last axis.
    is_sorted : bool
        True if every record already rises along the last axis; it is then not sorted again.

    Returns
    -------
    SampleLMoments
        Arrays of shape (...).

    Raises
    ------
    ValueError
        If a value is not finite.
    """
    rows = np.asarray(array, dtype=float)
    n = rows.shape[-1]
    _require_finite(rows)
    if not is_sorted:
        rows = np.sort(rows, axis=-1)
    lengths = np.full(rows.shape[:-1], n, dtype=np.int64)
    if n == 0:
        return _ratios(lengths, np.full((*rows.shape[:-1], ORDERS), np.nan))
    return _ratios(lengths, _lmoments_of_sorted(rows))


def average_ratios(lmoments: SampleLMoments, weights: ArrayLike) -> PoolLMoments:
    """Average the L-moment ratios of gauges with weights (Hosking and Wallis, 1997, chapter 6).

    The ratios are averaged, not the L-moments. With ``weights = n`` this is the usual regional average.

    Parameters
    ----------
    lmoments : SampleLMoments
        Arrays of shape (..., g).
    weights : array, shape (..., g)
        Weights that need not sum to one; broadcast against the ratios, so that (pools, g) gives one
        average a pool. A gauge of weight zero does not count, even where its ratios are undefined.

    Returns
    -------
    PoolLMoments
        Arrays of shape (...); a ratio is NaN if it is undefined at a gauge that has weight.

    Raises
    ------
    ValueError
        If a weight is negative or not finite, or the weights of a pool are all zero.
    """
    weight = np.asarray(weights, dtype=float)
    if not np.all(np.isfinite(weight)) or np.any(weight < 0):
        raise ValueError("weights must be finite and not negative")
    total = weight.sum(axis=-1)
    if np.any(total == 0):
        raise ValueError("at least one gauge of a pool must have a weight above zero")

    def average(ratio: FloatArray) -> FloatArray:
        counted = np.where(weight > 0, ratio, 0.0)
        return np.asarray((weight * counted).sum(axis=-1) / total)

    return PoolLMoments(average(lmoments.t), average(lmoments.t3), average(lmoments.t4), average(lmoments.t5))


def _require_finite(values: FloatArray) -> None:
    # The sum is finite only if every value is (or it overflowed): one cheap pass in the usual case.
    with np.errstate(over="ignore", invalid="ignore"):
        total = values.sum()
    if not np.isfinite(total) and not np.all(np.isfinite(values)):
        raise ValueError("records must hold finite values only: leave missing years out")


def _lmoments_of_sorted(rows: FloatArray) -> FloatArray:
    """Return l1..l5, shape (..., 5), of records sorted along the last axis (NaN above order n)."""
    n = rows.shape[-1]
    smallest = rows[..., :1]
    # Deviations from the smallest value: equal values give exact zeros, a large mean costs no digits.
    lmoments = (rows - smallest) @ order_weights(n)
    lmoments[..., 0] += smallest[..., 0]
    lmoments[..., n:] = np.nan
    return np.asarray(lmoments)


def _ratios(lengths: NDArray[np.int64], lmoments: FloatArray) -> SampleLMoments:
    l1, l2 = lmoments[..., 0], lmoments[..., 1]
    mean = np.where(l1 > 0, l1, np.nan)
    scale = np.where(l2 > 0, l2, np.nan)
    return SampleLMoments(
        n=lengths,
        l1=l1,
        l2=l2,
        t=l2 / mean,
        t3=lmoments[..., 2] / scale,
        t4=lmoments[..., 3] / scale,
        t5=lmoments[..., 4] / scale,
    )
