"""Tables of the stage `skew`, and the model as a document."""

from __future__ import annotations

from typing import Any

import numpy as np
import pandas as pd

from wrackline.hydrology.generalized_skew import SKEW_CORRELATION_EXPONENT
from wrackline.hydrology.records import BoolArray, FloatArray
from wrackline.hydrology.skew_candidates import Comparison, SkewCandidate
from wrackline.hydrology.skew_diagnostics import pseudo_anova
from wrackline.hydrology.skew_surface import SkewSurface
from wrackline.hydrology.station_skews import tabulate_causes
from wrackline.stages.skew_material import SkewMaterial
from wrackline.stats.gls import estimate_model_variance
from wrackline.study.config import StudyConfig
from wrackline.study.tables import Column, Table

ERL_DEFINITION = (
    "years of record whose raw sample skew (not corrected for bias) has a variance equal to the average variance of "
    "prediction at new sites (Griffis and Stedinger, 2009)"
)
GAUGE_COLUMNS = (
    Column("gauge_id", "text", "gauge"),
    Column("in_model", "true/false", "the gauge shapes the generalized skew"),
    Column("reason", "text", "why it does not"),
    Column("systematic_years", "years", "exactly known systematic peaks"),
    Column("record_years", "years", "years in the fit, historic ones and those known by threshold included"),
    Column("systematic_mse", "1", "mean square error that the station skew would have from a complete record of the systematic peaks"),
    Column("record_mse", "1", "mean square error of the station skew from the whole record"),
    Column("pseudo_record_length", "years", "systematic years times the ratio of the two: years of complete record that know the skew as well"),
    Column("station_skew", "1", "skew of the logarithms from the record alone"),
    Column("skew", "1", "station skew times 1 + 6 / pseudo record length: its bias is corrected"),
    Column("skew_mse", "1", "sampling variance of `skew`, taken at the model's skew, not the station's"),
    Column("fitted", "1", "the model's skew at the gauge"),
    Column("residual", "1", "`skew` less `fitted`"),
    Column("leverage", "1", "weight of the gauge's own skew in `fitted`"),
    Column("influence", "1", "how far the gauge moves the model, Cook's measure by deletion; blank for a surface"),
    Column("high_leverage", "true/false", "leverage above twice the average"),
    Column("high_influence", "true/false", "influence above 4 over the number of gauges"),
    Column("generalized_skew", "1", "generalized skew for the gauge's own fit: of the model without it where it is in the model"),
    Column("generalized_skew_mse", "1", "mean square error of the generalized skew"),
)  # fmt: skip
SITE_COLUMNS = (
    Column("site_id", "text", "gauge or ungauged site"),
    Column("kind", "text", "gauge or target"),
    Column("region", "text", "region in the skew model"),
    Column("generalized_skew", "1", "generalized skew of the basin"),
    Column("generalized_skew_mse", "1", "its mean square error"),
    Column("without_itself", "true/false", "the value is that of the model without the gauge"),
    Column(
        "beyond_attributes", "true/false", "an attribute lies beyond those of the gauges behind the model"
    ),
)
CANDIDATE_COLUMNS = (
    Column("model", "text", "model"),
    Column("in_use", "true/false", "the model in use"),
    Column("coefficients", "count", "coefficients, the constant included"),
    Column("model_variance", "1", "model-error variance: posterior mean"),
    Column("avp_new", "1", "average variance of prediction at sites like the gauges, not in the model"),
    Column("avp_old", "1", "average variance of prediction at the gauges of the model"),
    Column("effective_record_length", "years", ERL_DEFINITION),
    Column(
        "pseudo_r2",
        "1",
        "share of the constant's model-error variance that is explained; blank for a surface",
    ),
    Column(
        "smallest_ratio",
        "1",
        "smallest ratio of a coefficient beyond the constant to its standard error, by size",
    ),
    Column(
        "log_evidence", "1", "logarithm of the probability of the station skews over that under the constant"
    ),
    Column("required_evidence", "1", "what it must exceed to replace the constant"),
    Column(
        "log_score",
        "1",
        "leave-one-out log score: sum of log densities of the station skews given the others",
    ),
    Column("log_score_gain", "1", "log score less that of the constant"),
    Column("log_score_gain_se", "1", "its standard error, gauges taken as independent"),
    Column("remark", "text", "why a model could not be tried"),
)
CAUSE_COLUMNS = (
    Column("gauge_id", "text", "gauge"),
    Column("cause", "text", "cause of floods as the peaks table says it"),
    Column("n_peaks", "count", "exactly known positive peaks of that cause"),
    Column("skew", "1", "skew of their logarithms; blank below ten peaks"),
    Column("largest_flow", "flow", "largest of them"),
    Column("largest_water_year", "year", "its water year"),
    Column("largest_rank", "count", "its rank among all exactly known peaks of the gauge; 1 is the largest"),
)


