"""Figures of the validation."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pandas as pd

from wrackline.report.style import INK, WARM, WATER, new_figure, save_figure
from wrackline.study.config import StudyConfig


def draw_validation(path: Path, table: pd.DataFrame, route: str, config: StudyConfig) -> None:
    """Draw leave-one-out estimates of the adopted route against the records, for a common and a rare flood."""
    aeps = np.sort(table["aep"].unique())
    shown = sorted(
        {float(aeps[np.argmin(np.abs(np.log(aeps / wanted)))]) for wanted in (0.5, 0.01)}, reverse=True
    )
    figure, axes = new_figure(8.6, 4.2, ncols=len(shown), squeeze=False)
    for panel, aep in zip(axes[0], shown, strict=True):
        rows = table[(table["route"] == route) & (table["aep"] == aep)]
        hit = rows["covered"].to_numpy(dtype=bool)
        observed, predicted = rows["observed"].to_numpy(), rows["predicted"].to_numpy()
        for chosen, colour, marker, label in (
            (hit, WATER, "o", "interval holds the record"),
            (~hit, WARM, "D", "interval misses"),
        ):
            panel.scatter(observed[chosen], predicted[chosen], s=18, color=colour, marker=marker, label=label)
        if len(rows):
            ends = [min(observed.min(), predicted.min()) / 1.3, max(observed.max(), predicted.max()) * 1.3]
            panel.plot(ends, ends, color=INK, linewidth=1)
        panel.set(
            xscale="log",
            yscale="log",
            title=f"AEP {aep:g}",
            xlabel=f"flood from the record, {config.units.flow}",
            ylabel=f"estimate without the gauge, {config.units.flow}",
        )
        panel.legend(loc="upper left")
    save_figure(figure, path)
