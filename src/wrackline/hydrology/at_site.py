"""From a gauge's record to its flood quantiles: log-Pearson III by expected moments, with limits."""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike, NDArray

from wrackline.hydrology.low_floods import screen_low_floods, set_apart_low_floods
from wrackline.hydrology.quantile_limits import standard_error_moments, student_limits
from wrackline.hydrology.record_fits import RecordFits, SkewFit, add_warnings, choose_fit
from wrackline.hydrology.records import PeakRecords
from wrackline.stats.censored_sample import CensoredSample, compress_sample
from wrackline.stats.expected_moments import ExpectedMoments, SkewRule, fit_expected_moments
from wrackline.stats.moment_covariance import (
    ThresholdClasses,
    complete_skew_variance,
    group_thresholds,
    moment_covariance,
)
from wrackline.stats.pearson3 import frequency_factor
from wrackline.stats.skew_variance import (
    skew_weight,
    station_skew_mse,
    weighted_skew_mse,
)

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

GAUGE_AEPS = (0.9, 0.8, 0.5, 0.2, 0.1, 0.04, 0.02, 0.01, 0.005, 0.002)
_WEIGHT_TOLERANCE = 1e-10
_MOST_WEIGHTINGS = 60


def fit_records(
    records: PeakRecords,
    generalized_skew: ArrayLike | None = None,
    generalized_skew_mse: ArrayLike | None = None,
    aeps: ArrayLike = GAUGE_AEPS,
    confidence: float = 0.90,
    low_flood_thresholds: ArrayLike | None = None,
    skew_bound: float = np.inf,
) -> RecordFits:
    """Fit log-Pearson III to the records of all gauges by the expected moments algorithm.

    Parameters
    ----------
    records : PeakRecords
        Flows in m3/s.
    generalized_skew, generalized_skew_mse : float arrays (g,) or scalars, optional
        Generalized skew and its mean square error; both or neither. NaN where a gauge has none. A mean square
        error of 0 uses the generalized skew alone.
    aeps : float array (a,)
        Annual exceedance probabilities wanted.
    confidence : float
        Two-sided probability content of the limits.
    low_flood_thresholds : float array (g,), optional, m3/s
        The analyst's thresholds; NaN where the test decides.
    skew_bound : float
        Station skews are held within plus and minus this bound (1.41 is in use); unbounded by default.

    Returns
    -------
    RecordFits
        A gauge that cannot be fitted has NaN and a reason in `refusal`.

    Raises
    ------
    ValueError
        When only one of generalized skew and its mean square error is given.

    Notes
    -----
    Bulletin 17C (England and others, 2019): low floods by the multiple Grubbs-Beck test, expected moments
    (Cohn, Lane and Baier, 1997), generalized skew inside the iteration (Griffis, Stedinger and Cohn, 2004),
    limits after Cohn, Lane and Stedinger (2001). The error of a censored record's skew is that of a complete record of
    as many years times the ratio of the asymptotic variances with and without censoring (our reading).

    Coverage of 90 % limits, the whole chain simulated 2,000 times a case (25 to 100 systematic years, skew -0.7 to
    1.0, none or 30 % below a gauge base, none or 100 historic years, probabilities 0.1, 0.01, 0.002; generalized skew
    with mean square error 0.15): with the weighted skew 88.4 to 93.6 % in all 240 cases, each tail 1.8 to 9.0 %. With the
    station skew alone 85.7 to 93.9 % from 40 years on; at 25 years with a negative skew and a historic
    period as little as 78 %, the lower limit being too high. The table lies beside the command that makes it,
    tests/benchmarks/coverage_at_site.py.
    """
    if (generalized_skew is None) != (generalized_skew_mse is None):
        raise ValueError("a generalized skew needs its mean square error, and the other way round")
    aeps = np.asarray(aeps, dtype=float)
    g = records.n_gauges
    low_floods = screen_low_floods(records, low_flood_thresholds)
    fitted = set_apart_low_floods(records, low_floods.threshold)
    # Years known only as 'some flood' say nothing, nor do zeros where there is no flood to set them below.
    fitted = fitted.keep_rows(
        (fitted.flow_low > 0) | (np.isfinite(fitted.flow_high) & (fitted.flow_high > 0))
    )
    sample, classes = describe_observation(fitted)
    moments = fit_expected_moments(sample, skew_bound=skew_bound)
    usable = np.array([not reason for reason in low_floods.refusal], dtype=bool)
    years = sample.years
    station = _describe_fit(moments, classes, years, aeps, confidence, usable)

    weighted = skew = mse = None
    ratio = _censoring_ratio(classes, moments, years, np.flatnonzero(usable & moments.fitted))
    if generalized_skew is not None and generalized_skew_mse is not None:
        skew = np.broadcast_to(np.asarray(generalized_skew, dtype=float), (g,)).copy()
        mse = np.broadcast_to(np.asarray(generalized_skew_mse, dtype=float), (g,)).copy()
        has_skew = usable & np.isfinite(skew) & np.isfinite(mse)
        moments, ratio = _fit_weighted(sample, classes, skew, mse, has_skew, ratio, skew_bound)
        weighted = _describe_fit(moments, classes, years, aeps, confidence, has_skew, (skew, mse, ratio))

    best = choose_fit(station, weighted, skew, mse)
    refusal = tuple(low or own for low, own in zip(low_floods.refusal, best.moments.refusal, strict=True))
    exact, historic = records.exact & records.observed, records.historic
    own = records.gauge_index
    fits = RecordFits(
        gauge_ids=records.gauge_ids,
        aeps=aeps,
        confidence=confidence,
        n_peaks=np.bincount(own[exact & ~historic], minlength=g),
        n_historic=np.bincount(own[exact & historic], minlength=g),
        record_years=years,
        low_floods=low_floods,
        fitted_records=fitted,
        station=station,
        weighted=weighted,
        censoring_ratio=ratio,
        generalized_skew=skew,
        generalized_skew_mse=mse,
        refusal=refusal,
        warnings=(),
    )
    return add_warnings(fits)


