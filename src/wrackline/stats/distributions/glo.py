"""Generalized logistic distribution: location, scale, shape k (k < 0 has a heavy upper tail)."""

import numpy as np
from numpy.typing import ArrayLike
from scipy.special import expit, logit

from wrackline.stats.distributions._power_form import FloatArray, bend, broadcast_lmoments, split, unbend

NAME = "GLO"
TITLE = "generalized logistic"
PARAMETERS = ("location", "scale", "shape")


def fit(
    l1: ArrayLike, l2: ArrayLike, t3: ArrayLike, t4: ArrayLike | None = None, t5: ArrayLike | None = None
) -> FloatArray:
    """Fit to L-moments (Hosking and Wallis, 1997, appendix); `t4` and `t5` are not used.

    Returns shape (..., 3): location and scale in the unit of `l1`, shape. NaN where ``l2 <= 0`` or
    ``|t3| >= 1``.
    """
    l1, l2, t3 = broadcast_lmoments(l1, l2, t3)
    k = np.where(np.abs(t3) < 1, -t3, np.nan)
    scale = l2 * np.sinc(k)
    return np.stack([l1 - scale * _mean(k), scale, k], axis=-1)


def quantile(parameters: ArrayLike, p: ArrayLike) -> FloatArray:
    """Return the value not exceeded with probability `p`; `p` of 0 or 1 gives the bounds of the law."""
    location, scale, k = split(parameters)
    return location + scale * bend(logit(np.asarray(p, dtype=float)), k)


def cdf(parameters: ArrayLike, x: ArrayLike) -> FloatArray:
    """Return the probability that `x` is not exceeded."""
    location, scale, k = split(parameters)
    return np.asarray(expit(unbend((np.asarray(x, dtype=float) - location) / scale, k)))


def density(parameters: ArrayLike, x: ArrayLike) -> FloatArray:
    """Return the probability density at `x`, zero outside the bounds."""
    location, scale, k = split(parameters)
    y = unbend((np.asarray(x, dtype=float) - location) / scale, k)
    inside = ~np.isinf(y)
    y = np.where(inside, y, 0.0)
    with np.errstate(invalid="ignore"):
        return np.where(inside, np.exp(k * y - y - 2 * np.logaddexp(0.0, -y)) / scale, 0.0)


def fourth_ratio(t3: ArrayLike) -> FloatArray:
    """Return the L-kurtosis of the law with L-skewness `t3`: (1 + 5 t3^2) / 6, exact."""
    t3 = np.asarray(t3, dtype=float)
    return np.where(np.abs(t3) < 1, (1 + 5 * t3**2) / 6, np.nan)


def _mean(k: FloatArray) -> FloatArray:
    """Return the mean at location 0 and scale 1: 1/k - pi/sin(pi k), by its series near k = 0."""
    near = np.abs(k) < 0.03
    u2 = (np.pi * np.where(near, k, 0.0)) ** 2
    series = -(np.pi**2) * k * (1 / 6 + u2 * (7 / 360 + u2 * (31 / 15120 + u2 * (127 / 604800))))
    far = np.where(near, 0.5, k)
    return np.where(near, series, 1 / far - np.pi / np.sin(np.pi * far))
