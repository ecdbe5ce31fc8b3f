"""The look of the study's figures: one palette, one type size, bytes that depend on the data alone."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from matplotlib.figure import Figure

INK = "#22303c"
PAPER = "#ffffff"
MUTED = "#8a97a3"
WATER = "#1f6f8b"
WARM = "#c8553d"
SAND = "#e3c878"
MOSS = "#5b8c5a"
PLUM = "#7a4e7e"
SERIES = (WATER, WARM, MOSS, PLUM, "#b8860b", "#4b5d9b", "#9c6644", "#2a9d8f")
"""Colours for regions and pools, told apart by lightness as well as by hue; pair them with MARKERS."""
MARKERS = ("o", "s", "^", "D", "v", "P", "X", "h")

RC: Any = {
    "figure.dpi": 100,
    "savefig.dpi": 144,
    "font.size": 9.5,
    "font.family": "DejaVu Sans",
    "axes.edgecolor": INK,
    "axes.labelcolor": INK,
    "text.color": INK,
    "xtick.color": INK,
    "ytick.color": INK,
    "axes.spines.top": False,
    "axes.spines.right": False,
    "axes.grid": True,
    "grid.color": "#e4e9ed",
    "grid.linewidth": 0.7,
    "axes.axisbelow": True,
    "legend.frameon": False,
    "svg.hashsalt": "wrackline",
    "figure.constrained_layout.use": True,
}


def new_figure(width: float = 7.2, height: float = 4.4, **subplots: Any) -> tuple[Figure, Any]:
    """Return a figure and its axes in the study's style (inches); no display and no global state needed."""
    import matplotlib

    with matplotlib.rc_context(RC):
        from matplotlib.figure import Figure

        figure = Figure(figsize=(width, height))
        axes = figure.subplots(**subplots)
    return figure, axes


def save_figure(figure: Figure, path: Path) -> None:
    """Save as PNG or SVG by the ending, without dates, so that equal data give equal bytes."""
    import matplotlib

    path.parent.mkdir(parents=True, exist_ok=True)
    metadata = {"Date": None} if path.suffix == ".svg" else {"Software": None}
    with matplotlib.rc_context(RC):
        figure.savefig(path, metadata=metadata)
