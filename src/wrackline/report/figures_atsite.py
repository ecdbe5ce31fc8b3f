"""Figures of floods at gauges: frequency curves beside the record, densities, station skews."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy.special import ndtri

from wrackline.hydrology.alternatives import FamilyFits
from wrackline.hydrology.goodness_of_fit import Agreement
from wrackline.hydrology.plotting_positions import plot_positions
from wrackline.hydrology.record_fits import RecordFits
from wrackline.hydrology.records import PeakRecords
from wrackline.report.rounding import format_aep, format_flow, format_percent, format_unit
from wrackline.report.style import INK, MUTED, PAPER, SAND, SERIES, WARM, WATER, new_figure, save_figure

TICKS = (0.99, 0.95, 0.9, 0.8, 0.5, 0.2, 0.1, 0.04, 0.02, 0.01, 0.005, 0.002, 0.001, 0.0005, 0.0001)
LINES: tuple[Any, ...] = ("-", "--", "-.", ":", (0, (6, 1, 1, 1, 1, 1)), (0, (1, 2)), (0, (8, 3)))
CURVE_AEPS = (*np.round(np.linspace(0.98, 0.02, 33), 6).tolist(), 0.015, 0.01, 0.007, 0.005, 0.003, 0.002)
"""Where frequency curves and their limits are computed for drawing, unless rarer floods are wanted."""


@dataclass(frozen=True)
class FlowScale:
    """The unit in which flows are shown."""

    unit: str
    in_m3s: float

    def shown(self, flow: NDArray[np.float64]) -> NDArray[np.float64]:
        return np.asarray(flow, dtype=float) / self.in_m3s


def draw_frequency_curve(
    path: Path,
    fits: RecordFits,
    gauge: int,
    records: PeakRecords,
    title: str,
    scale: FlowScale,
    numerator: str,
) -> None:
    """Draw one gauge: its record over the years, and beside it the fitted curve on a probability axis.

    Parameters
    ----------
    path : Path
    fits : RecordFits
        At closely spaced probabilities.
    gauge : int
        Number of the gauge in `fits` and `records`.
    records : PeakRecords
        The records before low floods were set apart: these are drawn with the sizes they had.
    title : str
    scale : FlowScale
    numerator : str
        Of the plotting positions.
    """
    own = records.keep_gauges([gauge])
    fitted = fits.fitted_records.keep_gauges([gauge])
    threshold = float(fits.low_floods.threshold[gauge])
    figure, (years, curve) = new_figure(8.4, 4.7, ncols=2, sharey=True, width_ratios=(1, 1.75))
    floor, ceiling = _flow_range(own, fits, gauge)
    _draw_thresholds(years, own, floor, scale)
    band = {"color": WATER, "alpha": 0.2, "linewidth": 0}
    z, best = -ndtri(fits.aeps), fits.best
    curve.fill_between(z, scale.shown(best.lower[gauge]), scale.shown(best.upper[gauge]), **band, zorder=1)
    curve.plot(z, scale.shown(best.flow[gauge]), color=WATER, linewidth=2, zorder=3)
    _draw_peaks(years, own.water_year, own, threshold, scale)
    positions = plot_positions(fitted, numerator)
    shown = _as_rows(own, fitted, positions)
    # What is known only as a low flood keeps the place it would have had: to be seen, not to be fitted.
    low = (own.flow_high < threshold) & own.exact
    everywhere = plot_positions(own.keep_rows(own.flow_high > 0), numerator)
    with_size = np.full(len(own.water_year), np.nan)
    with_size[own.flow_high > 0] = everywhere
    shown = np.where(low, with_size, shown)
    _draw_peaks(curve, -ndtri(shown), own, threshold, scale, on_curve=True)
    if threshold > 0:
        for axes in (years, curve):
            axes.axhline(
                scale.shown(np.array(threshold)), color=WARM, linestyle=(0, (4, 3)), linewidth=1, zorder=2
            )
        curve.annotate(
            f"low-flood threshold {format_flow(float(scale.shown(np.array(threshold))))}",
            (0.99, scale.shown(np.array(threshold))),
            (0, -3), xycoords=("axes fraction", "data"), textcoords="offset points", ha="right", va="top", fontsize=7.5,
        )  # fmt: skip
    _finish(figure, years, curve, (floor, ceiling), fits, gauge, title, scale)
    save_figure(figure, path)


def _flow_range(own: PeakRecords, fits: RecordFits, gauge: int) -> tuple[float, float]:
    """Range of flows that the figure shows, m3/s: all positive peaks, the curve, and its limits as far as sensible."""
    ends = np.concatenate([own.flow_low, own.flow_high, own.perception_low])
    ends = ends[(ends > 0) & np.isfinite(ends)]
    flow, upper = fits.best.flow[gauge], fits.best.upper[gauge]
    smallest, largest = float(ends.min()), max(float(ends.max()), float(flow.max()))
    return max(0.7 * min(smallest, flow.min()), smallest / 10), min(1.5 * float(upper.max()), 8 * largest)


def _as_rows(own: PeakRecords, fitted: PeakRecords, positions: NDArray[np.float64]) -> NDArray[np.float64]:
    """Positions of the fitted record's rows at the rows of the record; NaN for years that are not in the fit."""
    of_year = dict(zip(fitted.water_year.tolist(), positions.tolist(), strict=True))
    return np.array([of_year.get(year, np.nan) for year in own.water_year.tolist()], dtype=float)


