"""Which records a regional analysis may use: tests on every gauge, flags, and reasons in words."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import ArrayLike, NDArray

from wrackline.hydrology.records import BoolArray, FloatArray, IntArray, PeakRecords
from wrackline.stats.trends import (
    LagOne,
    false_discovery_p,
    lag_one,
    mann_kendall,
    pettitt,
    sen_slope,
    serial_inflation,
)

NOTHING_KNOWN = -1


@dataclass(frozen=True)
class ScreeningSettings:
    """What counts as a flag; see the configuration's ``screening`` for the meaning of each."""

    minimum_peaks: int = 10
    significance: float = 0.05
    false_discovery_control: bool = True
    extreme_ratio: float = 1.5
    gap_share: float = 0.5
    exclude: tuple[str, ...] = ("short_record", "regulated", "redundant")


@dataclass(frozen=True)
class GaugeFlag:
    """One flag on one gauge, and what raised it in words."""

    gauge: int
    flag: str
    why: str


@dataclass(frozen=True)
class ScreeningResult:
    """Statistics and flags of every gauge; arrays have one entry per gauge.

    Attributes
    ----------
    n_peaks : int array
        Exactly known systematic peaks.
    first_year, last_year : int arrays
        Of the systematic record (exact, or known to lie in an interval); 0 without one.
    span, gap_years : int arrays
        Years from first to last, and those of them of which nothing is known.
    largest_over_median : float array, log10 cycles
        Of the exact systematic peaks; NaN where the median is zero or nothing is known.
    trend_p, trend_tau : float arrays
        Mann-Kendall test, two-sided; tau-a.
    trend_p_serial : float array
        The same with the variance inflated where the peaks less their trend are serially correlated.
    sen_slope : float array, percent per decade
        Median slope of the log10 peaks.
    change_point_p : float array
    change_point_year : int array
        Pettitt test; the last year of the first segment, 0 where there is none.
    lag1_correlation, lag1_lower, lag1_upper, lag1_p : float arrays
        Of the log10 peaks of consecutive years, with 95 % bounds for independence.
    trend_p_adjusted, change_point_p_adjusted, lag1_p_adjusted : float arrays
        Adjusted for testing many gauges (Benjamini and Hochberg, 1995); of ``trend_p_serial`` for the trend.
    disturbed_share : float array
        Share of the gauge's years that were regulated, diverted or urbanised.
    flags : tuple of GaugeFlag
        Sorted by gauge, in the order of the tests.
    """

    gauge_ids: tuple[str, ...]
    n_peaks: IntArray
    first_year: IntArray
    last_year: IntArray
    span: IntArray
    gap_years: IntArray
    largest_over_median: FloatArray
    trend_p: FloatArray
    trend_p_serial: FloatArray
    trend_p_adjusted: FloatArray
    trend_tau: FloatArray
    sen_slope: FloatArray
    change_point_p: FloatArray
    change_point_p_adjusted: FloatArray
    change_point_year: IntArray
    lag1_correlation: FloatArray
    lag1_lower: FloatArray
    lag1_upper: FloatArray
    lag1_p: FloatArray
    lag1_p_adjusted: FloatArray
    disturbed_share: FloatArray
    flags: tuple[GaugeFlag, ...]

    def flagged(self, flag: str) -> BoolArray:
        """Gauges that carry a flag, shape (g,)."""
        return _marked(len(self.gauge_ids), (f.gauge for f in self.flags if f.flag == flag))

    def excluded(self, exclude: Sequence[str]) -> BoolArray:
        """Gauges that carry any of the given flags, shape (g,)."""
        return _marked(len(self.gauge_ids), (f.gauge for f in self.flags if f.flag in exclude))


