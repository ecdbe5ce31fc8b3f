"""Correlations over the years that two records share, for all pairs, in blocks or streamed into bins."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]
BoolArray = NDArray[np.bool_]
BlockDistance = Callable[[IntArray, IntArray], FloatArray]
"""Gives the distances (p, q) between the records numbered in (p,) and those numbered in (q,)."""

CONSTANT = 1e-11
"""A pair of which one record's squared deviations over the shared years are below this share of its squares has no
correlation: the record is constant there, and what varies is rounding."""
IDENTICAL = 1 - 1e-6
"""Correlations above this belong to copies of one record, not to two gauges."""


@dataclass(frozen=True)
class PairBlock:
    """The pairs of two blocks of records.

    Attributes
    ----------
    first, second : int arrays (p,), (q,)
        Record numbers; every number of ``first`` comes before or stands within ``second``.
    correlation : float array (p, q)
        Pearson correlation over the shared years; NaN where fewer than the minimum are shared or one of the two
        records is constant over them.
    common : int array (p, q)
        Shared years.
    """

    first: IntArray
    second: IntArray
    correlation: FloatArray
    common: NDArray[np.int32]

    @property
    def distinct(self) -> BoolArray:
        """Each pair of different records once: the upper triangle on the diagonal, shape (p, q)."""
        return np.asarray(self.first[:, None] < self.second, dtype=bool)


@dataclass(frozen=True)
class ConcurrentPairs:
    """The pairs with enough shared years, as flat arrays (n,); ``first < second`` number the records."""

    first: IntArray
    second: IntArray
    correlation: FloatArray
    common: IntArray


@dataclass(frozen=True)
class PairBins:
    """Fisher z of all pairs, summed in bins of distance; every array has one entry per bin unless said.

    Attributes
    ----------
    edges : float array (k + 1,)
    all_pairs, all_distance : int and float arrays (k,)
        All pairs in the bin, whatever they share, and the sum of their distances.
    pairs : int array (k,)
        Pairs with enough shared years.
    common : float array (k,)
        Sum of their shared years.
    weight, distance, z, z_squared : float arrays (k,)
        Sums of the weights ``common - 3``, and of distance, z and z^2 times the weight.
    density : int array (c, d)
        Pairs by distance (``c`` equal parts of the range of ``edges``) and correlation (``d`` equal parts of
        -1 to 1): the picture of the scatter.
    identical : int
        Pairs left out because their records are copies of each other.
    """

    edges: FloatArray
    all_pairs: IntArray
    all_distance: FloatArray
    pairs: IntArray
    common: FloatArray
    weight: FloatArray
    distance: FloatArray
    z: FloatArray
    z_squared: FloatArray
    density: IntArray
    identical: int


def concurrent_correlation(
    values: ArrayLike, block: int = 256, minimum: int = 3
) -> tuple[FloatArray, NDArray[np.int32]]:
    """Correlate all pairs of records over the years they share.

    Parameters
    ----------
    values : float array (g, t)
        One row per record, one column per year; NaN where a record has no value.
    block : int
        Records worked on at a time.
    minimum : int
        Shared years below which no correlation is given.

    Returns
    -------
    correlation : float array (g, g)
        NaN where too few years are shared or a record is constant over them.
    common : int array (g, g)
        Shared years.

    Examples
    --------
    >>> r, n = concurrent_correlation([[1, 2, 4, np.nan], [2, 4, 8, 9], [np.nan, 1, 0, 2]])
    >>> float(r[0, 1].round(6)), int(n[0, 1]), int(n[0, 2])
    (1.0, 3, 2)
    """
    values = np.asarray(values, dtype=float)
    correlation = np.empty((len(values), len(values)))
    common = np.empty((len(values), len(values)), dtype=np.int32)
    for pairs in pair_blocks(values, block, minimum):
        rows = slice(pairs.first[0], pairs.first[-1] + 1)
        columns = slice(pairs.second[0], pairs.second[-1] + 1)
        correlation[rows, columns], common[rows, columns] = pairs.correlation, pairs.common
        if pairs.first[0] != pairs.second[0]:
            correlation[columns, rows], common[columns, rows] = pairs.correlation.T, pairs.common.T
    return correlation, common


def pair_blocks(values: ArrayLike, block: int = 256, minimum: int = 3) -> Iterator[PairBlock]:
    """Yield correlations and shared years of all pairs, in blocks on and above the diagonal.

    Every record is first shifted by its own mean and scaled by its own spread, so that the sums of products
    lose no digits; then the sums over the shared years of each pair are products of masked matrices.

    Parameters
    ----------
    values : float array (g, t)
        NaN where a record has no value.
    block : int
    minimum : int
        At least 2.
    """
    known, x = _standardized(np.asarray(values, dtype=float))
    g = len(x)
    for i in range(0, g, block):
        rows = np.arange(i, min(i + block, g))
        x_i, mask_i, single_i = (
            x[i : i + block],
            known[i : i + block].astype(float),
            known[i : i + block].astype("f4"),
        )
        sums_i = np.concatenate([x_i, x_i * x_i])
        for j in range(i, g, block):
            columns = np.arange(j, min(j + block, g))
            x_j, mask_j = x[j : j + block], known[j : j + block].astype(float)
            # Counts of years are exact in single precision, at half the cost.
            n = single_i @ known[j : j + block].astype("f4").T
            over_i = sums_i @ mask_j.T
            over_j = mask_i @ np.concatenate([x_j, x_j * x_j]).T
            r = _correlation(
                n,
                x_i @ x_j.T,
                over_i[: len(rows)],
                over_j[:, : len(columns)],
                over_i[len(rows) :],
                over_j[:, len(columns) :],
                minimum,
            )
            yield PairBlock(rows, columns, r, n.astype(np.int32))


def list_pairs(values: ArrayLike, minimum: int, block: int = 256) -> ConcurrentPairs:
    """Return the pairs that share at least ``minimum`` years and have a correlation.

    Parameters
    ----------
    values : float array (g, t)
        NaN where a record has no value.
    """
    parts = []
    for pairs in pair_blocks(values, block, minimum):
        at = np.nonzero(pairs.distinct & np.isfinite(pairs.correlation))
        parts.append((pairs.first[at[0]], pairs.second[at[1]], pairs.correlation[at], pairs.common[at]))
    if not parts:
        none = np.zeros(0, dtype=np.int64)
        return ConcurrentPairs(none, none, np.zeros(0), none)
    first, second, correlation, common = (np.concatenate(part) for part in zip(*parts, strict=True))
    order = np.lexsort((second, first))
    return ConcurrentPairs(first[order], second[order], correlation[order], common[order].astype(np.int64))


def bin_pairs(
    values: ArrayLike,
    distance: BlockDistance,
    edges: ArrayLike,
    minimum: int,
    density: tuple[int, int] = (60, 80),
    block: int = 256,
) -> PairBins:
    """Sum Fisher z of all pairs in bins of distance, never holding all pairs.

    Parameters
    ----------
    values : float array (g, t)
        NaN where a record has no value.
    distance : callable
        Called with two arrays of record numbers; returns their distances as a matrix.
    edges : float array (k + 1,), rising
        Edges of the bins; distances outside fall into the first or last bin.
    minimum : int, at least 4
        Shared years a pair needs; its weight is ``common - 3`` (Fisher, 1921).
    density : (int, int)
        Cells of the picture of the scatter along distance and correlation.
    """
    edges = np.asarray(edges, dtype=float)
    k = len(edges) - 1
    counts = np.zeros((2, k), dtype=np.int64)
    sums = np.zeros((6, k))
    picture = np.zeros(density[0] * density[1], dtype=np.int64)
    identical = 0
    for pairs in pair_blocks(values, block, minimum):
        once = pairs.distinct
        d = np.asarray(distance(pairs.first, pairs.second), dtype=float)[once]
        at = np.clip(np.searchsorted(edges, d, side="right") - 1, 0, k - 1)
        counts[0] += np.bincount(at, minlength=k)
        sums[0] += np.bincount(at, d, k)
        r, n = pairs.correlation[once], pairs.common[once]
        copies = np.abs(r) > IDENTICAL
        identical += int(copies.sum())
        used = np.isfinite(r) & ~copies
        r, n, d, at = r[used], n[used].astype(float), d[used], at[used]
        z, w = np.arctanh(r), n - 3
        counts[1] += np.bincount(at, minlength=k)
        for row, terms in enumerate((n, w, w * d, w * z, w * z * z), start=1):
            sums[row] += np.bincount(at, terms, k)
        picture += np.bincount(_density_cell(r, d, edges, density), minlength=len(picture))
    return PairBins(
        edges=edges,
        all_pairs=counts[0],
        all_distance=sums[0],
        pairs=counts[1],
        common=sums[1],
        weight=sums[2],
        distance=sums[3],
        z=sums[4],
        z_squared=sums[5],
        density=picture.reshape(density),
        identical=identical,
    )


def _standardized(values: FloatArray) -> tuple[BoolArray, FloatArray]:
    """Mask of known values, and the values less their mean over their spread, zero where unknown."""
    known = np.isfinite(values)
    n = np.maximum(known.sum(axis=1, keepdims=True), 1)
    x = np.where(known, values, 0.0)
    x -= x.sum(axis=1, keepdims=True) / n
    x[~known] = 0.0
    spread = np.sqrt(np.einsum("ij,ij->i", x, x)[:, None] / n)
    x /= np.where(spread > 0, spread, 1.0)
    return known, x


def _correlation(
    n: NDArray[np.float32],
    products: FloatArray,
    sum_i: FloatArray,
    sum_j: FloatArray,
    square_i: FloatArray,
    square_j: FloatArray,
    minimum: int,
) -> FloatArray:
    """Pearson correlation from the sums over shared years; overwrites its arguments except ``n``."""
    products *= n
    products -= sum_i * sum_j
    square_i *= n
    square_j *= n
    sum_i *= sum_i
    sum_j *= sum_j
    np.subtract(square_i, sum_i, out=sum_i)
    np.subtract(square_j, sum_j, out=sum_j)
    sum_i *= sum_j
    square_i *= square_j
    square_i *= CONSTANT
    unusable = sum_i <= square_i
    unusable |= n < minimum
    np.putmask(sum_i, unusable, np.nan)
    np.sqrt(sum_i, out=sum_i)
    products /= sum_i
    np.minimum(products, 1.0, out=products)
    return np.maximum(products, -1.0, out=products)


def _density_cell(r: FloatArray, d: FloatArray, edges: FloatArray, density: tuple[int, int]) -> IntArray:
    along = (d - edges[0]) / (edges[-1] - edges[0]) * density[0]
    across = (r + 1) / 2 * density[1]
    column = np.clip(along.astype(np.int64), 0, density[0] - 1)
    return np.asarray(column * density[1] + np.clip(across.astype(np.int64), 0, density[1] - 1))
