"""Which records enter a pool's averages, and the L-moment ratios of those whose low floods are missing or zero."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from wrackline.hydrology.records import BoolArray, FloatArray, IntArray, PeakRecords
from wrackline.stats.lmoments import SampleLMoments, sample_lmoments
from wrackline.stats.partial_moments import fit_gev_partial, gev_partial_moments, partial_moments

LARGEST_LOW_SHARE = 0.5
"""Share of a record that may lie below its threshold: beyond it the median itself is unknown."""
FEW_ZEROS = 0.10
"""Share of years without flow up to which a record's plain L-moments are taken: they hardly change."""


@dataclass(frozen=True)
class PoolRecords:
    """Records of the gauges in a pool's averages, in order of identifier, with their L-moments.

    Attributes
    ----------
    records : PeakRecords
        Exactly known systematic peaks; of records completed at the low end, those above the threshold.
    order : int array (g,)
        Their numbers among the gauges given.
    lmoments : SampleLMoments
        Arrays (g,).
    left_out : dict
        Gauge to the reason why it is not in the averages.
    completed : dict
        Gauge to words on what stands in for its low floods.
    """

    records: PeakRecords
    order: IntArray
    lmoments: SampleLMoments
    left_out: dict[str, str]
    completed: dict[str, str]


def take_records(records: PeakRecords, minimum_peaks: int) -> PoolRecords:
    """Take the records that a pool's averages can use.

    Parameters
    ----------
    records : PeakRecords
    minimum_peaks : int
        Exactly known systematic peaks that a gauge needs.

    Raises
    ------
    ValueError
        When no gauge has enough.

    Notes
    -----
    A record with more than a few years of no flow, or with years known only to have stayed below a flow, has no plain
    L-moments. The generalized extreme-value law is fitted to its partial probability-weighted moments above
    the threshold (Wang, 1990), and the L-moment ratios of that law stand in for the record's, with the number of floods
    above the threshold as its length. Limits: that one law is assumed for the low end; at most half of the
    record may lie below; years that only a perception threshold speaks of and historic peaks are not used.
    """
    low_year, threshold = _low_years(records)
    exact = records.systematic_exact
    own = records.gauge_index
    dry = np.bincount(own[exact & (records.flow_low <= 0)], minlength=records.n_gauges)
    plain = (threshold == 0) & (dry <= FEW_ZEROS * np.bincount(own[exact], minlength=records.n_gauges))
    above = exact & (plain[own] | (records.flow_low > threshold[own]))
    n_low = np.bincount(own[(exact & ~above) | low_year], minlength=records.n_gauges)
    n_above = np.bincount(own[above], minlength=records.n_gauges)
    kept = records.keep_rows(above)
    used, left_out = [], {}
    for i in sorted(range(kept.n_gauges), key=kept.gauge_ids.__getitem__):
        flow = kept.flow_low[kept.offsets[i] : kept.offsets[i + 1]]
        reason = _why_not(flow, int(n_low[i]), minimum_peaks)
        if reason:
            left_out[kept.gauge_ids[i]] = reason
        else:
            used.append(i)
    if not used:
        raise ValueError(f"no gauge has {minimum_peaks} exactly known peaks that differ")
    order = np.array(used, dtype=np.int64)
    chosen = kept.keep_gauges(order)
    lm = sample_lmoments(chosen.flow_low, chosen.offsets)
    completed: dict[str, str] = {}
    failed: list[int] = []
    columns = [np.array(c, dtype=float) for c in (lm.l1, lm.l2, lm.t, lm.t3, lm.t4, lm.t5)]
    for j in np.flatnonzero(n_low[order] > 0):
        i, gauge = int(order[j]), chosen.gauge_ids[j]
        flow = chosen.flow_low[chosen.offsets[j] : chosen.offsets[j + 1]]
        found = _complete(flow, int(n_low[i]))
        if found is None:
            left_out[gauge] = f"{n_low[i]} low years, and no law fits the floods above them"
            failed.append(int(j))
            continue
        for column, value in zip(columns, found, strict=True):
            column[j] = value
        completed[gauge] = f"{n_low[i]} of {n_low[i] + n_above[i]} years low or without flow"
    rest = np.setdiff1d(np.arange(len(order)), failed)
    few = [(records.gauge_ids[i], i) for i in order if plain[i] and dry[i]]
    return PoolRecords(
        chosen.keep_gauges(rest),
        order[rest],
        SampleLMoments(lm.n[rest], *(column[rest] for column in columns)),
        left_out,
        completed | {g: f"{dry[i]} of {n_above[i]} years without flow, taken as they are" for g, i in few},
    )


def _low_years(records: PeakRecords) -> tuple[BoolArray, FloatArray]:
    """Rows that say only that a systematic year's flood was small, and every gauge's threshold (zero: no such row)."""
    low = records.observed & ~records.historic & (records.flow_low == 0) & ~records.exact
    low &= np.isfinite(records.flow_high)
    threshold = np.zeros(records.n_gauges)
    np.maximum.at(threshold, records.gauge_index[low], records.flow_high[low])
    return low, threshold


def _why_not(flow: FloatArray, n_low: int, minimum_peaks: int) -> str:
    if len(flow) < minimum_peaks:
        above = " above its low years" if n_low else ""
        return f"{len(flow)} exactly known systematic peaks{above}, fewer than {minimum_peaks}"
    if flow.min() == flow.max():
        return "all peaks are equal"
    if n_low > LARGEST_LOW_SHARE * (n_low + len(flow)):
        return f"{n_low} of {n_low + len(flow)} years are low or without flow, more than half"
    return ""


def _complete(flow: FloatArray, n_low: int) -> FloatArray | None:
    """L-moments l1, l2 and ratios of the law fitted above the low years; None where none fits."""
    partial = partial_moments(np.concatenate([np.zeros(n_low), flow]), flow.min(), orders=3)
    law = fit_gev_partial(partial.moments, partial.censored_share)
    if not np.isfinite(law).all():
        return None
    b = gev_partial_moments(law, 0.0, orders=5)
    l1, l2 = b[0], 2 * b[1] - b[0]
    l3, l4 = 6 * b[2] - 6 * b[1] + b[0], 20 * b[3] - 30 * b[2] + 12 * b[1] - b[0]
    l5 = 70 * b[4] - 140 * b[3] + 90 * b[2] - 20 * b[1] + b[0]
    if not (l1 > 0 and l2 > 0):
        return None
    return np.array([l1, l2, l2 / l1, l3 / l2, l4 / l2, l5 / l2])
