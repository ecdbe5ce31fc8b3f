"""Whole blocks of neighbouring gauges left out, and estimated from the rest of the region."""

from __future__ import annotations

from typing import Any

import numpy as np

from wrackline.hydrology.index_flood import index_sampling_covariance, sample_index_floods
from wrackline.hydrology.quantile_covariance import quantile_sampling_covariance
from wrackline.hydrology.records import BoolArray, FloatArray, IntArray
from wrackline.hydrology.regional_equations import SavedEquations
from wrackline.stages.gauge_floods import UsedGauges, intercept_groups, pools_of_sites, read_gauge_floods
from wrackline.stages.regress import describe_errors, relative_sd_of, site_attributes
from wrackline.stages.running import StudyFiles
from wrackline.stats.gls import fit_gls


def predict_blocks(
    study: StudyFiles,
    gauges: UsedGauges,
    equations: dict[str, Any],
    growth: dict[str, Any],
    block: IntArray,
    aeps: FloatArray,
) -> dict[str, FloatArray]:
    """Predict the gauges of every block by equations and growth curves made without the block, log10 (g, p)."""
    from wrackline.stages.validate import growth_without

    region = intercept_groups(growth, gauges.sites, pools_of_sites(growth, gauges.gauge_ids))
    index = sample_index_floods(gauges.records, relative_sd_of(growth, gauges.gauge_ids), growth["statistic"])
    saved = SavedEquations.from_dict(equations["index_flood"])
    design = saved.plan.design(site_attributes(gauges.sites, saved.plan), region)
    used = index.usable & np.isfinite(design).all(axis=1)
    covariance = index_sampling_covariance(
        index.log10_variance, gauges.common_years, np.maximum(index.n, 1), gauges.correlation, growth["statistic"]
    )  # fmt: skip
    log10_index = np.log10(np.where(used, index.flow, 1.0))
    predicted = _predict(log10_index, design, covariance, used, block, float(saved.model_variance[0]))
    factors, _ = growth_without(gauges, growth, aeps, block)
    found = {"growth_curve": predicted[:, None] + np.log10(factors)}
    if "quantiles" in equations:
        found["quantile_regression"] = _predict_quantiles(study, gauges, equations, region, block, aeps)
    return found


def _predict_quantiles(
    study: StudyFiles,
    gauges: UsedGauges,
    equations: dict[str, Any],
    region: list[str],
    block: IntArray,
    aeps: FloatArray,
) -> FloatArray:
    saved = SavedEquations.from_dict(equations["quantiles"])
    floods = read_gauge_floods(study, gauges)
    design = saved.plan.design(site_attributes(gauges.sites, saved.plan), region)
    used = floods.usable & np.isfinite(design).all(axis=1)
    _, errors = describe_errors(gauges, floods, used)
    known = equations["quantiles"]["aeps"]
    out = np.full((len(block), len(aeps)), np.nan)
    for p, aep in enumerate(aeps.tolist()):
        at = known.index(aep)
        covariance = np.full((len(block), len(block)), np.nan)
        covariance[np.ix_(used, used)] = quantile_sampling_covariance(errors, aep)
        out[:, p] = _predict(
            floods.log10_flow[:, at], design, covariance, used, block, float(saved.model_variance[at])
        )
    return out


def _predict(
    y: FloatArray,
    design: FloatArray,
    covariance: FloatArray,
    used: BoolArray,
    block: IntArray,
    model_variance: float,
) -> FloatArray:
    """Predict every block (g,) from the others, the model-error variance held; NaN where the rest cannot carry it."""
    out = np.full(len(y), np.nan)
    for number in np.unique(block):
        rest, own = used & (block != number), used & (block == number)
        if not own.any():
            continue
        try:
            fit = fit_gls(
                y[rest],
                design[rest],
                covariance[np.ix_(rest, rest)],
                model_variance=max(model_variance, 1e-9),
            )
        except ValueError:
            # A region's intercept can lie in one block alone: without the block nothing is known of it.
            continue
        out[own] = fit.predict(design[own])[0]
    return out
