"""Page section of the stage `skew`: which model, why, how precise, and which gauges steer it."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np
import pandas as pd

from wrackline.hydrology.skew_candidates import CLOSE_EVIDENCE, REAL_EVIDENCE, Comparison, SkewCandidate
from wrackline.report.rounding import format_percent, format_significant
from wrackline.stages.skew_material import SkewMaterial
from wrackline.study.config import StudyConfig
from wrackline.study.contribution import Figure, PageTable, Section
from wrackline.study.tables import Table

MOST_ROWS = 25
FIGURES = {
    "skew_map.png": (
        "Left: generalized skew, with the gauges of the model: triangles up where a gauge's own skew lies above the model's, "
        "down where below, larger the farther. Right: its mean square error.",
        "Two maps of the region: generalized skew, and its mean square error, with gauges.",
    ),
    "skew_gauges.png": (
        "Station skews, corrected for bias, against pseudo record length. Line: mean of the model. Band: where nine in ten "
        "would lie if gauges differed by sampling alone.",
        "Scatter of station skews against years of record, with a band that narrows to the right.",
    ),
    "skew_candidates.png": (
        "Evidence of every model over one constant for all. Bars: logarithm of how much more probable the station skews are; "
        "red marks: what a bar must exceed. Dots: gain in the leave-one-out log score with one standard error.",
        "Bar chart of the evidence of the skew models over the constant.",
    ),
    "skew_covariates.png": (
        "Station skews against the attributes of the model; larger dots are better known.",
        "Scatter of station skew against the attributes in the model with the fitted line.",
    ),
}


def skew_section(
    config: StudyConfig,
    material: SkewMaterial,
    comparison: Comparison | None,
    tables: Sequence[Table],
    model: dict[str, Any],
    figures: Sequence[str],
    reach_km: float,
) -> Section:
    """Return the page's section on the generalized skew."""
    frames = {table.name: table.frame for table in tables}
    if comparison is None:
        paragraphs = _given(config, material)
        shown: tuple[PageTable, ...] = ()
    else:
        paragraphs = [
            _who_serves(config, material),
            _which_model(config, comparison),
            _how_precise(comparison, model),
            *_who_steers(material, comparison),
        ]
        shown = (
            _candidate_rows(frames["skew_candidates"]),
            *_coefficient_rows(comparison, model),
            *_steering_rows(frames["skew_gauges"]),
        )
    paragraphs += [*_map_words(config, comparison, figures, reach_km), *_causes(frames["skew_by_cause"])]
    return Section(
        key="skew",
        title="Generalized skew",
        paragraphs=tuple(paragraphs),
        figures=tuple(Figure(name, *FIGURES[name]) for name in figures),
        tables=shown,
        method=tuple(_method(config, comparison)),
    )


def _who_serves(config: StudyConfig, material: SkewMaterial) -> str:
    n, years = len(material.serve), material.measured.record_length[material.serve]
    out = [reason for reason in material.reasons if reason]
    short = sum(reason.startswith("its record is worth") for reason in out)
    flagged = sum(reason.startswith("flagged by") for reason in out)
    unused = sum(reason.startswith("not used") for reason in out)
    left = [
        f"{count} {words}"
        for count, words in (
            (unused, "are not used by the screening"),
            (short, f"have records worth fewer than {config.skew.minimum_record_years:g} years"),
            (flagged, "are flagged for trend or change"),
            (len(out) - unused - short - flagged, "have no station skew"),
        )
        if count
    ]
    text = (
        f"{n} of {material.n_gauges} gauges shape the generalized skew. Their records are worth {years.min():.0f} to "
        f"{years.max():.0f} years of complete record, {np.median(years):.0f} in the middle."
    )
    return text + (f" Of the others {', '.join(left)}." if left else "")


def _which_model(config: StudyConfig, comparison: Comparison) -> str:
    chosen, others = comparison.chosen, comparison.candidates[1:]
    what = _what(chosen)
    if config.skew.model:
        text = f"The model is fixed by the study: {what}. Reason given: {config.skew.why}"
        text += "" if text.endswith(".") else "."
        evidence = next(c for c in comparison.candidates if c.plan.name == comparison.evidence)
        same = comparison.evidence == chosen.plan.name
        return text + (
            " The evidence would choose the same."
            if same
            else f" The evidence would choose {_what(evidence)}."
        )
    if chosen.plan.kind == "constant":
        if not others:
            return f"The model is {what}; no other was tried."
        best = max(others, key=lambda c: c.log_evidence - c.required_evidence)
        text = f"The model is {what}. Of {len(others)} others tried, '{best.plan.name}' came nearest to replacing it: "
        if best.log_evidence > best.required_evidence:
            return text + (
                f"its log evidence over the constant is {best.log_evidence:.1f} with {best.required_evidence:.1f} needed, but it "
                f"predicts station skews that are left out worse (log score {best.gain:+.1f})."
            )
        return text + (
            f"its log evidence over the constant is {best.log_evidence:.1f}, and {best.required_evidence:.1f} were needed. "
            "Differences between the station skews are no more than short records and shared floods bring about."
        )
    return (
        f"The model is {what}. The station skews are {_odds(chosen.log_evidence)} more probable under it than under one "
        f"constant (log evidence {chosen.log_evidence:.1f}, needed {chosen.required_evidence:.1f}), and it predicts station "
        f"skews that are left out better (log score {chosen.gain:+.1f}, standard error {chosen.gain_se:.1f})."
    )


