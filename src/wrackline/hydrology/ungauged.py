"""Floods at ungauged sites: the index flood of a regression times the growth curve of a pool."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.special import stdtrit

from wrackline.hydrology.records import FloatArray

LOG10_E = float(np.log10(np.e))


@dataclass(frozen=True)
class SiteEstimates:
    """Flood quantiles of sites by one route; arrays (sites, AEPs), flows in m3/s."""

    flow: FloatArray
    lower: FloatArray
    upper: FloatArray
    se_log10: FloatArray


def scale_growth_curve(
    index_log10: FloatArray,
    index_variance: FloatArray,
    degrees_of_freedom: int,
    growth_factor: FloatArray,
    growth_ln_sd: FloatArray,
    confidence: float,
) -> SiteEstimates:
    """Combine index flood and growth factor, and their two uncertainties, at ungauged sites.

    The two errors are taken as independent: the index regression uses nothing of the growth curve but
    its scatter. Estimates are medians of the prediction's distribution, not means.

    Parameters
    ----------
    index_log10, index_variance : (s,)
        Prediction of the regression and its variance of prediction, log10.
    degrees_of_freedom : int
        Of the regression; sets the Student's t of the interval.
    growth_factor, growth_ln_sd : (s, a)
        Factor of the site's pool and the standard deviation of the natural logarithm of its error at a
        new site.
    confidence : float
        Probability content of the interval, in (0, 1).

    Examples
    --------
    >>> e = scale_growth_curve(np.array([2.0]), np.array([0.01]), 60, np.array([[1.0]]), np.array([[0.0]]), 0.9)
    >>> round(float(e.flow[0, 0])), round(float(e.upper[0, 0]))
    (100, 147)
    """
    log10_flow = index_log10[:, None] + np.log10(growth_factor)
    se = np.sqrt(index_variance[:, None] + (LOG10_E * growth_ln_sd) ** 2)
    reach = float(stdtrit(degrees_of_freedom, 0.5 + confidence / 2)) * se
    return SiteEstimates(10**log10_flow, 10 ** (log10_flow - reach), 10 ** (log10_flow + reach), se)
