"""How uncertain the skew of a record is, and how it is weighted with a generalized skew."""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike, NDArray

FloatArray = NDArray[np.float64]

POLYNOMIAL_LIMIT = np.sqrt(2.0)
"""Largest absolute skew for which the Griffis-Stedinger polynomial is used."""

SHORTEST_RECORD = 10.0
"""Fewest years for which polynomial and simulated values hold."""

_SIMULATED_YEARS = np.array([10, 15, 20, 30, 40, 60, 80, 120, 200], dtype=float)
_SIMULATED_SKEWS = np.array([1.4, 1.6, 1.8, 2.0, 2.25, 2.5, 2.75, 3.0])
# Mean square error of the bias-corrected skew about the true one, 40,000 Pearson III samples a cell
# (standard error 0.5-3 %); made by tests/benchmarks/simulate_skew_mse.py.
_SIMULATED_MSE = np.array(
    [
        (0.8221, 0.9461, 1.0776, 1.2555, 1.4838, 1.7809, 2.1304, 2.5410),  # n = 10
        (0.6167, 0.7086, 0.8192, 0.9499, 1.1296, 1.3683, 1.6406, 1.9669),  # n = 15
        (0.5173, 0.5946, 0.6807, 0.7870, 0.9539, 1.1534, 1.3607, 1.6571),  # n = 20
        (0.3988, 0.4682, 0.5471, 0.6306, 0.7561, 0.9176, 1.0986, 1.3103),  # n = 30
        (0.3419, 0.3994, 0.4590, 0.5457, 0.6585, 0.7873, 0.9445, 1.1278),  # n = 40
        (0.2633, 0.3189, 0.3788, 0.4434, 0.5450, 0.6524, 0.7730, 0.9251),  # n = 60
        (0.2202, 0.2707, 0.3196, 0.3784, 0.4711, 0.5716, 0.6754, 0.8118),  # n = 80
        (0.1698, 0.2073, 0.2566, 0.3061, 0.3833, 0.4760, 0.5680, 0.6774),  # n = 120
        (0.1154, 0.1453, 0.1832, 0.2219, 0.2873, 0.3567, 0.4373, 0.5218),  # n = 200
    ]
)


def griffis_stedinger_variance(n: ArrayLike, skew: ArrayLike) -> FloatArray:
    """Return the variance of the bias-corrected skew of `n` exactly known values.

    Parameters
    ----------
    n : array_like
        Years of record, 10 or more.
    skew : array_like
        Skew coefficient; the polynomial was fitted for absolute skews up to about 1.41.

    Notes
    -----
    Griffis and Stedinger (2009, J. Hydrol. Eng. 14(2)), as adopted by Bulletin 17C (England and others, 2019).
    It is used there as a mean square error; the squared bias (0.04 at n = 25 and skew 1) is not in it.

    Examples
    --------
    >>> round(float(griffis_stedinger_variance(82, -0.92911)), 4)
    0.1306
    """
    n, g2 = np.asarray(n, dtype=float), np.asarray(skew, dtype=float) ** 2
    a = -17.75 / n**2 + 50.06 / n**3
    b = 3.92 / n**0.3 - 31.10 / n**0.6 + 34.86 / n**0.9
    c = -7.31 / n**0.59 + 45.90 / n**1.18 - 86.50 / n**1.77
    return (6 / n + a) * (1 + (9 / 6 + b) * g2 + (15 / 48 + c) * g2**2)


def bulletin17b_skew_mse(n: ArrayLike, skew: ArrayLike) -> FloatArray:
    """Return the mean square error of the station skew by the formula of Bulletin 17B (1982, equation 6).

    Examples
    --------
    >>> round(float(bulletin17b_skew_mse(24, 0.73)), 4)
    0.2774
    """
    n, g = np.asarray(n, dtype=float), np.abs(np.asarray(skew, dtype=float))
    a = np.where(g <= 0.9, -0.33 + 0.08 * g, -0.52 + 0.30 * g)
    b = np.where(g <= 1.5, 0.94 - 0.26 * g, 0.55)
    return 10 ** (a - b * np.log10(n / 10))