def _odds(log_evidence: float) -> str:
    return f"{format_significant(float(np.exp(min(log_evidence, 20.0))), 2)} times"


def _what(candidate: SkewCandidate) -> str:
    plan, b = candidate.plan, candidate.model.coefficients
    if plan.kind == "constant":
        return f"one constant, {b[0]:.2f}, for the whole region"
    if plan.kind == "region":
        levels = ", ".join(f"{value:.2f} in {name}" for name, value in zip(plan.regions, b, strict=True))
        return f"a constant for every region: {levels}"
    if plan.kind == "surface":
        return f"a surface about {b[0]:.2f} on which neighbouring gauges inform each other"
    return f"a regression on {' and '.join(plan.columns[1:])}"


def _how_precise(comparison: Comparison, model: dict[str, Any]) -> str:
    chosen = comparison.chosen
    years = chosen.effective_record_length
    text = (
        f"At a new site its mean square error is {chosen.prediction_variance_new:.3f} on average (average variance of "
        f"prediction; {chosen.prediction_variance_old:.3f} at the gauges of the model), a standard error of "
        f"{np.sqrt(chosen.prediction_variance_new):.2f}"
    )
    text += f"; a record of {years:.0f} years would know its skew as well." if np.isfinite(years) else "."
    if "range_km" in model and model["range_km"] > 0:
        return text + f" Departures from the mean fade over {model['range_km']:.0f} km (a factor of e)."
    return text + (
        f" The model-error variance is {model['model_variance']:.3f} ({model['model_variance_lower']:.3f} to "
        f"{model['model_variance_upper']:.3f} with 90 % probability; {model['model_variance_moments']:.3f} by moments, "
        f"{model['model_variance_reml']:.3f} by restricted likelihood). Sampling errors of the station skews are "
        f"{model['error_variance_ratio']:.1f} times as large; that gauges share floods makes the variance of the constant "
        f"{model['beta_variance_misrepresentation']:.1f} times what independent gauges would give."
    )


def _who_steers(material: SkewMaterial, comparison: Comparison) -> list[str]:
    found = comparison.chosen.diagnostics
    if found is None:
        return []
    ids = material.moments["gauge_id"].to_numpy()[material.serve]
    strong = np.flatnonzero(found.high_influence)
    strong = strong[np.argsort(-found.influence[strong], kind="stable")]
    if len(strong) == 0:
        return ["No gauge has unusual influence on it."]
    listed = ", ".join(f"{ids[i]} ({comparison.chosen.model.stations.skew[i]:+.2f})" for i in strong[:8])
    more = f" and {len(strong) - 8} more" if len(strong) > 8 else ""
    return [
        f"{len(strong)} gauges have unusual influence (their skews in brackets): {listed}{more}. Check their records."
    ]


def _given(config: StudyConfig, material: SkewMaterial) -> list[str]:
    settings = config.skew
    if settings.source == "constant":
        return [
            f"The study was given a generalized skew of {settings.given_skew:g} with a mean square error of {settings.given_mse:g}; "
            f"no model was fitted. Reason given: {settings.why}"
        ]
    if settings.source == "map":
        return [
            f"The generalized skew and its mean square error were read from {settings.given_map}, at the basins' centroids; no "
            f"model was fitted. Reason given: {settings.why}"
        ]
    return [
        f"Only {len(material.serve)} gauges could shape a generalized skew; none was fitted, and the fits keep their station skews."
    ]


def _map_words(
    config: StudyConfig, comparison: Comparison | None, figures: Sequence[str], reach_km: float
) -> list[str]:
    if "skew_map.png" not in figures:
        return []
    behind = "gauge of the model" if comparison is not None else "site of the study"
    text = f"The map (maps/skew.tif: band 1 skew, band 2 mean square error) is blank farther than {reach_km:.0f} km from every {behind}"
    text += " and outside the regions' polygons." if config.inputs.regions else "."
    if comparison is not None and comparison.chosen.plan.kind == "regression":
        text += (
            " A cell has the attributes of the smallest basin that covers it, else of the nearest one; it is blank where they lie beyond "
            "the range of the gauges."
        )
    if comparison is not None and comparison.chosen.plan.kind == "surface":
        text += " A basin's own value is the mean over its polygon, at its centroid where it has none."
    if comparison is not None and comparison.chosen.plan.kind == "region":
        text += " A basin that reaches into several regions has their levels in proportion to its area."
    return [text]


