"""Sampling covariance of expected moments under perception thresholds, and what follows for quantiles."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from wrackline.stats.pearson3 import (
    conditional_moments,
    frequency_factor,
    frequency_factor_slope,
    partial_moments,
)

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

_STEP = 1e-4


@dataclass(frozen=True)
class ThresholdClasses:
    """Years of many gauges grouped by perception threshold.

    Attributes
    ----------
    n_gauges : int
    gauge : int array (c,)
        Gauge of every group, ascending.
    low, high : float arrays (c,)
        A value of these years would be known exactly if it lay within; ``-inf`` and ``inf`` where open.
    years : int array (c,)
    """

    n_gauges: int
    gauge: IntArray
    low: FloatArray
    high: FloatArray
    years: IntArray

    @property
    def total_years(self) -> FloatArray:
        return np.bincount(self.gauge, weights=self.years, minlength=self.n_gauges).astype(float)

    def keep_gauges(self, gauges: IntArray) -> ThresholdClasses:
        """Return the groups of the given gauge numbers (ascending), renumbered from 0."""
        position = np.full(self.n_gauges, -1, dtype=np.int64)
        position[gauges] = np.arange(len(gauges))
        kept = position[self.gauge] >= 0
        return ThresholdClasses(
            len(gauges), position[self.gauge][kept], self.low[kept], self.high[kept], self.years[kept]
        )


def group_thresholds(gauge: ArrayLike, low: ArrayLike, high: ArrayLike, n_gauges: int) -> ThresholdClasses:
    """Group years by gauge and perception threshold.

    Parameters
    ----------
    gauge : int array (m,)
    low, high : float arrays (m,)
        Thresholds of every year, in the space of the fit (logarithms).
    n_gauges : int
    """
    gauge, low, high = np.asarray(gauge, np.int64), np.asarray(low, float), np.asarray(high, float)
    order = np.lexsort((high, low, gauge))
    gauge, low, high = gauge[order], low[order], high[order]
    new = np.ones(len(order), dtype=bool)
    new[1:] = (np.diff(gauge) != 0) | (low[1:] != low[:-1]) | (high[1:] != high[:-1])
    first = np.flatnonzero(new)
    years = np.diff(np.append(first, len(order)))
    return ThresholdClasses(n_gauges, gauge[first], low[first], high[first], years)


def moment_covariance(
    classes: ThresholdClasses,
    mean: FloatArray,
    sd: FloatArray,
    skew: FloatArray,
    weight: FloatArray | None = None,
    generalized_skew_mse: FloatArray | None = None,
) -> FloatArray:
    """Return the covariance of (mean, standard deviation squared, skew) of expected-moments fits.

    Parameters
    ----------
    classes : ThresholdClasses
    mean, sd, skew : float arrays (g,)
        Moments of the distribution, at which the covariance is evaluated.
    weight : float array (g,), optional
        Share of the station skew in a weighted skew; 1 (default) for a station skew.
    generalized_skew_mse : float array (g,), optional
        Mean square error of the generalized skew, whose share is ``1 - weight``.

    Returns
    -------
    float array (g, 3, 3)
        In units of the data to powers 2, 3, 4 as fits (mean, variance, skew).

    Notes
    -----
    First-order method of Cohn, Lane and Stedinger (2001, Water Resour. Res. 37(6)): the fixed point is
    differentiated through the expected moments of the censored regions. The weight acts inside the
    iteration, so it enters the derivative there; scaling the skew row afterwards is wrong with
    censored years.
    """
    jacobian, scatter = _jacobian_and_scatter(classes, mean, sd, skew)
    g = classes.n_gauges
    share = np.tile(np.eye(3), (g, 1, 1))
    if weight is not None:
        share[:, 2, 2] = weight
    gain = np.linalg.solve(np.eye(3) - share @ jacobian, share)
    covariance = gain @ scatter @ gain.transpose(0, 2, 1)
    if weight is not None and generalized_skew_mse is not None:
        pull = np.zeros((g, 3))
        pull[:, 2] = 1 - weight
        direction = np.linalg.solve(np.eye(3) - share @ jacobian, pull[:, :, None])[:, :, 0]
        covariance = (
            covariance + generalized_skew_mse[:, None, None] * direction[:, :, None] * direction[:, None, :]
        )
    units = np.stack([sd, sd**2, np.ones_like(sd)], axis=1)
    return covariance * units[:, :, None] * units[:, None, :]


def complete_skew_variance(n: ArrayLike, skew: ArrayLike) -> FloatArray:
    """Return the asymptotic variance of the sample skew of n exactly known values (Bobee, 1973)."""
    g2 = np.asarray(skew, dtype=float) ** 2
    return 6 / np.asarray(n, dtype=float) * (1 + 1.5 * g2 + 0.3125 * g2**2)


def complete_quantile_variance(n: ArrayLike, sd: ArrayLike, skew: ArrayLike, aep: ArrayLike) -> FloatArray:
    """Return the asymptotic variance of a quantile fitted by moments to n exactly known values.

    Notes
    -----
    Bobee (1973), Kite (1977). Independent of `moment_covariance`, which equals it without censoring.
    """
    g = np.asarray(skew, dtype=float)
    k, slope = frequency_factor(aep, g), frequency_factor_slope(aep, g)
    shape = (
        1
        + k * g
        + 0.5 * k**2 * (1 + 0.75 * g**2)
        + 3 * k * slope * (g + 0.25 * g**3)
        + 3 * slope**2 * (2 + 3 * g**2 + 0.625 * g**4)
    )
    return np.asarray(sd, dtype=float) ** 2 / np.asarray(n, dtype=float) * shape


def quantile_gradient(sd: FloatArray, skew: FloatArray, aeps: FloatArray) -> FloatArray:
    """Return the derivative of quantiles by (mean, variance, skew), shape (g, a, 3)."""
    k = frequency_factor(aeps[None, :], skew[:, None])
    slope = frequency_factor_slope(aeps[None, :], skew[:, None])
    return np.stack([np.ones_like(k), k / (2 * sd[:, None]), sd[:, None] * slope], axis=-1)


def quantile_variance(
    covariance: FloatArray, sd: FloatArray, skew: FloatArray, aeps: FloatArray
) -> FloatArray:
    """Return the variance of quantiles, shape (g, a), from the covariance of (mean, variance, skew)."""
    gradient = quantile_gradient(sd, skew, aeps)
    return np.einsum("gai,gij,gaj->ga", gradient, covariance, gradient)


def _jacobian_and_scatter(
    classes: ThresholdClasses, mean: FloatArray, sd: FloatArray, skew: FloatArray
) -> tuple[FloatArray, FloatArray]:
    """Derivative of the moment update and covariance of its noise, both in standardised (mean, variance, skew)."""
    own, g = classes.gauge, classes.n_gauges
    low = (classes.low - mean[own]) / sd[own]
    high = (classes.high - mean[own]) / sd[own]
    share = classes.years / classes.total_years[own]
    class_skew = skew[own]
    below, above = np.full(low.shape, -np.inf), np.full(low.shape, np.inf)
    slope = np.zeros((len(own), 3, 3))
    scatter = np.zeros((len(own), 3, 3))
    for start, end, rows in ((below, low, np.isfinite(low)), (high, above, np.isfinite(high))):
        at = np.flatnonzero(rows)
        if not len(at):
            continue
        probability, moments = conditional_moments(start[at], end[at], class_skew[at])
        slope[at] += probability[:, None, None] * _region_slope(start[at], end[at], class_skew[at])
        scatter[at] += probability[:, None, None] * np.einsum("ic,jc->cij", moments, moments)
    powers = partial_moments(low, high, class_skew, order=6)
    for i in range(3):
        for j in range(3):
            scatter[:, i, j] += powers[i + j + 2]

    total_slope, total_scatter = np.zeros((g, 3, 3)), np.zeros((g, 3, 3))
    np.add.at(total_slope, own, share[:, None, None] * slope)
    np.add.at(total_scatter, own, share[:, None, None] * scatter)
    moments = np.stack([np.zeros(g), np.ones(g), skew], axis=1)
    noise = (total_scatter - moments[:, :, None] * moments[:, None, :]) / classes.total_years[:, None, None]
    # From raw moments about the mean to (mean, variance, skew), with mean 0 and standard deviation 1:
    # variance = m2 - m1**2, skew = (m3 - 3 m1 m2 + 2 m1**3) / variance**1.5.
    to_theta = np.zeros((g, 3, 3))
    to_theta[:, 0, 0] = to_theta[:, 1, 1] = to_theta[:, 2, 2] = 1
    to_theta[:, 2, 0], to_theta[:, 2, 1] = -3, -1.5 * skew
    return to_theta @ total_slope, to_theta @ noise @ to_theta.transpose(0, 2, 1)


def _region_slope(low: FloatArray, high: FloatArray, skew: FloatArray) -> FloatArray:
    """Derivative of the mean of (w, w**2, w**3) in a fixed region by (mean, variance, skew), shape (c, 3, 3)."""
    slope = np.empty((len(low), 3, 3))
    for column, (d_mean, d_variance, d_skew) in enumerate(np.eye(3) * _STEP):
        ends = []
        for sign in (1, -1):
            mean, sd = sign * d_mean, np.sqrt(1 + sign * d_variance)
            _, m = conditional_moments((low - mean) / sd, (high - mean) / sd, skew + sign * d_skew)
            first = mean + sd * m[0]
            second = mean**2 + 2 * mean * sd * m[0] + sd**2 * m[1]
            third = mean**3 + 3 * mean**2 * sd * m[0] + 3 * mean * sd**2 * m[1] + sd**3 * m[2]
            ends.append(np.stack([first, second, third], axis=1))
        slope[:, :, column] = (ends[0] - ends[1]) / (2 * _STEP)
    return slope
