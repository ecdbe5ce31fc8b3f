"""Figures of the pools: L-moment ratios, discordancy, growth curves with intervals."""

from __future__ import annotations

from itertools import cycle
from pathlib import Path

import numpy as np

from wrackline.hydrology.discordancy import LARGEST_CRITICAL
from wrackline.hydrology.pools import PoolAnalysis
from wrackline.report.rounding import format_aep
from wrackline.report.style import INK, MARKERS, MUTED, SERIES, WARM, new_figure, save_figure
from wrackline.stats import distributions

LINES = ("-", "--", "-.", ":", (0, (6, 1, 1, 1, 1, 1)))
REFERENCE_AEPS = (0.99, 0.9, 0.5, 0.2, 0.1, 0.04, 0.02, 0.01, 0.005, 0.002, 0.001, 0.0005, 0.0001)


def pool_style(number: int) -> tuple[str, str]:
    """Return the colour and marker of the pool with this number."""
    # beyond eight pools the colours come round again with other marks
    return SERIES[number % len(SERIES)], MARKERS[(number + number // len(SERIES)) % len(MARKERS)]


def number_gauges(pools: dict[str, PoolAnalysis]) -> dict[str, int]:
    """Number all pooled gauges from 1, in order of identifier: the figures' labels."""
    return {
        gauge: i for i, gauge in enumerate(sorted({g for p in pools.values() for g in p.gauge_ids}), start=1)
    }


def draw_ratio_diagram(path: Path, pools: dict[str, PoolAnalysis]) -> None:
    """Draw L-kurtosis against L-skew: every gauge with its number, pool averages, and the candidate laws."""
    numbers = number_gauges(pools)
    figure, axes = new_figure(7.6, 5.6)
    skews = np.concatenate([p.lmoments.t3 for p in pools.values()])
    kurtoses = np.concatenate([p.lmoments.t4 for p in pools.values()])
    reach = np.linspace(min(skews.min(), 0.0) - 0.05, max(skews.max(), 0.3) + 0.05, 200)
    for law, line in zip(distributions.CANDIDATES.values(), cycle(LINES), strict=False):
        axes.plot(
            reach,
            law.fourth_ratio(reach),
            linestyle=line,
            color=MUTED,
            linewidth=1.2,
            label=law.NAME,
            zorder=1,
        )
    crowded = len(skews) > 150
    for i, (name, pool) in enumerate(sorted(pools.items())):
        colour, marker = pool_style(i)
        t3, t4 = pool.lmoments.t3, pool.lmoments.t4
        axes.scatter(t3, t4, s=16, color=colour, marker=marker, alpha=0.75, zorder=2)
        axes.scatter(
            pool.ratios[1], pool.ratios[2], s=110, color=colour, marker=marker, edgecolor=INK, linewidth=1.3, zorder=4,
            label=f"pool {name}, average",
        )  # fmt: skip
        for gauge, x, y in () if crowded else zip(pool.gauge_ids, t3, t4, strict=True):
            axes.annotate(
                str(numbers[gauge]), (x, y), (3, 3), textcoords="offset points", fontsize=6.5, zorder=3
            )
    axes.set(
        xlabel="L-skew", ylabel="L-kurtosis", xlim=(reach[0], reach[-1]),
        ylim=(min(kurtoses.min(), 0.0) - 0.04, kurtoses.max() + 0.06),
    )  # fmt: skip
    axes.legend(loc="upper left", fontsize=8, ncols=2)
    save_figure(figure, path)


def draw_discordancy(path: Path, pools: dict[str, PoolAnalysis]) -> None:
    """Draw every gauge's D in a strip per pool, with the critical value; second looks are ringed."""
    figure, axes = new_figure(7.6, 1.3 + 0.6 * len(pools))
    for row, (_, pool) in enumerate(sorted(pools.items())):
        colour, marker = pool_style(row)
        found = pool.discordancy
        shown = np.isfinite(found.measure)
        jitter = 0.22 * (((np.arange(len(shown)) * 0.618034) % 1) - 0.5)
        axes.scatter(
            found.measure[shown], row + jitter[shown], s=24, color=colour, marker=marker, alpha=0.8, zorder=2
        )
        if np.isfinite(found.critical):
            axes.vlines(found.critical, row - 0.32, row + 0.32, color=WARM, linewidth=2, zorder=1)
        second = found.masked & shown
        axes.scatter(
            found.measure[second],
            row + jitter[second],
            s=80,
            facecolor="none",
            edgecolor=INK,
            linewidth=1,
            zorder=3,
        )
        for i in np.flatnonzero(found.discordant & shown):
            place = (found.measure[i], row + jitter[i])
            axes.annotate(pool.gauge_ids[i], place, (4, 5), textcoords="offset points", fontsize=7)
        if not shown.any():
            axes.annotate(found.note, (0.05, row), fontsize=8, va="center")
    names = [f"{name} ({len(pool.gauge_ids)})" for name, pool in sorted(pools.items())]
    axes.set_yticks(range(len(names)), names)
    axes.set(xlabel="discordancy D; bars mark the critical value", ylim=(len(names) - 0.4, -0.6))
    axes.set_xlim(
        0,
        max(
            LARGEST_CRITICAL + 0.3,
            *(np.nanmax(np.append(p.discordancy.measure, 0)) * 1.1 for p in pools.values()),
        ),
    )
    save_figure(figure, path)


def draw_growth_curves(path: Path, pools: dict[str, PoolAnalysis]) -> None:
    """Draw each pool's growth curve with its interval for an ungauged site and the other accepted curves."""
    columns = min(3, len(pools))
    rows = -(-len(pools) // columns)
    figure, grid = new_figure(
        1.2 + 3.0 * columns, 0.8 + 2.7 * rows, nrows=rows, ncols=columns, sharey=True, squeeze=False
    )
    every = np.concatenate([p.aep for p in pools.values()])
    ticks = [aep for aep in REFERENCE_AEPS if every.min() <= aep <= every.max()]
    for i, (name, pool) in enumerate(sorted(pools.items())):
        axes, (colour, _) = grid.flat[i], pool_style(i)
        x = reduce_aep(pool.aep)
        axes.fill_between(x, pool.growth.lower, pool.growth.upper, color=colour, alpha=0.22, linewidth=0)
        for law in sorted(set(pool.accepted) - {pool.curve.distribution}):
            axes.plot(x, pool.curves[law], color=MUTED, linewidth=1, linestyle="--", zorder=2)
        fine = np.linspace(x.min(), x.max(), 200)
        axes.plot(fine, pool.curve.factor(-np.expm1(-np.exp(-fine))), color=colour, linewidth=2, zorder=3)
        axes.axhline(1.0, color=INK, linewidth=0.7, zorder=1)
        axes.set_title(
            f"{name}: {pool.curve.distribution}, {len(pool.gauge_ids)} gauges", fontsize=9, loc="left"
        )
        axes.set_xticks(
            reduce_aep(np.array(ticks)), [format_aep(aep) for aep in ticks], rotation=45, fontsize=7.5
        )
        if i % columns == 0:
            axes.set_ylabel(f"flood over {pool.statistic} flood")
        if i + columns >= len(pools):
            axes.set_xlabel("annual exceedance probability")
    for axes in list(grid.flat)[len(pools) :]:
        axes.set_visible(False)
    save_figure(figure, path)


def reduce_aep(aep: np.ndarray) -> np.ndarray:
    """Return the Gumbel reduced variate of annual exceedance probabilities: straight for a Gumbel law."""
    return np.asarray(-np.log(-np.log1p(-np.asarray(aep, dtype=float))))
