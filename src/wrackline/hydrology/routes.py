"""Several routes to one flood: how wrong each is, how two are combined, and which one is adopted."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.special import stdtrit

from wrackline.hydrology.records import BoolArray, FloatArray, IntArray

ROUTES = ("growth_curve", "quantile_regression", "routes_combined")
EVEN = 0.5
WEIGHT_SD = 0.5
"""A weight is drawn towards one half as if one half were both its prior mean and its prior standard deviation."""


@dataclass(frozen=True)
class RoutePredictions:
    """Predictions by one route at n sites and p probabilities, log10.

    Attributes
    ----------
    log10_flow, variance : (n, p)
        NaN where the route gives nothing.
    degrees_of_freedom : int
    """

    log10_flow: FloatArray
    variance: FloatArray
    degrees_of_freedom: int

    @property
    def available(self) -> BoolArray:
        """Sites with predictions for every probability (n,)."""
        return np.asarray(np.isfinite(self.log10_flow).all(axis=1) & np.isfinite(self.variance).all(axis=1))


@dataclass(frozen=True)
class Combination:
    """How the growth curve and the quantile regression are combined, the same for all sites and probabilities.

    Attributes
    ----------
    weight : float
        Of the quantile regression; the growth curve has the rest. One weight for all probabilities, so that two rising
        curves combine to a rising one.
    own_weight, own_se : float
        What the leave-one-out errors say by themselves, and its standard error.
    correlation : (p,)
        Between the errors of the two routes.
    """

    weight: float
    own_weight: float
    own_se: float
    correlation: FloatArray


def fit_combination(
    observed: FloatArray,
    growth: RoutePredictions,
    quantile: RoutePredictions,
    judged: BoolArray | None = None,
) -> Combination:
    """Weigh two routes by their leave-one-out errors at gauges.

    Parameters
    ----------
    observed : (n, p)
        log10 floods of the records.
    growth, quantile : RoutePredictions of the same n gauges, each without itself
    judged : (p,), optional
        Probabilities that set the weight; by default all.

    Notes
    -----
    The weight minimises the squared error over all gauges and probabilities, each probability over its average error:
    the slope of the growth curve's error on the difference of the two. The record's own sampling error is in
    both errors and not in their difference, so it does not bias the weight. The standard error takes gauges as units. The
    correlation follows from the mean square difference of the routes and their variances of prediction.
    """
    there = growth.available & quantile.available & np.isfinite(observed).all(axis=1)
    one, other = (r.log10_flow[there] - observed[there] for r in (growth, quantile))
    difference = one - other
    share = np.ones(observed.shape[1]) if judged is None else judged.astype(float)
    share = share / (one**2 + other**2).mean(axis=0)
    cross = (one * difference * share).sum(axis=1)
    square = (difference**2 * share).sum(axis=1)
    own = float(cross.sum() / max(square.sum(), 1e-300))
    se = float(np.sqrt(((cross - own * square) ** 2).sum()) / max(square.sum(), 1e-300))
    weight = settle_weight(own, se)
    first, second = growth.variance[there].mean(axis=0), quantile.variance[there].mean(axis=0)
    shared = 0.5 * (first + second - (difference**2).mean(axis=0))
    correlation = np.clip(shared / np.sqrt(first * second), 0.0, 0.999)
    return Combination(weight, own, se, correlation)


def settle_weight(own: float, se: float) -> float:
    """Return the weight to use where the errors alone say ``own`` with a standard error.

    Drawn towards one half by its uncertainty, within 0 and 1; a route that is surely the lesser one (its share two standard
    errors below one half) and adds nothing sure (not one standard error above none) gets none.

    Examples
    --------
    >>> settle_weight(0.05, 0.1), settle_weight(0.97, 0.1), round(settle_weight(0.7, 0.5), 2)
    (0.0, 1.0, 0.6)
    """
    if own < se and own + 2 * se < EVEN:
        return 0.0
    if own > 1 - se and own - 2 * se > EVEN:
        return 1.0
    precision, prior = 1.0 / max(se, 1e-6) ** 2, 1.0 / WEIGHT_SD**2
    return float(np.clip((own * precision + EVEN * prior) / (precision + prior), 0.0, 1.0))


def combine_routes(
    combination: Combination, growth: RoutePredictions, quantile: RoutePredictions
) -> RoutePredictions:
    """Combine two routes' predictions, with the variance that their correlated errors leave."""
    w, v = combination.weight, 1.0 - combination.weight
    shared = combination.correlation * np.sqrt(growth.variance * quantile.variance)
    return RoutePredictions(
        v * growth.log10_flow + w * quantile.log10_flow,
        v**2 * growth.variance + w**2 * quantile.variance + 2 * w * v * shared,
        min(growth.degrees_of_freedom, quantile.degrees_of_freedom),
    )


def interval_reach(prediction: RoutePredictions, confidence: float, factor: float = 1.0) -> FloatArray:
    """Half widths (n, p) of intervals in log10: Student's t times the standard error, times a calibration factor."""
    t = float(stdtrit(prediction.degrees_of_freedom, 0.5 + confidence / 2))
    return factor * t * np.sqrt(prediction.variance)


def covers(
    observed: FloatArray,
    observed_variance: FloatArray,
    prediction: RoutePredictions,
    confidence: float,
    factor: float = 1.0,
) -> BoolArray:
    """Whether each interval, widened for the record's own sampling variance, holds the record's flood (n, p)."""
    t = float(stdtrit(prediction.degrees_of_freedom, 0.5 + confidence / 2))
    reach = t * np.sqrt(factor**2 * prediction.variance + observed_variance)
    return np.asarray(np.abs(observed - prediction.log10_flow) <= reach)


