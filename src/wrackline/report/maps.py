"""The study's map as a figure: gauges, ungauged sites, basins and regions, without a base map."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from wrackline.report.style import INK, MARKERS, MUTED, PAPER, SERIES, new_figure

if TYPE_CHECKING:
    from matplotlib.figure import Figure

KM_PER_DEGREE = 111.195
"""Kilometres in one degree of a great circle, on a sphere of radius 6371 km."""
WIDTH, LEFT, LEGEND, BELOW, ABOVE = 7.2, 0.62, 1.75, 0.72, 0.1
"""Inches: the figure's width, and the room left, right (for the legend), below and above the frame."""
PROPORTIONS = (0.45, 1.35)
"""Least and largest height of the frame over its width."""
LEGEND_GROUPS = 12
LEGEND_LETTERS = 20
LABELLED_TARGETS = 15


@dataclass(frozen=True)
class Places:
    """Sites on a map: identifiers, longitude and latitude in decimal degrees, and the group of each (may be blank)."""

    ids: tuple[str, ...]
    longitude: np.ndarray
    latitude: np.ndarray
    group: tuple[str, ...]

    @classmethod
    def none(cls) -> Places:
        return cls((), np.empty(0), np.empty(0), ())


def group_look(number: int) -> tuple[str, str]:
    """Colour and marker of the group with this number; colour and shape both change, so either will do.

    >>> group_look(0) != group_look(8)
    True
    """
    return SERIES[number % len(SERIES)], MARKERS[(number + number // len(SERIES)) % len(MARKERS)]


def draw_study_map(
    gauges: Places,
    used: np.ndarray,
    targets: Places,
    *,
    basins: tuple[Any, ...] = (),
    regions: tuple[Any, ...] = (),
    group_title: str = "Region",
) -> Figure:
    """Draw gauges by group (hollow grey: not used), targets, and light outlines of basins and regions.

    Parameters
    ----------
    gauges, targets : Places
        Sites in EPSG:4326.
    used : ndarray of bool, one per gauge
    basins, regions : tuple of shapely polygons or multipolygons in EPSG:4326
    group_title : str
        What a group is, for the legend.

    Notes
    -----
    One degree of longitude is drawn cos(latitude) times as wide as one of latitude, at the middle of the
    map, so shapes and the scale bar are true there. Longitudes are unwrapped, so that a region on both
    sides of the 180th meridian stays in one piece.
    """
    figure, axes = new_figure(WIDTH, WIDTH)
    figure.set_layout_engine("none")
    centre = central_longitude(np.concatenate([gauges.longitude, targets.longitude]))
    east_gauges, east_targets = (unwrap(place.longitude, centre) for place in (gauges, targets))
    _draw_outlines(axes, _rings(basins), centre, color=MUTED, linewidth=0.5, alpha=0.55)
    _draw_outlines(
        axes, _borders(regions), centre, color=INK, linewidth=1.1, alpha=0.75, linestyle=(0, (6, 3))
    )
    _draw_gauges(axes, gauges, east_gauges, np.asarray(used, dtype=bool))
    _draw_targets(axes, targets, east_targets)
    _frame(figure, axes)
    axes.legend(
        title=group_title if any(gauges.group) else None,
        loc="upper left",
        bbox_to_anchor=(1.01, 1.0),
        borderaxespad=0.0,
        alignment="left",
        frameon=False,
        fontsize=8.5,
        title_fontsize=8.5,
        labelspacing=0.6,
    )
    return figure


def _draw_gauges(axes: Any, gauges: Places, east: np.ndarray, used: np.ndarray) -> None:
    groups = sorted({group for group, keep in zip(gauges.group, used, strict=True) if keep})
    group_of = np.array(gauges.group, dtype=object)
    size = float(np.clip(2600.0 / max(len(gauges.ids), 1), 9.0, 46.0))
    for number, group in enumerate(groups):
        here = used & (group_of == group)
        colour, marker = group_look(number)
        label = (
            _legible(group or "gauge used", f"no. {number + 1}", LEGEND_LETTERS)
            if number < LEGEND_GROUPS
            else None
        )
        axes.scatter(
            east[here],
            gauges.latitude[here],
            s=size,
            c=colour,
            marker=marker,
            edgecolors=PAPER,
            linewidths=0.6,
            label=label,
            zorder=4,
        )
    if len(groups) > LEGEND_GROUPS:
        axes.scatter([], [], s=0, label=f"and {len(groups) - LEGEND_GROUPS} more")
    if (~used).any():
        axes.scatter(
            east[~used],
            gauges.latitude[~used],
            s=size * 0.8,
            facecolors="none",
            edgecolors=MUTED,
            linewidths=1.0,
            label="gauge not used",
            zorder=3,
        )


def _draw_targets(axes: Any, targets: Places, east: np.ndarray) -> None:
    if not targets.ids:
        return
    axes.scatter(
        east,
        targets.latitude,
        s=46,
        marker="P",
        facecolors=PAPER,
        edgecolors=INK,
        linewidths=1.1,
        label="ungauged site",
        zorder=5,
    )
    if len(targets.ids) > LABELLED_TARGETS:
        return
    for name, x, y in zip(targets.ids, east, targets.latitude, strict=True):
        axes.annotate(
            _legible(name, ""), (x, y), xytext=(6, 4), textcoords="offset points", fontsize=7.5, zorder=6
        )


def _draw_outlines(axes: Any, lines: list[np.ndarray], centre: float, **look: Any) -> None:
    from matplotlib.collections import LineCollection

    if lines:
        unwrapped = [np.column_stack([unwrap(line[:, 0], centre), line[:, 1]]) for line in lines]
        axes.add_collection(LineCollection(unwrapped, zorder=1, **look), autolim=True)


def _rings(shapes: tuple[Any, ...]) -> list[np.ndarray]:
    parts = [part for shape in shapes if shape is not None for part in getattr(shape, "geoms", [shape])]
    return [np.asarray(part.exterior.coords)[:, :2] for part in parts if not part.is_empty]


def _borders(shapes: tuple[Any, ...]) -> list[np.ndarray]:
    """Outlines with each shared border once: dashes drawn twice would close to a full line."""
    import shapely

    rings = [shapely.LineString(ring) for ring in _rings(shapes)]
    if not rings:
        return []
    merged = shapely.line_merge(shapely.union_all(rings))
    return [np.asarray(line.coords) for line in getattr(merged, "geoms", [merged])]


def _legible(text: str, instead: str, most: int = 40) -> str:
    """Return the text when the figure's font has all its letters, else what stands for it; never a formula."""
    from matplotlib.font_manager import findfont, get_font

    letters = get_font(findfont("DejaVu Sans")).get_charmap()
    if not all(ord(letter) in letters for letter in text):
        return instead
    short = text if len(text) <= most else text[: most - 1] + "…"
    return short.replace("$", r"\$")


def _frame(figure: Figure, axes: Any) -> None:
    """Fit the frame to the land, between a broad strip and a tall one, and state directions and scale."""
    axes.margins(0.06)
    axes.autoscale_view()
    (west, east), (south, north) = axes.get_xlim(), axes.get_ylim()
    across = max(float(np.cos(np.radians((south + north) / 2.0))), 0.05)
    wide = WIDTH - LEFT - LEGEND
    tall = float(np.clip((north - south) / ((east - west) * across), *PROPORTIONS)) * wide
    figure.set_size_inches(WIDTH, tall + BELOW + ABOVE)
    height = tall + BELOW + ABOVE
    axes.set_position((LEFT / WIDTH, BELOW / height, wide / WIDTH, tall / height))
    degrees_east = max(east - west, (north - south) * wide / tall / across)
    degrees_north = degrees_east * across * tall / wide
    west, south = (west + east - degrees_east) / 2.0, (south + north - degrees_north) / 2.0
    axes.set_xlim(west, west + degrees_east)
    axes.set_ylim(south, south + degrees_north)
    axes.xaxis.set_major_locator(_few_ticks())
    axes.yaxis.set_major_locator(_few_ticks())
    axes.xaxis.set_major_formatter(lambda value, _: format_degrees((value + 180.0) % 360.0 - 180.0, "E", "W"))
    axes.yaxis.set_major_formatter(lambda value, _: format_degrees(value, "N", "S"))
    axes.tick_params(labelsize=8, length=3)
    for side, spine in axes.spines.items():
        spine.set_visible(side in ("top", "right", "bottom", "left"))
        spine.set_color("#c9d1d7")
    _draw_scale_bar(axes, KM_PER_DEGREE * across, tall)


def _few_ticks() -> Any:
    from matplotlib.ticker import MaxNLocator

    return MaxNLocator(nbins=5, steps=[1, 2, 2.5, 5, 10])


def _draw_scale_bar(axes: Any, km_per_degree_east: float, tall: float) -> None:
    """Draw the scale below the frame, where it cannot hide a gauge (``tall``: height of the frame, inches)."""
    from matplotlib.transforms import blended_transform_factory

    west, east = axes.get_xlim()
    length = nice_length((east - west) * km_per_degree_east / 4.0)
    step = length / km_per_degree_east
    place = blended_transform_factory(axes.transData, axes.transAxes)
    for start, colour in ((west, INK), (west + step / 2.0, PAPER)):
        axes.fill_between(
            [start, start + step / 2.0],
            -0.50 / tall,
            -0.44 / tall,
            transform=place,
            facecolor=colour,
            edgecolor=INK,
            linewidth=0.8,
            clip_on=False,
            zorder=7,
        )
    axes.set_xlim(west, east)
    axes.text(
        west + step * 1.06,
        -0.47 / tall,
        f"{length:g} km, north is up",
        transform=place,
        va="center",
        fontsize=8,
        clip_on=False,
    )


def nice_length(km: float) -> float:
    """Largest 1, 2 or 5 times a power of ten that is not longer than ``km``.

    >>> [nice_length(km) for km in (4.9, 5.0, 130.0, 0.3)]
    [2.0, 5.0, 100.0, 0.2]
    """
    power = 10.0 ** np.floor(np.log10(km))
    lead = max(step for step in (1.0, 2.0, 5.0) if step * power <= km * (1 + 1e-9))
    return float(lead * power)


def format_degrees(value: float, positive: str, negative: str) -> str:
    """Word a longitude or latitude.

    >>> format_degrees(-71.5, "E", "W"), format_degrees(0.0, "N", "S")
    ('71.5° W', '0°')
    """
    text = f"{abs(round(value, 6)):g}°"
    return (
        text if round(value, 6) in (-180.0, 0.0, 180.0) else f"{text} {positive if value > 0 else negative}"
    )


def central_longitude(longitude: np.ndarray) -> float:
    """Return the middle of longitudes on the circle, degrees; 0 where there are none."""
    if len(longitude) == 0:
        return 0.0
    angle = np.radians(longitude)
    return float(np.degrees(np.arctan2(np.sin(angle).mean(), np.cos(angle).mean())))


def unwrap(longitude: np.ndarray, centre: float) -> np.ndarray:
    """Return longitudes within 180 degrees of ``centre``, so that a region on both sides of the 180th meridian stays whole."""
    return (np.asarray(longitude, dtype=float) - centre + 180.0) % 360.0 - 180.0 + centre
