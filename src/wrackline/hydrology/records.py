"""The record: what is known about every gauge's flood of every water year."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, fields, replace

import numpy as np
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]
BoolArray = NDArray[np.bool_]


@dataclass(frozen=True)
class PeakRecords:
    """Annual peaks of many gauges as flat arrays; gauge ``i`` owns rows ``offsets[i]:offsets[i + 1]``.

    Every row is one gauge and one water year. Rows are sorted by gauge (in the order of
    ``gauge_ids``) and by water year within a gauge. A year about which nothing is known has no row.

    Attributes
    ----------
    gauge_ids : tuple of str, length g
    offsets : int array (g + 1,)
    water_year : int array (m,)
        Named by the calendar year in which it ends.
    flow_low, flow_high : float arrays (m,), m3/s
        The flood of the year lies in ``[flow_low, flow_high]``. Equal where the peak is known
        exactly; ``flow_high`` is ``inf`` where it has no upper bound.
    perception_low, perception_high : float arrays (m,), m3/s
        The perception threshold: a flood of that year would be on record with its size only if it
        lay in ``[perception_low, perception_high]``.
    historic : bool array (m,)
        True where the peak was recorded outside systematic gauging.
    observed : bool array (m,)
        True where a row of the peak table stands behind it; False for years that only a threshold
        speaks of.
    cause : array of str (m,)
        ``rain``, ``snowmelt``, ...; ``unknown`` where not said.

    Notes
    -----
    The observation model is that of Cohn, Lane and Baier (1997, Water Resour. Res. 33(9)).
    """

    gauge_ids: tuple[str, ...]
    offsets: IntArray
    water_year: IntArray
    flow_low: FloatArray
    flow_high: FloatArray
    perception_low: FloatArray
    perception_high: FloatArray
    historic: BoolArray
    observed: BoolArray
    cause: NDArray[np.str_]

    @property
    def n_gauges(self) -> int:
        return len(self.gauge_ids)

    @property
    def gauge_index(self) -> IntArray:
        """Gauge number of every row, shape (m,)."""
        return np.repeat(np.arange(self.n_gauges), np.diff(self.offsets))

    @property
    def exact(self) -> BoolArray:
        """Rows whose peak is known exactly, shape (m,)."""
        return self.flow_low == self.flow_high

    @property
    def systematic_exact(self) -> BoolArray:
        """Exactly known peaks of systematic gauging: what L-moments and correlations use, shape (m,)."""
        return self.exact & self.observed & ~self.historic

    def keep_rows(self, keep: BoolArray) -> PeakRecords:
        """Return the records with only the marked rows; every gauge stays, perhaps empty."""
        counts = np.bincount(self.gauge_index[keep], minlength=self.n_gauges)
        offsets = np.concatenate([[0], np.cumsum(counts)]).astype(np.int64)
        rows = {
            f.name: getattr(self, f.name)[keep]
            for f in fields(self)
            if f.name not in ("gauge_ids", "offsets")
        }
        return replace(self, offsets=offsets, **rows)

    def keep_gauges(self, gauges: Sequence[int] | IntArray) -> PeakRecords:
        """Return the records of the given gauge numbers, in that order."""
        gauges = np.asarray(gauges, dtype=np.int64)
        starts, counts = self.offsets[:-1][gauges], np.diff(self.offsets)[gauges]
        offsets = np.concatenate([[0], np.cumsum(counts)]).astype(np.int64)
        rows_at = np.repeat(starts - offsets[:-1], counts) + np.arange(offsets[-1])
        rows = {
            f.name: getattr(self, f.name)[rows_at]
            for f in fields(self)
            if f.name not in ("gauge_ids", "offsets")
        }
        return replace(self, gauge_ids=tuple(self.gauge_ids[i] for i in gauges), offsets=offsets, **rows)


def exact_records(
    gauge_ids: Sequence[str], offsets: IntArray, water_year: IntArray, flow: FloatArray
) -> PeakRecords:
    """Build records of exactly known systematic peaks, as a simulation or a notebook has them.

    Parameters
    ----------
    gauge_ids : sequence of str, length g
    offsets : int array (g + 1,)
    water_year : int array (m,)
    flow : float array (m,), m3/s
    """
    m = len(flow)
    return PeakRecords(
        gauge_ids=tuple(gauge_ids),
        offsets=np.asarray(offsets, dtype=np.int64),
        water_year=np.asarray(water_year, dtype=np.int64),
        flow_low=np.asarray(flow, dtype=float),
        flow_high=np.asarray(flow, dtype=float),
        perception_low=np.zeros(m),
        perception_high=np.full(m, np.inf),
        historic=np.zeros(m, dtype=bool),
        observed=np.ones(m, dtype=bool),
        cause=np.full(m, "unknown"),
    )
