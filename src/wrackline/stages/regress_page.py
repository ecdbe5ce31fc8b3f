"""What the page says about the regressions."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from wrackline.hydrology.attribute_choice import AttributeChoice
from wrackline.hydrology.quantile_regression import order_floods, standard_error_percent
from wrackline.report.rounding import format_aep, format_flow, format_percent, format_significant
from wrackline.stages.gauge_floods import UsedGauges
from wrackline.study.config import StudyConfig
from wrackline.study.contribution import Figure, PageTable, Section
from wrackline.study.faults import Fault, FaultLog

if TYPE_CHECKING:
    from wrackline.stages.regress import IndexEquation, QuantileEquations


def regress_warnings(
    gauges: UsedGauges, index: IndexEquation, quantiles: QuantileEquations | None
) -> list[Fault]:
    """Warn of high leverage, large residuals, influence, spatial structure and crossing floods."""
    faults = FaultLog()
    ids = np.array(gauges.gauge_ids, dtype=object)
    n, k = len(index.fit.fitted), len(index.fit.coefficients)
    own = ids[index.in_fit]
    for i in np.flatnonzero(index.fit.leverage > 3 * k / n):
        faults.warning(
            "high_leverage", "regress",
            f"gauge {own[i]} has leverage {index.fit.leverage[i]:.2f} in the index-flood regression, over three times the average of {k / n:.2f}",
            "Check its attributes: its flood steers the equation.",
        )  # fmt: skip
    scale = np.sqrt(index.fit.model_variance + index.fit.sampling_variance)
    for i in np.flatnonzero(np.abs(index.fit.residuals) > 3 * scale):
        faults.warning(
            "large_residual", "regress",
            f"the index flood of gauge {own[i]} is {10 ** index.fit.residuals[i]:.2f} times its regression estimate",
            "Check its area, attributes and units, and whether the gauge belongs to the study.",
        )  # fmt: skip
    if quantiles:
        _warn_of_quantiles(ids, quantiles, faults)
    return faults.warnings


def _warn_of_quantiles(ids: np.ndarray, quantiles: QuantileEquations, faults: FaultLog) -> None:
    from wrackline.stages.regress import rare_place

    regression = quantiles.regression
    place = rare_place(regression.aeps)
    fit, own = regression.fits[place], ids[quantiles.in_fit]
    strong = np.flatnonzero(fit.influence > 4 / len(own))
    if len(strong):
        faults.warning(
            "influential_gauges", "regress",
            f"{len(strong)} gauges move the equation of AEP {regression.aeps[place]:g} more than others (influence above 4/n): {_few(own[strong])}",
            "Check their records and attributes first.",
        )  # fmt: skip
    spatial = quantiles.diagnostics[place].spatial
    if spatial.p_value < 0.05:
        faults.warning(
            "spatial_structure", "regress",
            f"residuals of AEP {regression.aeps[place]:g} go together among neighbours (Moran's I {spatial.statistic:.2f}, p {spatial.p_value:.3f})",
            "An attribute may be missing, or regions may want intercepts of their own.",
        )  # fmt: skip
    _, crossed = order_floods(quantiles.design[quantiles.in_fit] @ regression.coefficients.T)
    if crossed.any():
        faults.warning(
            "crossing_floods", "regress",
            f"equations of neighbouring AEPs cross at gauges {_few(own[crossed])}; their floods were put in order",
            "These gauges lie at the edge of the attributes' range.",
        )  # fmt: skip


def index_section(
    config: StudyConfig,
    gauges: UsedGauges,
    index: IndexEquation,
    quantiles: QuantileEquations | None,
    choice: AttributeChoice | None,
) -> Section:
    """The page's words on the index flood and the quantile equations."""
    paragraphs = [_tell_index(config, gauges, index)]
    figures = [
        Figure(
            "index_flood.png",
            "Left: sample index floods against the regression, with the line of equality and bars of two sampling standard errors. "
            "Right: residuals against area; a trend would mean that the equation bends.",
            "Two scatter plots of the index-flood regression: sample against regression, and residual against basin area.",
        )
    ]
    tables = [
        PageTable(
            "Coefficients of log10 index flood (m3/s; area in km2).",
            ("term", "coefficient", "standard error", "ratio"),
            _coefficient_rows(index),
            "tables/equations.json",
        )
    ]
    if quantiles:
        paragraphs += _tell_quantiles(quantiles)
        figures.append(
            Figure(
                "residual_map.png",
                "Residuals of the rare flood at the gauges, log10: where one colour gathers, the equation misses something.",
                "Map of regression residuals at gauges, coloured from under- to overestimated.",
            )
        )
        tables.append(_quantile_table(quantiles))
    if choice:
        paragraphs.append(_tell_choice(config, choice))
        tables.append(_subset_page_table(choice))
    return Section(
        key="index_flood",
        title="Index flood and quantile equations",
        paragraphs=tuple(paragraphs),
        figures=tuple(figures),
        tables=tuple(tables),
        method=_method(config, quantiles),
    )


