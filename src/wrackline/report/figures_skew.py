"""Figures of the generalized skew: the map and its error, the gauges behind it, and the models compared."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
import pandas as pd

from wrackline.report.maps import group_look
from wrackline.report.style import INK, MUTED, PAPER, SAND, WARM, WATER, new_figure, save_figure

if TYPE_CHECKING:
    from wrackline.hydrology.generalized_skew import StationSkews
    from wrackline.hydrology.skew_candidates import Comparison
    from wrackline.study.skew_map import Grid

MOST_GROUPS = 8


def draw_maps(
    path: Path,
    grid: Grid,
    skew: np.ndarray,
    mse: np.ndarray,
    gauges: pd.DataFrame,
    residual: np.ndarray | None,
) -> None:
    """Draw the map of skew with the gauges' residuals, and beside it the map of its mean square error."""
    across = max(float(np.cos(np.radians(grid.latitude.mean()))), 0.05)
    tall = grid.rows / (grid.columns * across)
    figure, (left, right) = new_figure(9.0, float(np.clip(0.9 + 3.3 * tall, 2.6, 7.5)), ncols=2)
    extent = (grid.west, grid.west + grid.cell * grid.columns, grid.north - grid.cell * grid.rows, grid.north)
    for axes, values, title, colours in (
        (left, skew, "generalized skew", "RdYlBu_r"),
        (right, mse, "mean square error", "YlOrBr"),
    ):
        low, high = float(np.nanmin(values)), float(np.nanmax(values))
        room = max(0.05 - (high - low), 0.0) / 2
        shown = axes.imshow(
            np.ma.masked_invalid(values), extent=extent, cmap=colours, vmin=low - room, vmax=high + room,
            aspect=1 / across, interpolation="nearest", alpha=0.9,
        )  # fmt: skip
        bar = figure.colorbar(shown, ax=axes, shrink=0.85, format="%.2f")
        bar.outline.set_visible(False)
        axes.grid(False)
        axes.set_title(title, fontsize=10)
        axes.xaxis.set_major_formatter(lambda value, _: f"{(value + 180.0) % 360.0 - 180.0:g}°")
        axes.yaxis.set_major_formatter(lambda value, _: f"{value:g}°")
        axes.locator_params(nbins=5)
    x, y = gauges["longitude"].to_numpy(), gauges["latitude"].to_numpy()
    if residual is not None:
        _draw_residuals(left, x, y, residual)
    right.scatter(x, y, s=5, color=INK, linewidths=0)
    save_figure(figure, path)


def _draw_residuals(axes: Any, x: np.ndarray, y: np.ndarray, residual: np.ndarray) -> None:
    """Triangles up where a gauge's skew lies above the model, down where below; the larger the farther."""
    size = 6 + 60 * np.minimum(np.abs(residual), 1.5)
    for above, marker, colour in ((True, "^", WARM), (False, "v", WATER)):
        here = (residual > 0) == above
        axes.scatter(
            x[here], y[here], s=size[here], marker=marker, facecolors=PAPER, edgecolors=colour,
            linewidths=0.9, label="gauge above" if above else "gauge below",
        )  # fmt: skip
    axes.legend(loc="best", fontsize=8, frameon=True, framealpha=0.8, edgecolor="none")


def draw_station_skews(path: Path, stations: StationSkews, fitted: np.ndarray, regions: list[str]) -> None:
    """Draw station skews against pseudo record length, with the band in which sampling alone would put them."""
    figure, axes = new_figure(7.2, 4.2)
    order = np.argsort(stations.record_length)
    years, level = stations.record_length[order], float(np.mean(fitted))
    reach = 1.645 * np.sqrt(stations.variance[order])
    axes.fill_between(years, level - reach, level + reach, color=SAND, alpha=0.45, linewidth=0, zorder=1)
    axes.axhline(level, color=INK, linewidth=1, zorder=2)
    names = sorted(set(regions))
    of = np.array(regions, dtype=object)
    for number, name in enumerate(names):
        colour, marker = group_look(number)
        here = of == name
        label = name if name and number < MOST_GROUPS else None
        axes.scatter(
            stations.record_length[here], stations.skew[here], s=22, color=colour, marker=marker,
            edgecolors=PAPER, linewidths=0.5, label=label, zorder=3,
        )  # fmt: skip
    if any(names):
        axes.legend(fontsize=8)
    axes.set(xlabel="pseudo record length, years", ylabel="station skew, corrected for bias")
    save_figure(figure, path)


