"""A sheet per pool, and the map of pools."""

from __future__ import annotations

from itertools import cycle
from pathlib import Path

import numpy as np
import pandas as pd

from wrackline.hydrology.growth_curves import Ratios, growth_factors
from wrackline.hydrology.pools import PoolAnalysis
from wrackline.report.figures_pool import LINES, REFERENCE_AEPS, pool_style, reduce_aep
from wrackline.report.rounding import format_aep
from wrackline.report.style import INK, MUTED, WARM, WATER, new_figure, save_figure
from wrackline.stats import distributions
from wrackline.study.config import StudyConfig
from wrackline.study.contribution import Figure
from wrackline.study.pool_plans import PoolPlan

MOST_SHEETS = 6


def choose_sheets(config: StudyConfig, pools: dict[str, PoolAnalysis]) -> dict[str, PoolAnalysis]:
    """Choose the pools that the page shows one by one: those named, all of a few, or the most heterogeneous of many."""
    named = {name: pools[name] for name in config.pooling.sheets if name in pools}
    if named:
        return named
    if config.pooling.method != "influence":
        return dict(pools)
    worst = sorted(pools, key=lambda name: (-np.nan_to_num(pools[name].heterogeneity.h[0], nan=-99.0), name))
    return {name: pools[name] for name in sorted(worst[:MOST_SHEETS])}


def draw_sheets(folder: Path, pools: dict[str, PoolAnalysis], gauges: pd.DataFrame) -> list[Figure]:
    """Draw one sheet per pool; returns them for the page."""
    figures = []
    for i, (name, pool) in enumerate(sorted(pools.items()), start=1):
        file = f"pool_sheet_{i:02}.png"
        draw_sheet(folder / file, name, pool, gauges)
        figures.append(
            Figure(
                file,
                f"Pool {name}. Left: its growth curve with the interval for a new site (band), and the curves of its gauges "
                "from their own records (thin; of one law, darker with more weight). Right: L-moment ratios of the gauges, "
                "larger with more weight; the cross marks the average; discordant gauges are named.",
                f"Growth curves and L-moment ratio diagrams of pool {name}.",
            )
        )
    return figures


def draw_sheet(path: Path, name: str, pool: PoolAnalysis, gauges: pd.DataFrame) -> None:
    """Draw a pool's curve against those of its gauges, and two diagrams of L-moment ratios."""
    figure, (left, middle, right) = new_figure(10.5, 3.7, ncols=3, width_ratios=(1.5, 1, 1))
    x, lm = reduce_aep(pool.aep), pool.lmoments
    left.fill_between(x, pool.growth.lower, pool.growth.upper, color=WATER, alpha=0.2, linewidth=0)
    law = pool.curve.distribution if pool.curve.distribution in distributions.CANDIDATES else "GEV"
    own = growth_factors(law, Ratios(lm.t, lm.t3, lm.t4, lm.t5), pool.aep, pool.statistic)
    weight = pool.weight / pool.weight.max()
    for factor, share in zip(own, weight, strict=True):
        if np.isfinite(factor).all():
            left.plot(x, factor, color=MUTED, linewidth=0.8, alpha=0.25 + 0.65 * float(share), zorder=2)
    left.plot(x, pool.growth.factor, color=WATER, linewidth=2.4, zorder=3)
    ticks = np.array([aep for aep in REFERENCE_AEPS if pool.aep.min() <= aep <= pool.aep.max()])
    left.set_xticks(reduce_aep(ticks), [format_aep(aep) for aep in ticks], rotation=45, fontsize=7.5)
    left.set(xlabel="annual exceedance probability", ylabel=f"flood over {pool.statistic} flood")
    left.set_ylim(min(0.0, float(pool.growth.lower.min())), float(pool.growth.upper.max()) * 1.35)
    left.set_title(f"{name}: {pool.curve.distribution}, own curves {law}", fontsize=9, loc="left")

    size = 12 + 60 * weight
    reach = np.linspace(lm.t3.min() - 0.05, lm.t3.max() + 0.05, 100)
    for candidate, line in zip(distributions.CANDIDATES.values(), cycle(LINES), strict=False):
        middle.plot(
            reach,
            candidate.fourth_ratio(reach),
            linestyle=line,
            color=MUTED,
            linewidth=1,
            label=candidate.NAME,
        )
    for axes, y, average, label in (
        (middle, lm.t4, pool.ratios[2], "L-kurtosis"),
        (right, lm.t, pool.ratios[0], "L-CV"),
    ):
        axes.scatter(lm.t3, y, s=size, color=WATER, alpha=0.65, linewidth=0, zorder=3)
        axes.scatter(pool.ratios[1], average, s=90, marker="x", color=INK, linewidth=2, zorder=4)
        for i in np.flatnonzero(pool.discordancy.discordant):
            axes.scatter(
                lm.t3[i], y[i], s=size[i] + 40, facecolor="none", edgecolor=WARM, linewidth=1.3, zorder=4
            )
            axes.annotate(pool.gauge_ids[i], (lm.t3[i], y[i]), (5, 4), textcoords="offset points", fontsize=7)
        axes.set(xlabel="L-skew", ylabel=label)
    middle.set_ylim(float(lm.t4.min()) - 0.04, float(lm.t4.max()) + 0.06)
    middle.legend(fontsize=6.5, ncols=2, loc="upper left")
    save_figure(figure, path)


def draw_pool_map(path: Path, gauges: pd.DataFrame, targets: pd.DataFrame, plan: PoolPlan) -> None:
    """Draw where the pools' gauges and the targets lie: a colour and a mark per pool, or reach of every own pool."""
    figure, axes = new_figure(6.4, 6.0)
    longitude, latitude = (
        gauges[f"centroid_{axis}"].to_numpy(dtype=float) for axis in ("longitude", "latitude")
    )
    if plan.method == "influence":
        members = np.zeros(len(gauges), dtype=int)
        for of in plan.members.values():
            members[of] += 1
        drawn = axes.scatter(longitude, latitude, c=members, s=28, cmap="cividis", zorder=3)
        figure.colorbar(drawn, ax=axes, label="pools that the gauge is in", shrink=0.7)
    else:
        for i, (name, of) in enumerate(sorted(plan.members.items())):
            colour, marker = pool_style(i)
            axes.scatter(longitude[of], latitude[of], s=28, color=colour, marker=marker, label=name, zorder=3)
        free = np.setdiff1d(
            np.arange(len(gauges)), np.concatenate([*plan.members.values(), np.empty(0, dtype=int)])
        )
        if len(free):
            axes.scatter(
                longitude[free], latitude[free], s=18, color=MUTED, marker="x", label="in no pool", zorder=2
            )
    if len(targets):
        places = (targets[f"centroid_{axis}"].to_numpy(dtype=float) for axis in ("longitude", "latitude"))
        axes.scatter(*places, s=60, facecolor="none", edgecolor=INK, linewidth=1.1, label="targets", zorder=4)
    axes.set(xlabel="longitude", ylabel="latitude")
    axes.set_aspect(1 / max(np.cos(np.radians(latitude.mean())), 0.1))
    if len(plan.members) <= 12 or plan.method == "influence":
        handles, labels = axes.get_legend_handles_labels()
        if handles:
            axes.legend(handles, labels, fontsize=8, loc="upper left", bbox_to_anchor=(1.02, 1.0))
    save_figure(figure, path)
