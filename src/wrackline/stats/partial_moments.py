"""Partial and censored-sample L-moments, for records whose low floods are missing, zero or misleading."""

from dataclasses import dataclass
from types import ModuleType
from typing import Literal

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.special import gamma, gammainc

from wrackline.stats.distributions._power_form import bend
from wrackline.stats.lmoments import SampleLMoments, sample_lmoments

FloatArray = NDArray[np.float64]

_NODES, _NODE_WEIGHTS = np.polynomial.legendre.leggauss(60)


@dataclass(frozen=True)
class PartialMoments:
    """Partial probability-weighted moments of a set of records.

    Attributes
    ----------
    moments : array, shape (..., orders)
        b'_0, b'_1, ... in the unit of the values.
    censored_share : array, shape (...)
        Share of values below the threshold, the estimate of F(threshold).
    """

    moments: FloatArray
    censored_share: FloatArray


def partial_moments(values: ArrayLike, threshold: ArrayLike, orders: int = 4) -> PartialMoments:
    """Compute partial probability-weighted moments of records censored below a threshold.

    Parameters
    ----------
    values : array, shape (..., n)
        Records of one length; anything below the threshold only counts.
    threshold : array, shape (...)
        Values of at least this size are used.
    orders : int
        How many moments, at most n.

    Raises
    ------
    ValueError
        If a value is not finite or the records are shorter than `orders`.

    Notes
    -----
    Source: Wang (1990), b'_r = (1/n) sum of (j-1)...(j-r) / ((n-1)...(n-r)) x*_j with x* = x at or above
    the threshold and 0 below, ranks j over all n values.

    Examples
    --------
    >>> partial_moments([12.0, 20.0, 22.0], 18.0, orders=2).moments
    array([14.        , 10.66666667])
    """
    rows = np.sort(np.asarray(values, dtype=float), axis=-1)
    n = rows.shape[-1]
    if not np.all(np.isfinite(rows)):
        raise ValueError("records must hold finite values only: leave missing years out")
    if orders < 1 or n < orders:
        raise ValueError(f"{orders} moments need records of at least {orders} values, not {n}")
    used = rows >= np.asarray(threshold, dtype=float)[..., None]
    rank = np.arange(1, n + 1, dtype=float)
    weight = np.full(n, 1.0 / n)
    weights = [weight]
    for order in range(1, orders):
        weight = weight * (rank - order) / (n - order)
        weights.append(weight)
    moments = np.where(used, rows, 0.0) @ np.stack(weights, axis=-1)
    return PartialMoments(moments=np.asarray(moments), censored_share=1 - used.mean(axis=-1))


def gev_partial_moments(parameters: ArrayLike, censored_share: ArrayLike, orders: int = 4) -> FloatArray:
    """Return the partial probability-weighted moments of a generalized extreme-value law (Wang, 1990).

    Parameters
    ----------
    parameters : array, shape (..., 3)
        Location, scale, shape k > -1.
    censored_share : array, shape (...)
        F0, the non-exceedance probability of the threshold.

    Returns
    -------
    array, shape (..., orders)
        Integrals of x(F) F^r from F0 to 1.
    """
    location, scale, k = (part[..., None] for part in np.moveaxis(np.asarray(parameters, dtype=float), -1, 0))
    constant, bent = _gev_integrals(k, np.asarray(censored_share, dtype=float)[..., None], orders)
    return np.asarray(location * constant + scale * bent)


def fit_gev_partial(moments: ArrayLike, censored_share: ArrayLike) -> FloatArray:
    """Fit the generalized extreme-value law to three partial probability-weighted moments (Wang, 1990).

    Parameters
    ----------
    moments : array, shape (..., at least 3)
        b'_0, b'_1, b'_2.
    censored_share : array, shape (...)
        F0, from 0 to below 1.

    Returns
    -------
    array, shape (..., 3)
        Location, scale, shape; NaN where no shape between -0.99 and 5 solves the equations or the scale
        would not be positive.
    """
    b = np.asarray(moments, dtype=float)[..., :3]
    share = np.broadcast_to(np.asarray(censored_share, dtype=float), b.shape[:-1])
    share = np.where((share >= 0) & (share < 1), share, np.nan)

    def miss(k: FloatArray) -> FloatArray:
        # Location and scale are linear: what is left is one determinant in the shape.
        c, g = _gev_integrals(k[..., None], share[..., None], 3)
        with np.errstate(invalid="ignore"):
            return np.asarray(np.linalg.det(np.stack(np.broadcast_arrays(b, c, g), axis=-1)))

    low, high = np.full(share.shape, -0.99), np.full(share.shape, 5.0)
    at_low, at_high = miss(low), miss(high)
    solvable = np.sign(at_low) * np.sign(at_high) < 0
    for _ in range(60):
        middle = 0.5 * (low + high)
        same = np.sign(miss(middle)) == np.sign(at_low)
        low, high = np.where(same, middle, low), np.where(same, high, middle)
    k = np.where(solvable, 0.5 * (low + high), np.nan)
    c, g = _gev_integrals(k[..., None], share[..., None], 2)
    determinant = c[..., 0] * g[..., 1] - c[..., 1] * g[..., 0]
    location = (b[..., 0] * g[..., 1] - b[..., 1] * g[..., 0]) / determinant
    scale = (c[..., 0] * b[..., 1] - c[..., 1] * b[..., 0]) / determinant
    fitted = np.stack([location, scale, k], axis=-1)
    return np.where((scale > 0)[..., None], fitted, np.nan)


