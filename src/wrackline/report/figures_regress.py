"""Figures of the index-flood regression and of the target estimates."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pandas as pd

from wrackline.report.style import INK, MUTED, SAND, WARM, WATER, new_figure, save_figure
from wrackline.study.config import StudyConfig


def draw_regression(path: Path, table: pd.DataFrame, area: np.ndarray, config: StudyConfig) -> None:
    """Draw sample against regression, and residual against area (declared units), for the gauges in the fit."""
    table, area = table[table["in_fit"]], area[table["in_fit"].to_numpy()]
    figure, (left, right) = new_figure(8.6, 4.1, ncols=2)
    reach = 10 ** (2 * table["se_log10"].to_numpy())
    sample, fitted = table["index_flood"].to_numpy(), table["regression"].to_numpy()
    left.errorbar(
        fitted,
        sample,
        yerr=[sample - sample / reach, sample * reach - sample],
        fmt="o",
        markersize=3.5,
        color=WATER,
        ecolor=SAND,
        elinewidth=1,
        zorder=2,
    )
    ends = [min(fitted.min(), sample.min()) / 1.3, max(fitted.max(), sample.max()) * 1.3]
    left.plot(ends, ends, color=INK, linewidth=1, zorder=1)
    left.set(
        xscale="log",
        yscale="log",
        xlabel=f"regression estimate, {config.units.flow}",
        ylabel=f"sample index flood, {config.units.flow}",
    )
    right.axhline(0, color=INK, linewidth=1)
    right.scatter(area, table["residual_log10"], s=14, color=WATER, zorder=2)
    right.set(xscale="log", xlabel=f"basin area, {config.units.area}", ylabel="residual, log10")
    save_figure(figure, path)


def draw_targets(path: Path, table: pd.DataFrame, aep: float, config: StudyConfig) -> None:
    """Draw one AEP's estimate with its interval for every target, largest on top."""
    chosen = table[(table["aep"] == aep) & table["flow"].notna()].sort_values("flow", kind="stable")
    figure, axes = new_figure(7.2, 1.2 + 0.24 * max(len(chosen), 4))
    rows = np.arange(len(chosen))
    axes.hlines(rows, chosen["lower"], chosen["upper"], color=SAND, linewidth=5, zorder=1)
    warned = (chosen["warnings"] != "").to_numpy()
    axes.scatter(
        chosen["flow"][~warned],
        rows[~warned],
        s=26,
        color=WATER,
        marker="o",
        zorder=2,
        label="within the gauges' range",
    )
    if warned.any():
        axes.scatter(
            chosen["flow"][warned],
            rows[warned],
            s=30,
            color=WARM,
            marker="D",
            zorder=2,
            label="with a warning",
        )
    axes.set_yticks(rows, chosen["target_id"])
    axes.set(
        xscale="log",
        xlabel=f"flood of AEP {aep:g}, {config.units.flow}, with its {config.confidence:.0%} interval",
    )
    axes.grid(axis="y", visible=False)
    axes.tick_params(axis="y", length=0, labelcolor=INK)
    axes.legend(loc="lower right", labelcolor=INK)
    axes.spines["left"].set_color(MUTED)
    save_figure(figure, path)


def draw_quantile_residuals(path: Path, sites: pd.DataFrame, residuals: np.ndarray, aep: float) -> None:
    """Draw residuals of one equation at the gauges' places, blue where the equation is too low."""
    figure, axes = new_figure(6.4, 5.0)
    reach = float(np.abs(residuals).max(initial=0.01))
    order = np.argsort(np.abs(residuals), kind="stable")
    shown = axes.scatter(
        sites["longitude"].to_numpy()[order],
        sites["latitude"].to_numpy()[order],
        c=residuals[order],
        s=20 + 120 * np.abs(residuals[order]) / reach,
        cmap="RdBu",
        vmin=-reach,
        vmax=reach,
        edgecolors=INK,
        linewidths=0.6,
    )
    axes.set(xlabel="longitude, degrees", ylabel="latitude, degrees", title=f"AEP {aep:g}")
    axes.set_aspect(1.0 / np.cos(np.radians(float(sites["latitude"].mean()))))
    figure.colorbar(shown, ax=axes, label="residual, log10: flood over regression")
    save_figure(figure, path)
