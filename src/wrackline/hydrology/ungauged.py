"""Floods at ungauged sites by every route, and which of them is adopted."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from scipy.special import stdtrit

from wrackline.hydrology.quantile_regression import order_floods
from wrackline.hydrology.records import BoolArray, FloatArray
from wrackline.hydrology.regional_equations import SavedEquations
from wrackline.hydrology.routes import Combination, RoutePredictions, combine_routes

LOG10_E = float(np.log10(np.e))


@dataclass(frozen=True)
class SiteEstimates:
    """Flood quantiles of sites by one route; arrays (sites, AEPs), flows in m3/s."""

    flow: FloatArray
    lower: FloatArray
    upper: FloatArray
    se_log10: FloatArray
    reordered: BoolArray


def scale_growth_curve(
    index_log10: FloatArray,
    index_variance: FloatArray,
    degrees_of_freedom: int,
    growth_factor: FloatArray,
    growth_ln_sd: FloatArray,
) -> RoutePredictions:
    """Combine index flood and growth factor, and their two uncertainties, at ungauged sites.

    The two errors are taken as independent: the index regression uses nothing of the growth curve but
    its scatter. Estimates are medians of the prediction's distribution, not means.

    Parameters
    ----------
    index_log10, index_variance : (s,)
        Prediction of the regression and its variance of prediction, log10.
    degrees_of_freedom : int
        Of the regression.
    growth_factor, growth_ln_sd : (s, a)
        Factor of the site's pool and the standard deviation of the natural logarithm of its error at a
        new site.
    """
    return RoutePredictions(
        index_log10[:, None] + np.log10(growth_factor),
        index_variance[:, None] + (LOG10_E * growth_ln_sd) ** 2,
        degrees_of_freedom,
    )


def state_intervals(prediction: RoutePredictions, confidence: float, factor: float = 1.0) -> SiteEstimates:
    """Turn predictions into floods with Student's t intervals.

    Parameters
    ----------
    prediction : RoutePredictions
    confidence : float
        Probability content of the intervals, in (0, 1).
    factor : float
        Calibration of the standard errors.

    Examples
    --------
    >>> e = state_intervals(RoutePredictions(np.array([[2.0]]), np.array([[0.01]]), 60), 0.9)
    >>> round(float(e.flow[0, 0])), round(float(e.upper[0, 0]))
    (100, 147)
    """
    log10_flow, reordered = order_floods(prediction.log10_flow)
    se = factor * np.sqrt(prediction.variance)
    reach = float(stdtrit(prediction.degrees_of_freedom, 0.5 + confidence / 2)) * se
    return SiteEstimates(
        10**log10_flow, 10 ** (log10_flow - reach), 10 ** (log10_flow + reach), se, reordered
    )


def growth_at(aeps: FloatArray, pools: dict[str, Any], pool: list[str]) -> tuple[FloatArray, FloatArray]:
    """Growth factors and the ln standard deviations of their errors at new sites, (sites, p); NaN in no pool."""
    growth = np.full((len(pool), len(aeps)), np.nan)
    growth_sd = np.full_like(growth, np.nan)
    for i, name in enumerate(pool):
        if name in pools:
            at = [pools[name]["aeps"].index(aep) for aep in aeps.tolist()]
            growth[i] = np.array(pools[name]["growth_factor"])[at]
            growth_sd[i] = np.array(pools[name]["ln_sd_new_site"])[at]
    return growth, growth_sd


def pick_equations(saved: dict[str, Any], aeps: FloatArray) -> SavedEquations:
    """The saved quantile equations of some probabilities."""
    at = [saved["aeps"].index(aep) for aep in aeps.tolist()]
    whole = SavedEquations.from_dict(saved)
    return SavedEquations(
        whole.plan,
        whole.coefficients[at],
        whole.coefficient_covariance[at],
        whole.model_variance[at],
        whole.degrees_of_freedom,
        whole.space,
    )


def read_combination(saved: dict[str, Any], aeps: FloatArray) -> Combination | None:
    """The saved combination of routes, for some probabilities."""
    one = saved["combination"]
    if one is None:
        return None
    at = [saved["aeps"].index(aep) for aep in aeps.tolist()]
    return Combination(
        one["weight_quantile_regression"],
        one["own_weight"],
        one["own_weight_se"],
        np.array(one["correlation"], dtype=float)[at],
    )


def estimate_regional(
    index: RoutePredictions, quantile: RoutePredictions | None, combination: Combination | None
) -> dict[str, RoutePredictions]:
    """All regional routes by name: the growth curve, the quantile regression, and both combined where both are there."""
    routes = {"growth_curve": index}
    if quantile is not None:
        routes["quantile_regression"] = quantile
        if combination is not None:
            routes["routes_combined"] = combine_routes(combination, index, quantile)
    return routes
