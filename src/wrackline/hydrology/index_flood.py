"""The index flood at gauges, its sampling error, and its regression on catchment attributes."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

import numpy as np

from wrackline.hydrology.records import BoolArray, FloatArray, PeakRecords
from wrackline.stats.gls import GlsFit, Method, fit_gls

LOG10_E = float(np.log10(np.e))


@dataclass(frozen=True)
class IndexFloods:
    """Sample index floods of gauges.

    Attributes
    ----------
    n : (g,)
        Exact systematic peaks behind each.
    flow : (g,), m3/s
        NaN where a gauge has no such peak.
    log10_variance : (g,)
        Sampling variance of log10 of ``flow``; NaN where it has no logarithm.
    """

    n: np.ndarray
    flow: FloatArray
    log10_variance: FloatArray

    @property
    def usable(self) -> BoolArray:
        return np.isfinite(self.log10_variance)


def sample_index_floods(
    records: PeakRecords, relative_sd: FloatArray, statistic: Literal["median", "mean"] = "median"
) -> IndexFloods:
    """Take the index flood of every gauge from its systematic peaks.

    The mean takes exactly known peaks alone; the median also counts years known to lie below it.

    Parameters
    ----------
    records : PeakRecords of g gauges
    relative_sd : (g,)
        Standard error of one year's worth of index flood over the index flood, from the POOL's growth
        curve (`median_relative_sd`, or the curve's coefficient of variation for means): a gauge's own
        scatter in its weight would bias the regression.
    statistic : {"median", "mean"}

    Notes
    -----
    The sampling variance of a median is ``1 / (4 n f(m)^2)``; both variances fall with ``1 / n``.
    """
    exact = records.systematic_exact
    n, flow = _middle_or_mean(records, exact, records.flow_low, statistic)
    if statistic == "median":
        # A year known to lie below the median takes its rank without its size; leaving it out would raise the median.
        low = ~records.exact & (records.flow_low == 0) & ~records.historic
        low &= records.flow_high <= flow[records.gauge_index]
        if low.any():
            value = np.where(exact, records.flow_low, records.flow_high)
            n, flow = _middle_or_mean(records, exact | low, value, statistic)
    filled = n > 0
    positive = filled & (np.nan_to_num(flow) > 0)
    variance = np.full(records.n_gauges, np.nan)
    variance[positive] = (LOG10_E * relative_sd[positive]) ** 2 / n[positive]
    return IndexFloods(n, flow, variance)


def _middle_or_mean(
    records: PeakRecords, rows: BoolArray, value: FloatArray, statistic: Literal["median", "mean"]
) -> tuple[np.ndarray, FloatArray]:
    """Count the marked rows of every gauge and take the median or mean of their values; NaN where there is none."""
    gauge = records.gauge_index[rows]
    ordered = value[rows][np.lexsort((value[rows], gauge))]
    n = np.bincount(gauge, minlength=records.n_gauges)
    start, filled = np.cumsum(n) - n, n > 0
    flow = np.full(records.n_gauges, np.nan)
    if statistic == "median":
        below, above = start + (n - 1) // 2, start + n // 2
        flow[filled] = 0.5 * (ordered[below[filled]] + ordered[above[filled]])
    else:
        flow[filled] = np.add.reduceat(np.append(ordered, 0.0), start[filled]) / n[filled]
    return n, flow


def index_sampling_covariance(
    log10_variance: FloatArray,
    common_years: np.ndarray,
    n: np.ndarray,
    correlation: FloatArray,
    statistic: Literal["median", "mean"] = "median",
) -> FloatArray:
    """Return the sampling covariance (g, g) of log10 index floods of gauges that share years.

    Two medians correlate as the signs of the two years' deviations do: ``(2 / pi) arcsin(rho)`` for
    bivariate normal logs; two means as the floods themselves. Both shrink with the share of common years.

    Parameters
    ----------
    log10_variance, n : (g,)
    common_years : (g, g) counts
    correlation : (g, g), of concurrent log peaks
    """
    shared = 2.0 / np.pi * np.arcsin(correlation) if statistic == "median" else correlation
    sd = np.sqrt(log10_variance)
    covariance = shared * common_years / np.sqrt(np.outer(n, n)) * np.outer(sd, sd)
    np.fill_diagonal(covariance, log10_variance)
    return covariance


def count_common_years(records: PeakRecords) -> np.ndarray:
    """Count the years in which both gauges of a pair have an exact systematic peak, shape (g, g)."""
    kept = records.keep_rows(records.systematic_exact)
    if len(kept.water_year) == 0:
        return np.zeros((records.n_gauges, records.n_gauges))
    first = kept.water_year.min()
    present = np.zeros((records.n_gauges, kept.water_year.max() - first + 1), dtype=np.float32)
    present[kept.gauge_index, kept.water_year - first] = 1.0
    return (present @ present.T).astype(float)


def fit_index_regression(
    index: IndexFloods, design: FloatArray, sampling_covariance: FloatArray, method: Method = "reml"
) -> tuple[GlsFit, BoolArray]:
    """Regress log10 index floods on the design's columns; returns the fit and the gauges it used (g,)."""
    used = index.usable & np.isfinite(design).all(axis=1)
    return (
        fit_gls(np.log10(index.flow[used]), design[used], sampling_covariance[np.ix_(used, used)], method),
        used,
    )