def station_skew_mse(n: ArrayLike, skew: ArrayLike) -> FloatArray:
    """Return the error variance that weighs a station skew of a complete record.

    Parameters
    ----------
    n, skew : array_like
        Years of record and skew, broadcast.

    Notes
    -----
    The Griffis-Stedinger polynomial up to an absolute skew of 1.41. Beyond it the polynomial is far too small
    (n = 25, skew 3: 0.25 against a simulated mean square error of 1.46), so simulation takes over, gradually between
    1.41 and 1.6. Under 10 years, where the polynomial can turn negative, the value of 10 years grows as one over the
    years.
    """
    n, skew = np.broadcast_arrays(np.asarray(n, dtype=float), np.asarray(skew, dtype=float))
    if (n < SHORTEST_RECORD).any():
        return station_skew_mse(np.maximum(n, SHORTEST_RECORD), skew) * np.maximum(SHORTEST_RECORD / n, 1.0)
    size = np.abs(skew)
    mse = griffis_stedinger_variance(n, np.minimum(size, POLYNOMIAL_LIMIT))
    beyond = size > POLYNOMIAL_LIMIT
    if beyond.any():
        change = np.clip((size[beyond] - POLYNOMIAL_LIMIT) / (1.6 - POLYNOMIAL_LIMIT), 0, 1)
        simulated = _simulated_log_mse(n[beyond], size[beyond])
        mse = np.array(mse)
        mse[beyond] = np.exp((1 - change) * np.log(mse[beyond]) + change * simulated)
    return mse


def correct_skew_bias(n: ArrayLike, skew: ArrayLike, variance: ArrayLike) -> tuple[FloatArray, FloatArray]:
    """Return skew and its variance after the factor ``1 + 6 / n`` that removes most of its bias.

    Notes
    -----
    Tasker and Stedinger (1986, Water Resour. Res. 22(10)); used where skews of many gauges are regionalised, not in
    the fit of one.
    """
    factor = 1 + 6 / np.asarray(n, dtype=float)
    return factor * np.asarray(skew, dtype=float), factor**2 * np.asarray(variance, dtype=float)


def skew_weight(station_mse: ArrayLike, generalized_mse: ArrayLike) -> FloatArray:
    """Return the share of the station skew in the weighted skew, inverse to the mean square errors.

    Examples
    --------
    >>> w = skew_weight(0.2774, 0.302)
    >>> round(float(w * 0.73 + (1 - w) * 0.6), 4)
    0.6678
    """
    station_mse, generalized_mse = (
        np.asarray(station_mse, dtype=float),
        np.asarray(generalized_mse, dtype=float),
    )
    return generalized_mse / (generalized_mse + station_mse)


def weighted_skew_mse(station_mse: ArrayLike, generalized_mse: ArrayLike) -> FloatArray:
    """Return the mean square error of the weighted skew of independent station and generalized skews."""
    station_mse, generalized_mse = (
        np.asarray(station_mse, dtype=float),
        np.asarray(generalized_mse, dtype=float),
    )
    return station_mse * generalized_mse / (station_mse + generalized_mse)


def _simulated_log_mse(n: FloatArray, size: FloatArray) -> FloatArray:
    """Logarithm of the simulated mean square error, linear in log years and skew between the simulated ones."""
    years = np.clip(n, _SIMULATED_YEARS[0], _SIMULATED_YEARS[-1])
    size = np.minimum(size, _SIMULATED_SKEWS[-1])
    x, y = np.log(years), size
    grid_x = np.log(_SIMULATED_YEARS)
    i = np.clip(np.searchsorted(grid_x, x) - 1, 0, len(grid_x) - 2)
    j = np.clip(np.searchsorted(_SIMULATED_SKEWS, y) - 1, 0, len(_SIMULATED_SKEWS) - 2)
    u = (x - grid_x[i]) / (grid_x[i + 1] - grid_x[i])
    v = (y - _SIMULATED_SKEWS[j]) / (_SIMULATED_SKEWS[j + 1] - _SIMULATED_SKEWS[j])
    table = np.log(_SIMULATED_MSE)
    value = (1 - u) * ((1 - v) * table[i, j] + v * table[i, j + 1])
    value = value + u * ((1 - v) * table[i + 1, j] + v * table[i + 1, j + 1])
    # Beyond 200 years the error falls as one over the years.
    return value - np.log(np.maximum(n, _SIMULATED_YEARS[-1]) / _SIMULATED_YEARS[-1])
