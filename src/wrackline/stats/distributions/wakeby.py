"""Wakeby distribution: five parameters, for pools that no three-parameter law describes.

x = location + (alpha / beta) (1 - (1 - F)^beta) - (gamma / delta) (1 - (1 - F)^-delta).
"""

import numpy as np
from numpy.typing import ArrayLike, NDArray

from wrackline.stats.distributions import gpa
from wrackline.stats.distributions._power_form import FloatArray, bend, broadcast_lmoments, split

NAME = "WAK"
TITLE = "Wakeby"
PARAMETERS = ("location", "alpha", "beta", "gamma", "delta")

# What `fit_with_step` had to do, from the full fit down to none.
STEPS = ("all five parameters", "lower bound zero", "generalized Pareto", "none")
# -ln(1 - F) of the smallest positive exceedance probability.
_LARGEST_REDUCED = 745.0


def fit(l1: ArrayLike, l2: ArrayLike, t3: ArrayLike, t4: ArrayLike, t5: ArrayLike) -> FloatArray:
    """Fit to five L-moments; see `fit_with_step`. Returns shape (..., 5)."""
    return fit_with_step(l1, l2, t3, t4, t5)[0]


def fit_with_step(
    l1: ArrayLike, l2: ArrayLike, t3: ArrayLike, t4: ArrayLike, t5: ArrayLike
) -> tuple[FloatArray, NDArray[np.str_]]:
    """Fit to five L-moments and say which step succeeded (Hosking and Wallis, 1997, appendix A.11).

    If five parameters are infeasible the lower bound is set to zero and four are fitted; if these are
    too, a generalized Pareto law is fitted to l1, l2 and t3.

    Returns
    -------
    parameters : array, shape (..., 5)
        Location, alpha and gamma in the unit of `l1`. NaN where not even the last step is feasible.
    step : text array, shape (...)
        One of `STEPS`.
    """
    l1, l2, t3, t4, t5 = broadcast_lmoments(l1, l2, t3, t4, t5)
    with np.errstate(all="ignore"):
        five = _fit_five(l1, l2, t3 * l2, t4 * l2, t5 * l2)
        four = _fit_four(l1, l2, t3 * l2, t4 * l2)
    pareto = np.zeros(five.shape)
    pareto[..., :3] = gpa.fit(l1, l2, t3)
    parameters = np.full(five.shape, np.nan)
    step = np.full(l1.shape, STEPS[3])
    for candidate, name in ((pareto, STEPS[2]), (four, STEPS[1]), (five, STEPS[0])):
        valid = np.all(np.isfinite(candidate), axis=-1)
        parameters = np.where(valid[..., None], candidate, parameters)
        step = np.where(valid, name, step)
    return parameters, step


def quantile(parameters: ArrayLike, p: ArrayLike) -> FloatArray:
    """Return the value not exceeded with probability `p`; `p` of 0 or 1 gives the bounds of the law."""
    with np.errstate(divide="ignore"):
        reduced = -np.log1p(-np.asarray(p, dtype=float))
    return _quantile_of_reduced(split(parameters), reduced)


def cdf(parameters: ArrayLike, x: ArrayLike) -> FloatArray:
    """Return the probability that `x` is not exceeded (the quantile function inverted to rounding)."""
    return -np.expm1(-_reduced(parameters, x))


def density(parameters: ArrayLike, x: ArrayLike) -> FloatArray:
    """Return the probability density at `x`, zero outside the bounds."""
    _, alpha, beta, gamma, delta = split(parameters)
    reduced = _reduced(parameters, x)
    lower, upper = quantile(parameters, 0.0), quantile(parameters, 1.0)
    inside = (np.asarray(x) >= lower) & (np.asarray(x) <= upper)
    with np.errstate(all="ignore"):
        rate = alpha * np.exp((1 - beta) * reduced) + gamma * np.exp((1 + delta) * reduced)
        value = np.where(inside, 1 / rate, 0.0)
    return np.where(np.isnan(lower), np.nan, value)


def _quantile_of_reduced(parameters: tuple[FloatArray, ...], reduced: FloatArray) -> FloatArray:
    location, alpha, beta, gamma, delta = parameters
    first = np.where(alpha == 0, 0.0, alpha * bend(reduced, beta))
    with np.errstate(invalid="ignore"):
        second = np.where(gamma == 0, 0.0, gamma * bend(reduced, -delta))
        return location + first + second


