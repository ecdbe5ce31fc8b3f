"""Sampling covariance of log-Pearson III quantiles of many gauges, from regional statistics."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from wrackline.hydrology.records import FloatArray
from wrackline.stats.pearson3 import frequency_factor, frequency_factor_slope


@dataclass(frozen=True)
class QuantileErrorModel:
    """What the sampling errors of log10 quantiles depend on; regional, never a gauge's own statistics.

    Attributes
    ----------
    sd, skew : (n,)
        Standard deviation and skew of log10 peaks, both from regional relations.
    years : (n,)
        Record lengths (pseudo record lengths for censored records).
    common_years, correlation : (n, n)
        Shared years, and smoothed correlation of concurrent log10 peaks.
    station_weight : (n,)
        Weight of the station skew in the weighted skew; 0 where the generalized skew is used alone.
    skew_covariance : (n, n)
        Sampling covariance of the station skews.
    generalized_covariance : (n, n)
        Covariance of the errors of the generalized skew at the gauges: variance of prediction on the
        diagonal, the shared part of it off the diagonal.
    """

    sd: FloatArray
    skew: FloatArray
    years: FloatArray
    common_years: FloatArray
    correlation: FloatArray
    station_weight: FloatArray
    skew_covariance: FloatArray
    generalized_covariance: FloatArray


def quantile_sampling_covariance(model: QuantileErrorModel, aep: float) -> FloatArray:
    """Return the sampling covariance (n, n) of log10 floods of one AEP, weighted skews.

    Notes
    -----
    Tasker and Stedinger (1989, J. Hydrol. 111) for known skew, Griffis and Stedinger (2007, J. Hydrol.
    344) for weighted skew on the diagonal; between gauges, the parts of station skew, of standard
    deviation with skew and of the shared generalized-skew error follow from the same first-order terms.

    Examples
    --------
    Two records of 40 years that share nothing, with the skew known to be zero:

    >>> one = QuantileErrorModel(*(np.array([v, v]) for v in (0.25, 0.0, 40.0)), np.diag([40.0, 40.0]),
    ...     np.eye(2), np.zeros(2), np.zeros((2, 2)), np.zeros((2, 2)))
    >>> quantile_sampling_covariance(one, 0.5).round(6).tolist()
    [[0.001562, 0.0], [0.0, 0.001562]]
    """
    g, w, s = model.skew, model.station_weight, model.sd
    k = frequency_factor(aep, g)
    slope = frequency_factor_slope(aep, g)
    shared_years = model.common_years / np.outer(model.years, model.years)
    np.fill_diagonal(shared_years, 1.0 / model.years)
    rho = model.correlation.copy()
    np.fill_diagonal(rho, 1.0)

    mean_and_sd = rho * (
        1.0 + 0.5 * ((g * k)[:, None] + g * k) + 0.5 * np.outer(k, k) * (rho + 0.75 * np.outer(g, g))
    )
    # Covariance of a standard deviation with a skew, per year: 3 g / 2 + 3 g^3 / 8 of the gauge with the skew.
    with_skew = w * slope * (1.5 * g + 0.375 * g**3)
    sd_and_skew = rho**3 * (np.outer(k, with_skew) + np.outer(with_skew, k))
    station = np.outer(w * slope, w * slope) * model.skew_covariance
    generalized = np.outer((1.0 - w) * slope, (1.0 - w) * slope) * model.generalized_covariance
    return np.outer(s, s) * ((mean_and_sd + sd_and_skew) * shared_years + station + generalized)
