"""The page's map and plots as Bokeh models: empty frames that the page's own scripts fill and keep in step."""

from __future__ import annotations

import json
import re
from collections.abc import Mapping, Sequence
from functools import cache
from typing import Any

import numpy as np

from wrackline.report.style import INK, MUTED, RISING, TWO_SIDED, WATER

MAP_HEIGHT, CURVE_HEIGHT, YEARS_HEIGHT = 540, 400, 220
LABELLED_AEPS = (0.9, 0.5, 0.2, 0.1, 0.04, 0.01, 0.002, 0.0001)

LEAST_SKEW_RANGE = 0.35
"""The skew surface is coloured at least this far to both sides of zero: a level map near zero looks level and near zero."""
LEAST_MSE_SHARE = 0.5
"""The error's colours span at least this share of its largest value."""


def frame_items(data: Mapping[str, Any]) -> list[dict[str, Any]]:
    """Return the three frames as Bokeh's JSON items, with identifiers that depend on nothing but their order."""
    from bokeh.core.types import ID
    from bokeh.embed import json_item

    figures = (
        ("map", _map(data["skew"])),
        ("curve", _curve(data["aeps"])),
        ("years", _years()),
    )
    return [_numbered(name, dict(json_item(figure, ID(f"{name}-frame")))) for name, figure in figures]


@cache
def library_script() -> str:
    """Bokeh's own script, for embedding; it fetches nothing."""
    from bokeh.resources import Resources

    script = "\n".join(Resources(mode="inline", components=["bokeh"]).js_raw)
    if "</script" in script.lower():
        raise ValueError("the library's script cannot be embedded as it is")
    return script


def _numbered(name: str, item: dict[str, Any]) -> dict[str, Any]:
    """Replace the library's running numbers, which depend on what the process made before."""
    text = json.dumps(item)
    order: dict[str, str] = {}
    text = re.sub(r'"(p\d+)"', lambda m: f'"{order.setdefault(m[1], f"{name}{len(order)}")}"', text)
    return dict(json.loads(text))


def _figure(name: str, height: int, x_range: Any, y_range: Any, tools: Sequence[Any], **look: Any) -> Any:
    from bokeh.plotting import figure

    frame = figure(
        name=name, height=height, sizing_mode="stretch_width", x_range=x_range, y_range=y_range,
        tools=list(tools), toolbar_location=None, output_backend="canvas", border_fill_color=None,
        background_fill_color=None, outline_line_color=None, min_border_right=12, **look,
    )  # fmt: skip
    for axis in (*frame.xaxis, *frame.yaxis):
        axis.update(axis_line_color=MUTED, major_tick_line_color=MUTED, minor_tick_line_color=None)
        axis.update(
            major_label_text_font_size="12px",
            axis_label_text_font_size="12.5px",
            axis_label_text_font_style="normal",
        )
    return frame


def _source(name: str, **columns: Any) -> Any:
    from bokeh.models import ColumnDataSource

    return ColumnDataSource(name=name, data=columns)


def _add_spans(frame: Any, name: str, across: str, colour: str, width: float) -> None:
    """Add upright lines from ``low`` to ``high`` at the places ``across``; the page fills their source."""
    source = _source(name, **{column: [] for column in (across, "low", "high")})
    frame.segment(
        across, "low", across, "high", source=source, name=name, line_color=colour, line_width=width
    )


def _add_peaks(frame: Any, name: str, across: str, size: float, hover: str) -> None:
    """Add the peaks of the picked site, each with its marker and fill, and what they say under the pointer."""
    columns: dict[str, Any] = {column: [] for column in (across, "flow", "marker", "fill", "label")}
    peaks = frame.scatter(
        across, "flow", source=_source(name, **columns), name=name,
        marker="marker", fill_color="fill", line_color=INK, size=size,
    )  # fmt: skip
    frame.add_tools(_hover(peaks, hover))


def _hover(renderer: Any, name: str) -> Any:
    from bokeh.models import HoverTool

    return HoverTool(name=name, renderers=[renderer], tooltips=[("", "@label")], point_policy="follow_mouse")


