"""Tables of the stage `regress`."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
import pandas as pd

from wrackline.hydrology.attribute_choice import AttributeChoice
from wrackline.hydrology.quantile_regression import standard_error_percent
from wrackline.hydrology.regional_equations import spread_to_all
from wrackline.stages.gauge_floods import UsedGauges
from wrackline.study.config import StudyConfig
from wrackline.study.tables import Column, Table

if TYPE_CHECKING:
    from wrackline.stages.regress import IndexEquation, QuantileEquations

INDEX_COLUMNS = (
    Column("gauge_id", "text", "gauge"),
    Column("n_peaks", "count", "exact systematic peaks behind the index flood"),
    Column("index_flood", "flow", "sample index flood"),
    Column(
        "se_log10", "log10", "standard error of the log10 sample index flood, from the pool's growth curve"
    ),
    Column("regression", "flow", "index flood by the regression equation"),
    Column("residual_log10", "log10", "log10 of sample over regression"),
    Column("leverage", "", "weight of the gauge's own index flood in its regression estimate"),
    Column("influence", "", "influence, the analogue of Cook's distance"),
    Column("in_fit", "true/false", "whether the gauge is in the regression"),
    Column("reason", "text", "why it is not"),
)
REGRESSION_COLUMNS = (
    Column("gauge_id", "text", "gauge"),
    Column("aep", "fraction", "annual exceedance probability"),
    Column("flow", "flow", "flood from the record, weighted skew"),
    Column("sampling_se_log10", "log10", "its standard error in the regression, from regional statistics"),
    Column("regression", "flow", "flood by the regression equation"),
    Column("residual_log10", "log10", "log10 of flood over regression"),
    Column("leverage", "", "weight of the gauge's own flood in its regression estimate"),
    Column("influence", "", "influence, the analogue of Cook's distance"),
)
SUBSET_COLUMNS = (
    Column("rank", "count", "place by average variance of prediction"),
    Column("attributes", "text", "attributes of the equation"),
    Column("model_variance", "log10^2", "model-error variance"),
    Column("prediction_variance", "log10^2", "average variance of prediction"),
    Column("prediction_error_percent", "%", "standard error of prediction"),
    Column(
        "left_out_rmse",
        "log10",
        "root mean square difference of gauges from their prediction without themselves",
    ),
    Column("smallest_ratio", "", "smallest coefficient over its standard error"),
    Column("largest_inflation", "", "largest variance inflation factor"),
    Column("objections", "text", "why the subset is not chosen; blank: sound"),
    Column("used", "true/false", "whether the study's equations take it"),
)


def index_table(config: StudyConfig, gauges: UsedGauges, equation: IndexEquation, pool: list[str]) -> Table:
    """A row per used gauge: sample, regression, residual, leverage, influence."""
    index, in_fit = equation.index, equation.in_fit
    possible = np.asarray(np.isfinite(equation.design).all(axis=1))
    regression = np.full(len(possible), np.nan)
    regression[possible] = 10 ** equation.fit.predict(equation.design[possible])[0]
    no_pool = np.array([not name for name in pool])
    reasons = np.select(
        [in_fit, no_pool, index.usable],
        ["", "in no pool, so its sampling error is unknown", "an attribute has no value after its transformation"],
        "its index flood is zero or missing",
    )  # fmt: skip
    frame = pd.DataFrame(
        {
            "gauge_id": gauges.gauge_ids,
            "n_peaks": index.n,
            "index_flood": index.flow / config.flow_in_m3s,
            "se_log10": np.sqrt(index.log10_variance),
            "regression": regression / config.flow_in_m3s,
            "residual_log10": spread_to_all(equation.fit.residuals, in_fit),
            "leverage": spread_to_all(equation.fit.leverage, in_fit),
            "influence": spread_to_all(equation.fit.influence, in_fit),
            "in_fit": in_fit,
            "reason": reasons.astype(object),
        }
    )
    return Table("index_floods", frame, INDEX_COLUMNS)


def regression_table(config: StudyConfig, gauges: UsedGauges, equations: QuantileEquations) -> Table:
    """A row per gauge in the quantile equations and probability."""
    regression, used = equations.regression, equations.in_fit
    log10_flow = equations.floods.log10_flow[used]
    fitted = equations.design[used] @ regression.coefficients.T
    ids = np.array(gauges.gauge_ids, dtype=object)[used]
    n, p = log10_flow.shape
    frame = pd.DataFrame(
        {
            "gauge_id": np.repeat(ids, p),
            "aep": np.tile(regression.aeps, n),
            "flow": 10 ** log10_flow.ravel() / config.flow_in_m3s,
            "sampling_se_log10": np.sqrt(regression.sampling_variance).ravel(),
            "regression": 10 ** fitted.ravel() / config.flow_in_m3s,
            "residual_log10": (log10_flow - fitted).ravel(),
            "leverage": np.column_stack([fit.leverage for fit in regression.fits]).ravel(),
            "influence": np.column_stack([fit.influence for fit in regression.fits]).ravel(),
        }
    )
    return Table("regression_gauges", frame, REGRESSION_COLUMNS)


def subset_table(choice: AttributeChoice | None, used: tuple[str, ...]) -> Table:
    """The best subsets of attributes; the chosen and the used one stand at the end where they are not among them."""
    rows = []
    if choice:
        shown = list(choice.subsets) + ([choice.best] if choice.best not in choice.subsets else [])
        rows = [
            (
                rank if subset in choice.subsets else None,
                " + ".join(subset.attributes) or "constant alone",
                subset.model_variance,
                subset.prediction_variance,
                float(standard_error_percent(subset.prediction_variance)),
                float(np.sqrt(subset.left_out_error)),
                subset.smallest_ratio,
                subset.largest_inflation,
                "; ".join(subset.objections),
                set(subset.attributes) == set(used),
            )
            for rank, subset in enumerate(shown, 1)
        ]
    frame = pd.DataFrame(rows, columns=[column.name for column in SUBSET_COLUMNS])
    return Table("attribute_subsets", frame, SUBSET_COLUMNS)


def left_out_table(
    gauge_ids: list[str], index: IndexEquation, quantiles: QuantileEquations | None
) -> pd.DataFrame:
    """For later stages: every gauge and its predictions without itself, log10 of m3/s; a blank AEP: the index flood."""
    ids = np.array(gauge_ids, dtype=object)
    frames = [
        pd.DataFrame(
            {
                "gauge_id": ids[index.in_fit],
                "aep": np.nan,
                "observed": np.log10(index.index.flow[index.in_fit]),
                "observed_variance": index.index.log10_variance[index.in_fit],
                "predicted": index.left_out.predicted,
                "predicted_variance": index.left_out.variance,
            }
        )
    ]
    if quantiles:
        regression, used = quantiles.regression, quantiles.in_fit
        n, p = regression.left_out.shape
        frames.append(
            pd.DataFrame(
                {
                    "gauge_id": np.repeat(ids[used], p),
                    "aep": np.tile(regression.aeps, n),
                    "observed": quantiles.floods.log10_flow[used].ravel(),
                    "observed_variance": regression.sampling_variance.ravel(),
                    "predicted": regression.left_out.ravel(),
                    "predicted_variance": regression.left_out_variance.ravel(),
                }
            )
        )
    return pd.concat(frames, ignore_index=True)
