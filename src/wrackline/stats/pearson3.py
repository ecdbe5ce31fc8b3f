"""Pearson type III distribution in standardised form: exact through the incomplete gamma, smooth through zero skew.

A variate is ``x = mean + sd * w``; everything here is about ``w`` (mean 0, standard deviation 1) and its
skew. With ``c = skew / 2`` and ``alpha = 1 / c**2``, ``y = alpha * (1 + c * w)`` is a gamma variate of shape
``alpha`` (reflected for negative skew). Close to zero skew the incomplete gamma loses digits, so expansions
in the skew take over; they agree with it to about twelve digits where they meet.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.special import gammainc, gammaincc, gammainccinv, gammaincinv, gammaln, ndtr, ndtri

FloatArray = NDArray[np.float64]

EXPANSION_SKEW = 2e-3
"""Below this absolute skew the expansions about the normal distribution are used."""

_SQRT_2PI = np.sqrt(2 * np.pi)
_HALF_LOG_2PI = 0.5 * np.log(2 * np.pi)


def frequency_factor(aep: ArrayLike, skew: ArrayLike) -> FloatArray:
    """Return K, the standardised quantile that is exceeded with probability `aep`.

    Parameters
    ----------
    aep : array_like
        Annual exceedance probability, a fraction in (0, 1).
    skew : array_like
        Skew coefficient of either sign, broadcast against `aep`.

    Returns
    -------
    float array of the broadcast shape
        ``quantile = mean + sd * K``. NaN where the skew is NaN.

    Notes
    -----
    Tabulated by Harter (1969) and reprinted in Bulletin 17B (Interagency Advisory Committee on Water Data,
    1982, appendix 3).

    Examples
    --------
    >>> round(float(frequency_factor(0.01, 0.7)), 5)
    2.82359
    """
    aep, skew = np.broadcast_arrays(np.asarray(aep, dtype=float), np.asarray(skew, dtype=float))
    k = np.full(aep.shape, np.nan)
    near_zero = np.abs(skew) < EXPANSION_SKEW
    if near_zero.any():
        k[near_zero] = _cornish_fisher(-ndtri(aep[near_zero]), skew[near_zero])
    for rows, inverse in ((skew >= EXPANSION_SKEW, gammainccinv), (skew <= -EXPANSION_SKEW, gammaincinv)):
        if rows.any():
            c = 0.5 * skew[rows]
            alpha = 1 / (c * c)
            k[rows] = c * (inverse(alpha, aep[rows]) - alpha)
    return k


def frequency_factor_slope(aep: ArrayLike, skew: ArrayLike) -> FloatArray:
    """Return dK/dskew by a fourth-order central difference, accurate to about 1e-8.

    Parameters
    ----------
    aep, skew : array_like
        As for `frequency_factor`.
    """
    aep, skew = np.broadcast_arrays(np.asarray(aep, dtype=float), np.asarray(skew, dtype=float))
    step = 2e-3
    near = frequency_factor(aep, skew + step) - frequency_factor(aep, skew - step)
    far = frequency_factor(aep, skew + 2 * step) - frequency_factor(aep, skew - 2 * step)
    return (8 * near - far) / (12 * step)


def cdf(w: ArrayLike, skew: ArrayLike) -> FloatArray:
    """Return the probability that the standardised variate does not exceed `w`."""
    return _probability(w, skew, upper=False)


def sf(w: ArrayLike, skew: ArrayLike) -> FloatArray:
    """Return the probability that the standardised variate exceeds `w`, accurate in the upper tail."""
    return _probability(w, skew, upper=True)


def pdf(w: ArrayLike, skew: ArrayLike) -> FloatArray:
    """Return the density of the standardised variate; 0 outside its support.

    At the bound itself, where the density may be infinite (absolute skew above 2), 0 is returned.
    """
    w, skew = np.broadcast_arrays(np.asarray(w, dtype=float), np.asarray(skew, dtype=float))
    u = 0.5 * skew * w
    inside = np.isfinite(w) & (u > -1)
    density = _boundary_term(np.where(inside, w, 0.0), skew) / (1 + np.where(inside, u, 0.0))
    return np.where(inside, density, np.where(np.isnan(w) | np.isnan(skew), np.nan, 0.0))


def support(skew: ArrayLike) -> tuple[FloatArray, FloatArray]:
    """Return lower and upper bound of the standardised variate (infinite where there is none)."""
    skew = np.asarray(skew, dtype=float)
    bound = -2 / np.where(skew == 0, np.nan, skew)
    return np.where(skew > 0, bound, -np.inf), np.where(skew < 0, bound, np.inf)


def partial_moments(low: ArrayLike, high: ArrayLike, skew: ArrayLike, order: int = 3) -> FloatArray:
    """Return the integrals of ``w**k`` times the density over intervals, for k = 0 .. `order`.

    Parameters
    ----------
    low, high : array_like
        Ends of the intervals of the standardised variate, ``-inf`` and ``inf`` allowed.
    skew : array_like
        Skew, broadcast against the ends.
    order : int
        Highest power.

    Returns
    -------
    float array (order + 1, ...)

    Notes
    -----
    A three-term recurrence that follows from the Pearson equation ``d/dw[(1 + c w) f] = -w f``: it needs one
    incomplete gamma and one density per finite end, and holds through zero skew, where expanding the
    moments of a shifted gamma variate (Cohn, Lane and Baier, 1997) cancels.
    """
    low, high, skew = np.broadcast_arrays(
        np.asarray(low, dtype=float), np.asarray(high, dtype=float), np.asarray(skew, dtype=float)
    )
    moments = np.empty((order + 1, *low.shape))
    moments[0], at_low, at_high, w_low, w_high = _interval_terms(low, high, skew)
    c = 0.5 * skew
    for k in range(order):
        boundary = at_high - at_low
        previous = k * (moments[k - 1] + c * moments[k]) if k else 0.0
        moments[k + 1] = previous - boundary
        at_low, at_high = at_low * w_low, at_high * w_high
    return moments


def conditional_moments(
    low: ArrayLike, high: ArrayLike, skew: ArrayLike, order: int = 3
) -> tuple[FloatArray, FloatArray]:
    """Return the probability of intervals and the mean of ``w**k``, k = 1 .. `order`, within them.

    Where an interval holds (almost) no probability, because it lies outside the support or is far narrower
    than a standard deviation, all of it is put at the end of the interval nearest to the support, or at its
    middle.

    Returns
    -------
    probability : float array (...)
    moments : float array (order, ...)
    """
    low, high, skew = np.broadcast_arrays(
        np.asarray(low, dtype=float), np.asarray(high, dtype=float), np.asarray(skew, dtype=float)
    )
    partial = partial_moments(low, high, skew, order)
    probability = partial[0]
    with np.errstate(invalid="ignore"):
        width = high - low
        degenerate = ~(probability > 1e-280) | (width < 1e-5)
    moments = partial[1:] / np.where(degenerate, 1.0, probability)
    if degenerate.any():
        point = _nearest_point(low[degenerate], high[degenerate], skew[degenerate])
        moments[:, degenerate] = point ** np.arange(1, order + 1)[:, None]
    return np.maximum(probability, 0.0), moments


def _nearest_point(low: FloatArray, high: FloatArray, skew: FloatArray) -> FloatArray:
    """The point of an interval that carries its mass when the distribution hardly reaches it."""
    bottom, top = support(skew)
    middle = np.clip(0.0, np.maximum(low, bottom), np.minimum(high, top))
    point = np.where(high <= bottom, high, np.where(low >= top, low, middle))
    narrow = high - low < 1e-5
    return np.where(narrow, 0.5 * (np.where(narrow, low, 0.0) + np.where(narrow, high, 0.0)), point)


def _interval_terms(
    low: FloatArray, high: FloatArray, skew: FloatArray
) -> tuple[FloatArray, FloatArray, FloatArray, FloatArray, FloatArray]:
    """Probability of the intervals and the boundary terms ``(1 + c w) f`` at both ends."""
    has_low, has_high = np.isfinite(low), np.isfinite(high)
    w_low, w_high = np.where(has_low, low, 0.0), np.where(has_high, high, 0.0)
    # Work from the tail that the interval lies in, so that small probabilities keep their digits.
    upper = has_low & (~has_high | (w_low + w_high > 0))
    tail_low, tail_high = np.where(upper, 1.0, 0.0), np.where(upper, 0.0, 1.0)
    at_low, at_high = np.zeros(low.shape), np.zeros(low.shape)
    for has, w, tail, term in ((has_low, w_low, tail_low, at_low), (has_high, w_high, tail_high, at_high)):
        if has.any():
            w_has, skew_has = w[has], skew[has]
            tail[has] = _tail(w_has, skew_has, upper[has])
            term[has] = _boundary_term(w_has, skew_has)
    return np.where(upper, tail_low - tail_high, tail_high - tail_low), at_low, at_high, w_low, w_high


def _boundary_term(w: FloatArray, skew: FloatArray) -> FloatArray:
    """``(1 + c w)`` times the density at finite w; 0 outside the support."""
    c = 0.5 * skew
    u = c * w
    inside = u > -1
    safe_u = np.where(inside, u, 0.0)
    c2 = c * c
    # alpha * (log1p(u) - u) tends to -w**2 / 2; a series avoids the cancellation at small u.
    small = np.abs(safe_u) < 1e-2
    exponent = np.array((np.log1p(safe_u) - safe_u) / np.where(small, 1.0, c2))
    if small.any():
        exponent[small] = -w[small] * w[small] * _log1p_remainder(safe_u[small])
    term = np.exp(exponent - _stirling_remainder(c2) - _HALF_LOG_2PI)
    return term if inside.all() else np.where(inside, term, 0.0)


def _probability(w: ArrayLike, skew: ArrayLike, *, upper: bool) -> FloatArray:
    w, skew = np.broadcast_arrays(np.asarray(w, dtype=float), np.asarray(skew, dtype=float))
    return _tail(w.ravel(), skew.ravel(), np.full(w.size, upper)).reshape(w.shape)


def _tail(w: FloatArray, skew: FloatArray, upper: NDArray[np.bool_]) -> FloatArray:
    """Non-exceedance or, where `upper`, exceedance probability of flat arrays."""
    probability = np.full(w.shape, np.nan)
    near_zero = np.abs(skew) < EXPANSION_SKEW
    if near_zero.any():
        probability[near_zero] = _edgeworth(w[near_zero], skew[near_zero], upper[near_zero])
    c = np.where(near_zero, 1.0, 0.5 * skew)
    alpha = 1 / (c * c)
    y = alpha * np.maximum(1 + c * w, 0.0)
    from_above = upper != (skew < 0)
    for rows, function in ((~near_zero & ~from_above, gammainc), (~near_zero & from_above, gammaincc)):
        if rows.any():
            probability[rows] = function(alpha[rows], y[rows])
    return probability


def _cornish_fisher(z: FloatArray, g: FloatArray) -> FloatArray:
    """K to the third order in the skew; the cumulants of the gamma are g, 3/2 g**2, 3 g**3."""
    z2 = z * z
    first = (z2 - 1) / 6
    second = (z**3 - 3 * z) / 16 - (2 * z**3 - 5 * z) / 36
    third = (z2 * z2 - 6 * z2 + 3) / 40 - (z2 * z2 - 5 * z2 + 2) / 16 + (12 * z2 * z2 - 53 * z2 + 17) / 324
    return z + g * (first + g * (second + g * third))


def _edgeworth(w: FloatArray, g: FloatArray, upper: NDArray[np.bool_]) -> FloatArray:
    """Tail probability to the third order in the skew."""
    finite = np.where(np.isfinite(w), w, 0.0)
    he = [np.ones_like(finite), finite]
    for k in range(1, 8):
        he.append(finite * he[k] - k * he[k - 1])
    first = he[2] / 6
    second = he[3] / 16 + he[5] / 72
    third = he[4] / 40 + he[6] / 96 + he[8] / 1296
    density = np.where(np.isfinite(w), np.exp(-0.5 * finite**2) / _SQRT_2PI, 0.0)
    correction = density * g * (first + g * (second + g * third))
    return np.where(upper, ndtr(-w) + correction, ndtr(w) - correction)


def _log1p_remainder(u: FloatArray) -> FloatArray:
    """``(u - log1p(u)) / u**2`` by its series, for abs(u) < 0.01."""
    total = np.zeros_like(u)
    for k in range(9, 1, -1):
        total = 1 / k - u * total
    return total


def _stirling_remainder(c2: FloatArray) -> FloatArray:
    """``gammaln(alpha)`` minus Stirling's leading terms, with ``alpha = 1 / c2``; 0 at ``c2 = 0``."""
    # The series is good to 1e-15 for alpha above 20.
    x2 = c2 * c2
    series = c2 * (1 / 12 - x2 * (1 / 360 - x2 * (1 / 1260 - x2 * (1 / 1680 - x2 / 1188))))
    large = c2 > 0.05
    if not large.any():
        return series
    alpha = 1 / np.where(large, c2, 1.0)
    exact = gammaln(alpha) - ((alpha - 0.5) * np.log(alpha) - alpha + _HALF_LOG_2PI)
    return np.where(large, exact, series)
