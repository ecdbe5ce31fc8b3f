"""From a gauge's record to its flood quantiles: log-Pearson III by expected moments, with limits."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import ArrayLike, NDArray

from wrackline.hydrology.low_floods import LowFloods, screen_low_floods, set_apart_low_floods
from wrackline.hydrology.quantile_limits import standard_error_moments, student_limits
from wrackline.hydrology.records import PeakRecords
from wrackline.stats.expected_moments import (
    CensoredSample,
    ExpectedMoments,
    SkewRule,
    compress_sample,
    fit_expected_moments,
)
from wrackline.stats.moment_covariance import (
    ThresholdClasses,
    complete_skew_variance,
    group_thresholds,
    moment_covariance,
)
from wrackline.stats.pearson3 import frequency_factor
from wrackline.stats.skew_variance import (
    POLYNOMIAL_LIMIT,
    skew_weight,
    station_skew_mse,
    weighted_skew_mse,
)

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

GAUGE_AEPS = (0.9, 0.8, 0.5, 0.2, 0.1, 0.04, 0.02, 0.01, 0.005, 0.002)
FEW_PEAKS = 10
_WEIGHT_TOLERANCE = 1e-10
_MOST_WEIGHTINGS = 60


@dataclass(frozen=True)
class SkewFit:
    """Log-Pearson III fits of all gauges with one kind of skew. All logarithms are of base 10 and flows in m3/s.

    Attributes
    ----------
    moments : ExpectedMoments
        Moments of the logarithms, shape (g,) each.
    station_skew_mse : float array (g,)
        Mean square error of the record's own skew: that of a complete record of as many years, times the ratio
        of the asymptotic variances with and without censoring.
    skew_mse : float array (g,)
        Mean square error of the skew in use.
    covariance : float array (g, 3, 3)
        Sampling covariance of mean, variance and skew.
    log10_quantile, log10_se : float arrays (g, a)
        Logarithm of the flood quantile and its standard error.
    log10_lower, log10_upper : float arrays (g, a)
        Confidence limits.
    """

    moments: ExpectedMoments
    station_skew_mse: FloatArray
    skew_mse: FloatArray
    covariance: FloatArray
    log10_quantile: FloatArray
    log10_se: FloatArray
    log10_lower: FloatArray
    log10_upper: FloatArray

    @property
    def flow(self) -> FloatArray:
        """Flood quantiles in m3/s, shape (g, a)."""
        return 10**self.log10_quantile

    @property
    def lower(self) -> FloatArray:
        return 10**self.log10_lower

    @property
    def upper(self) -> FloatArray:
        return 10**self.log10_upper


@dataclass(frozen=True)
class FitWarning:
    """Something odd about the fit of one gauge."""

    code: str
    text: str


@dataclass(frozen=True)
class RecordFits:
    """Everything that the records alone, and with a generalized skew, say about floods at their gauges.

    Attributes
    ----------
    gauge_ids : tuple of str, length g
    aeps : float array (a,)
    confidence : float
        Two-sided probability content of the limits.
    n_peaks, n_historic : int arrays (g,)
        Exactly known peaks of systematic gauging (low floods included) and of historic knowledge.
    record_years : int array (g,)
        Years in the fit, known exactly or as intervals.
    low_floods : LowFloods
    fitted_records : PeakRecords
        The records as they entered the fit, low floods set apart.
    station : SkewFit
        With the record's own skew.
    weighted : SkewFit or None
        With the weighted skew; None when no generalized skew was given. NaN at gauges without one.
    generalized_skew, generalized_skew_mse : float arrays (g,) or None
    refusal : tuple of str, length g
        Why there is no fit; empty where there is one.
    warnings : tuple of tuple of FitWarning, length g
    """

    gauge_ids: tuple[str, ...]
    aeps: FloatArray
    confidence: float
    n_peaks: IntArray
    n_historic: IntArray
    record_years: IntArray
    low_floods: LowFloods
    fitted_records: PeakRecords
    station: SkewFit
    weighted: SkewFit | None
    generalized_skew: FloatArray | None
    generalized_skew_mse: FloatArray | None
    refusal: tuple[str, ...]
    warnings: tuple[tuple[FitWarning, ...], ...]

    @property
    def best(self) -> SkewFit:
        """The weighted fit where there is one, else the station fit."""
        return self.station if self.weighted is None else self.weighted


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
    limits after Cohn, Lane and Stedinger (2001).
    """
    if (generalized_skew is None) != (generalized_skew_mse is None):
        raise ValueError("a generalized skew needs its mean square error, and the other way round")
    aeps = np.asarray(aeps, dtype=float)
    g = records.n_gauges
    low_floods = screen_low_floods(records, low_flood_thresholds)
    fitted = set_apart_low_floods(records, low_floods.threshold)
    fitted = fitted.keep_rows((fitted.flow_low > 0) | np.isfinite(fitted.flow_high))
    sample, classes = describe_observation(fitted)
    moments = fit_expected_moments(sample, skew_bound=skew_bound)
    refusal = tuple(low or own for low, own in zip(low_floods.refusal, moments.refusal, strict=True))
    usable = np.array([not reason for reason in refusal], dtype=bool)
    years = sample.years
    station = _describe_fit(moments, classes, years, aeps, confidence, usable)

    weighted = skew = mse = None
    if generalized_skew is not None and generalized_skew_mse is not None:
        skew = np.broadcast_to(np.asarray(generalized_skew, dtype=float), (g,)).copy()
        mse = np.broadcast_to(np.asarray(generalized_skew_mse, dtype=float), (g,)).copy()
        has_skew = usable & np.isfinite(skew) & np.isfinite(mse)
        moments, ratio = _fit_weighted(sample, classes, skew, mse, has_skew, station, skew_bound)
        weighted = _describe_fit(moments, classes, years, aeps, confidence, has_skew, (skew, mse, ratio))

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
        generalized_skew=skew,
        generalized_skew_mse=mse,
        refusal=refusal,
        warnings=(),
    )
    return _with_warnings(fits)


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
    between two finite levels counts as known.
    """
    low, high = records.flow_low, records.flow_high
    perception_low, perception_high = records.perception_low, records.perception_high
    below = (low == 0) & np.isfinite(high) & ~records.exact
    above = np.isposinf(high) & (low > 0)
    perception_low = np.where(below & (perception_low < high), high, perception_low)
    perception_high = np.where(above & (perception_high > low), low, perception_high)
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
    station: SkewFit,
    skew_bound: float,
) -> tuple[ExpectedMoments, FloatArray]:
    """Fit with the weighted skew; the censoring's part in the station skew's error is settled from outside.

    Returns the moments and the ratio of the asymptotic variances of the station skew with and without censoring.
    """
    g = sample.n_gauges
    years = sample.years
    gauges = np.flatnonzero(usable)
    ratio = _censoring_ratio(classes, station.moments, years, gauges)
    total = {name: np.full(g, np.nan) for name in ("mean", "sd", "skew", "station_skew")}
    iterations, converged = np.zeros(g, dtype=np.int64), np.zeros(g, dtype=bool)
    clamped, beyond = np.zeros(g, dtype=bool), np.zeros(g, dtype=bool)
    refusal = ["" if use else "no generalized skew" for use in usable]
    for _ in range(_MOST_WEIGHTINGS):
        if not len(gauges):
            break
        rule = _weighting(skew[gauges], mse[gauges], years[gauges], ratio[gauges])
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


def _weighting(skew: FloatArray, mse: FloatArray, years: IntArray, ratio: FloatArray) -> SkewRule:
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


def _with_warnings(fits: RecordFits) -> RecordFits:
    """Return the fits with what is odd about each gauge put into words."""
    return replace(fits, warnings=tuple(tuple(_warn(fits, i)) for i in range(len(fits.gauge_ids))))


def _warn(fits: RecordFits, i: int) -> Iterator[FitWarning]:
    """What a reader of one gauge's results should know."""
    low, station, best = fits.low_floods, fits.station, fits.best
    if fits.refusal[i]:
        yield FitWarning("not_fitted", fits.refusal[i])
        return
    n = int(fits.n_peaks[i] + fits.n_historic[i])
    if n < FEW_PEAKS:
        yield FitWarning("few_peaks", f"{n} exactly known peaks; common practice asks for {FEW_PEAKS}")
    if low.count[i] > fits.n_peaks[i] / 2:
        yield FitWarning(
            "mostly_low_floods",
            f"{low.count[i]} of {fits.n_peaks[i]} systematic peaks lie below the low-flood threshold",
        )
    if low.accurate_count[i] != low.count[i]:
        yield FitWarning(
            "low_flood_count_depends",
            f"the low-flood test counts {low.count[i]} with the guideline's p-values, "
            f"{low.accurate_count[i]} with accurate ones",
        )
    skew = station.moments.skew[i]
    if abs(skew) > POLYNOMIAL_LIMIT:
        yield FitWarning(
            "large_skew",
            f"station skew {skew:.2f} is beyond 1.41 in absolute value; its error is from simulation",
        )
    if station.moments.clamped[i]:
        yield FitWarning("skew_clamped", "the bound on the station skew took effect")
    if best.moments.beyond_support[i]:
        yield FitWarning(
            "peak_beyond_bound", "an exactly known peak lies beyond the bound of the fitted distribution"
        )
    if fits.weighted is not None and fits.generalized_skew is not None:
        reason = fits.weighted.moments.refusal[i]
        if reason:
            yield FitWarning("not_weighted", f"no weighted skew: {reason}")
        elif abs(skew - fits.generalized_skew[i]) > 0.5:
            yield FitWarning(
                "skews_differ",
                f"station skew {skew:.2f} and generalized skew {fits.generalized_skew[i]:.2f} differ by more than 0.5",
            )