def censored_lmoments(
    values: ArrayLike, offsets: ArrayLike, thresholds: ArrayLike, kind: Literal["A", "B"]
) -> SampleLMoments:
    """Compute L-moments of ragged records that are censored below a threshold (after Hosking, 1995).

    Parameters
    ----------
    values, offsets : arrays, shapes (total,) and (g + 1,)
        Ragged records as in `sample_lmoments`.
    thresholds : array, shape (g,)
        Values below it are censored.
    kind : {"A", "B"}
        "A": L-moments of the uncensored values alone. "B": of all values, the censored ones set at the
        threshold. Hosking censors from above; from below is the same with the signs turned.

    Returns
    -------
    SampleLMoments
        Arrays of shape (g,); `n` is the number of values used (kind "A": the uncensored).

    Raises
    ------
    ValueError
        If `kind` is unknown or the thresholds are not one a record.
    """
    flat = np.asarray(values, dtype=float)
    starts = np.asarray(offsets, dtype=np.int64)
    lengths = starts[1:] - starts[:-1]
    limits = np.asarray(thresholds, dtype=float)
    if limits.shape != lengths.shape:
        raise ValueError("there must be one threshold a record")
    gauge = np.repeat(np.arange(lengths.size), lengths)
    if kind == "B":
        return sample_lmoments(np.maximum(flat, limits[gauge]), offsets)
    if kind != "A":
        raise ValueError(f'kind must be "A" or "B", not {kind!r}')
    kept = flat >= limits[gauge]
    counts = np.bincount(gauge[kept], minlength=lengths.size)
    return sample_lmoments(flat[kept], np.concatenate([[0], np.cumsum(counts)]))


def quantile_with_zeros(
    law: ModuleType, parameters: ArrayLike, zero_share: ArrayLike, p: ArrayLike
) -> FloatArray:
    """Return quantiles of a law of positive floods joined with a share of zero years.

    Parameters
    ----------
    law : module of `wrackline.stats.distributions`
        The law of the positive values.
    parameters : array, shape (..., m)
        Its parameters.
    zero_share : array, shape (...)
        Share of years without a flood, from 0 to below 1.
    p : array
        Non-exceedance probability over all years.

    Notes
    -----
    The conditional probability adjustment (Stedinger, Vogel and Foufoula-Georgiou, 1993): zero for
    ``p <= zero_share``, else the law's quantile at (p - zero_share) / (1 - zero_share).
    """
    share, p = np.broadcast_arrays(np.asarray(zero_share, dtype=float), np.asarray(p, dtype=float))
    conditional = (p - share) / (1 - share)
    flooded = conditional > 0
    quantile = law.quantile(parameters, np.where(flooded, conditional, 0.5))
    return np.where(flooded, quantile, 0.0)


def _gev_integrals(k: FloatArray, share: FloatArray, orders: int) -> tuple[FloatArray, FloatArray]:
    """Return the integrals of F^r and of (1 - (-ln F)^k) / k F^r from `share` to 1, shape (..., orders)."""
    r1 = np.arange(1.0, orders + 1)
    constant = (1 - share**r1) / r1
    with np.errstate(divide="ignore", invalid="ignore"):
        top = -r1 * np.log(share)
    # Near k = 0 the closed form is a difference of nearly equal numbers: integrate instead.
    near = np.abs(k) < 0.02
    safe = np.where(near, 1.0, k)
    with np.errstate(over="ignore"):
        closed = (constant - r1 ** (-1 - safe) * gamma(1 + safe) * gammainc(1 + safe, top)) / safe
    if not np.any(near):
        return constant, closed
    # With t = -r1 ln F and t = top * s^4 the logarithm at t = 0 is harmless to the rule.
    s, ds = (1 + _NODES) / 2, _NODE_WEIGHTS / 2
    upper = np.minimum(top, 40.0)[..., None]
    t = upper * s**4
    reduced = np.log(r1)[:, None] - np.log(t)
    integrand = bend(reduced, k[..., None]) * np.exp(-t) * 4 * upper * s**3
    by_rule = np.sum(ds * integrand, axis=-1) / r1
    return constant, np.where(near, by_rule, closed)
