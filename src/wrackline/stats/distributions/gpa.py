"""Generalized Pareto distribution: location (lower bound), scale, shape k (k < 0 has a heavy upper tail)."""

import numpy as np
from numpy.typing import ArrayLike

from wrackline.stats.distributions._power_form import FloatArray, bend, broadcast_lmoments, split, unbend

NAME = "GPA"
TITLE = "generalized Pareto"
PARAMETERS = ("location", "scale", "shape")


def fit(
    l1: ArrayLike, l2: ArrayLike, t3: ArrayLike, t4: ArrayLike | None = None, t5: ArrayLike | None = None
) -> FloatArray:
    """Fit to L-moments (Hosking and Wallis, 1997, appendix); `t4` and `t5` are not used.

    Returns shape (..., 3): location and scale in the unit of `l1`, shape. NaN where ``l2 <= 0`` or
    ``|t3| >= 1``.
    """
    l1, l2, t3 = broadcast_lmoments(l1, l2, t3)
    t3 = np.where(np.abs(t3) < 1, t3, np.nan)
    k = (1 - 3 * t3) / (1 + t3)
    return np.stack([l1 - (2 + k) * l2, (1 + k) * (2 + k) * l2, k], axis=-1)


def quantile(parameters: ArrayLike, p: ArrayLike) -> FloatArray:
    """Return the value not exceeded with probability `p`; `p` of 0 or 1 gives the bounds of the law."""
    location, scale, k = split(parameters)
    with np.errstate(divide="ignore"):
        y = -np.log1p(-np.asarray(p, dtype=float))
    return location + scale * bend(y, k)


def cdf(parameters: ArrayLike, x: ArrayLike) -> FloatArray:
    """Return the probability that `x` is not exceeded."""
    return -np.expm1(-np.maximum(_reduced(parameters, x), 0.0))


def density(parameters: ArrayLike, x: ArrayLike) -> FloatArray:
    """Return the probability density at `x`, zero outside the bounds."""
    _, scale, k = split(parameters)
    y = _reduced(parameters, x)
    inside = ~(np.isinf(y) | (y < 0))
    y = np.where(inside, y, 0.0)
    return np.where(inside, np.exp(k * y - y) / scale, 0.0)


def fourth_ratio(t3: ArrayLike) -> FloatArray:
    """Return the L-kurtosis of the law with L-skewness `t3`: t3 (1 + 5 t3) / (5 + t3), exact."""
    t3 = np.asarray(t3, dtype=float)
    return np.where(np.abs(t3) < 1, t3 * (1 + 5 * t3) / (5 + t3), np.nan)


def _reduced(parameters: ArrayLike, x: ArrayLike) -> FloatArray:
    location, scale, k = split(parameters)
    return unbend((np.asarray(x, dtype=float) - location) / scale, k)
