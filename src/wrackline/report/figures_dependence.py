"""The figure of correlation against distance."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pandas as pd

from wrackline.hydrology.dependence import Dependence
from wrackline.report.style import INK, MUTED, WARM, WATER, new_figure, save_figure

FORM_WORDS = {"exponential": "exponential", "box_cox": "Box-Cox distance", "independent": "independent"}


def draw_correlation_with_distance(dependence: Dependence, bins: pd.DataFrame, path: Path) -> None:
    """Draw the density of pairs, the mean correlation of bins of distance with its spread, and the fitted curve.

    ``bins`` is the table of the stage: ``mean_distance_km``, ``correlation``, ``correlation_lower``, ``correlation_upper``.
    """
    from matplotlib.colors import LinearSegmentedColormap

    figure, axes = new_figure(height=4.0)
    density = dependence.bins.density.astype(float)
    edges = dependence.bins.edges
    if density.any():
        columns = np.linspace(edges[0], edges[-1], density.shape[0] + 1)
        rows = np.linspace(-1, 1, density.shape[1] + 1)
        fade = LinearSegmentedColormap.from_list("pairs", ["#dfe5ea", "#5d6b78"])
        density[density == 0] = np.nan
        mesh = axes.pcolormesh(columns, rows, density.T, cmap=fade, rasterized=True)
        figure.colorbar(mesh, ax=axes, label="pairs of gauges", pad=0.01, shrink=0.8)
        reach = columns[1:][np.isfinite(density).any(axis=1)].max()
    else:
        reach = edges[-1]
    if len(bins):
        center = bins["correlation"].to_numpy()
        spread = np.abs(bins[["correlation_lower", "correlation_upper"]].to_numpy().T - center)
        axes.errorbar(
            bins["mean_distance_km"], center, yerr=spread, fmt="o", color=INK, markersize=4, elinewidth=0.9,
            capsize=2, label="mean of the pairs in a bin, and one standard deviation",
        )  # fmt: skip
    d = np.linspace(0, reach, 300)
    axes.plot(
        d,
        dependence.model.correlation(d),
        color=WARM,
        linewidth=2,
        label=f"fitted ({FORM_WORDS[dependence.model.form]})",
    )
    if dependence.rejected is not None:
        axes.plot(
            d,
            dependence.rejected.correlation(d),
            color=WATER,
            linewidth=1.2,
            linestyle="--",
            label=f"not taken ({FORM_WORDS[dependence.rejected.form]})",
        )
    axes.axhline(0, color=MUTED, linewidth=0.8)
    axes.set_xlim(0, reach)
    axes.set_ylim(-0.6 if len(bins) else -1, 1)
    axes.set_xlabel("distance between basin centroids, km")
    axes.set_ylabel("correlation of log10 peaks")
    axes.legend(loc="upper right", fontsize=8, frameon=False)
    save_figure(figure, path)