def split_by_space(latitude: FloatArray, longitude: FloatArray, blocks: int = 8) -> IntArray:
    """Split sites into blocks of neighbours: halve the largest block across its longer side until there are enough.

    Examples
    --------
    >>> split_by_space(np.zeros(4), np.array([0.0, 10.0, 1.0, 11.0]), 2).tolist()
    [0, 1, 0, 1]
    """
    east = longitude * np.cos(np.radians(latitude.mean()))
    parts = [np.arange(len(latitude))]
    while len(parts) < min(blocks, len(latitude)):
        parts.sort(key=len, reverse=True)
        whole = parts.pop(0)
        along = latitude if np.ptp(latitude[whole]) > np.ptp(east[whole]) else east
        order = whole[np.argsort(along[whole], kind="stable")]
        parts += [order[: len(order) // 2], order[len(order) // 2 :]]
    block = np.empty(len(latitude), dtype=np.int64)
    for number, part in enumerate(sorted(parts, key=lambda p: int(p.min()))):
        block[part] = number
    return block


@dataclass(frozen=True)
class Calibration:
    """Do the intervals of a route hold what they promise, and by how much are they widened if not?

    Attributes
    ----------
    coverage, coverage_se : float
        Raw, over gauges and probabilities; blocks of neighbours are the units of the standard error.
    factor : float
        Multiplies standard errors; one where the raw coverage is not below the stated by two standard errors.
    judged_coverage : float
        Coverage at every block with the factor fitted on the other blocks; the raw one where the factor is one.
    """

    coverage: float
    coverage_se: float
    factor: float
    judged_coverage: float


def calibrate_intervals(
    observed: FloatArray,
    observed_variance: FloatArray,
    prediction: RoutePredictions,
    block: IntArray,
    confidence: float,
) -> Calibration:
    """Measure the coverage of leave-one-out intervals; where it falls short, fit the factor that widens them."""
    there = prediction.available & np.isfinite(observed).all(axis=1)
    observed, variance, block = observed[there], observed_variance[there], block[there]
    prediction = RoutePredictions(
        prediction.log10_flow[there], prediction.variance[there], prediction.degrees_of_freedom
    )
    hit = covers(observed, variance, prediction, confidence)
    raw = float(hit.mean())
    names = np.unique(block)
    off = np.array([(hit[block == b] - raw).sum() for b in names])
    se = float(np.sqrt((off**2).sum() * len(names) / max(len(names) - 1, 1)) / hit.size)
    if raw >= confidence - 2 * se:
        return Calibration(raw, se, 1.0, raw)

    def fit(rows: BoolArray) -> float:
        part = RoutePredictions(
            prediction.log10_flow[rows], prediction.variance[rows], prediction.degrees_of_freedom
        )
        low, high = 1.0, 8.0
        for _ in range(50):
            middle = 0.5 * (low + high)
            if covers(observed[rows], variance[rows], part, confidence, middle).mean() < confidence:
                low = middle
            else:
                high = middle
        return high

    judged = np.zeros_like(hit)
    for b in names:
        own = block == b
        part = RoutePredictions(
            prediction.log10_flow[own], prediction.variance[own], prediction.degrees_of_freedom
        )
        judged[own] = covers(observed[own], variance[own], part, confidence, fit(~own))
    return Calibration(raw, se, fit(np.ones(len(block), dtype=bool)), float(judged.mean()))


def out_of_block_error(
    observed: FloatArray, growth: RoutePredictions, quantile: RoutePredictions, block: IntArray
) -> dict[str, float]:
    """Mean square leave-one-out error of each route over all probabilities, the weight fitted on the other blocks."""
    both = growth.available & quantile.available & np.isfinite(observed).all(axis=1)
    combined = np.full_like(observed, np.nan)
    for b in np.unique(block[both]):
        own, rest = both & (block == b), both & (block != b)
        if rest.sum() < 5:
            continue
        weight = fit_combination(observed[rest], _rows(growth, rest), _rows(quantile, rest)).weight
        combined[own] = (1 - weight) * growth.log10_flow[own] + weight * quantile.log10_flow[own]
    flows = {
        "growth_curve": growth.log10_flow,
        "quantile_regression": quantile.log10_flow,
        "routes_combined": combined,
    }
    judged = both & np.isfinite(combined).all(axis=1)
    return {
        route: float(((flow[judged] - observed[judged]) ** 2).mean()) if judged.any() else float("nan")
        for route, flow in flows.items()
    }


def pick_probabilities(prediction: RoutePredictions, chosen: BoolArray) -> RoutePredictions:
    """Return the predictions for some of the probabilities."""
    return RoutePredictions(
        prediction.log10_flow[:, chosen], prediction.variance[:, chosen], prediction.degrees_of_freedom
    )


def _rows(prediction: RoutePredictions, rows: BoolArray) -> RoutePredictions:
    return RoutePredictions(
        prediction.log10_flow[rows], prediction.variance[rows], prediction.degrees_of_freedom
    )


def weigh_with_record(
    record: FloatArray, record_variance: FloatArray, regional: FloatArray, regional_variance: FloatArray
) -> tuple[FloatArray, FloatArray]:
    """Weigh the record's log10 flood with a regional estimate made without the gauge, by inverse variances.

    Examples
    --------
    >>> y, v = weigh_with_record(*(np.array([x]) for x in (3.60, 0.0081, 3.45, 0.025)))
    >>> round(float(y[0]), 6), round(float(v[0]), 6)
    (3.563293, 0.006118)
    """
    total = record_variance + regional_variance
    weighted = (regional_variance * record + record_variance * regional) / total
    return weighted, record_variance * regional_variance / total
