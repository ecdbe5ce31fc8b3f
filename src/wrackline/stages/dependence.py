"""Dependence: how strongly the peaks of two gauges go together, as a function of their distance."""

from __future__ import annotations

import numpy as np
import pandas as pd

from wrackline.hydrology.dependence import Dependence, DistanceModel, fit_dependence
from wrackline.report.figures_dependence import draw_correlation_with_distance
from wrackline.report.rounding import format_count, format_significant
from wrackline.stages.running import StudyFiles, main
from wrackline.study.contribution import Contribution, Figure, PageTable, Section, to_json, write_contribution
from wrackline.study.faults import Fault
from wrackline.study.handover import read_records, read_sites
from wrackline.study.tables import Column, Table, write_text

TABLE_BINS = 20
MODEL_COLUMNS = (
    Column("form", "text", "form of the curve: exponential, box_cox, or independent (no curve)"),
    Column("adopted", "true/false", "the form in use"),
    Column("a", "1", "coefficient a of Z = exp(a - b D), Fisher z of the correlation"),
    Column("b", "1/km", "coefficient b; of the Box-Cox distance in that form"),
    Column("exponent", "1", "exponent of the distance in the Box-Cox form (D^exponent - 1) / exponent"),
    Column("minimum_common_years", "years", "years that a pair of gauges must share to be fitted"),
    Column("pairs", "count", "pairs of gauges fitted"),
    Column("weighted_sse", "1", "sum of (common years - 3) times the squared residual of z"),
    Column(
        "reduced_chi2", "1", "the same over the degrees of freedom; pairs share gauges, so it need not be 1"
    ),
    Column("pseudo_r2", "fraction", "share of the weighted scatter of z that the curve explains"),
    Column("average_correlation", "1", "mean correlation by the curve over all pairs of used gauges"),
)
BIN_COLUMNS = (
    Column("distance_lower_km", "km", "lower edge of the bin of centroid distance"),
    Column("distance_upper_km", "km", "upper edge"),
    Column("mean_distance_km", "km", "weighted mean distance of the pairs fitted"),
    Column("pairs", "count", "pairs of gauges with enough common years"),
    Column("mean_common_years", "years", "mean number of common years"),
    Column("correlation", "1", "correlation at the weighted mean of Fisher z"),
    Column("correlation_lower", "1", "the same one standard deviation of z lower"),
    Column("correlation_upper", "1", "the same one standard deviation of z higher"),
    Column("fitted_correlation", "1", "correlation by the fitted curve at the mean distance"),
)
PAGE_BIN_COLUMNS = (
    "distance_lower_km",
    "distance_upper_km",
    "pairs",
    "mean_common_years",
    "correlation",
    "fitted_correlation",
)


def run(study: StudyFiles) -> str:
    """Fit the correlation of concurrent peaks to the used records; write ``work/dependence``."""
    screen = read_sites(study.work("screen") / "gauges.csv")
    used = screen.loc[screen["used"], "gauge_id"].tolist()
    sites = read_sites(study.work("intake") / "gauges.csv").set_index("gauge_id").loc[used]
    settings = study.config.dependence
    found = fit_dependence(
        read_records(study.work("screen") / "records.csv", used),
        sites["centroid_latitude"].to_numpy(dtype=float),
        sites["centroid_longitude"].to_numpy(dtype=float),
        settings.minimum_common_years,
        settings.fallback_common_years,
    )
    bins = bins_table(found)
    folder = study.work("dependence")
    write_text(
        folder / "model.json",
        to_json({**found.model.to_dict(), "average_correlation": found.average_correlation}),
    )
    draw_correlation_with_distance(found, bins, folder / "figures" / "correlation_distance.png")
    write_contribution(folder, _contribution(found, bins))
    return f"{found.model.form} curve from {format_count(found.model.n_pairs)} pairs, average correlation {found.average_correlation:.2f}"


def model_table(found: Dependence) -> pd.DataFrame:
    """Return the adopted form and the other one, a row each."""
    models = [found.model] + ([found.rejected] if found.rejected is not None else [])
    rows = [
        {
            **model.to_dict(),
            "exponent": model.exponent if model.form == "box_cox" else np.nan,
            "a": model.a if model.form != "independent" else np.nan,
            "b": model.b if model.form != "independent" else np.nan,
            "adopted": model is found.model,
            "average_correlation": found.average_correlation if model is found.model else np.nan,
        }
        for model in models
    ]
    return pd.DataFrame(rows, columns=[column.name for column in MODEL_COLUMNS])


