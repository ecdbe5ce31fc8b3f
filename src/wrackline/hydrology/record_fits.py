"""Results of at-site fits: numbers, and what a reader should know about them."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, fields, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from wrackline.hydrology.low_floods import LowFloods
from wrackline.hydrology.records import PeakRecords
from wrackline.stats.expected_moments import ExpectedMoments
from wrackline.stats.skew_variance import POLYNOMIAL_LIMIT

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

FEW_PEAKS = 10
# Records and skews for which the coverage of the limits was simulated and found good.
TESTED_SKEWS = (-0.7, 1.0)
TESTED_YEARS_WEIGHTED, TESTED_YEARS_STATION = 25, 40


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
    censoring_ratio : float array (g,)
        Asymptotic variance of the station skew over that of a complete record of as many years, at the fit in use.
    generalized_skew, generalized_skew_mse : float arrays (g,) or None
    refusal : tuple of str, length g
        Why there is no fit in use; empty where there is one. That the station fit alone failed is a warning.
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
    censoring_ratio: FloatArray
    generalized_skew: FloatArray | None
    generalized_skew_mse: FloatArray | None
    refusal: tuple[str, ...]
    warnings: tuple[tuple[FitWarning, ...], ...]

    @property
    def best(self) -> SkewFit:
        """The weighted fit of every gauge that has a generalized skew, else its station fit."""
        return choose_fit(self.station, self.weighted, self.generalized_skew, self.generalized_skew_mse)


def choose_fit(
    station: SkewFit, weighted: SkewFit | None, skew: FloatArray | None, mse: FloatArray | None
) -> SkewFit:
    """Take every gauge's fit from `weighted` where a generalized skew was given, else from `station`."""
    if weighted is None or skew is None or mse is None:
        return station
    given = np.isfinite(skew) & np.isfinite(mse)

    def pick(ours: NDArray[Any], theirs: NDArray[Any]) -> NDArray[Any]:
        return np.where(given.reshape(-1, *[1] * (ours.ndim - 1)), ours, theirs)

    ours, theirs = weighted.moments, station.moments
    moments = ExpectedMoments(
        **{
            field.name: pick(getattr(ours, field.name), getattr(theirs, field.name))
            for field in fields(ExpectedMoments)
            if field.name != "refusal"
        },
        refusal=tuple(np.where(given, ours.refusal, theirs.refusal).tolist()),
    )
    return SkewFit(
        moments=moments,
        **{
            field.name: pick(getattr(weighted, field.name), getattr(station, field.name))
            for field in fields(SkewFit)
            if field.name != "moments"
        },
    )


def add_warnings(fits: RecordFits) -> RecordFits:
    """Return the fits with what is odd about each gauge put into words."""
    best = fits.best.moments
    return replace(
        fits,
        warnings=tuple(
            tuple(_warn(fits, i, best.beyond_support, best.skew)) for i in range(len(fits.gauge_ids))
        ),
    )


def _warn(
    fits: RecordFits, i: int, beyond_support: NDArray[np.bool_], best_skew: FloatArray
) -> Iterator[FitWarning]:
    """What a reader of one gauge's results should know."""
    low, station = fits.low_floods, fits.station
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
    if fits.weighted is not None and station.moments.refusal[i]:
        yield FitWarning("no_station_fit", f"no fit with the station skew: {station.moments.refusal[i]}")
    skew = station.moments.skew[i]
    if abs(skew) > POLYNOMIAL_LIMIT:
        yield FitWarning(
            "large_skew",
            f"station skew {skew:.2f} is beyond 1.41 in absolute value; its error is from simulation",
        )
    if station.moments.clamped[i]:
        yield FitWarning("skew_clamped", "the bound on the station skew took effect")
    if beyond_support[i]:
        yield FitWarning(
            "peak_beyond_bound", "an exactly known peak lies beyond the bound of the fitted distribution"
        )
    is_weighted = fits.generalized_skew is not None and np.isfinite(fits.generalized_skew[i])
    fewest = TESTED_YEARS_WEIGHTED if is_weighted else TESTED_YEARS_STATION
    used = best_skew[i]
    if n < fewest or not TESTED_SKEWS[0] <= used <= TESTED_SKEWS[1]:
        yield FitWarning(
            "limits_untested",
            f"confidence limits were tested from {fewest} peaks and for skews of {TESTED_SKEWS[0]:g} to "
            f"{TESTED_SKEWS[1]:g}; here {n} peaks and a skew of {used:.2f}",
        )
    if fits.generalized_skew is not None:
        generalized = fits.generalized_skew[i]
        if np.isnan(generalized):
            yield FitWarning("not_weighted", "no generalized skew here; the station skew is used alone")
        elif abs(skew - generalized) > 0.5:
            yield FitWarning(
                "skews_differ",
                f"station skew {skew:.2f} and generalized skew {generalized:.2f} differ by more than 0.5",
            )
