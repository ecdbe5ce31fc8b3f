"""The form x = (1 - exp(-k y)) / k that most flood distributions share, smooth through k = 0."""

import numpy as np
from numpy.typing import ArrayLike, NDArray

FloatArray = NDArray[np.float64]

# Below this shape the form is y to the last bit; the quotient would suffer from denormal numbers.
_STRAIGHT = 1e-200


def bend(y: ArrayLike, k: ArrayLike) -> FloatArray:
    """Return (1 - exp(-k y)) / k, which is y at k = 0. Infinite `y` gives the bound or infinity."""
    y, k = np.asarray(y, dtype=float), np.asarray(k, dtype=float)
    straight = np.abs(k) < _STRAIGHT
    shape = np.where(straight, 1.0, k)
    with np.errstate(over="ignore", invalid="ignore"):
        return np.where(straight, y, -np.expm1(-shape * y) / shape)


def unbend(x: ArrayLike, k: ArrayLike) -> FloatArray:
    """Return -ln(1 - k x) / k, the inverse of `bend`; beyond a bound plus or minus infinity."""
    x, k = np.asarray(x, dtype=float), np.asarray(k, dtype=float)
    straight = np.abs(k) < _STRAIGHT
    shape = np.where(straight, 1.0, k)
    with np.errstate(divide="ignore", invalid="ignore", over="ignore"):
        return np.where(straight, x, -np.log1p(np.maximum(-shape * x, -1.0)) / shape)


def relative_expm1(x: ArrayLike) -> FloatArray:
    """Return (exp(x) - 1) / x, which is 1 at x = 0."""
    x = np.asarray(x, dtype=float)
    at_zero = np.abs(x) < _STRAIGHT
    divisor = np.where(at_zero, 1.0, x)
    with np.errstate(over="ignore"):
        return np.where(at_zero, 1.0, np.expm1(divisor) / divisor)


def split(parameters: ArrayLike) -> tuple[FloatArray, ...]:
    """Return the parameters, shape (..., m), as m arrays of shape (...)."""
    return tuple(np.moveaxis(np.asarray(parameters, dtype=float), -1, 0))


def broadcast_lmoments(*lmoments: ArrayLike) -> tuple[FloatArray, ...]:
    """Return L-moments as float arrays of one shape; NaN everywhere the L-scale (second) is not positive."""
    arrays = np.broadcast_arrays(*(np.asarray(value, dtype=float) for value in lmoments))
    usable = arrays[1] > 0
    return tuple(np.where(usable, value, np.nan) for value in arrays)