def _map(skew: Mapping[str, Any] | None) -> Any:
    from bokeh.models import PanTool, PrintfTickFormatter, Range1d, TapTool, WheelZoomTool

    pan, zoom = PanTool(), WheelZoomTool(modifiers={"ctrl": True}, zoom_on_axis=False)
    frame = _figure(
        "map", MAP_HEIGHT, Range1d(start=0, end=1), Range1d(start=0, end=1), [pan, zoom], lod_threshold=None
    )
    frame.toolbar.active_drag, frame.toolbar.active_scroll = pan, zoom
    frame.grid.visible = False
    for axis in (*frame.xaxis, *frame.yaxis):
        axis.ticker.desired_num_ticks = 4
        axis.formatter = PrintfTickFormatter(format="%g°")
    frame.min_border_left = 52
    for band, palette in (("skew", TWO_SIDED), ("mse", RISING)):
        _add_surface(frame, band, palette, skew)
    frame.patches(
        "xs",
        "ys",
        source=_source("basins", xs=[], ys=[]),
        name="basins",
        fill_color=WATER,
        fill_alpha=0.05,
        line_color=MUTED,
        line_alpha=0.7,
        line_width=0.7,
    )
    frame.patches(
        "xs",
        "ys",
        source=_source("regions", xs=[], ys=[]),
        name="regions",
        fill_color=None,
        line_color=INK,
        line_alpha=0.8,
        line_width=1.6,
        line_dash=[6, 3],
    )
    frame.scatter(
        "x",
        "y",
        source=_source("ring", x=[], y=[]),
        name="ring",
        size=24,
        fill_color=None,
        line_color=INK,
        line_width=2.5,
    )
    columns: dict[str, Any] = {name: [] for name in ("x", "y", "fill", "line", "marker", "size", "label")}
    sites = frame.scatter(
        "x",
        "y",
        source=_source("sites", **columns),
        name="sites",
        marker="marker",
        size="size",
        fill_color="fill",
        line_color="line",
        line_width=1,
    )
    sites.nonselection_glyph = None
    sites.selection_glyph = None
    frame.add_tools(TapTool(renderers=[sites]), _hover(sites, "site hover"))
    return frame


def _add_surface(frame: Any, band: str, palette: Sequence[str], skew: Mapping[str, Any] | None) -> None:
    """Add one band of the skew map as an image in seven classes, hidden until it is asked for."""
    from bokeh.models import LinearColorMapper

    if skew is None:
        return
    values = np.array([np.nan if v is None else v for v in skew[band]], dtype=np.float32)
    image = np.flipud(values.reshape(skew["rows"], skew["columns"]))
    known = values[np.isfinite(values)]
    low, high = float(known.min()), float(known.max())
    if palette is TWO_SIDED:
        far = max(abs(low), abs(high), LEAST_SKEW_RANGE)
        low, high = -far, far
    else:
        room = max(LEAST_MSE_SHARE * high - (high - low), 0.0) / 2
        low, high = low - room, high + room
    mapper = LinearColorMapper(
        name=f"{band} colours", palette=list(palette), low=low, high=high, nan_color="rgba(0,0,0,0)"
    )
    frame.image(
        "image", "x", "y", "dw", "dh", color_mapper=mapper, name=f"{band} surface", alpha=0.75, visible=False,
        source=_source(
            f"{band} surface", image=[image], x=[skew["west"]], y=[skew["north"] - skew["cell"] * skew["rows"]],
            dw=[skew["cell"] * skew["columns"]], dh=[skew["cell"] * skew["rows"]],
        ),
    )  # fmt: skip


def _curve(aeps: Sequence[Mapping[str, Any]]) -> Any:
    """Floods against probability: the horizontal axis is normal, the vertical one logarithmic."""
    from bokeh.models import FixedTicker, Range1d
    from scipy.special import ndtri

    places = {round(float(-ndtri(p)), 4): f"{100 * p:g}\u202f%" for p in LABELLED_AEPS}
    span = [one["z"] for one in aeps] or [0.0]
    frame = _figure(
        "curve", CURVE_HEIGHT, Range1d(start=min(*span, -1.4) - 0.1, end=max(*span, 2.4) + 0.15), Range1d(start=1, end=10), [],
        y_axis_type="log", x_axis_label="annual exceedance probability", y_axis_label="flow",
    )  # fmt: skip
    frame.min_border_left = 60
    frame.xaxis.ticker = FixedTicker(ticks=sorted(places))
    frame.xaxis.major_label_overrides = {place: text for place, text in places.items()}
    frame.varea(
        "x",
        "lower",
        "upper",
        source=_source("band", x=[], lower=[], upper=[]),
        name="band",
        fill_alpha=0.2,
        fill_color=WATER,
    )
    frame.multi_line(
        "xs",
        "ys",
        source=_source("lines", xs=[], ys=[], colour=[], width=[], dash=[]),
        name="lines",
        line_color="colour",
        line_width="width",
        line_dash="dash",
    )
    _add_spans(frame, "spans", "z", INK, 1.2)
    _add_peaks(frame, "peaks", "z", 7, "peak hover")
    return frame


def _years() -> Any:
    """Peaks by water year, with the floods that would have left no record shaded."""
    from bokeh.models import NumeralTickFormatter, Range1d

    frame = _figure(
        "years",
        YEARS_HEIGHT,
        Range1d(start=1900, end=2000),
        Range1d(start=0, end=1),
        [],
        x_axis_label="water year",
        y_axis_label="flow",
    )
    frame.xaxis.formatter = NumeralTickFormatter(format="0")
    frame.xgrid.visible = False
    frame.quad(
        left="left",
        right="right",
        bottom="bottom",
        top="top",
        source=_source("unseen", left=[], right=[], bottom=[], top=[]),
        name="unseen",
        fill_alpha=0.35,
        fill_color=MUTED,
        line_color=None,
    )
    _add_spans(frame, "stems", "year", WATER, 1.3)
    _add_peaks(frame, "dots", "year", 6, "year hover")
    return frame