def screen_records(
    records: PeakRecords,
    regulated: ArrayLike,
    settings: ScreeningSettings,
    disturbed_share: ArrayLike | None = None,
) -> ScreeningResult:
    """Test every record and flag what a regional analysis should know of it.

    A test flags and never alters a record. Trend, change point and serial correlation are tested on the
    systematic record; a peak known only to lie below a level is tied at the record's highest such level, together
    with all smaller peaks. A level above the median of the exact peaks says nothing about order and is left out.

    Parameters
    ----------
    records : PeakRecords
    regulated : bool array (g,)
        Gauges whose record, as used, is not of natural floods.
    settings : ScreeningSettings
    disturbed_share : float array (g,), optional
        Share of years regulated, diverted or urbanised; reported, 0 where left out.

    Returns
    -------
    ScreeningResult
        The flag ``redundant`` is not among its flags: it needs pairs of gauges (see `find_redundant_pairs`).
    """
    g = records.n_gauges
    exact = records.keep_rows(records.systematic_exact)
    n_peaks = np.diff(exact.offsets)
    first, last, known = _systematic_span(records)
    span = np.where(known > 0, last - first + 1, 0)
    median = _medians(exact)
    largest = _largest_over_median(exact, median)
    values, years, offsets = _values_to_test(records, median)
    log10_values = _log10_with_zeros_tied(values, offsets)
    slope = sen_slope(log10_values, years, offsets)
    lag = lag_one(log10_values, years, offsets)
    trend = mann_kendall(values, offsets)
    serial_p = mann_kendall(values, offsets, _inflation(log10_values, years, offsets, slope)).p
    change = pettitt(values, years, offsets)
    result = ScreeningResult(
        gauge_ids=records.gauge_ids,
        n_peaks=n_peaks,
        first_year=first,
        last_year=last,
        span=span,
        gap_years=span - known,
        largest_over_median=largest,
        trend_p=trend.p,
        trend_p_serial=serial_p,
        trend_p_adjusted=false_discovery_p(serial_p),
        trend_tau=trend.tau,
        sen_slope=100 * (10 ** (10 * slope) - 1),
        change_point_p=change.p,
        change_point_p_adjusted=false_discovery_p(change.p),
        change_point_year=change.last_year,
        lag1_correlation=lag.r1,
        lag1_lower=lag.lower,
        lag1_upper=lag.upper,
        lag1_p=lag.p,
        lag1_p_adjusted=false_discovery_p(lag.p),
        disturbed_share=np.zeros(g) if disturbed_share is None else np.asarray(disturbed_share, dtype=float),
        flags=(),
    )
    flags = _raise_flags(result, np.asarray(regulated, dtype=bool), settings)
    return _with_flags(result, flags)


def add_flag(result: ScreeningResult, flag: str, why: dict[int, str]) -> ScreeningResult:
    """Return the result with one more flag on the gauges that ``why`` numbers."""
    return _with_flags(result, [*result.flags, *(GaugeFlag(i, flag, text) for i, text in why.items())])


def _raise_flags(r: ScreeningResult, regulated: BoolArray, settings: ScreeningSettings) -> list[GaugeFlag]:
    controlled = settings.false_discovery_control
    trend_p = r.trend_p_adjusted if controlled else r.trend_p_serial
    change_p = r.change_point_p_adjusted if controlled else r.change_point_p
    lag_p = r.lag1_p_adjusted if controlled else r.lag1_p
    level = settings.significance
    raised: list[tuple[str, BoolArray]] = [
        ("short_record", r.n_peaks < settings.minimum_peaks),
        ("regulated", regulated),
        ("trend", trend_p < level),
        ("change_point", change_p < level),
        ("serial_correlation", lag_p < level),
        ("extreme_flood", r.largest_over_median > settings.extreme_ratio),
        ("long_gaps", r.gap_years > settings.gap_share * r.span),
    ]
    words = {
        "short_record": lambda i: f"{r.n_peaks[i]} peaks, fewer than {settings.minimum_peaks}",
        "regulated": lambda i: "floods are regulated",
        "trend": lambda i: (
            f"peaks {'rise' if r.trend_tau[i] > 0 else 'fall'} by {abs(r.sen_slope[i]):.2g} % "
            f"per decade (p = {trend_p[i]:.2g})"
        ),
        "change_point": lambda i: f"level changes after {r.change_point_year[i]} (p = {change_p[i]:.2g})",
        "serial_correlation": lambda i: (
            f"correlation of {r.lag1_correlation[i]:.2f} from year to year (p = {lag_p[i]:.2g})"
        ),
        "extreme_flood": lambda i: f"largest peak {10 ** r.largest_over_median[i]:.3g} times the median",
        "long_gaps": lambda i: f"{r.gap_years[i]} of {r.span[i]} years are missing",
    }
    return [
        GaugeFlag(int(i), flag, words[flag](i)) for flag, marked in raised for i in np.flatnonzero(marked)
    ]


