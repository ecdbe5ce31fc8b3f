"""Confidence limits of flood quantiles, in the logarithms of flow."""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.special import ndtr, ndtri, stdtr, stdtrit

from wrackline.stats.moment_covariance import ThresholdClasses, moment_covariance
from wrackline.stats.noncentral_t import noncentral_t_quantile
from wrackline.stats.pearson3 import frequency_factor, frequency_factor_slope

FloatArray = NDArray[np.float64]

FEWEST_DEGREES_OF_FREEDOM = 5.0
SMALLEST_DENOMINATOR = 0.5
_STEP = 2e-3


def standard_error_moments(
    classes: ThresholdClasses,
    mean: FloatArray,
    sd: FloatArray,
    skew: FloatArray,
    aeps: FloatArray,
    weight: FloatArray | None = None,
    generalized_skew_mse: FloatArray | None = None,
) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Return variance of quantiles, variance of their standard error, and the covariance of the two.

    Parameters
    ----------
    classes, mean, sd, skew, weight, generalized_skew_mse
        As for `moment_covariance`.
    aeps : float array (a,)

    Returns
    -------
    variance, variance_of_se, covariance_with_se : float arrays (g, a)
        First order: the standard error is differentiated through the moments it is evaluated at, with thresholds
        and weight held fixed.
    """

    # The frequency factor is by far the dearest part, and depends on the skew alone: seven values serve all.
    factors = frequency_factor(
        aeps[None, None, :], skew[None, :, None] + _STEP * np.arange(-3, 4)[:, None, None]
    )

    def gradient_at(sd: FloatArray, offset: int) -> FloatArray:
        near, far = factors[4 + offset] - factors[2 + offset], factors[5 + offset] - factors[1 + offset]
        slope = (8 * near - far) / (12 * _STEP)
        k = factors[3 + offset]
        return np.stack([np.ones_like(k), k / (2 * sd[:, None]), sd[:, None] * slope], axis=-1)

    def standard_error_at(mean: FloatArray, variance: FloatArray, offset: int) -> FloatArray:
        sd = np.sqrt(variance)
        covariance = moment_covariance(classes, mean, sd, skew + offset * _STEP, weight, generalized_skew_mse)
        gradient = gradient_at(sd, offset)
        return np.sqrt(np.maximum(np.einsum("gai,gij,gaj->ga", gradient, covariance, gradient), 0.0))

    variance = sd**2
    none = np.zeros_like(sd)
    shifts = ((_STEP * sd, none, 0), (none, _STEP * variance, 0), (none, none, 1))
    sizes = (_STEP * sd, _STEP * variance, np.full_like(sd, _STEP))
    slope = np.stack(
        [
            (standard_error_at(mean + m, variance + v, j) - standard_error_at(mean - m, variance - v, -j))
            / (2 * size[:, None])
            for (m, v, j), size in zip(shifts, sizes, strict=True)
        ],
        axis=-1,
    )
    covariance = moment_covariance(classes, mean, sd, skew, weight, generalized_skew_mse)
    gradient = gradient_at(sd, 0)
    of_quantile = np.einsum("gai,gij,gaj->ga", gradient, covariance, gradient)
    of_se = np.einsum("gai,gij,gaj->ga", slope, covariance, slope)
    shared = np.einsum("gai,gij,gaj->ga", gradient, covariance, slope)
    return of_quantile, of_se, shared


def student_limits(
    log10_quantile: FloatArray,
    variance: FloatArray,
    variance_of_se: FloatArray,
    covariance_with_se: FloatArray,
    confidence: float,
    orthogonal: bool = True,
) -> tuple[FloatArray, FloatArray]:
    """Return lower and upper confidence limits that allow for the covariance of a quantile and its standard error.

    Parameters
    ----------
    log10_quantile, variance, variance_of_se, covariance_with_se : float arrays (g, a)
    confidence : float
        Probability content, two-sided.
    orthogonal : bool
        Degrees of freedom from the part of the standard error's variance that is uncorrelated with the quantile
        (default), or from all of it.

    Notes
    -----
    Cohn, Lane and Stedinger (2001, Water Resour. Res. 37(6)). Their definition of the degrees of freedom could not be
    read; the default is what the derivation asks for. Denominators are kept above 0.5 and degrees of
    freedom above 5.
    """
    se = np.sqrt(variance)
    beta = covariance_with_se / variance
    own = variance_of_se - beta**2 * variance if orthogonal else variance_of_se
    freedom = 0.5 * variance / np.maximum(own, 1e-300)
    t = stdtrit(np.clip(freedom, FEWEST_DEGREES_OF_FREEDOM, 1e6), 0.5 * (1 + confidence))
    lower = log10_quantile - t * se / np.maximum(1 + beta * t, SMALLEST_DENOMINATOR)
    upper = log10_quantile + t * se / np.maximum(1 - beta * t, SMALLEST_DENOMINATOR)
    return lower, upper


def known_skew_limits(
    mean: ArrayLike,
    sd: ArrayLike,
    skew: ArrayLike,
    n: int,
    aep: ArrayLike,
    confidence: float,
    skew_variance: ArrayLike = 0.0,
) -> tuple[FloatArray, FloatArray]:
    """Return limits through the noncentral t distribution, for complete records and a skew taken as known.

    Parameters
    ----------
    mean, sd, skew : array_like
        Of the logarithms.
    n : int
        Years of record, all exactly known.
    aep : array_like
    confidence : float
        Two-sided probability content.
    skew_variance : array_like
        Variance of the skew where it is not known exactly.

    Notes
    -----
    Stedinger (1983, Water Resour. Res. 19(2)); exact for zero skew. An independent check on `student_limits`.
    """
    mean, sd, g = (np.asarray(value, dtype=float) for value in (mean, sd, skew))
    aep = np.asarray(aep, dtype=float)
    z, k = -ndtri(aep), frequency_factor(aep, g)
    spread = 1 + g * k + 0.5 * (1 + 0.75 * g**2) * k**2
    spread = spread + n * np.asarray(skew_variance) * frequency_factor_slope(aep, g) ** 2
    ratio = np.sqrt(spread / (1 + 0.5 * z**2))
    limits = [
        mean + sd * (k + ratio * (noncentral_t_quantile(level, n - 1, z * np.sqrt(n)) / np.sqrt(n) - z))
        for level in (0.5 * (1 - confidence), 0.5 * (1 + confidence))
    ]
    return limits[0], limits[1]


def bulletin17b_limits(
    mean: ArrayLike, sd: ArrayLike, skew: ArrayLike, n: int, aep: ArrayLike, confidence: float
) -> tuple[FloatArray, FloatArray]:
    """Return limits by the noncentral-t approximation of Bulletin 17B (1982, appendix 9), the skew taken as known.

    NaN where the approximation has no real solution. `confidence` is the two-sided probability content.
    """
    mean, sd = np.asarray(mean, dtype=float), np.asarray(sd, dtype=float)
    z, k = ndtri(0.5 * (1 + confidence)), frequency_factor(aep, skew)
    a, b = 1 - z**2 / (2 * (n - 1)), k**2 - z**2 / n
    discriminant = k**2 - a * b
    root = np.sqrt(np.where(discriminant >= 0, discriminant, np.nan))
    return mean + sd * (k - root) / a, mean + sd * (k + root) / a


def expected_probability(n: ArrayLike, aep: ArrayLike) -> FloatArray:
    """Return the exceedance probability of the fitted quantile, averaged over what `n` years could have shown.

    Parameters
    ----------
    n : array_like
        Years of record.
    aep : array_like
        Nominal annual exceedance probability.

    Notes
    -----
    Normal case (Beard, 1960; Bulletin 17B, 1982, appendix 11), used there for any skew. An extra to be labelled as such; the
    fitted curve is never changed by it.

    Examples
    --------
    >>> round(float(expected_probability(10, 0.1)), 5)
    0.12639
    """
    n = np.asarray(n, dtype=float)
    return stdtr(n - 1, ndtri(np.asarray(aep, dtype=float)) * np.sqrt(n / (n + 1)))


def expected_probability_aep(n: ArrayLike, aep: ArrayLike) -> FloatArray:
    """Return the nominal exceedance probability whose expected probability is `aep`.

    The quantile at the returned value is exceeded with probability `aep` on average over sampling.

    Examples
    --------
    >>> nominal = expected_probability_aep(30, 0.01)
    >>> round(float(expected_probability(30, nominal)), 6)
    0.01
    """
    n = np.asarray(n, dtype=float)
    return ndtr(stdtrit(n - 1, np.asarray(aep, dtype=float)) * np.sqrt((n + 1) / n))