def _tell_index(config: StudyConfig, gauges: UsedGauges, index: IndexEquation) -> str:
    out = int((~index.in_fit).sum())
    residual = np.abs(index.fit.residuals)
    at = int(residual.argmax())
    gauge = np.array(gauges.gauge_ids, dtype=object)[index.in_fit][at]
    terms = ", ".join(index.plan.columns[max(len(index.plan.regions), 1) :]) or "a constant"
    sample = 10 ** (index.fit.fitted[at] + index.fit.residuals[at]) / config.flow_in_m3s
    return (
        f"The index flood is the {config.index_flood.statistic} of the annual floods. Its logarithm was regressed on {terms} "
        f"at {int(index.in_fit.sum())} gauges"
        + (f"; {out} used gauges could not take part (see the table of index floods). " if out else ". ")
        + f"The standard error of prediction at an ungauged site is {format_percent(index.diagnostics.prediction_error_percent / 100)}, "
        f"of which the equation's own lack of fit is {format_percent(index.diagnostics.model_error_percent / 100)}. The largest residual is at gauge "
        f"{gauge}: a sample index flood of {format_flow(sample)} {config.units.flow} against "
        f"{format_flow(10 ** index.fit.fitted[at] / config.flow_in_m3s)} {config.units.flow} from the equation."
    )


def _tell_quantiles(quantiles: QuantileEquations) -> list[str]:
    from wrackline.stages.regress import rare_place

    regression = quantiles.regression
    place = rare_place(regression.aeps)
    found = quantiles.diagnostics[place]
    told = [
        f"Floods of {len(regression.aeps)} probabilities, from the records with weighted skew, were regressed on "
        f"{', '.join(quantiles.plan.columns)} at {int(quantiles.in_fit.sum())} gauges. For AEP {format_aep(float(regression.aeps[place]))} the standard "
        f"error of prediction is {format_percent(found.prediction_error_percent / 100)}; sampling variance is "
        f"{format_significant(found.error_variance_ratio, 2) or 'far more than once'} times the model-error variance"
        + (", too much for ordinary least squares." if found.error_variance_ratio > 0.2 else ".")
    ]
    spatial = found.spatial
    told.append(
        f"Moran's I of its residuals among six nearest gauges is {spatial.statistic:.2f} (p {spatial.p_value:.3f} by permutation): "
        + (
            "neighbours go together, so something of the region is not in the equation."
            if spatial.p_value < 0.05
            else "no spatial structure is left to explain."
        )
    )
    if quantiles.influence:
        best = min(quantiles.influence, key=lambda trial: trial.error)
        y = quantiles.floods.log10_flow[quantiles.in_fit, place]
        whole = float(((y - regression.left_out[:, place]) ** 2).mean())
        told.append(
            f"As an alternative, every gauge was estimated from the {best.n_gauges} gauges most like it (region of influence; sizes "
            f"{', '.join(str(trial.n_gauges) for trial in quantiles.influence)} were tried): leave-one-out error "
            f"{format_percent(float(standard_error_percent(best.error)) / 100)} against {format_percent(float(standard_error_percent(whole)) / 100)} of the one equation, "
            "sampling errors of the gauges included. "
            + (
                "The region of influence does better here; look for an attribute or a grouping that the equation lacks."
                if best.error < whole
                else "The one equation does at least as well and has no jumps in space."
            )
        )
    return told


