"""Figures of the comparison with an earlier edition."""

from __future__ import annotations

from pathlib import Path

import numpy as np

from wrackline.report.maps import central_longitude, unwrap
from wrackline.report.style import INK, MUTED, PAPER, SERIES, TWO_SIDED, new_figure, save_figure

CAUSE_COLOURS = {
    "software": MUTED,
    "own_new_peaks": SERIES[0],
    "own_revised_peaks": SERIES[7],
    "own_thresholds_flags": SERIES[5],
    "generalized_skew": SERIES[3],
    "regional_models": SERIES[2],
    "site_attributes": SERIES[4],
    "configuration": SERIES[1],
}


def draw_change_map(
    path: Path,
    longitude: np.ndarray,
    latitude: np.ndarray,
    change_percent: np.ndarray,
    beyond: np.ndarray,
    target: np.ndarray,
    title: str,
) -> None:
    """Draw the change at every site: colour by sign, size by amount; a dark rim where it leaves the stated interval."""
    from matplotlib.colors import LinearSegmentedColormap

    colours = LinearSegmentedColormap.from_list("change", TWO_SIDED[::-1])
    figure, axes = new_figure(7.2, 6.2)
    east = unwrap(longitude, central_longitude(longitude))
    reach = max(float(np.nanmax(np.abs(change_percent))), 1e-9)
    order = np.argsort(-np.abs(change_percent), kind="stable")
    drawn = None
    for chosen, marker, label in ((~target, "o", "gauge"), (target, "D", "ungauged site")):
        at = order[chosen[order]]
        if len(at) == 0:
            continue
        drawn = axes.scatter(
            east[at],
            latitude[at],
            s=14 + 190 * np.abs(change_percent[at]) / reach,
            c=change_percent[at],
            cmap=colours,
            vmin=-reach,
            vmax=reach,
            marker=marker,
            edgecolors=[INK if out else MUTED for out in beyond[at]],
            linewidths=np.where(beyond[at], 1.6, 0.5),
            label=label,
        )
    axes.set_aspect(1.0 / max(np.cos(np.deg2rad(float(latitude.mean()))), 0.1))
    axes.set(xlabel="longitude, degrees", ylabel="latitude, degrees", title=title)
    if drawn is not None:
        figure.colorbar(drawn, ax=axes, label="change, %", shrink=0.75)
        axes.legend(loc="best")
    save_figure(figure, path)


def draw_shares(path: Path, sites: list[str], shares: dict[str, np.ndarray], title: str) -> None:
    """Draw the shares of the causes at the sites that moved most, as bars left and right of no change."""
    figure, axes = new_figure(7.8, 1.4 + 0.34 * len(sites))
    place = np.arange(len(sites))[::-1]
    right, left = np.zeros(len(sites)), np.zeros(len(sites))
    for cause, values in shares.items():
        if not np.any(values):
            continue
        start = np.where(values >= 0, right, left)
        axes.barh(
            place,
            values,
            left=start,
            color=CAUSE_COLOURS[cause],
            edgecolor=PAPER,
            label=cause.replace("_", " "),
        )
        right += np.maximum(values, 0)
        left += np.minimum(values, 0)
    total = np.sum(list(shares.values()), axis=0)
    axes.scatter(total, place, color=INK, marker="|", s=140, zorder=3, label="whole change")
    axes.axvline(0, color=INK, linewidth=0.8)
    axes.set_yticks(place, sites)
    axes.grid(visible=False, axis="y")
    axes.set(xlabel="share of the change, % of the old flood", title=title)
    axes.legend(loc="upper left", bbox_to_anchor=(1.0, 1.0))
    save_figure(figure, path)
