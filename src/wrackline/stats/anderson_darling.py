"""The k-sample Anderson-Darling statistic and its bootstrap for records divided by their own index.

A test of homogeneity without a parent distribution: do the scaled records of a pool come from one law?
"""

from dataclasses import dataclass
from itertools import pairwise
from typing import Literal

import numpy as np
from numpy.typing import ArrayLike, NDArray

FloatArray = NDArray[np.float64]

# Replicates drawn at a time hold about this many values, to bound the memory of large pools.
_VALUES_AT_A_TIME = 500_000


@dataclass(frozen=True)
class AndersonDarlingTest:
    """Outcome of the bootstrap test of homogeneity.

    Attributes
    ----------
    statistic : float
        The observed k-sample statistic of the scaled records.
    probability : float
        Share of the bootstrap statistics that do not exceed it: near 1 the pool is heterogeneous.
    probability_se : float
        Standard error of that share from the number of replicates.
    replicates : int
        Replicates that gave a statistic.
    """

    statistic: float
    probability: float
    probability_se: float
    replicates: int


def ksample_statistic(values: ArrayLike, offsets: ArrayLike) -> FloatArray:
    """Compute the k-sample Anderson-Darling statistic of many sets of records at once.

    Parameters
    ----------
    values : array, shape (..., total)
        The records one after another along the last axis; leading axes are replicates.
    offsets : int array, shape (k + 1,)
        Record i is ``values[..., offsets[i]:offsets[i + 1]]``; none may be empty.

    Returns
    -------
    array, shape (...)
        Zero if all values are equal.

    Raises
    ------
    ValueError
        If there are fewer than two records, an empty one, or values that are not finite.

    Notes
    -----
    Source: Scholz and Stephens (1987); with ties their statistic for discrete parents, in which equal
    values are counted together. With M_ij the number of values of record i up to the j-th of the pool, it
    needs only S_j = sum_i M_ij^2 / n_i, a running sum of fixed steps in pool order.

    Examples
    --------
    >>> ksample_statistic([1.0, 2.0, 3.0, 4.0], [0, 2, 4]).round(6)
    np.float64(1.666667)
    """
    pooled = np.asarray(values, dtype=float)
    starts = np.asarray(offsets, dtype=np.int64)
    lengths = np.diff(starts)
    if lengths.size < 2 or np.any(lengths < 1):
        raise ValueError("at least two records are needed, and none may be empty")
    if starts[0] != 0 or starts[-1] != pooled.shape[-1]:
        raise ValueError("offsets must rise from 0 to the number of values")
    if not np.all(np.isfinite(pooled)):
        raise ValueError("records must hold finite values only: leave missing years out")
    in_order = pooled.copy()
    for begin, end in pairwise(starts):
        in_order[..., begin:end].sort(axis=-1)
    return _statistic_of_sorted_records(in_order, lengths)


def bootstrap_homogeneity(
    values: ArrayLike,
    offsets: ArrayLike,
    stream: np.random.Generator,
    replicates: int = 500,
    index: Literal["median", "mean"] = "median",
) -> AndersonDarlingTest:
    """Test whether records divided by their own index come from one law.

    Dividing by an estimated index makes the tabulated distribution of the statistic wrong. So records are
    drawn with replacement from all scaled values, each is divided by its own index again, and the statistic
    is recomputed.

    Parameters
    ----------
    values : array, shape (total,)
        The records one after another, in any unit.
    offsets : int array, shape (k + 1,)
        Record i is ``values[offsets[i]:offsets[i + 1]]``.
    stream : numpy.random.Generator
        Random numbers (see `wrackline.stats.streams`).
    replicates : int
        Number of bootstrap pools.
    index : {"median", "mean"}
        What a record is divided by.

    Raises
    ------
    ValueError
        If the index of a record is not positive, or as `ksample_statistic`.

    Notes
    -----
    Source: Viglione, Laio and Claps (2007), who call a pool heterogeneous above a probability of 0.95.
    A replicate with a record whose index is not positive is left out of the count.
    """
    flat = np.asarray(values, dtype=float)
    starts = np.asarray(offsets, dtype=np.int64)
    lengths = np.diff(starts)
    scaled, positive = _divide_by_index(flat[None, :], starts, index)
    if not positive[0]:
        raise ValueError(f"the {index} of every record must be positive to serve as its index")
    observed = float(ksample_statistic(scaled[0], starts))
    chunk = max(1, _VALUES_AT_A_TIME // flat.size)
    drawn = []
    for begin in range(0, replicates, chunk):
        size = (min(chunk, replicates - begin), flat.size)
        pools = scaled[0][stream.integers(0, flat.size, size=size)]
        rescaled, usable = _divide_by_index(pools, starts, index)
        drawn.append(_statistic_of_sorted_records(rescaled[usable], lengths))
    statistics = np.concatenate(drawn) if drawn else np.zeros(0)
    count = statistics.size
    # Rounding must not decide whether a replicate equal to the observed pool exceeds it.
    share = float(np.mean(statistics <= observed * (1 + 1e-12))) if count else float("nan")
    error = float(np.sqrt(share * (1 - share) / count)) if count else float("nan")
    return AndersonDarlingTest(observed, share, error, count)


def _divide_by_index(
    pools: FloatArray, starts: NDArray[np.int64], index: str
) -> tuple[FloatArray, NDArray[np.bool_]]:
    """Sort every record of every pool, divide it by its index; say which pools had positive indices."""
    scaled = pools.copy()
    positive = np.ones(len(pools), dtype=bool)
    for begin, end in pairwise(starts):
        record = scaled[:, begin:end]
        record.sort(axis=1)
        if index == "median":
            n = end - begin
            centre = 0.5 * (record[:, (n - 1) // 2] + record[:, n // 2])
        elif index == "mean":
            centre = record.mean(axis=1)
        else:
            raise ValueError(f'the index must be "median" or "mean", not {index!r}')
        positive &= centre > 0
        record /= np.where(centre > 0, centre, np.nan)[:, None]
    return scaled, positive


def _statistic_of_sorted_records(values: FloatArray, lengths: NDArray[np.int64]) -> FloatArray:
    total = values.shape[-1]
    rank = np.concatenate([np.arange(1, n + 1) for n in lengths])
    steps = (2 * rank - 1) / np.repeat(lengths, lengths)
    order = np.argsort(values, axis=-1, kind="stable")
    pooled = np.take_along_axis(values, order, axis=-1)
    sums = np.cumsum(steps[order], axis=-1)[..., :-1]
    j = np.arange(1, total)
    terms = (total * sums - j**2) / (j * (total - j))
    tied = pooled[..., 1:] == pooled[..., :-1]
    if np.any(tied):
        terms = _count_ties_together(terms, tied)
    return np.asarray(np.maximum(terms.sum(axis=-1), 0.0))


def _count_ties_together(terms: FloatArray, tied: NDArray[np.bool_]) -> FloatArray:
    """Give every value of a run of equal values the term at the end of the run (none at the very end)."""
    positions = np.arange(terms.shape[-1])
    total = terms.shape[-1] + 1
    # A position ends its run if the next value differs; the last value of the pool ends the last run.
    ends = np.where(tied, total, positions)
    run_end = np.minimum.accumulate(ends[..., ::-1], axis=-1)[..., ::-1]
    at_end = np.take_along_axis(terms, np.minimum(run_end, total - 2), axis=-1)
    return np.where(run_end == total, 0.0, at_end)