def _with_flags(result: ScreeningResult, flags: Sequence[GaugeFlag]) -> ScreeningResult:
    return replace(result, flags=tuple(sorted(flags, key=lambda f: f.gauge)))


def _marked(g: int, numbers: Iterable[int]) -> BoolArray:
    marked = np.zeros(g, dtype=bool)
    marked[list(numbers)] = True
    return marked


def _systematic_span(records: PeakRecords) -> tuple[IntArray, IntArray, IntArray]:
    """First and last year of systematic gauging, and the years between of which something is known."""
    gauged = records.observed & ~records.historic
    gauge = records.gauge_index
    g = records.n_gauges
    first, last = np.full(g, np.iinfo(np.int64).max), np.full(g, NOTHING_KNOWN)
    np.minimum.at(first, gauge[gauged], records.water_year[gauged])
    np.maximum.at(last, gauge[gauged], records.water_year[gauged])
    inside = (records.water_year >= first[gauge]) & (records.water_year <= last[gauge])
    known = np.bincount(gauge[inside], minlength=g)
    some = last != NOTHING_KNOWN
    return np.where(some, first, 0), np.where(some, last, 0), known


def _medians(exact: PeakRecords) -> FloatArray:
    """Median of every gauge's peaks; NaN where there is none."""
    n = np.diff(exact.offsets)
    order = np.lexsort((exact.flow_low, exact.gauge_index))
    flow = np.append(exact.flow_low[order], np.nan)
    start = exact.offsets[:-1]
    middle = np.where(n > 0, start + n // 2, len(flow) - 1)
    below = np.where(n > 0, start + (n - 1) // 2, len(flow) - 1)
    return np.asarray((flow[below] + flow[middle]) / 2)


def _largest_over_median(exact: PeakRecords, median: FloatArray) -> FloatArray:
    largest = np.zeros(exact.n_gauges)
    np.maximum.at(largest, exact.gauge_index, exact.flow_low)
    usable = (median > 0) & (largest > 0)
    ratio = np.divide(largest, median, out=np.ones(len(median)), where=usable)
    return np.where(usable, np.log10(ratio), np.nan)


def _values_to_test(records: PeakRecords, median: FloatArray) -> tuple[FloatArray, IntArray, IntArray]:
    """Values of the systematic record whose order means something, their years, and the offsets of gauges."""
    gauge = records.gauge_index
    first, last, _ = _systematic_span(records)
    inside = (records.water_year >= first[gauge]) & (records.water_year <= last[gauge]) & ~records.historic
    below = ~records.exact & (records.flow_low <= 0)
    # Written so that a level is also left out where no exact peak gives a median.
    inside &= ~below | (records.flow_high <= median[gauge])
    tested = records.keep_rows(inside)
    gauge, low, high = tested.gauge_index, tested.flow_low, tested.flow_high
    below = ~tested.exact & (low <= 0)
    level = np.zeros(tested.n_gauges)
    np.maximum.at(level, gauge[below], high[below])
    bounded = np.isfinite(high)
    point = np.where(bounded, np.sqrt(low * np.where(bounded, high, low)), low)
    return np.maximum(np.where(tested.exact, low, point), level[gauge]), tested.water_year, tested.offsets


def _log10_with_zeros_tied(values: FloatArray, offsets: IntArray) -> FloatArray:
    """Logarithms, with zeros tied at the record's smallest positive value."""
    record = np.repeat(np.arange(len(offsets) - 1), np.diff(offsets))
    smallest = np.full(len(offsets) - 1, np.inf)
    positive = values > 0
    np.minimum.at(smallest, record[positive], values[positive])
    smallest = np.where(np.isfinite(smallest), smallest, 1.0)
    return np.asarray(np.log10(np.maximum(values, smallest[record])))


def _inflation(log10_values: FloatArray, years: IntArray, offsets: IntArray, slope: FloatArray) -> FloatArray:
    """Inflation of the trend test's variance where what remains without the trend is serially correlated."""
    n = np.diff(offsets)
    detrended = log10_values - np.repeat(np.nan_to_num(slope), n) * years
    lag: LagOne = lag_one(detrended, years, offsets)
    significant: NDArray[np.bool_] = lag.r1 > lag.upper
    return serial_inflation(np.where(significant, lag.r1, 0.0), n)
