"""Figures of the section on data."""

from __future__ import annotations

from pathlib import Path

import numpy as np

from wrackline.hydrology.records import PeakRecords
from wrackline.report.style import SAND, WATER, new_figure, save_figure


def draw_record_years(records: PeakRecords, path: Path) -> None:
    """Draw how many gauges have a peak on record in every water year, exact and as an interval."""
    figure, axes = new_figure(height=2.8)
    year, exact = records.water_year[records.observed], records.exact[records.observed]
    if len(year):
        span = np.arange(year.min(), year.max() + 1)
        known, bounded = (np.bincount(year[rows] - span[0], minlength=len(span)) for rows in (exact, ~exact))
        axes.bar(span, known, width=0.9, color=WATER, label="known exactly")
        if bounded.any():
            axes.bar(span, bounded, width=0.9, bottom=known, color=SAND, label="known as an interval")
            axes.legend(loc="upper left", frameon=False)
    axes.set_xlabel("water year")
    axes.set_ylabel("gauges with a peak")
    axes.grid(axis="x", visible=False)
    save_figure(figure, path)
