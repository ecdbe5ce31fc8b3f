"""Plotting positions of exact peaks in records with perception thresholds."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from wrackline.hydrology.records import PeakRecords

FloatArray = NDArray[np.float64]

NUMERATORS = {"weibull": 0.0, "cunnane": 0.40, "gringorten": 0.44, "hazen": 0.5}
"""The constant a of ``(rank - a) / (count + 1 - 2 a)`` by the name of its author."""


def plot_positions(records: PeakRecords, numerator: str = "weibull") -> FloatArray:
    """Return the plotting position (annual exceedance probability) of every year's flood.

    Parameters
    ----------
    records : PeakRecords
        As they enter the fit, low floods already set apart.
    numerator : {"weibull", "cunnane", "gringorten", "hazen"}

    Returns
    -------
    float array (m,)
        NaN for floods known only as below or above a level. A flood known as an interval with two finite positive
        ends is placed at its geometric middle. A flood known only as above a level has no position of its own and
        takes the rank of that level, so that smaller floods do not move up into its place.

    Raises
    ------
    ValueError
        For an unknown numerator.

    Notes
    -----
    Hirsch and Stedinger (1987, Water Resour. Res. 23(4)). For display; nothing is fitted to them.
    """
    if numerator not in NUMERATORS:
        raise ValueError(f"plotting position '{numerator}' is not known; choose from {', '.join(NUMERATORS)}")
    a = NUMERATORS[numerator]
    aep = np.full(len(records.water_year), np.nan)
    plotted = (records.flow_low > 0) & np.isfinite(records.flow_high)
    middle = np.sqrt(np.where(plotted, records.flow_low * np.where(plotted, records.flow_high, 1.0), np.nan))
    size = np.where(plotted & ~records.exact, middle, records.flow_low)
    for start, end in zip(records.offsets[:-1], records.offsets[1:], strict=True):
        rows = slice(start, end)
        aep[rows] = _positions_of_gauge(
            size[rows], plotted[rows], records.flow_high[rows], records.perception_low[rows], a
        )
    return aep


def _positions_of_gauge(
    size: FloatArray, plotted: NDArray[np.bool_], high: FloatArray, perception_low: FloatArray, a: float
) -> FloatArray:
    """Positions of one gauge: each band between thresholds shares out the probability of its own."""
    aep = np.full(len(size), np.nan)
    ranked = size > 0
    levels = np.unique(np.append(perception_low[np.isfinite(perception_low)], 0.0))
    exceeded = 0.0
    for j in range(len(levels) - 1, -1, -1):
        top = levels[j + 1] if j + 1 < len(levels) else np.inf
        band = np.flatnonzero(ranked & (size >= levels[j]) & (size < top))
        lower = np.sum(plotted & (size < levels[j])) + np.sum(~plotted & (high <= levels[j]))
        if not len(band):
            continue
        share = (1 - exceeded) * len(band) / (len(band) + lower)
        # Equal peaks keep their order in the record, after floods that were at least as large; the sort is stable.
        order = band[np.lexsort((plotted[band], -size[band]))]
        aep[order] = exceeded + share * (np.arange(1, len(band) + 1) - a) / (len(band) + 1 - 2 * a)
        exceeded += share
    return np.where(plotted, aep, np.nan)