def skew_tables(
    config: StudyConfig,
    material: SkewMaterial,
    comparison: Comparison | None,
    skew: FloatArray,
    mse: FloatArray,
    left_out: BoolArray,
    outside: BoolArray,
) -> tuple[Table, ...]:
    """Return the published tables; ``skew`` to ``outside`` have an entry per site."""
    sites = material.sites
    site_table = pd.DataFrame(
        {
            "site_id": sites["site_id"],
            "kind": np.where(sites["gauge"], "gauge", "target").astype(object),
            "region": sites["region"],
            "generalized_skew": skew,
            "generalized_skew_mse": mse,
            "without_itself": left_out,
            "beyond_attributes": outside,
        }
    )
    tables = [
        Table("skew_gauges", _gauge_table(material, comparison, skew, mse), GAUGE_COLUMNS),
        Table("skew_sites", site_table, SITE_COLUMNS),
        Table("skew_by_cause", _cause_table(config, material), CAUSE_COLUMNS),
    ]
    if comparison is not None:
        tables.append(Table("skew_candidates", _candidate_table(comparison), CANDIDATE_COLUMNS))
    return tuple(tables)


def work_sites(
    material: SkewMaterial, skew: FloatArray, mse: FloatArray, left_out: BoolArray, design: FloatArray
) -> pd.DataFrame:
    """Return what later stages need of every site: values, and the model's columns for the shared error."""
    frame = pd.DataFrame({"site_id": material.sites["site_id"], "gauge": material.sites["gauge"]})
    frame["generalized_skew"], frame["generalized_skew_mse"] = skew, mse
    frame["without_itself"] = left_out
    for column in range(design.shape[1]):
        frame[f"x{column + 1}"] = design[:, column]
    return frame


def leverage_of(candidate: SkewCandidate) -> FloatArray:
    """Return the weight of every station skew in the model's skew at that station, (n,)."""
    if candidate.diagnostics is not None:
        return candidate.diagnostics.leverage
    model = candidate.model
    assert isinstance(model, SkewSurface)
    weighted = model.precision @ model.design
    core = model.precision - weighted @ model.coefficient_covariance @ weighted.T
    return np.asarray(1.0 - np.einsum("ij,ji->i", model.stations.covariance, core))


def _gauge_table(
    material: SkewMaterial, comparison: Comparison | None, skew: FloatArray, mse: FloatArray
) -> pd.DataFrame:
    g, measured, serve = material.n_gauges, material.measured, material.serve
    blank = np.full(g, np.nan)
    frame = pd.DataFrame(
        {
            "gauge_id": material.moments["gauge_id"],
            "in_model": np.array([not reason for reason in material.reasons]) & (comparison is not None),
            "reason": material.reasons,
            "systematic_years": measured.systematic_years,
            "record_years": measured.historical_years,
            "systematic_mse": measured.systematic_mse,
            "record_mse": measured.all_mse,
            "pseudo_record_length": measured.record_length,
            "station_skew": material.moments["station_skew"].to_numpy(dtype=float),
        }
    )
    columns = {
        name: blank.copy() for name in ("skew", "skew_mse", "fitted", "residual", "leverage", "influence")
    }
    flags = {name: np.zeros(g, dtype=bool) for name in ("high_leverage", "high_influence")}
    if comparison is not None:
        chosen = comparison.chosen
        leverage = leverage_of(chosen)
        columns["skew"][serve], columns["skew_mse"][serve] = (
            chosen.model.stations.skew,
            chosen.model.stations.variance,
        )
        columns["fitted"][serve] = chosen.model.fitted
        columns["residual"][serve] = chosen.model.stations.skew - chosen.model.fitted
        columns["leverage"][serve] = leverage
        flags["high_leverage"][serve] = leverage > 2 * leverage.mean()
        if chosen.diagnostics is not None:
            columns["influence"][serve] = chosen.diagnostics.influence
            flags["high_influence"][serve] = chosen.diagnostics.high_influence
    for name, values in {**columns, **flags}.items():
        frame[name] = values
    frame["generalized_skew"], frame["generalized_skew_mse"] = skew[:g], mse[:g]
    return frame


def _candidate_table(comparison: Comparison) -> pd.DataFrame:
    rows: list[tuple[Any, ...]] = []
    for c in comparison.candidates:
        ratios = np.abs(c.ratios[1:]) if c.plan.kind == "regression" else np.array([np.nan])
        rows.append(
            (
                c.plan.name, c is comparison.chosen, len(c.model.coefficients), c.model.model_variance,
                c.prediction_variance_new, c.prediction_variance_old, c.effective_record_length, c.pseudo_r2,
                float(ratios.min()), c.log_evidence, c.required_evidence, c.score, c.gain, c.gain_se, "",
            )
        )  # fmt: skip
    rows += [(name, False, None, *[None] * 11, reason) for name, reason in comparison.refused]
    frame = pd.DataFrame(rows, columns=[column.name for column in CANDIDATE_COLUMNS])
    constant = frame["model"] == "constant"
    frame.loc[constant, ["required_evidence", "log_score_gain_se"]] = np.nan
    frame["coefficients"] = frame["coefficients"].astype("Int64")
    return frame