def bins_table(found: Dependence) -> pd.DataFrame:
    """Return Fisher z in twenty bins of equal width up to the farthest pair fitted; empty bins have no row."""
    narrow = found.bins
    filled = np.flatnonzero(narrow.pairs)
    if len(filled) == 0:
        return pd.DataFrame(columns=[column.name for column in BIN_COLUMNS], dtype=float)
    per_bin = -(-(filled[-1] + 1) // TABLE_BINS)
    wide = np.arange(len(narrow.pairs)) // per_bin
    width = per_bin * (narrow.edges[1] - narrow.edges[0])
    n_wide = wide[-1] + 1
    names = ("pairs", "common", "weight", "distance", "z", "z_squared")
    sums = {name: np.bincount(wide, getattr(narrow, name), n_wide) for name in names}
    some = np.flatnonzero(sums["pairs"])
    pairs, common, weight, distance, z, z_squared = (sums[name][some] for name in names)
    mean_distance, mean_z = distance / weight, z / weight
    spread = np.sqrt(np.maximum(z_squared / weight - mean_z**2, 0.0))
    return pd.DataFrame(
        {
            "distance_lower_km": some * width,
            "distance_upper_km": (some + 1) * width,
            "mean_distance_km": mean_distance,
            "pairs": pairs.astype(np.int64),
            "mean_common_years": common / pairs,
            "correlation": np.tanh(mean_z),
            "correlation_lower": np.tanh(mean_z - spread),
            "correlation_upper": np.tanh(mean_z + spread),
            "fitted_correlation": found.model.correlation(mean_distance),
        }
    )


def _contribution(found: Dependence, bins: pd.DataFrame) -> Contribution:
    figure = Figure(
        "correlation_distance.png",
        "Correlation of concurrent annual peaks against the distance between basin centroids.",
        "Density of pairs, means of bins of distance with their spread, and the fitted curve. "
        + _falls_from_to(found.model, bins),
    )
    page_bins = tuple(
        (
            f"{format_significant(lower)} to {format_significant(upper)}",
            format_count(int(pairs)),
            f"{years:.0f}",
            f"{correlation:.2f}",
            f"{fitted:.2f}",
        )
        for lower, upper, pairs, years, correlation, fitted in bins[list(PAGE_BIN_COLUMNS)].to_numpy(
            dtype=float
        )
    )
    section = Section(
        key="dependence",
        title="Dependence between gauges",
        paragraphs=tuple(_sentences(found, bins)),
        figures=(figure,),
        tables=(
            PageTable(
                "Correlation of concurrent peaks by distance.",
                ("distance, km", "pairs", "common years", "correlation", "fitted"),
                page_bins,
                "tables/concurrent_correlation_bins.csv",
            ),
        )
        if page_bins
        else (),
        method=(
            "Pearson correlation of the log10 peaks of the years that two gauges share; Fisher's z weighted by the "
            "common years less three (Fisher, 1921); Z = exp(a - b D) by weighted nonlinear least squares, D between "
            "basin centroids. The Box-Cox distance is taken only if it is clearly better: gauges times the logarithm "
            "of the ratio of weighted squares above 2.71 (chi-square, one degree of freedom, 10 %).",
            "Correlations of single pairs never enter a covariance; the fitted curve does.",
        ),
    )
    faults = tuple(Fault(code, "warning", "dependence", text) for code, text in found.warnings)
    tables = (
        Table("concurrent_correlation_model", model_table(found), MODEL_COLUMNS),
        Table("concurrent_correlation_bins", bins, BIN_COLUMNS),
    )
    return Contribution("dependence", tables, (section,), faults)


def _sentences(found: Dependence, bins: pd.DataFrame) -> list[str]:
    model = found.model
    told = [text for _, text in found.warnings]
    if model.form == "independent":
        return told
    names = {"exponential": "exponential", "box_cox": "Box-Cox"}
    sentences = [
        f"{format_count(model.n_pairs)} pairs of gauges share at least {model.minimum_common_years} years of peaks. "
        + _falls_from_to(model, bins)
        + f" Over all pairs of gauges it averages {found.average_correlation:.2f}.",
        f"The curve explains {100 * model.pseudo_r2:.0f} % of the weighted scatter of Fisher's z; its reduced "
        f"chi-square is {model.reduced_chi2:.2f} (pairs share gauges, so it need not be 1).",
    ]
    if found.rejected is not None:
        less = 100 * (
            1
            - min(model.weighted_sse, found.rejected.weighted_sse)
            / max(model.weighted_sse, found.rejected.weighted_sse)
        )
        better = "leaves" if model.form == "box_cox" else "would leave"
        sentences.append(
            f"The {names[model.form]} form was taken; the Box-Cox form {better} {less:.1f} % less weighted scatter "
            f"than the exponential one, which is {'' if model.form == 'box_cox' else 'not '}clearly better."
        )
    if found.n_zero:
        sentences.append(f"{format_count(found.n_zero)} zero flows have no logarithm and were left out here.")
    return sentences + told


def _falls_from_to(model: DistanceModel, bins: pd.DataFrame) -> str:
    if bins.empty or model.form == "independent":
        return ""
    near, far = bins["mean_distance_km"].iloc[0], bins["mean_distance_km"].iloc[-1]
    at_near, at_far = model.correlation([near, far])
    return (
        f"The fitted correlation is {at_near:.2f} at {format_significant(near)} km and {at_far:.2f} at "
        f"{format_significant(far)} km."
    )


if __name__ == "__main__":
    main("dependence", run)
