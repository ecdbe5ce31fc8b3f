"""Pearson type III distribution by its mean, standard deviation and skew (of either sign, or zero)."""

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.special import betainc, gammainc, gammaincc, gammainccinv, gammaincinv, gammaln, ndtr, ndtri

from wrackline.stats.distributions._power_form import FloatArray, broadcast_lmoments, split

NAME = "PE3"
TITLE = "Pearson type III"
PARAMETERS = ("mean", "standard_deviation", "skew")

# Below this skew scipy's gamma functions lose digits in the tails (6 % of the quantile at a skew of 1e-4 and
# a probability of 1e-6, scipy 1.17), while four Cornish-Fisher terms are exact to about 1e-13.
_NEARLY_NORMAL = 5e-3
# A nearly normal score beyond this has probability zero in double precision.
_FARTHEST_SCORE = 40.0
# Above this gamma shape the series in 1 / shape below are exact to rounding.
_LARGE = 50.0
# t3 sqrt(3 pi A) in powers of 1 / A, from 6 I_{1/3}(A, 2A) - 3 in exact arithmetic.
_LSKEW_SERIES = (
    *(1.0, 11 / 216, -271 / 10368, -17095 / 2239488),
    *(0.00615659505930500, 0.00351635444104183, -0.00389460926952320, -0.00337030609014483),
)
# Gamma(A + 1/2) / (Gamma(A) sqrt A) in powers of 1 / A.
_HALF_SERIES = (1.0, -1 / 8, 1 / 128, 5 / 1024, -21 / 32768, -399 / 262144, 869 / 4194304, 39325 / 33554432)
# L-kurtosis in powers of 1 / A: exact at zero, the rest fitted here to the quadrature (1e-13 below 0.02).
_LKURT_SERIES = (
    *(30 / np.pi * np.arctan(np.sqrt(2.0)) - 9, 0.031260983199, 0.012989228096, 0.002061926776),
    *(-0.002005579865, -0.001303312768, 0.001003218369),
)
_GRID = np.arange(-40.0, 12.0, 0.1)


def fit(
    l1: ArrayLike, l2: ArrayLike, t3: ArrayLike, t4: ArrayLike | None = None, t5: ArrayLike | None = None
) -> FloatArray:
    """Fit to L-moments (Hosking and Wallis, 1997, appendix); `t4` and `t5` are not used.

    The rational approximation of the gamma shape is refined until the L-skewness
    ``6 I_{1/3}(A, 2A) - 3`` is met to rounding.

    Returns shape (..., 3): mean and standard deviation in the unit of `l1`, skew. NaN where ``l2 <= 0`` or
    ``|t3| >= 1``.
    """
    l1, l2, t3 = broadcast_lmoments(l1, l2, t3)
    inverse = _inverse_gamma_shape(np.abs(t3))
    skew = 2 * np.sign(t3) * np.sqrt(inverse)
    return np.stack([l1, l2 * np.sqrt(np.pi) / _half_ratio(inverse), skew], axis=-1)


def quantile(parameters: ArrayLike, p: ArrayLike) -> FloatArray:
    """Return the value not exceeded with probability `p`; `p` of 0 or 1 gives the bounds of the law."""
    mean, deviation, skew = split(parameters)
    p, skew = np.broadcast_arrays(np.asarray(p, dtype=float), skew)
    frequency_factor = np.where(
        np.abs(skew) < _NEARLY_NORMAL, _nearly_normal_factor(p, skew), _gamma_factor(p, skew)
    )
    return mean + deviation * frequency_factor


def cdf(parameters: ArrayLike, x: ArrayLike) -> FloatArray:
    """Return the probability that `x` is not exceeded."""
    factor, skew = _standardize(parameters, x)
    near = np.abs(skew) < _NEARLY_NORMAL
    shape = 4 / np.where(near, 1.0, skew) ** 2
    y = np.maximum(shape + np.sqrt(shape) * np.sign(skew) * factor, 0.0)
    from_gamma = np.where(skew > 0, gammainc(shape, y), gammaincc(shape, y))
    # NaN parameters would be lost in the comparison of signs.
    from_gamma = np.where(np.isnan(skew), np.nan, from_gamma)
    return np.where(near, ndtr(_nearly_normal_score(factor, np.where(near, skew, 0.0))[0]), from_gamma)


