"""Figures of the section on screening."""

from __future__ import annotations

from pathlib import Path

import numpy as np

from wrackline.hydrology.records import BoolArray, PeakRecords
from wrackline.hydrology.screening import ScreeningResult
from wrackline.report.style import INK, MUTED, WARM, WATER, new_figure, save_figure

NAMED_GAUGES = 60
"""Up to this many gauges the timeline names every line."""


def draw_record_timeline(records: PeakRecords, used: BoolArray, path: Path) -> None:
    """Draw the years on record of every gauge, earliest start on top; gauges not used are thin, with a cross."""
    from matplotlib.collections import LineCollection

    gauge, start, end = _runs(records)
    first = np.full(records.n_gauges, np.iinfo(np.int64).max)
    np.minimum.at(first, gauge, start)
    some = np.flatnonzero(np.diff(records.offsets) > 0)
    order = some[np.lexsort((some, first[some]))]
    line = np.full(records.n_gauges, -1)
    line[order] = np.arange(len(order))
    height = float(np.clip(1.4 + 0.15 * len(order), 3.2, 11.0))
    figure, axes = new_figure(height=height)
    thick = float(np.clip(0.6 * 72 * height / max(len(order), 1), 0.5, 5.0))
    for chosen, colour, width, label in (
        (used, WATER, thick, "used"),
        (~used, WARM, max(0.35 * thick, 0.4), "not used"),
    ):
        runs = chosen[gauge]
        if runs.any():
            y = line[gauge[runs]]
            ends = np.stack(
                [np.column_stack([start[runs] - 0.5, y]), np.column_stack([end[runs] + 0.5, y])], axis=1
            )
            axes.add_collection(LineCollection(list(ends), colors=colour, linewidths=width, label=label))
    if len(gauge):
        axes.set_xlim(start.min() - 1, end.max() + 4)
        last = np.full(records.n_gauges, np.iinfo(np.int64).min)
        np.maximum.at(last, gauge, end)
        out = order[~used[order]]
        axes.plot(last[out] + 2, line[out], "x", color=WARM, markersize=min(thick + 2, 5))
        figure.legend(loc="outside upper right", ncols=2, frameon=False)
    axes.set_ylim(len(order) - 0.4, -0.6)
    axes.set_xlabel("water year")
    axes.grid(axis="y", visible=False)
    if len(order) <= NAMED_GAUGES:
        axes.set_yticks(np.arange(len(order)), [records.gauge_ids[i] for i in order], fontsize=6.5)
    else:
        axes.set_yticks([])
        axes.set_ylabel(f"{len(order)} gauges")
    save_figure(figure, path)


def draw_trends(result: ScreeningResult, path: Path) -> None:
    """Draw the trend of every record that is not short against its middle; triangles where it is significant."""
    figure, axes = new_figure(height=3.6)
    tested = np.isfinite(result.sen_slope) & np.isfinite(result.trend_p) & ~result.flagged("short_record")
    middle = (result.first_year + result.last_year) / 2
    size = 6 + 0.5 * np.minimum(result.n_peaks, 120)
    flagged = result.flagged("trend")
    rising = result.trend_tau > 0
    for chosen, marker, colour, label in (
        (tested & ~flagged, "o", MUTED, "no significant trend"),
        (tested & flagged & rising, "^", WATER, "rising"),
        (tested & flagged & ~rising, "v", WARM, "falling"),
    ):
        if chosen.any():
            axes.scatter(
                middle[chosen],
                result.sen_slope[chosen],
                s=size[chosen] if marker == "o" else 1.6 * size[chosen],
                marker=marker,
                facecolor="none" if marker == "o" else colour,
                edgecolor=colour,
                linewidth=0.9,
                label=label,
            )
    axes.axhline(0, color=INK, linewidth=0.8)
    axes.set_xlabel("middle of the record, water year")
    axes.set_ylabel("trend of the peaks, % per decade")
    if tested.any():
        figure.legend(loc="outside upper right", ncols=3, frameon=False)
    save_figure(figure, path)


def _runs(records: PeakRecords) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Gauge, first and last year of every run of consecutive years on record."""
    gauge, year = records.gauge_index, records.water_year
    if len(year) == 0:
        return gauge, year, year
    breaks = np.flatnonzero((np.diff(gauge) != 0) | (np.diff(year) != 1)) + 1
    starts = np.concatenate([[0], breaks])
    ends = np.concatenate([breaks, [len(year)]]) - 1
    return gauge[starts], year[starts], year[ends]