def _draw_thresholds(axes: Any, own: PeakRecords, floor: float, scale: FlowScale) -> None:
    """Shade what would not be on record with its size: below the perception threshold of every span of years."""
    labelled = False
    for first, last, level in _spans(own):
        axes.fill_between(
            [first - 0.5, last + 0.5], scale.shown(np.array(floor / 10)), scale.shown(np.array(level)),
            facecolor=SAND, alpha=0.45, hatch="///", edgecolor="#b79a4a", linewidth=0,
            label=None if labelled else "not on record below", zorder=0,
        )  # fmt: skip
        labelled = True
        if last - first >= 4:
            axes.annotate(
                f"{first}–{last}: from {format_flow(float(scale.shown(np.array(level))))}",
                (first, scale.shown(np.array(level))), (2, -4), textcoords="offset points", fontsize=7, va="top",
                bbox={"boxstyle": "square,pad=0.15", "facecolor": PAPER, "edgecolor": "none", "alpha": 0.85},
            )  # fmt: skip


def _spans(own: PeakRecords) -> list[tuple[int, int, float]]:
    """First year, last year and level of every run of years with one perception threshold above zero."""
    spans: list[tuple[int, int, float]] = []
    for year, level in zip(own.water_year.tolist(), own.perception_low.tolist(), strict=True):
        if level <= 0 or not np.isfinite(level):
            continue
        if spans and spans[-1][2] == level and year - spans[-1][1] == 1:
            spans[-1] = (spans[-1][0], year, level)
        else:
            spans.append((year, year, level))
    return spans


def _draw_peaks(
    axes: Any, x: NDArray[Any], own: PeakRecords, threshold: float, scale: FlowScale, on_curve: bool = False
) -> None:
    """Draw every year's flood by what is known of it; kinds differ in shape, not in colour alone."""
    low, high = scale.shown(own.flow_low), scale.shown(own.flow_high)
    positive = own.exact & (own.flow_low > 0)
    small = positive & (own.flow_high < threshold)
    historic = positive & own.historic & ~small
    plain = positive & ~own.historic & ~small
    kinds = (
        (plain, "o", {"markersize": 4, "markerfacecolor": INK, "markeredgecolor": INK}, "systematic peak"),
        (historic, "D", {"markersize": 6, "markerfacecolor": WARM, "markeredgecolor": INK}, "historic peak"),
        (
            small,
            "x",
            {"markersize": 4.5, "markeredgecolor": WARM},
            "low flood, fitted as 'below the threshold'",
        ),
    )
    for chosen, marker, style, label in kinds:
        at = chosen & np.isfinite(x)
        if at.any():
            axes.plot(x[at], low[at], marker, **style, label=label if on_curve else None, zorder=5)
    between = ~own.exact & (own.flow_low > 0) & np.isfinite(own.flow_high) & np.isfinite(x)
    if between.any():
        middle = np.sqrt(low[between] * high[between])
        spread = np.stack([middle - low[between], high[between] - middle])
        axes.errorbar(
            x[between], middle, spread, fmt="s", markersize=4, markerfacecolor="white", markeredgecolor=INK,
            ecolor=INK, elinewidth=1, capsize=2.5, label="peak known as an interval" if on_curve else None, zorder=5,
        )  # fmt: skip
    if on_curve:
        return
    # Without a plotting position: shown over the years only.
    above = np.isinf(own.flow_high) & (own.flow_low > 0)
    below = own.observed & (own.flow_low == 0) & ~own.exact & np.isfinite(own.flow_high)
    for chosen, level, marker, label in ((above, low, "^", "at least"), (below, high, "v", "at most")):
        if chosen.any():
            axes.plot(x[chosen], level[chosen], marker, markersize=5, markerfacecolor="white", markeredgecolor=INK,
                      label=f"{label} this flow", zorder=5)  # fmt: skip