def density(parameters: ArrayLike, x: ArrayLike) -> FloatArray:
    """Return the probability density at `x`, zero outside the bounds."""
    _, deviation, _ = split(parameters)
    factor, skew = _standardize(parameters, x)
    near = np.abs(skew) < _NEARLY_NORMAL
    shape = 4 / np.where(near, 1.0, skew) ** 2
    w = np.sign(skew) * factor / np.sqrt(shape)
    inside = ~(w <= -1)
    log1p_w = np.log1p(np.where(inside, w, 0.0))
    # The gamma density about its mean, with Stirling's formula divided out: exact for any shape.
    log_density = shape * (log1p_w - np.where(inside, w, 0.0)) - log1p_w - _stirling_error(shape)
    z, slope = _nearly_normal_score(factor, np.where(near, skew, 0.0))
    with np.errstate(over="ignore"):
        from_gamma = np.where(inside, np.exp(log_density), 0.0)
    from_normal = np.exp(-(z**2) / 2) / slope
    return np.where(near, from_normal, from_gamma) / (np.sqrt(2 * np.pi) * deviation)


def fourth_ratio(t3: ArrayLike) -> FloatArray:
    """Return the L-kurtosis of the law with L-skewness `t3`, by quadrature to about 1e-11."""
    inverse = _inverse_gamma_shape(np.abs(np.asarray(t3, dtype=float)))
    shape = 1 / np.maximum(inverse, 0.01)[..., None]
    # Trapezium rule over ln x, stretched so that the integrand has width one for any shape.
    x = (shape + 1) * np.exp(_GRID / np.sqrt(1 + shape))
    probability, complement = gammainc(shape, x), gammaincc(shape, x)
    weight = probability * complement * x
    fourth = np.sum(weight * (1 - 5 * probability * complement), axis=-1) / np.sum(weight, axis=-1)
    return np.where(inverse < 0.01, np.polynomial.polynomial.polyval(inverse, _LKURT_SERIES), fourth)


def _standardize(parameters: ArrayLike, x: ArrayLike) -> tuple[FloatArray, FloatArray]:
    mean, deviation, skew = split(parameters)
    factor, skew = np.broadcast_arrays((np.asarray(x, dtype=float) - mean) / deviation, skew)
    return factor, skew


def _gamma_factor(p: FloatArray, skew: FloatArray) -> FloatArray:
    skew = np.where(np.abs(skew) < _NEARLY_NORMAL, 1.0, skew)
    shape = 4 / skew**2
    factor = np.empty(np.shape(skew))
    right = skew > 0
    left = ~right
    factor[right] = gammaincinv(shape[right], p[right]) - shape[right]
    factor[left] = shape[left] - gammainccinv(shape[left], p[left])
    return factor / np.sqrt(shape)


def _nearly_normal_factor(p: FloatArray, skew: FloatArray) -> FloatArray:
    z = np.asarray(ndtri(p))
    inside = np.isfinite(z)
    small = np.where(np.abs(skew) < _NEARLY_NORMAL, skew, 0.0)
    if not small.any():
        return z
    return np.where(inside, _cornish_fisher(np.where(inside, z, 0.0), small)[0], z)


