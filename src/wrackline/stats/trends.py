"""Tests of many records at once: trend, slope, change point, serial correlation, false discoveries.

A record is a run of values in a flat array: record ``i`` owns ``values[offsets[i]:offsets[i + 1]]``, in the
order of time. Records of equal length are worked on as one block, so that no step runs record by record.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.special import erfc, ndtri

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]
BLOCK_PAIRS = 2_000_000
"""Pairs of years held at a time (16 MB): keeps memory flat for any number of records."""


@dataclass(frozen=True)
class MannKendall:
    """Mann-Kendall tests, one entry per record; NaN for records of fewer than two values.

    Attributes
    ----------
    s : float array (g,)
        Rising pairs less falling pairs.
    s_var : float array (g,)
        Variance of ``s`` without trend, corrected for ties.
    z, p : float arrays (g,)
        Normal deviate with continuity correction, and its two-sided p-value (an approximation for fewer than
        about ten values). A record of equal values has ``z = 0`` and ``p = 1``.
    tau : float array (g,)
        Kendall's tau-a: ``s`` over the number of pairs, ties counting as neither.
    """

    s: FloatArray
    s_var: FloatArray
    z: FloatArray
    p: FloatArray
    tau: FloatArray


@dataclass(frozen=True)
class Pettitt:
    """Pettitt tests, one entry per record.

    Attributes
    ----------
    k : float array (g,)
        Largest absolute value of Pettitt's statistic; NaN for records of fewer than two values.
    last_year : int array (g,)
        Last year of the first segment (the earliest where several are equal); 0 where ``k`` is NaN or zero.
    p : float array (g,)
        Approximate two-sided p-value, at most 1.
    """

    k: FloatArray
    last_year: IntArray
    p: FloatArray


@dataclass(frozen=True)
class LagOne:
    """Lag-one serial correlations, one entry per record.

    Attributes
    ----------
    r1 : float array (g,)
        NaN where fewer than three pairs of consecutive years exist or all values are equal.
    lower, upper : float arrays (g,)
        Bounds within which ``r1`` of an independent record lies.
    p : float array (g,)
        Two-sided p-value against independence.
    pairs : int array (g,)
        Pairs of consecutive years.
    """

    r1: FloatArray
    lower: FloatArray
    upper: FloatArray
    p: FloatArray
    pairs: IntArray


def mann_kendall(values: ArrayLike, offsets: ArrayLike, inflation: ArrayLike = 1.0) -> MannKendall:
    """Test every record for a monotonic trend (Mann, 1945; Kendall, 1975).

    Parameters
    ----------
    values : float array (m,)
        Finite, any unit; only their order counts. Censored values are tied at their threshold.
    offsets : int array (g + 1,)
    inflation : float or float array (g,)
        Factor on the variance of S, for serially correlated records (see `serial_inflation`).

    Examples
    --------
    >>> test = mann_kendall([1.0, 2.0, 2.0, 5.0], [0, 4])
    >>> float(test.s[0]), round(float(test.s_var[0]), 4), round(float(test.tau[0]), 4)
    (5.0, 7.6667, 0.8333)
    """
    values, offsets = _flat(values, offsets)
    s, ties = np.zeros(len(offsets) - 1), np.zeros(len(offsets) - 1)
    for records, rows in _blocks_of_equal_length(offsets):
        block = values[rows]
        s[records] = sum(
            np.sign(block[:, lag:] - block[:, :-lag]).sum(axis=1) for lag in range(1, block.shape[1])
        )
        ties[records] = _tie_term(block)
    n = np.diff(offsets).astype(float)
    s_var = (n * (n - 1) * (2 * n + 5) - ties) / 18 * inflation
    tested = n >= 2
    spread = np.sqrt(np.where(s_var > 0, s_var, 1.0))
    z = np.where(tested, (s - np.sign(s)) / spread, np.nan)
    tau = np.where(tested, s / np.where(tested, n * (n - 1) / 2, 1.0), np.nan)
    return MannKendall(
        np.where(tested, s, np.nan), np.where(tested, s_var, np.nan), z, erfc(np.abs(z) / np.sqrt(2)), tau
    )


def sen_slope(values: ArrayLike, years: ArrayLike, offsets: ArrayLike) -> FloatArray:
    """Return every record's median slope over all pairs of years (Theil, 1950; Sen, 1968).

    Parameters
    ----------
    values : float array (m,)
    years : int array (m,)
        True years, so that gaps count with their length; distinct within a record.
    offsets : int array (g + 1,)

    Returns
    -------
    float array (g,), unit of ``values`` per year
        NaN for records of fewer than two values.

    Examples
    --------
    >>> sen_slope([1.0, 2.0, 9.0], [2000, 2001, 2005], [0, 3])
    array([1.6])
    """
    values, offsets = _flat(values, offsets)
    years = np.asarray(years, dtype=float)
    slope = np.full(len(offsets) - 1, np.nan)
    for records, rows in _blocks_of_equal_length(offsets):
        first, second = np.triu_indices(rows.shape[1], k=1)
        if len(first):
            block, year = values[rows], years[rows]
            pair_slopes = (block[:, second] - block[:, first]) / (year[:, second] - year[:, first])
            slope[records] = np.median(pair_slopes, axis=1, overwrite_input=True)
    return slope


def pettitt(values: ArrayLike, years: ArrayLike, offsets: ArrayLike) -> Pettitt:
    """Test every record for one abrupt change of level (Pettitt, 1979, Appl. Stat. 28(2)).

    ``U_t = 2 * (sum of the first t ranks) - t (n + 1)`` with mean ranks for ties, ``K = max abs(U_t)``,
    ``p = 2 exp(-6 K^2 / (n^3 + n^2))``, at most 1.

    Parameters
    ----------
    values : float array (m,)
    years : int array (m,)
    offsets : int array (g + 1,)
    """
    values, offsets = _flat(values, offsets)
    years = np.asarray(years, dtype=np.int64)
    n = np.diff(offsets).astype(float)
    k, last_year = np.full(len(n), np.nan), np.zeros(len(n), dtype=np.int64)
    for records, rows in _blocks_of_equal_length(offsets):
        length = rows.shape[1]
        if length < 2:
            continue
        u = 2 * np.cumsum(_mean_ranks(values[rows]), axis=1) - np.arange(1, length + 1) * (length + 1)
        size = np.abs(u[:, :-1])
        last = size.argmax(axis=1)
        k[records] = size[np.arange(len(last)), last]
        last_year[records] = np.where(k[records] > 0, years[rows][np.arange(len(last)), last], 0)
    p = np.minimum(2 * np.exp(-6 * k**2 / np.where(n > 0, n**3 + n**2, 1.0)), 1.0)
    return Pettitt(k, last_year, p)


def lag_one(values: ArrayLike, years: ArrayLike, offsets: ArrayLike, confidence: float = 0.95) -> LagOne:
    """Return every record's correlation between consecutive years, with bounds for independence.

    Only years that follow each other form a pair. ``r1`` is the mean product of the pairs over the variance of
    the whole record; without gaps that is the usual ``sum (x_t - m)(x_t+1 - m) / sum (x_t - m)^2``. The bounds
    are Anderson's (1942, Ann. Math. Stat. 13(1)), with the number of pairs in the place of ``n - 1``.

    Parameters
    ----------
    values : float array (m,)
    years : int array (m,)
    offsets : int array (g + 1,)
    confidence : float
        Content of the two-sided bounds.
    """
    values, offsets = _flat(values, offsets)
    years = np.asarray(years, dtype=np.int64)
    n = np.diff(offsets)
    record = np.repeat(np.arange(len(n)), n)
    mean = np.bincount(record, values, len(n)) / np.maximum(n, 1)
    deviation = values - mean[record]
    squares = np.bincount(record, deviation**2, len(n))
    # A record of equal values leaves rounding noise about its mean; that is no variance.
    varies = squares > 1e-24 * np.bincount(record, values**2, len(n))
    follows = (np.diff(years) == 1) & (np.diff(record) == 0)
    pairs = np.bincount(record[1:][follows], minlength=len(n))
    products = np.bincount(record[1:][follows], (deviation[1:] * deviation[:-1])[follows], len(n))
    usable = (pairs >= 3) & varies
    per_pair = np.where(usable, pairs, 3).astype(float)
    whole = np.maximum(n, 2)
    r1 = np.where(usable, products / per_pair * (whole - 1) / np.where(usable, squares, 1.0), np.nan)
    center, spread = -1 / per_pair, np.sqrt(per_pair - 1) / per_pair
    reach = ndtri(0.5 + confidence / 2) * spread
    p = erfc(np.abs(r1 - center) / spread / np.sqrt(2))
    return LagOne(
        r1, np.where(usable, center - reach, np.nan), np.where(usable, center + reach, np.nan), p, pairs
    )


def serial_inflation(r1: ArrayLike, n: ArrayLike) -> FloatArray:
    """Return the factor by which serial correlation inflates the variance of the Mann-Kendall S.

    ``1 + 2 sum_k (1 - k/n) r1^k``, the ratio of ``n`` to the effective record length of a first-order
    autoregression (Yue and Wang, 2004, Water Resour. Manage. 18); 1 where ``r1`` is not positive or NaN.

    Examples
    --------
    >>> round(float(serial_inflation(0.5, 50)), 4)
    2.92
    """
    r = np.nan_to_num(np.clip(np.asarray(r1, dtype=float), 0.0, 0.95))
    n = np.maximum(np.asarray(n, dtype=float), 1.0)
    return np.asarray(1 + 2 * (r / (1 - r) - r * (1 - r**n) / (n * (1 - r) ** 2)), dtype=float)


def false_discovery_p(p: ArrayLike) -> FloatArray:
    """Return p-values adjusted for testing many records (Benjamini and Hochberg, 1995, J. R. Stat. Soc. B 57).

    Rejecting where the adjusted value is at most ``q`` keeps the expected share of false alarms among the
    rejections at or below ``q``. NaN stays NaN and is not counted as a test.

    Examples
    --------
    >>> false_discovery_p([0.01, 0.04, 0.03, float("nan")]).tolist()
    [0.03, 0.04, 0.04, nan]
    """
    p = np.asarray(p, dtype=float)
    adjusted = np.full(p.shape, np.nan)
    tested = np.flatnonzero(np.isfinite(p))
    order = tested[np.argsort(-p[tested], kind="stable")]
    rank = np.arange(len(order), 0, -1)
    adjusted[order] = np.minimum(np.minimum.accumulate(p[order] * len(order) / rank), 1.0)
    return adjusted


def _flat(values: ArrayLike, offsets: ArrayLike) -> tuple[FloatArray, IntArray]:
    return np.asarray(values, dtype=float), np.asarray(offsets, dtype=np.int64)


def _blocks_of_equal_length(offsets: IntArray) -> Iterator[tuple[IntArray, IntArray]]:
    """Yield record numbers (k,) and the rows (k, n) of their values, never more than `BLOCK_PAIRS` pairs."""
    lengths = np.diff(offsets)
    for length in np.unique(lengths[lengths > 0]):
        same = np.flatnonzero(lengths == length)
        at_a_time = max(1, int(BLOCK_PAIRS // max(length * (length - 1) // 2, 1)))
        for start in range(0, len(same), at_a_time):
            records = same[start : start + at_a_time]
            yield records, offsets[records][:, None] + np.arange(length)


def _run_bounds(ordered: FloatArray) -> tuple[IntArray, IntArray]:
    """First and last position of the run of equal values that every entry of sorted rows lies in."""
    k, n = ordered.shape
    position = np.broadcast_to(np.arange(n), (k, n))
    rises = ordered[:, 1:] > ordered[:, :-1]
    edge = np.ones((k, 1), dtype=bool)
    first = np.maximum.accumulate(np.where(np.hstack([edge, rises]), position, 0), axis=1)
    last = np.where(np.hstack([rises, edge]), position, n - 1)
    last = np.minimum.accumulate(last[:, ::-1], axis=1)[:, ::-1]
    return first, last


def _mean_ranks(block: FloatArray) -> FloatArray:
    """Ranks from 1 along every row, ties sharing their mean rank."""
    order = np.argsort(block, axis=1, kind="stable")
    first, last = _run_bounds(np.take_along_axis(block, order, axis=1))
    ranks = np.empty(block.shape)
    np.put_along_axis(ranks, order, (first + last) / 2 + 1, axis=1)
    return ranks


def _tie_term(block: FloatArray) -> FloatArray:
    """Sum of t (t - 1) (2 t + 5) over the groups of t equal values in every row."""
    first, last = _run_bounds(np.sort(block, axis=1))
    t = (last - first + 1).astype(float)
    # Every one of the t members carries 1 / t of its group's term.
    return np.asarray(((t - 1) * (2 * t + 5)).sum(axis=1), dtype=float)