def _tell_choice(config: StudyConfig, choice: AttributeChoice) -> str:
    best = ", ".join(choice.best.attributes) or "the constant alone"
    line = f"regression: {{attributes: [{', '.join(choice.best.attributes)}]}}"
    if not config.regression.attributes:
        return (
            f"The attributes are not pinned. All {choice.tried} subsets were ranked by variance of prediction at AEP 0.01 or the nearest to it; the "
            f"best sound one is {best} and was used. Pin it, so that later years do not change the form of the equations: {line}"
        )
    pinned = ", ".join(config.regression.attributes)
    if set(config.regression.attributes) == set(choice.best.attributes):
        return f"The attributes are pinned ({pinned}); of all {choice.tried} subsets the evidence would choose the same."
    return f"The attributes are pinned ({pinned}); of all {choice.tried} subsets the evidence would now choose {best}."


def _coefficient_rows(index: IndexEquation) -> tuple[tuple[str, ...], ...]:
    error = np.sqrt(np.diag(index.fit.coefficient_covariance))
    return tuple(
        (name, f"{b:.4f}", f"{se:.4f}", f"{b / se:.1f}")
        for name, b, se in zip(index.plan.columns, index.fit.coefficients, error, strict=True)
    )


def _quantile_table(quantiles: QuantileEquations) -> PageTable:
    regression = quantiles.regression
    rows = tuple(
        (
            format_aep(float(aep)),
            *(f"{b:.4f}" for b in coefficients),
            format_percent(found.model_error_percent / 100),
            format_percent(found.prediction_error_percent / 100),
            f"{found.pseudo_r2:.2f}",
        )
        for aep, coefficients, found in zip(
            regression.aeps, regression.coefficients, quantiles.diagnostics, strict=True
        )
    )
    return PageTable(
        "Coefficients of log10 flood (m3/s; area in km2) and errors of the equations.",
        ("AEP", *quantiles.plan.columns, "model error", "error of prediction", "pseudo-R2"),
        rows,
        "tables/equations.json",
    )


def _subset_page_table(choice: AttributeChoice) -> PageTable:
    rows = tuple(
        (
            " + ".join(subset.attributes) or "constant alone",
            format_percent(float(standard_error_percent(subset.prediction_variance)) / 100),
            f"{np.sqrt(subset.left_out_error):.4f}",
            f"{subset.smallest_ratio:.1f}" if np.isfinite(subset.smallest_ratio) else "",
            f"{subset.largest_inflation:.1f}",
            "; ".join(subset.objections) or "none",
        )
        for subset in choice.subsets
    )
    return PageTable(
        "The subsets of attributes with the smallest variance of prediction.",
        ("attributes", "error of prediction", "leave-one-out error, log10", "smallest ratio", "largest inflation", "objections"),
        rows,
        "tables/attribute_subsets.csv",
    )  # fmt: skip


def _method(config: StudyConfig, quantiles: QuantileEquations | None) -> tuple[str, ...]:
    variance = {
        "reml": "restricted maximum likelihood",
        "moments": "the method of moments",
        "bayes": "its posterior mean under an exponential prior of mean 1/24",
    }[config.regression.model_variance]
    told = [
        f"Generalized least squares with a known sampling covariance (Stedinger and Tasker, 1985), model-error variance by {variance}. "
        "Sampling variances of index floods come from the pool's growth curve, not from each gauge's own scatter; shared years correlate the "
        "sampling errors through the fitted distance model."
    ]
    if quantiles:
        sd = (
            "regressed on log10 area"
            if quantiles.sd.slope
            else "pooled (no slope with area beyond two standard errors)"
        )
        told.append(
            f"Quantiles: sampling covariance after Tasker and Stedinger (1989) and Griffis and Stedinger (2007) with regional statistics (standard "
            f"deviation {sd}, generalized skew) and the error that gauges share through the generalized skew. The coefficients of all "
            "probabilities are held on three curves, one, K and dK/dg of Pearson III at the regional skew, so that floods of neighbouring probabilities do not "
            "cross; the covariances are those of the smoothed coefficients."
        )
    return tuple(told)


def _few(names: np.ndarray) -> str:
    return ", ".join(str(name) for name in names[:10]) + (" ..." if len(names) > 10 else "")
