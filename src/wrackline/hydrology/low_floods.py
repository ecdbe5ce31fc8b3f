"""Potentially influential low floods: found by test or by the analyst, then treated as 'below the threshold'."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import ArrayLike, NDArray

from wrackline.hydrology.records import PeakRecords
from wrackline.stats.low_outliers import screen_low_outliers

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]
BoolArray = NDArray[np.bool_]


@dataclass(frozen=True)
class LowFloods:
    """Low floods of every gauge.

    Attributes
    ----------
    threshold : float array (g,), m3/s
        Smallest retained peak, or the analyst's threshold; 0 where nothing was set apart.
    count : int array (g,)
        Exact systematic peaks below the threshold, zeros included.
    zeros : int array (g,)
        Peaks of zero flow among them.
    accurate_count : int array (g,)
        What the test would count with accurate p-values; differs from `count` where the approximation decides.
    p_outward, p_inward : float arrays (g,)
        p-values at the decisions of the test, NaN where there was none.
    overridden : bool array (g,)
        True where the analyst set the threshold.
    refusal : tuple of str, length g
        Why the record cannot be fitted without a decision of the analyst; empty where it can.
    """

    threshold: FloatArray
    count: IntArray
    zeros: IntArray
    accurate_count: IntArray
    p_outward: FloatArray
    p_inward: FloatArray
    overridden: BoolArray
    refusal: tuple[str, ...]


def screen_low_floods(records: PeakRecords, thresholds: ArrayLike | None = None) -> LowFloods:
    """Find the potentially influential low floods of every gauge.

    Parameters
    ----------
    records : PeakRecords
        The exact systematic peaks are tested; zero peaks of any kind belong to them.
    thresholds : float array (g,), optional, m3/s
        The analyst's thresholds; NaN where the test decides. 0 keeps every positive peak.

    Returns
    -------
    LowFloods

    Notes
    -----
    Multiple Grubbs-Beck test (Cohn and others, 2013, Water Resour. Res. 49(8)). Zero peaks are always low floods,
    for their logarithm does not exist; without a threshold from test or analyst the smallest positive
    peak is the threshold then. Peaks equal to the threshold are retained.
    """
    tested = records.systematic_exact | (records.exact & (records.flow_low == 0))
    own, peaks = records.gauge_index[tested], records.flow_low[tested]
    g = records.n_gauges
    order = np.lexsort((peaks, own))
    peaks, own = peaks[order], own[order]
    n = np.bincount(own, minlength=g)
    offsets = np.concatenate([[0], np.cumsum(n)])
    with np.errstate(divide="ignore"):
        outliers = screen_low_outliers(np.log10(peaks), offsets)

    given = np.full(g, np.nan) if thresholds is None else np.asarray(thresholds, dtype=float)
    overridden = ~np.isnan(given)
    retained = np.append(peaks, np.nan)[
        np.where(outliers.count < n, offsets[:-1] + outliers.count, len(peaks))
    ]
    threshold = np.where(outliers.count > 0, retained, 0.0)
    smallest_positive = np.append(peaks, np.nan)[
        np.where(outliers.zeros < n, offsets[:-1] + outliers.zeros, len(peaks))
    ]
    # A threshold of zero cannot hold zero peaks: they lie below the smallest positive one then.
    chosen = np.where((given == 0) & (outliers.zeros > 0), smallest_positive, given)
    threshold = np.where(overridden, chosen, threshold)
    count = np.bincount(own, weights=peaks < threshold[own], minlength=g).astype(np.int64)
    refusal = tuple(
        f"{zeros} of {total} systematic peaks are zero; set a low-flood threshold to fit the rest"
        if zeros > total / 2 and not decided
        else ""
        for zeros, total, decided in zip(outliers.zeros, n, overridden, strict=True)
    )
    return LowFloods(
        threshold=threshold,
        count=count,
        zeros=outliers.zeros,
        accurate_count=np.where(overridden, count, outliers.accurate_count),
        p_outward=outliers.p_outward,
        p_inward=outliers.p_inward,
        overridden=overridden,
        refusal=refusal,
    )


def set_apart_low_floods(records: PeakRecords, threshold: ArrayLike) -> PeakRecords:
    """Turn the peaks below a threshold into 'between zero and the threshold', and raise what could be perceived.

    Parameters
    ----------
    records : PeakRecords
    threshold : float array (g,), m3/s
        As in `LowFloods`; 0 or NaN changes nothing.

    Returns
    -------
    PeakRecords
        Years whose flood is known to lie below the threshold get the interval from zero to it; the lower
        perception threshold of every year is at least the threshold. A flood known only to lie in an
        interval across the threshold keeps its interval.
    """
    level = np.nan_to_num(np.asarray(threshold, dtype=float))[records.gauge_index]
    below = (records.flow_high < level) | (~records.exact & (records.flow_high <= level))
    return replace(
        records,
        flow_low=np.where(below, 0.0, records.flow_low),
        flow_high=np.where(below, level, records.flow_high),
        perception_low=np.maximum(records.perception_low, level),
    )
