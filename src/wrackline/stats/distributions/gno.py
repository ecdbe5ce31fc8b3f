"""Generalized normal (three-parameter lognormal) distribution: location, scale, shape k.

x = location + scale (1 - exp(-k z)) / k with z standard normal; k < 0 is skewed to the right.
"""

import numpy as np
from numpy.typing import ArrayLike
from scipy.special import erf, erfc, ndtr, ndtri, owens_t

from wrackline.stats.distributions._power_form import (
    FloatArray,
    bend,
    broadcast_lmoments,
    relative_expm1,
    split,
    unbend,
)

NAME = "GNO"
TITLE = "generalized normal"
PARAMETERS = ("location", "scale", "shape")

# Hosking and Wallis (1997, appendix): k as a rational function of L-skewness, the start of our iteration.
_NUMERATOR = (2.0466534, -3.6544371, 1.8396733, -0.20360244)
_DENOMINATOR = (1.0, -2.0182173, 1.2420401, -0.21741801)
_NODES, _NODE_WEIGHTS = np.polynomial.legendre.leggauss(16)
# The trapezium rule is exact to rounding for these analytic integrands with normal tails.
_STEP = 0.125
_NORMAL_GRID = np.arange(-14.0, 14.0 + _STEP / 2, _STEP)


def fit(
    l1: ArrayLike, l2: ArrayLike, t3: ArrayLike, t4: ArrayLike | None = None, t5: ArrayLike | None = None
) -> FloatArray:
    """Fit to L-moments (Hosking and Wallis, 1997, appendix); `t4` and `t5` are not used.

    L-skewness as a function of the shape is closed in Owen's T function,
    ``(1 - 12 T(k / sqrt 2, 1 / sqrt 3)) / erf(k / 2)``, and is inverted to rounding.

    Returns shape (..., 3): location and scale in the unit of `l1`, shape. NaN where ``l2 <= 0`` or
    ``|t3| > 0.995``.
    """
    l1, l2, t3 = broadcast_lmoments(l1, l2, t3)
    k = _shape(t3)
    # erf(k/2) / k, smooth through k = 0.
    near = np.abs(k) < 1e-8
    safe = np.where(near, 1.0, k)
    per_shape = np.where(near, 1 / np.sqrt(np.pi), erf(safe / 2) / safe)
    scale = l2 * np.exp(-(k**2) / 2) / per_shape
    mean = -(k / 2) * relative_expm1(k**2 / 2)
    return np.stack([l1 - scale * mean, scale, k], axis=-1)


def quantile(parameters: ArrayLike, p: ArrayLike) -> FloatArray:
    """Return the value not exceeded with probability `p`; `p` of 0 or 1 gives the bounds of the law."""
    location, scale, k = split(parameters)
    return location + scale * bend(ndtri(np.asarray(p, dtype=float)), k)


def cdf(parameters: ArrayLike, x: ArrayLike) -> FloatArray:
    """Return the probability that `x` is not exceeded."""
    location, scale, k = split(parameters)
    return np.asarray(ndtr(unbend((np.asarray(x, dtype=float) - location) / scale, k)))


def density(parameters: ArrayLike, x: ArrayLike) -> FloatArray:
    """Return the probability density at `x`, zero outside the bounds."""
    location, scale, k = split(parameters)
    z = unbend((np.asarray(x, dtype=float) - location) / scale, k)
    inside = ~np.isinf(z)
    z = np.where(inside, z, 0.0)
    return np.where(inside, np.exp(k * z - z**2 / 2) / (np.sqrt(2 * np.pi) * scale), 0.0)


def fourth_ratio(t3: ArrayLike) -> FloatArray:
    """Return the L-kurtosis of the law with L-skewness `t3`, by quadrature to about 1e-12."""
    k = _shape(np.asarray(t3, dtype=float))[..., None]
    # exp(-k z) moves the weight of the integrand to z = -k: the grid is laid about half way.
    z = _NORMAL_GRID - k / 2
    probability, complement = ndtr(z), ndtr(-z)
    # By parts, l_r is an integral of F (1 - F) times a polynomial over x: no cancellation in the tails.
    weight = probability * complement * np.exp(-k * z)
    fourth = np.sum(weight * (1 - 5 * probability * complement), axis=-1)
    return np.asarray(fourth / np.sum(weight, axis=-1))


def _shape(t3: FloatArray) -> FloatArray:
    """Return the shape with L-skewness `t3`, by Newton's method on ln(1 - |t3|)."""
    size = np.where(np.abs(t3) <= 0.995, np.abs(t3), np.nan)
    square = np.minimum(size, 0.94) ** 2
    k = np.minimum(size, 0.94) * np.polynomial.polynomial.polyval(square, _NUMERATOR)
    k = k / np.polynomial.polynomial.polyval(square, _DENOMINATOR)
    for _ in range(30):
        value, slope = _lskewness(k)
        step = (np.log1p(-size) - np.log1p(-value)) * (1 - value) / slope
        k = np.maximum(k - step, 0.0)
        if not np.any(np.abs(step) > 1e-15 * (1 + k)):
            break
    return -np.sign(t3) * k


def _lskewness(k: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Return the size of L-skewness for shapes k >= 0 and its derivative with respect to k."""
    near = k < 1.0
    small, large = np.where(near, k, 0.5), np.where(near, 1.0, k)
    # 6 / sqrt(pi) times the integral of erf(x / sqrt 3) exp(-x^2) from 0 to k / 2, over erf(k / 2).
    x = small[..., None] / 4 * (1 + _NODES)
    integral = small / 4 * np.sum(_NODE_WEIGHTS * erf(x / np.sqrt(3)) * np.exp(-(x**2)), axis=-1)
    positive = small > 0
    denominator = np.where(positive, erf(small / 2), 1.0)
    by_rule = np.where(positive, 6 / np.sqrt(np.pi) * integral / denominator, 0.0)
    gap = (12 * owens_t(large / np.sqrt(2), 1 / np.sqrt(3)) - erfc(large / 2)) / erf(large / 2)
    value = np.where(near, by_rule, 1 - gap)
    steepest = np.sqrt(3 / np.pi) / 2
    safe = np.where(k > 1e-6, k, 1.0)
    slope = np.exp(-(safe**2) / 4) / np.sqrt(np.pi) * (3 * erf(safe / np.sqrt(12)) - value) / erf(safe / 2)
    return value, np.where(k > 1e-6, slope, steepest)