def _nearly_normal_score(factor: FloatArray, skew: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Return the normal score of a frequency factor and the slope of the factor in it."""
    factor = np.clip(factor, -_FARTHEST_SCORE, _FARTHEST_SCORE)
    # Elsewhere the score is the factor (normal) or is not used (far from normal).
    near = (skew != 0) & (np.abs(skew) < _NEARLY_NORMAL)
    scores, slopes = np.array(factor), np.ones(np.shape(factor))
    factor, skew = factor[near], skew[near]
    z = factor - skew * (factor**2 - 1) / 6
    for _ in range(6):
        value, slope = _cornish_fisher(z, skew)
        z = z - (value - factor) / slope
    scores[near], slopes[near] = z, _cornish_fisher(z, skew)[1]
    return scores, slopes


def _cornish_fisher(z: FloatArray, skew: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Return the frequency factor of a normal score to the fourth power of the skew, and its slope.

    The terms are those of the chi-square quantile (Goldberg and Levine, 1946), from memory and confirmed
    against the gamma quantile: the remainder falls with the fifth power of the skew.
    """
    value = (
        z
        + skew * (z**2 - 1) / 6
        + skew**2 * (z**3 - 7 * z) / 144
        - skew**3 * (6 * z**4 + 14 * z**2 - 32) / 12960
        + skew**4 * (9 * z**5 + 256 * z**3 - 433 * z) / 622080
    )
    slope = (
        1
        + skew * z / 3
        + skew**2 * (3 * z**2 - 7) / 144
        - skew**3 * (24 * z**3 + 28 * z) / 12960
        + skew**4 * (45 * z**4 + 768 * z**2 - 433) / 622080
    )
    return value, slope


def _stirling_error(shape: FloatArray) -> FloatArray:
    """Return ln Gamma(A) less Stirling's (A - 1/2) ln A - A + ln(2 pi) / 2."""
    inverse = 1 / shape
    series = inverse * (1 / 12 - inverse**2 * (1 / 360 - inverse**2 * (1 / 1260 - inverse**2 / 1680)))
    small = np.minimum(shape, _LARGE)
    direct = gammaln(small) - (small - 0.5) * np.log(small) + small - 0.5 * np.log(2 * np.pi)
    return np.where(shape > _LARGE, series, direct)


def _half_ratio(inverse: FloatArray) -> FloatArray:
    """Return Gamma(A + 1/2) / (Gamma(A) sqrt A) with `inverse` = 1 / A (one at zero)."""
    series = np.polynomial.polynomial.polyval(inverse, _HALF_SERIES)
    small = 1 / np.maximum(inverse, 1 / _LARGE)
    direct = np.exp(gammaln(small + 0.5) - gammaln(small)) / np.sqrt(small)
    return np.where(inverse < 1 / _LARGE, series, direct)


def _inverse_gamma_shape(size: FloatArray) -> FloatArray:
    """Return 1 / A for L-skewness of this size (zero at zero).

    The rational approximation of Hosking and Wallis is good to 5e-5, so correcting its argument by the
    L-skewness it misses gains four digits a round.
    """
    size = np.where(size < 1, size, np.nan)
    low = size < 1 / 3
    argument = size
    for _ in range(5):
        missed = size - _lskewness(_approximate_inverse(argument, low))
        argument = np.asarray(argument + missed)
    return _approximate_inverse(argument, low)


def _approximate_inverse(size: FloatArray, low: NDArray[np.bool_]) -> FloatArray:
    z = 3 * np.pi * size**2
    inverse_low = z * (1 + 0.1882 * z + 0.0442 * z**2) / (1 + 0.2906 * z)
    z = np.where(low, 0.5, 1 - size)
    numerator = z * (0.36067 + z * (-0.59567 + z * 0.25361))
    inverse_high = (1 + z * (-2.78861 + z * (2.56096 - z * 0.77045))) / numerator
    return np.where(low, inverse_low, inverse_high)


def _lskewness(inverse: FloatArray) -> FloatArray:
    """Return the L-skewness of a gamma law with `inverse` = 1 / A."""
    series = np.sqrt(inverse / (3 * np.pi)) * np.polynomial.polynomial.polyval(inverse, _LSKEW_SERIES)
    small = 1 / np.maximum(inverse, 1 / _LARGE)
    return np.where(inverse < 1 / _LARGE, series, 6 * betainc(small, 2 * small, 1 / 3) - 3)