def _finish(
    figure: Any, years: Any, curve: Any, limits: tuple[float, float], fits: RecordFits, gauge: int, title: str,
    scale: FlowScale,
) -> None:  # fmt: skip
    zeros = int(fits.low_floods.zeros[gauge])
    if zeros:
        words = f"{zeros} year{'s' * (zeros != 1)} of zero flow"
        years.annotate(words, (0.03, 0.03), xycoords="axes fraction", fontsize=7.5)
    years.set_yscale("log")
    years.set_ylim(*scale.shown(np.array(limits)))
    years.yaxis.set_major_formatter(_plain_number())
    years.yaxis.set_minor_formatter(_sparse_number(limits[1] / limits[0]))
    years.tick_params(axis="y", which="minor", labelsize=7)
    years.set(xlabel="water year", ylabel=f"annual peak, {format_unit(scale.unit)}")
    years.margins(x=0.04)
    ticks = [aep for aep in TICKS if fits.aeps.min() * 0.999 <= aep <= max(fits.aeps.max(), 0.98)]
    curve.set_xticks(-ndtri(np.array(ticks)), [format_aep(aep) for aep in ticks], rotation=45, fontsize=8)
    smallest = min((x.min() for x in (line.get_xdata() for line in curve.lines) if len(x) > 2), default=0.0)
    curve.set(
        xlabel="annual exceedance probability",
        xlim=(max(min(smallest - 0.08, -ndtri(0.985)), -ndtri(0.995)), -ndtri(fits.aeps.min()) + 0.08),
    )
    moments = fits.best.moments
    share = format_percent(fits.confidence)
    curve.plot([], [], color=WATER, linewidth=2, label=f"log-Pearson III, skew {moments.skew[gauge]:.2f}")
    curve.fill_between([], [], [], color=WATER, alpha=0.2, label=f"{share} limits")
    for axes in (years, curve):
        axes.grid(which="minor", axis="y", linewidth=0.35)
    handles, labels = curve.get_legend_handles_labels()
    more, words = years.get_legend_handles_labels()
    figure.legend(
        handles + more, labels + words, loc="outside lower center", ncols=4, fontsize=7.5, frameon=False
    )
    figure.suptitle(title, fontsize=10, x=0.01, ha="left")


def _plain_number() -> Any:
    from matplotlib.ticker import FuncFormatter

    return FuncFormatter(lambda value, _: f"{value:,.12g}".replace(",", "\u202f"))


def _sparse_number(ratio: float) -> Any:
    """Label 2 and 5 between powers of ten, on short axes only; every second label would collide on long ones."""
    from matplotlib.ticker import FuncFormatter

    wanted = ("2", "5") if ratio < 1e3 else ()
    return FuncFormatter(
        lambda value, _: f"{value:,.12g}".replace(",", "\u202f") if f"{value:e}"[0] in wanted else ""
    )