def _causes(causes: pd.DataFrame) -> list[str]:
    known = causes[~causes["cause"].isin(["unknown", ""])]
    if known.empty:
        return []
    peaks = known.groupby("cause")["n_peaks"].sum()
    largest = known[known["largest_rank"] == 1].groupby("cause").size()
    total, tops = int(peaks.sum()), int(largest.sum())
    parts = [
        f"{name.replace('_', ' ')} {format_percent(peaks[name] / total, 2)} of peaks"
        + (f" and {format_percent(largest.get(name, 0) / tops, 2)} of the largest" if tops else "")
        for name in sorted(peaks.index, key=lambda n: (-peaks[n], n))
    ]
    return [
        "Causes of floods, where they are known: "
        + "; ".join(parts)
        + ". Skews by cause are in the table skew_by_cause: where "
        "a rare cause makes the largest floods, one skew cannot stand for all."
    ]


def _candidate_rows(frame: pd.DataFrame) -> PageTable:
    def number(value: Any, digits: int) -> str:
        return "" if pd.isna(value) else f"{value:.{digits}f}"

    candidates: list[Any] = list(frame.itertuples())
    rows = tuple(
        (
            row.model + (" (in use)" if row.in_use else ""),
            number(row.model_variance, 3),
            number(row.avp_new, 3),
            number(row.avp_old, 3),
            number(row.effective_record_length, 0),
            number(row.pseudo_r2, 2),
            number(row.smallest_ratio, 1),
            number(row.log_evidence, 1),
            number(row.log_score_gain, 1),
            row.remark,
        )
        for row in candidates
    )
    head = (
        "model", "model-error variance", "AVP new", "AVP old", "effective years", "pseudo R²", "b / s.e.",
        "log evidence", "log score gained", "remark",
    )  # fmt: skip
    return PageTable(
        "Models of generalized skew (AVP: average variance of prediction).",
        head,
        rows,
        "tables/skew_candidates.csv",
    )


def _coefficient_rows(comparison: Comparison, model: dict[str, Any]) -> tuple[PageTable, ...]:
    rows = tuple(
        (name, f"{b:.3f}", f"{se:.3f}")
        for name, b, se in zip(model["columns"], model["coefficients"], model["coefficient_se"], strict=True)
    )
    caption = "Coefficients of the model in use."
    return (PageTable(caption, ("term", "coefficient", "standard error"), rows, "tables/skew_model.json"),)


def _steering_rows(frame: pd.DataFrame) -> tuple[PageTable, ...]:
    steer = frame[frame["high_influence"] | frame["high_leverage"]]
    if steer.empty:
        return ()
    steer = steer.sort_values(["influence", "gauge_id"], ascending=[False, True]).head(MOST_ROWS)
    gauges: list[Any] = list(steer.itertuples())
    rows = tuple(
        (
            row.gauge_id,
            f"{row.pseudo_record_length:.0f}",
            f"{row.skew:.2f}",
            f"{row.residual:.2f}",
            f"{row.leverage:.3f}",
            "" if pd.isna(row.influence) else f"{row.influence:.3f}",
        )
        for row in gauges
    )
    head = ("gauge", "pseudo record, years", "skew", "residual", "leverage", "influence")
    return (PageTable("Gauges with high leverage or influence.", head, rows, "tables/skew_gauges.csv"),)


def _method(config: StudyConfig, comparison: Comparison | None) -> list[str]:
    words = [
        "Pseudo record length: systematic years times the mean square error of the skew from them alone over that from the whole "
        "record, both at the station's skew (Veilleux, 2011); at most the years in the fit.",
    ]
    if comparison is None:
        return words
    return [
        "Station skews times 1 + 6 / P (Tasker and Stedinger, 1986); their variances by Griffis and Stedinger (2009) at the skew of "
        "an ordinary regression, so that no gauge weighs itself; correlated as the cube of the fitted correlation of floods times "
        "the share of common years (Martins and Stedinger, 2002).",
        *words,
        "Coefficients by weighted least squares, their precision and the model-error variance by generalized least squares with "
        "the full sampling covariance: the posterior mean given the coefficients, exponential prior with mean 0.1 (Reis, Stedinger and "
        "Martins, 2005; Veilleux, Stedinger and Eash, 2012). The surface: best linear unbiased prediction with model errors that "
        "are correlated over distance.",
        f"Choice of model: another than the constant needs a log evidence above {REAL_EVIDENCE:g} (odds of 7 to 1; regressions also the "
        "logarithm of the number tried) and a leave-one-out log score that is not lower; of those the one with the fewest "
        f"parameters, unless another has {CLOSE_EVIDENCE:g} more. The average variance of prediction is printed but does not decide: a "
        "constant for regions that differ takes part of the difference for shared sampling error, and then looks more precise than it is.",
        "A gauge of the model gets the generalized skew of the model without it, with that prediction's variance: otherwise its own "
        "record would count twice in its fit.",
    ]