def describe_observation(records: PeakRecords) -> tuple[CensoredSample, ThresholdClasses]:
    """Return base-10 logarithms of records as censored samples, and the thresholds behind them.

    Parameters
    ----------
    records : PeakRecords
        Without zero peaks: low floods set apart.

    Notes
    -----
    The covariance of the moments follows from the thresholds. Where a flood is known only as below or above a
    level although its thresholds would have let it be recorded, that level counts as the threshold; a flood
    between two finite levels counts as known. Where a flood is known only as above a level below the low-flood
    threshold, or could be perceived only below that threshold, nothing is left to be known exactly: the year
    tells on which side of its one level the flood lay.
    """
    low, high = records.flow_low, records.flow_high
    perception_low, perception_high = records.perception_low, records.perception_high
    below = (low == 0) & np.isfinite(high) & ~records.exact
    above = np.isposinf(high) & (low > 0)
    perception_low = np.where(below & (perception_low < high), high, perception_low)
    perception_high = np.where(above & (perception_high > low), low, perception_high)
    perception_low = np.minimum(perception_low, perception_high)
    own = records.gauge_index
    with np.errstate(divide="ignore"):
        sample = compress_sample(own, np.log10(low), np.log10(high), records.n_gauges)
        classes = group_thresholds(own, np.log10(perception_low), np.log10(perception_high), records.n_gauges)
    return sample, classes


def _fit_weighted(
    sample: CensoredSample,
    classes: ThresholdClasses,
    skew: FloatArray,
    mse: FloatArray,
    usable: NDArray[np.bool_],
    ratio: FloatArray,
    skew_bound: float,
) -> tuple[ExpectedMoments, FloatArray]:
    """Fit with the weighted skew; the censoring's part in the station skew's error is settled from outside.

    Returns the moments and the ratio of the asymptotic variances of the station skew with and without censoring.
    """
    g = sample.n_gauges
    years = sample.years
    gauges = np.flatnonzero(usable)
    ratio = ratio.copy()
    total = {name: np.full(g, np.nan) for name in ("mean", "sd", "skew", "station_skew")}
    iterations, converged = np.zeros(g, dtype=np.int64), np.zeros(g, dtype=bool)
    clamped, beyond = np.zeros(g, dtype=bool), np.zeros(g, dtype=bool)
    refusal = ["" if use else "no generalized skew" for use in usable]
    for _ in range(_MOST_WEIGHTINGS):
        if not len(gauges):
            break
        rule = weighting(skew[gauges], mse[gauges], years[gauges], ratio[gauges])
        part = fit_expected_moments(sample.keep_gauges(gauges), rule, skew_bound=skew_bound)
        for name, values in total.items():
            values[gauges] = getattr(part, name)
        iterations[gauges] += part.iterations
        converged[gauges], clamped[gauges], beyond[gauges] = part.converged, part.clamped, part.beyond_support
        for i, reason in zip(gauges, part.refusal, strict=True):
            refusal[i] = reason
        fits = ExpectedMoments(**total, iterations=iterations, converged=converged, clamped=clamped,
                               beyond_support=beyond, refusal=tuple(refusal))  # fmt: skip
        gauges = gauges[part.fitted]
        new = _censoring_ratio(classes, fits, years, gauges)
        moved = np.abs(new - ratio)[gauges] > _WEIGHT_TOLERANCE * ratio[gauges]
        ratio[gauges] = new[gauges]
        gauges = gauges[moved]
    for i in gauges:
        refusal[i] = "the weight of the station skew did not settle"
    return (
        ExpectedMoments(**total, iterations=iterations, converged=converged, clamped=clamped,
                        beyond_support=beyond, refusal=tuple(refusal)),
        ratio,
    )  # fmt: skip