def _cause_table(config: StudyConfig, material: SkewMaterial) -> pd.DataFrame:
    found = tabulate_causes(material.records)
    ids = np.array(material.records.gauge_ids, dtype=object)
    return pd.DataFrame(
        {
            "gauge_id": ids[found.gauge] if len(found.gauge) else ids[:0],
            "cause": found.cause.astype(object),
            "n_peaks": found.n_peaks,
            "skew": found.skew,
            "largest_flow": found.largest / config.flow_in_m3s,
            "largest_water_year": found.largest_year,
            "largest_rank": found.largest_rank,
        }
    )


def describe_model(
    config: StudyConfig, material: SkewMaterial, comparison: Comparison | None
) -> dict[str, Any]:
    """Return all that is needed to apply the model elsewhere and to judge it; no NaN."""
    settings = config.skew
    if comparison is None:
        return {
            "source": settings.source if settings.source != "fitted" else "none",
            "why": settings.why,
            "skew": settings.given_skew if settings.source == "constant" else None,
            "mse": settings.given_mse if settings.source == "constant" else None,
            "map": settings.given_map if settings.source == "map" else "",
            "n_gauges": len(material.serve),
        }
    chosen = comparison.chosen
    model, plan = chosen.model, chosen.plan
    columns = model.design[:, 1:] if plan.attributes.names else np.empty((len(model.design), 0))
    document: dict[str, Any] = {
        "source": "fitted",
        "model": plan.name,
        "kind": plan.kind,
        "chosen_by": "configuration" if settings.model else "evidence",
        "why": settings.why,
        "evidence_would_choose": comparison.evidence,
        "n_gauges": len(material.serve),
        "gauges": material.moments["gauge_id"].iloc[material.serve].tolist(),
        "columns": list(plan.columns),
        "regions": list(plan.regions),
        "attributes": list(plan.attributes.names),
        "transforms": list(plan.attributes.transforms),
        "transformed_lower": columns.min(axis=0).tolist(),
        "transformed_upper": columns.max(axis=0).tolist(),
        "area_unit": "km2",
        "coefficients": model.coefficients.tolist(),
        "coefficient_se": np.sqrt(np.diag(model.coefficient_covariance)).tolist(),
        "coefficient_covariance": model.coefficient_covariance.tolist(),
        "model_variance": model.model_variance,
        "model_variance_definition": "posterior mean, exponential prior with mean 0.1",
        "average_prediction_variance_new": chosen.prediction_variance_new,
        "average_prediction_variance_old": chosen.prediction_variance_old,
        "effective_record_length": _or_none(chosen.effective_record_length),
        "effective_record_length_definition": ERL_DEFINITION,
        "log_evidence": chosen.log_evidence,
        "leave_one_out_log_score": chosen.score,
        "correlation_exponent": SKEW_CORRELATION_EXPONENT,
        "sampling_covariance_repaired": bool(model.stations.repaired),
    }
    if isinstance(model, SkewSurface):
        return document | {"range_km": model.range_km, "pseudo_r2": None}
    return document | _precision(comparison)


def _precision(comparison: Comparison) -> dict[str, Any]:
    """Diagnostics that only a model with uncorrelated model errors has."""
    from wrackline.hydrology.generalized_skew import SkewModel

    chosen = comparison.chosen
    model, constant, found = chosen.model, comparison.candidates[0].model, chosen.diagnostics
    assert isinstance(model, SkewModel)
    assert isinstance(constant, SkewModel)
    assert found is not None
    stations = model.stations
    cumulative = np.cumsum(model.posterior.weights)
    lower, upper = np.interp([0.05, 0.95], cumulative, model.posterior.nodes)
    return {
        "range_km": 0.0,
        "model_variance_lower": float(lower),
        "model_variance_upper": float(upper),
        "model_variance_weighted": model.model_variance_weighted,
        "model_variance_marginal": model.marginal_model_variance,
        "model_variance_moments": estimate_model_variance(
            stations.skew, model.design, stations.covariance, "moments"
        ),
        "model_variance_reml": estimate_model_variance(
            stations.skew, model.design, stations.covariance, "reml"
        ),
        "average_sampling_variance": found.average_sampling_variance,
        "pseudo_r2": found.pseudo_r2,
        "error_variance_ratio": found.error_variance_ratio,
        "beta_variance_misrepresentation": found.beta_variance_misrepresentation,
        "pseudo_anova": [
            {"source": source, "degrees_of_freedom": df, "sum": value}
            for source, df, value in pseudo_anova(model, constant)
        ],
        "average_leverage": float(found.leverage.mean()),
        "influence_limit": 4 / len(found.influence),
    }


def _or_none(value: float) -> float | None:
    return float(value) if np.isfinite(value) else None