def draw_densities(
    path: Path,
    gauges: list[int],
    titles: list[str],
    records: PeakRecords,
    families: tuple[FamilyFits, ...],
    agreements: tuple[Agreement, ...],
    scale: FlowScale,
) -> None:
    """Draw histograms of the exactly known peaks of a few gauges with the densities of the fitted families.

    Families that do not serve at a gauge are thin and pale there.
    """
    columns = len(gauges)
    figure, grid = new_figure(1.0 + 3.1 * columns, 3.9, ncols=columns, squeeze=False)
    for axes, gauge, title in zip(grid.flat, gauges, titles, strict=True):
        own = records.keep_gauges([gauge])
        peaks = np.log10(scale.shown(own.flow_low[own.exact & (own.flow_low > 0)]))
        bins = max(5, int(np.ceil(np.sqrt(len(peaks)))))
        axes.hist(peaks, bins=bins, density=True, color="#dfe7ec", edgecolor=MUTED, linewidth=0.6)
        width = float(np.ptp(peaks)) or 1.0
        x = np.linspace(peaks.min() - 0.2 * width, peaks.max() + 0.25 * width, 240)
        highest = axes.get_ylim()[1]
        for number, (fits, agreement) in enumerate(zip(families, agreements, strict=True)):
            serves = bool(agreement.serves[gauge])
            y = fits.family.density(fits.parameters[gauge], x + np.log10(scale.in_m3s))
            axes.plot(
                x, y, linestyle=LINES[number % len(LINES)], color=SERIES[number % len(SERIES)],
                linewidth=(2.4 if number == 0 else 1.5) if serves else 0.8, alpha=1.0 if serves else 0.55,
                zorder=4 if number == 0 else 3,
            )  # fmt: skip
        axes.set_ylim(0, 1.25 * highest)
        axes.set_title(title, fontsize=9, loc="left")
        axes.xaxis.set_major_locator(_few_decades(x))
        axes.xaxis.set_major_formatter(_power_of_ten())
        axes.set_xlabel(f"annual peak, {format_unit(scale.unit)}")
    grid.flat[0].set_ylabel("density per tenfold of flow")
    for number, fits in enumerate(families):
        style = {"linestyle": LINES[number % len(LINES)], "color": SERIES[number % len(SERIES)]}
        grid.flat[0].plot([], [], linewidth=2.4 if number == 0 else 1.5, label=fits.family.title, **style)
    figure.legend(loc="outside lower center", ncols=4, fontsize=8, frameon=False)
    save_figure(figure, path)


def _few_decades(x: NDArray[np.float64]) -> Any:
    from matplotlib.ticker import FixedLocator

    steps = (1, 2, 5) if np.ptp(x) < 2.5 else (1,)
    every = [np.log10(step) + power for power in range(-6, 9) for step in steps]
    return FixedLocator([value for value in every if x.min() <= value <= x.max()])


def _power_of_ten() -> Any:
    from matplotlib.ticker import FuncFormatter

    return FuncFormatter(lambda value, _: f"{float(f'{10**value:.3g}'):,.12g}".replace(",", "\u202f"))


def draw_station_skews(path: Path, fits: RecordFits, used: NDArray[np.bool_]) -> None:
    """Draw every gauge's station skew against its years in the fit, with one standard error either way."""
    figure, axes = new_figure(7.2, 3.8)
    skew, se = fits.station.moments.skew, np.sqrt(fits.station.station_skew_mse)
    years, low = fits.record_years, fits.low_floods.count > 0
    fitted = np.isfinite(skew) & np.isfinite(se)
    for chosen, marker, colour, face, label in (
        (fitted & used & ~low, "o", WATER, WATER, "used, no low floods"),
        (fitted & used & low, "s", WARM, "white", "used, with low floods"),
        (fitted & ~used, "x", MUTED, MUTED, "not used in the region"),
    ):
        if chosen.any():
            axes.errorbar(
                years[chosen], skew[chosen], se[chosen], fmt=marker, markersize=4, color=colour, markerfacecolor=face,
                elinewidth=0.6, alpha=0.9, label=label,
            )  # fmt: skip
    for level in (-np.sqrt(2), np.sqrt(2)):
        axes.axhline(level, color=INK, linewidth=0.8, linestyle=(0, (4, 3)))
    axes.axhline(0, color=INK, linewidth=0.6)
    axes.annotate("±1.41", (0.995, np.sqrt(2)), (0, 3), xycoords=("axes fraction", "data"),
                  textcoords="offset points", ha="right", fontsize=7.5)  # fmt: skip
    axes.set(xlabel="years in the fit, known exactly or as intervals", ylabel="station skew of log10 flow")
    if fitted.any():
        figure.legend(loc="outside upper right", ncols=3, fontsize=8, frameon=False)
    save_figure(figure, path)