def weighting(skew: FloatArray, mse: FloatArray, years: IntArray, ratio: FloatArray) -> SkewRule:
    """Return the rule that weighs station skews with the generalized skew by their mean square errors."""

    def weigh(station: FloatArray, rows: IntArray) -> FloatArray:
        weight = skew_weight(station_skew_mse(years[rows], station) * ratio[rows], mse[rows])
        return weight * station + (1 - weight) * skew[rows]

    return weigh


def _censoring_ratio(
    classes: ThresholdClasses, moments: ExpectedMoments, years: IntArray, gauges: IntArray
) -> FloatArray:
    """Asymptotic variance of the station skew over that of a complete record of as many years; 1 elsewhere."""
    ratio = np.ones(len(years))
    censored = np.zeros(len(years), dtype=bool)
    censored[classes.gauge[np.isfinite(classes.low) | np.isfinite(classes.high)]] = True
    gauges = gauges[censored[gauges]]
    mean, sd, skew = moments.mean[gauges], moments.sd[gauges], moments.skew[gauges]
    covariance = moment_covariance(classes.keep_gauges(gauges), mean, sd, skew)
    ratio[gauges] = covariance[:, 2, 2] / complete_skew_variance(years[gauges], skew)
    return ratio


def _describe_fit(
    moments: ExpectedMoments,
    classes: ThresholdClasses,
    years: IntArray,
    aeps: FloatArray,
    confidence: float,
    usable: NDArray[np.bool_],
    generalized: tuple[FloatArray, FloatArray, FloatArray] | None = None,
) -> SkewFit:
    """Add errors, quantiles and limits to fitted moments; NaN where a gauge is not usable."""
    g, a = len(years), len(aeps)
    at = np.flatnonzero(usable & moments.fitted)
    part = classes.keep_gauges(at)
    mean, sd, skew = moments.mean[at], moments.sd[at], moments.skew[at]
    weight = mse = None
    if generalized is None:
        covariance = moment_covariance(part, mean, sd, skew)
        ratio = covariance[:, 2, 2] / complete_skew_variance(years[at], skew)
        own_mse = station_skew_mse(years[at], skew) * ratio
        skew_mse = own_mse
    else:
        mse = generalized[1][at]
        own_mse = station_skew_mse(years[at], moments.station_skew[at]) * generalized[2][at]
        weight = skew_weight(own_mse, mse)
        skew_mse = weighted_skew_mse(own_mse, mse)
        covariance = moment_covariance(part, mean, sd, skew, weight, mse)
    quantile = mean[:, None] + sd[:, None] * frequency_factor(aeps[None, :], skew[:, None])
    variance, of_se, shared = standard_error_moments(part, mean, sd, skew, aeps, weight, mse)
    lower, upper = student_limits(quantile, variance, of_se, shared, confidence)

    def spread(values: FloatArray, *shape: int) -> FloatArray:
        everywhere = np.full((g, *shape), np.nan)
        everywhere[at] = values
        return everywhere

    return SkewFit(
        moments=moments,
        station_skew_mse=spread(own_mse),
        skew_mse=spread(skew_mse),
        covariance=spread(covariance, 3, 3),
        log10_quantile=spread(quantile, a),
        log10_se=spread(np.sqrt(variance), a),
        log10_lower=spread(lower, a),
        log10_upper=spread(upper, a),
    )
