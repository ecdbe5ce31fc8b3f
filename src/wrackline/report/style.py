"""The look of the study's figures: one palette, one type size, bytes that depend on the data alone."""

from __future__ import annotations

from collections.abc import Iterator
from contextlib import contextmanager
from contextvars import ContextVar
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
TWO_SIDED = ("#14506b", "#4a86a0", "#9dbfca", "#e9e4d8", "#dfa789", "#bf6a4b", "#8a3423")
"""Blue to rust through light sand: told apart by people with any colour vision; strong ends are both dark."""
RISING = ("#f0e3b8", "#d2cf9a", "#a3b98b", "#719e86", "#468080", "#276072", "#163f5a")
"""Light to dark in even steps of lightness, so it reads in grey print too."""

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


_wanted: ContextVar[bool] = ContextVar("figures_wanted", default=True)


@contextmanager
def without_figures() -> Iterator[None]:
    """Save no figure inside: for runs whose numbers alone are wanted."""
    token = _wanted.set(False)
    try:
        yield
    finally:
        _wanted.reset(token)


def save_figure(figure: Figure, path: Path) -> None:
    """Save as PNG or SVG by the ending, without dates, so that equal data give equal bytes."""
    if not _wanted.get():
        return
    import matplotlib

    path.parent.mkdir(parents=True, exist_ok=True)
    metadata = {"Date": None} if path.suffix == ".svg" else {"Software": None}
    with matplotlib.rc_context(RC):
        figure.savefig(path, metadata=metadata)
