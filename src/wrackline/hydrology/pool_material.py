"""What all pools of a study share: the ratios of every usable gauge, and simulated draws."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from wrackline.hydrology.homogeneity import (
    PresortedDraws,
    fit_parent,
    measure_heterogeneity,
    sampling_constants,
    simulate_independent,
)
from wrackline.hydrology.pool_records import take_records
from wrackline.hydrology.records import FloatArray, IntArray, PeakRecords
from wrackline.stats.lmoments import SampleLMoments, average_ratios


@dataclass(frozen=True)
class PoolMaterial:
    """What all pools of a study are made of: the ratios of every usable gauge, and draws they share.

    Attributes
    ----------
    gauge_ids : tuple of str
        Of all gauges.
    numbers : int array (u,)
        Gauges with usable records, ascending.
    lmoments : SampleLMoments, arrays (u,)
    sampling : (2,)
        Years times the sampling variance of L-CV and L-skew, at the average ratios.
    draws : PresortedDraws
    """

    gauge_ids: tuple[str, ...]
    numbers: IntArray
    lmoments: SampleLMoments
    sampling: FloatArray
    draws: PresortedDraws

    @property
    def years_of_gauges(self) -> IntArray:
        """Usable peaks of every gauge; zero for one without a usable record."""
        years = np.zeros(len(self.gauge_ids), dtype=np.int64)
        years[self.numbers] = self.lmoments.n
        return years

    def h1_of_rows(self, rows: IntArray) -> float:
        """H1 of the usable gauges with these row numbers, independent, weights by record length; NaN where untestable."""
        lm = self.lmoments
        n = lm.n[rows]
        if len(rows) < 2:
            return float("nan")
        t, t3, t4 = (ratio[rows] for ratio in (lm.t, lm.t3, lm.t4))
        parent = fit_parent(*(float(n @ ratio / n.sum()) for ratio in (t, t3, t4)))
        simulated = simulate_independent(n, parent, self.draws)
        return float(measure_heterogeneity(n, t, t3, t4, simulated).h[0])

    def h1_of_gauges(self, gauges: IntArray) -> float:
        """H1 of these gauges, those without usable records left aside."""
        return self.h1_of_rows(np.flatnonzero(np.isin(self.numbers, gauges)))


def gather_material(records: PeakRecords, minimum_peaks: int, draws: PresortedDraws) -> PoolMaterial:
    """Compute once what every pool needs of every gauge; records in order of identifier.

    Raises
    ------
    ValueError
        When no gauge has enough peaks.
    """
    taken = take_records(records, minimum_peaks)
    lm = taken.lmoments
    average = average_ratios(lm, lm.n)
    sampling = sampling_constants(fit_parent(*map(float, (average.t, average.t3, average.t4))), lm.n, draws)
    return PoolMaterial(records.gauge_ids, taken.order, lm, sampling, draws)
