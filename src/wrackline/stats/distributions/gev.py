"""Generalized extreme-value distribution: location, scale, shape k (k < 0 has a heavy upper tail)."""

import numpy as np
from numpy.typing import ArrayLike
from scipy.special import gammaln

from wrackline.stats.distributions._power_form import (
    FloatArray,
    bend,
    broadcast_lmoments,
    relative_expm1,
    split,
    unbend,
)

NAME = "GEV"
TITLE = "generalized extreme value"
PARAMETERS = ("location", "scale", "shape")

_LN2, _LN3 = np.log(2.0), np.log(3.0)
# zeta(j) / j of alternating sign, j = 2..9: ln Gamma(1 + k) = -gamma k + zeta(2) k^2 / 2 - ...
_LOG_GAMMA_SERIES = (
    0.8224670334241132,
    -0.4006856343865314,
    0.27058080842778454,
    -0.20738555102867398,
    0.1695571769974082,
    -0.14404989676884612,
    0.12550966952474304,
    -0.11133426586956469,
)


def fit(
    l1: ArrayLike, l2: ArrayLike, t3: ArrayLike, t4: ArrayLike | None = None, t5: ArrayLike | None = None
) -> FloatArray:
    """Fit to L-moments (Hosking and Wallis, 1997, appendix); `t4` and `t5` are not used.

    The shape solves the exact equation of L-skewness by Newton's method, not by its usual polynomial.

    Returns shape (..., 3): location and scale in the unit of `l1`, shape. NaN where ``l2 <= 0`` or
    ``|t3| >= 1``.
    """
    l1, l2, t3 = broadcast_lmoments(l1, l2, t3)
    k = _shape(t3)
    per_gamma = _log_gamma_1p_over_k(k)
    with np.errstate(over="ignore", invalid="ignore"):
        scale = l2 / (_LN2 * relative_expm1(-k * _LN2) * np.exp(k * per_gamma))
        mean = -per_gamma * relative_expm1(k * per_gamma)
    return np.stack([l1 - scale * mean, scale, k], axis=-1)


def quantile(parameters: ArrayLike, p: ArrayLike) -> FloatArray:
    """Return the value not exceeded with probability `p`; `p` of 0 or 1 gives the bounds of the law."""
    location, scale, k = split(parameters)
    with np.errstate(divide="ignore"):
        y = -np.log(-np.log(np.asarray(p, dtype=float)))
    return location + scale * bend(y, k)


def cdf(parameters: ArrayLike, x: ArrayLike) -> FloatArray:
    """Return the probability that `x` is not exceeded."""
    location, scale, k = split(parameters)
    y = unbend((np.asarray(x, dtype=float) - location) / scale, k)
    with np.errstate(over="ignore"):
        return np.exp(-np.exp(-y))


def density(parameters: ArrayLike, x: ArrayLike) -> FloatArray:
    """Return the probability density at `x`, zero outside the bounds."""
    location, scale, k = split(parameters)
    y = unbend((np.asarray(x, dtype=float) - location) / scale, k)
    inside = ~np.isinf(y)
    y = np.where(inside, y, 0.0)
    with np.errstate(over="ignore"):
        return np.where(inside, np.exp(k * y - y - np.exp(-y)) / scale, 0.0)


def fourth_ratio(t3: ArrayLike) -> FloatArray:
    """Return the L-kurtosis of the law with L-skewness `t3`, from the exact formulas (about 1e-13)."""
    k = _shape(np.asarray(t3, dtype=float))
    second = _LN2 * relative_expm1(-k * _LN2)
    third = _LN3 * relative_expm1(-k * _LN3)
    fourth = 2 * _LN2 * relative_expm1(-2 * k * _LN2)
    return (5 * fourth - 10 * third) / second + 6


def _shape(t3: FloatArray) -> FloatArray:
    """Return the shape with L-skewness `t3`: (1 + t3) / 2 = (2^-k - 3^-k) / (1 - 2^-k).

    In logarithms the right side is nearly straight in k, so Newton's method needs no safeguard.
    """
    t3 = np.where(np.abs(t3) < 1, t3, np.nan)
    target = np.log((1 + t3) / 2)
    c = 2 / (3 + t3) - _LN2 / _LN3
    k = np.where(t3 > -0.7, 7.8590 * c + 2.9554 * c**2, -target / _LN2)
    for _ in range(30):
        numerator, denominator = -k * np.log(1.5), -k * _LN2
        ratio = relative_expm1(numerator) / relative_expm1(denominator)
        value = denominator + np.log(ratio * np.log(1.5) / _LN2)
        slope = -_LN2 - np.log(1.5) * _log_slope(numerator) + _LN2 * _log_slope(denominator)
        step = (value - target) / slope
        k = k - step
        if not np.any(np.abs(step) > 1e-15 * (1 + np.abs(k))):
            break
    return k


def _log_slope(x: FloatArray) -> FloatArray:
    """Return the derivative of ln((e^x - 1) / x)."""
    near = np.abs(x) < 1e-2
    far = np.where(near, 1.0, x)
    return np.where(near, 0.5 + x / 12, -1 / np.expm1(-far) - 1 / far)


def _log_gamma_1p_over_k(k: FloatArray) -> FloatArray:
    """Return ln Gamma(1 + k) / k, by its series where 1 + k would lose the digits of k."""
    near = np.abs(k) < 0.02
    small = np.where(near, k, 0.0)
    series = np.polynomial.polynomial.polyval(small, (-np.euler_gamma, *_LOG_GAMMA_SERIES))
    far = np.where(near, 1.0, k)
    return np.where(near, series, gammaln(1 + far) / far)
