"""Records with censored years, reduced to what a fit by moments needs of them."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]


@dataclass(frozen=True)
class CensoredSample:
    """Records of many gauges, reduced to what the fit needs of them.

    Attributes
    ----------
    exact_count : int array (g,)
        Number of exactly known values.
    exact_mean : float array (g,)
    exact_squares, exact_cubes : float arrays (g,)
        Sums of squares and cubes of deviations from `exact_mean`.
    exact_smallest, exact_largest : float arrays (g,)
    class_gauge : int array (c,)
        Gauge of every class of censored years, ascending.
    class_low, class_high : float arrays (c,)
        Interval of the class; ``-inf`` and ``inf`` where open.
    class_years : int array (c,)
        Number of years of that gauge with that very interval.
    """

    exact_count: IntArray
    exact_mean: FloatArray
    exact_squares: FloatArray
    exact_cubes: FloatArray
    exact_smallest: FloatArray
    exact_largest: FloatArray
    class_gauge: IntArray
    class_low: FloatArray
    class_high: FloatArray
    class_years: IntArray

    @property
    def n_gauges(self) -> int:
        return len(self.exact_count)

    @property
    def years(self) -> IntArray:
        """Years in the fit, exact and censored, shape (g,)."""
        censored = np.bincount(self.class_gauge, weights=self.class_years, minlength=self.n_gauges)
        return self.exact_count + censored.astype(np.int64)

    @property
    def exact_sd(self) -> FloatArray:
        """Standard deviation of the exact values (divisor n - 1), shape (g,)."""
        return np.sqrt(self.exact_squares / np.maximum(self.exact_count - 1, 1))

    def keep_gauges(self, gauges: IntArray) -> CensoredSample:
        """Return the sample of the given gauge numbers (ascending), renumbered from 0."""
        position = np.full(self.n_gauges, -1, dtype=np.int64)
        position[gauges] = np.arange(len(gauges))
        of_class = position[self.class_gauge]
        kept = of_class >= 0
        return CensoredSample(
            **{name: getattr(self, name)[gauges] for name in _PER_GAUGE},
            class_gauge=of_class[kept],
            class_low=self.class_low[kept],
            class_high=self.class_high[kept],
            class_years=self.class_years[kept],
        )


_PER_GAUGE = (
    "exact_count",
    "exact_mean",
    "exact_squares",
    "exact_cubes",
    "exact_smallest",
    "exact_largest",
)


def compress_sample(gauge: ArrayLike, low: ArrayLike, high: ArrayLike, n_gauges: int) -> CensoredSample:
    """Reduce records to sums over exact values and counts over distinct censoring intervals.

    Parameters
    ----------
    gauge : int array (m,)
        Gauge number of every year.
    low, high : float arrays (m,)
        The value of the year (a logarithm of flow) lies in ``[low, high]``; equal where known exactly.
    n_gauges : int

    Notes
    -----
    Years with the interval ``(-inf, inf)`` say nothing and are left out.
    """
    gauge, low, high = np.asarray(gauge, np.int64), np.asarray(low, float), np.asarray(high, float)
    exact = low == high
    own, x = gauge[exact], low[exact]
    count = np.bincount(own, minlength=n_gauges)
    mean = np.bincount(own, weights=x, minlength=n_gauges) / np.maximum(count, 1)
    deviation = x - mean[own]
    # A second pass removes the rounding of the first, so that equal values have no spread at all.
    shift = np.bincount(own, weights=deviation, minlength=n_gauges) / np.maximum(count, 1)
    mean, deviation = mean + shift, deviation - shift[own]
    smallest, largest = np.full(n_gauges, np.inf), np.full(n_gauges, -np.inf)
    np.minimum.at(smallest, own, x)
    np.maximum.at(largest, own, x)
    constant = largest <= smallest
    squares = np.bincount(own, weights=deviation**2, minlength=n_gauges)

    censored = ~exact & ~(np.isneginf(low) & np.isposinf(high))
    of_gauge, from_low, to_high = gauge[censored], low[censored], high[censored]
    order = np.lexsort((to_high, from_low, of_gauge))
    of_gauge, from_low, to_high = of_gauge[order], from_low[order], to_high[order]
    new = np.ones(len(order), dtype=bool)
    new[1:] = (np.diff(of_gauge) != 0) | (from_low[1:] != from_low[:-1]) | (to_high[1:] != to_high[:-1])
    first = np.flatnonzero(new)
    return CensoredSample(
        exact_count=count,
        exact_mean=mean,
        exact_squares=np.where(constant, 0.0, squares),
        exact_cubes=np.bincount(own, weights=deviation**3, minlength=n_gauges).astype(float),
        exact_smallest=smallest,
        exact_largest=largest,
        class_gauge=of_gauge[first],
        class_low=from_low[first],
        class_high=to_high[first],
        class_years=np.diff(np.append(first, len(order))),
    )