def draw_candidates(path: Path, comparison: Comparison) -> None:
    """Draw the evidence of every model over the constant, and what it had to exceed."""
    others = comparison.candidates[1:]
    figure, axes = new_figure(7.2, 1.3 + 0.32 * len(others))
    rows = np.arange(len(others))[::-1]
    colours = [WATER if c is comparison.chosen else MUTED for c in others]
    axes.barh(rows, [c.log_evidence for c in others], height=0.55, color=colours, zorder=2)
    for row, c in zip(rows, others, strict=True):
        axes.vlines(c.required_evidence, row - 0.4, row + 0.4, color=WARM, linewidth=1.6, zorder=3)
        axes.errorbar(
            c.gain, row, xerr=c.gain_se, fmt="o", markersize=4, color=INK, elinewidth=1, zorder=4,
        )  # fmt: skip
    axes.axvline(0, color=INK, linewidth=1)
    axes.set_yticks(rows, [c.plan.name for c in others])
    axes.set_xlabel(
        "bar: log evidence over the constant (red: needed); dot: leave-one-out log score gained, ± 1 s.e."
    )
    axes.xaxis.label.set_fontsize(8.5)
    save_figure(figure, path)


def draw_covariate(path: Path, comparison: Comparison) -> None:
    """Draw station skews against every attribute of the model in use, with the fitted slope."""
    model, plan = comparison.chosen.model, comparison.chosen.plan
    k = len(plan.attributes.names)
    figure, panels = new_figure(3.6 * max(k, 2), 3.8, ncols=k, squeeze=False)
    partial = model.stations.skew - model.design @ model.coefficients
    for column, axes in enumerate(panels.ravel(), start=1):
        x = model.design[:, column]
        rest = model.coefficients[0] + model.coefficients[column] * x
        axes.scatter(x, rest + partial, s=400 * model.stations.variance.min() / model.stations.variance / 8,
                     color=WATER, alpha=0.8, linewidths=0, zorder=2)  # fmt: skip
        ends = np.array([x.min(), x.max()])
        axes.plot(ends, model.coefficients[0] + model.coefficients[column] * ends, color=INK, linewidth=1.2)
        axes.set(
            xlabel=plan.columns[column],
            ylabel="station skew, other terms taken off" if k > 1 else "station skew",
        )
    save_figure(figure, path)


def draw_weighting(
    path: Path, station: np.ndarray, weighted: np.ndarray, years: np.ndarray, ratio: np.ndarray
) -> None:
    """Draw weighted against station skew, and the change of a rare flood against years of record."""
    figure, (left, right) = new_figure(8.6, 3.9, ncols=2)
    both = np.concatenate([station, weighted])
    ends = [float(np.nanmin(both)) - 0.1, float(np.nanmax(both)) + 0.1]
    left.plot(ends, ends, color=INK, linewidth=1, zorder=1)
    left.scatter(station, weighted, s=16, color=WATER, linewidths=0, alpha=0.85, zorder=2)
    left.set(xlabel="station skew", ylabel="weighted skew")
    right.axhline(0, color=INK, linewidth=1)
    right.scatter(years, 100 * (ratio - 1), s=16, color=WATER, linewidths=0, alpha=0.85, zorder=2)
    right.set(xlabel="years in the fit", ylabel="change of the flood, %")
    save_figure(figure, path)