def _reduced(parameters: ArrayLike, x: ArrayLike) -> FloatArray:
    """Return -ln(1 - F) at `x`, by Newton's method kept inside a shrinking bracket."""
    location, alpha, beta, gamma, delta, x = np.broadcast_arrays(
        *split(parameters), np.asarray(x, dtype=float)
    )
    low, high = np.zeros(x.shape), np.full(x.shape, _LARGEST_REDUCED)
    y = np.ones(x.shape)
    with np.errstate(all="ignore"):
        for _ in range(120):
            miss = _quantile_of_reduced((location, alpha, beta, gamma, delta), y) - x
            low, high = np.where(miss <= 0, y, low), np.where(miss > 0, y, high)
            newton = y - miss / (alpha * np.exp(-beta * y) + gamma * np.exp(delta * y))
            inside = (newton > low) & (newton < high)
            following = np.where(inside, newton, 0.5 * (low + high))
            settled = np.abs(following - y) <= 4e-16 * (1e-3 + y)
            y = following
            if np.all(settled):
                break
    y = np.where(x <= location, 0.0, y)
    return np.where(np.isnan(location) | np.isnan(x), np.nan, y)


def _fit_five(l1: FloatArray, l2: FloatArray, l3: FloatArray, l4: FloatArray, l5: FloatArray) -> FloatArray:
    beta, delta = _exponents(
        (3 * l2 - 25 * l3 + 32 * l4, -3 * l2 + 5 * l3 + 8 * l4, 3 * l2 + 5 * l3 + 2 * l4),
        (
            7 * l2 - 85 * l3 + 203 * l4 - 125 * l5,
            -7 * l2 + 25 * l3 + 7 * l4 - 25 * l5,
            7 * l2 + 5 * l3 - 7 * l4 - 5 * l5,
        ),
    )
    spread = 4 * (beta + delta)
    alpha = (1 + beta) * (2 + beta) * (3 + beta) * ((1 + delta) * l2 - (3 - delta) * l3) / spread
    gamma = -(1 - delta) * (2 - delta) * (3 - delta) * ((1 - beta) * l2 - (3 + beta) * l3) / spread
    location = l1 - alpha / (1 + beta) - gamma / (1 - delta)
    return _keep_valid(location, alpha, beta, gamma, delta)


def _fit_four(l1: FloatArray, l2: FloatArray, l3: FloatArray, l4: FloatArray) -> FloatArray:
    beta, delta = _exponents(
        (4 * l1 - 11 * l2 + 9 * l3, -l2 + 3 * l3, l2 + l3),
        (10 * l1 - 29 * l2 + 35 * l3 - 16 * l4, -l2 + 5 * l3 - 4 * l4, l2 - l4),
    )
    alpha = (1 + beta) * (2 + beta) * (l1 - (2 - delta) * l2) / (beta + delta)
    gamma = -(1 - delta) * (2 - delta) * (l1 - (2 + beta) * l2) / (beta + delta)
    return _keep_valid(np.zeros_like(alpha), alpha, beta, gamma, delta)


def _exponents(n: tuple[FloatArray, ...], c: tuple[FloatArray, ...]) -> tuple[FloatArray, FloatArray]:
    """Return beta and delta: the larger root and minus the smaller root of the quadratic."""
    square = n[1] * c[2] - n[2] * c[1]
    linear = n[0] * c[2] - n[2] * c[0]
    constant = n[0] * c[1] - n[1] * c[0]
    root = np.sqrt(linear**2 - 4 * square * constant)
    # The stable pair of formulas: no difference of nearly equal numbers.
    half = -0.5 * (linear + np.where(linear >= 0, root, -root))
    first, second = half / square, constant / half
    return np.maximum(first, second), -np.minimum(first, second)


def _keep_valid(
    location: FloatArray, alpha: FloatArray, beta: FloatArray, gamma: FloatArray, delta: FloatArray
) -> FloatArray:
    parameters = np.stack([location, alpha, beta, gamma, delta], axis=-1)
    valid = (beta > -1) & (delta < 1) & (gamma >= 0) & (alpha + gamma >= 0) & (beta + delta > 0)
    return np.where((valid & np.all(np.isfinite(parameters), axis=-1))[..., None], parameters, np.nan)
