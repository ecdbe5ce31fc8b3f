"""Equations of all probabilities together: smoothing, honest covariances, leave-one-out, choice of attributes."""

import numpy as np
import pytest

from wrackline.hydrology.attribute_choice import choose_attributes
from wrackline.hydrology.attributes import DesignPlan, convex_hull, describe_space, lies_outside
from wrackline.hydrology.quantile_covariance import QuantileErrorModel, quantile_sampling_covariance
from wrackline.hydrology.quantile_regression import build_error_model, fit_quantile_regression
from wrackline.hydrology.region_of_influence import try_regions_of_influence
from wrackline.stats.gls import fit_gls
from wrackline.stats.pearson3 import frequency_factor
from wrackline.stats.spatial_structure import measure_spatial_structure

AEPS = np.array([0.5, 0.2, 0.1, 0.04, 0.02, 0.01, 0.005, 0.002])
SKEW = -0.1


def region(n=40, seed=0):
    """Log-Pearson III floods of invented gauges: places, design, error model and log10 floods."""
    rng = np.random.default_rng(seed)
    place = rng.uniform(0, 300, (n, 2))
    distance = np.hypot(*(place[:, None] - place).transpose(2, 0, 1))
    correlation = 0.9 * np.exp(-distance / 100)
    np.fill_diagonal(correlation, 1.0)
    years = rng.integers(20, 80, n).astype(float)
    log_area = rng.uniform(1, 3.5, n)
    errors = build_error_model(
        np.full(n, 0.25),
        np.full(n, SKEW),
        0.01 + 0.05 * np.eye(n),
        years,
        np.minimum(years[:, None], years),
        correlation,
    )
    design = np.column_stack([np.ones(n), log_area])
    mean = 0.5 + 0.8 * log_area + rng.normal(0, 0.1, n) + 0.25 * rng.normal(0, 1, n) / np.sqrt(years)
    sd = 0.28 - 0.01 * log_area + 0.25 * rng.normal(0, 1, n) / np.sqrt(2 * years)
    skew = SKEW + rng.normal(0, 0.2, n)
    flow = mean[:, None] + sd[:, None] * frequency_factor(AEPS[None, :], skew[:, None])
    return distance, design, errors, flow


def test_smoothed_coefficients_stay_close_to_those_of_each_probability():
    _, design, errors, flow = region()
    found = fit_quantile_regression(flow, design, errors, AEPS)
    own = np.array([fit.coefficients for fit in found.fits])
    se = np.sqrt([np.diag(fit.coefficient_covariance) for fit in found.fits])
    assert (np.abs(found.coefficients - own) < 0.1 * se).all()


def test_covariance_of_smoothed_coefficients_is_that_of_the_equations_they_replace():
    _, design, errors, flow = region()
    found = fit_quantile_regression(flow, design, errors, AEPS)
    for smoothed, fit in zip(found.coefficient_covariance, found.fits, strict=True):
        # The basis holds all but second-order terms, so smoothing neither gains nor loses more than a few percent.
        np.testing.assert_allclose(np.diag(smoothed), np.diag(fit.coefficient_covariance), rtol=0.05)
        np.testing.assert_allclose(smoothed, smoothed.T, rtol=1e-9)


def test_floods_rise_at_all_gauges_and_well_beyond_them():
    _, design, errors, flow = region()
    found = fit_quantile_regression(flow, design, errors, AEPS)
    beyond = np.column_stack([np.ones(3), [0.0, 4.0, 5.0]])
    assert (np.diff(found.predict(np.vstack([design, beyond]))[0], axis=1) > 0).all()


def test_leaving_a_gauge_out_equals_refitting_and_smoothing_without_it():
    _, design, errors, flow = region()
    found = fit_quantile_regression(flow, design, errors, AEPS)
    for i in (0, 17):
        kept = np.arange(len(flow)) != i
        between = np.ix_(kept, kept)
        own = [
            fit_gls(
                flow[kept, p],
                design[kept],
                quantile_sampling_covariance(errors, float(aep))[between],
                model_variance=fit.model_variance,
            ).coefficients
            for p, (aep, fit) in enumerate(zip(AEPS, found.fits, strict=True))
        ]
        np.testing.assert_allclose(found.left_out[i], found.smoothing @ np.array(own) @ design[i], rtol=1e-9)


def test_own_standard_deviations_in_the_weights_would_bias_the_line_low():
    """The reason for regional statistics: paired replicates with pooled and with own standard deviations."""
    n, k = 40, float(frequency_factor(0.01, 0.0))
    rng = np.random.default_rng(3)
    lines = []
    for _ in range(60):
        years = rng.integers(10, 40, n)
        mean = np.array([rng.normal(0, 1, m).mean() for m in years])
        sd = np.array([rng.normal(0, 1, m).std(ddof=1) for m in years])
        y = 2.3 + rng.normal(0, 0.12, n) + 0.28 * (mean + k * (sd - 1))
        pooled = np.full(n, np.sqrt(np.average(sd**2, weights=years - 1)))
        line = []
        for scale in (pooled, sd):
            none = np.zeros((n, n))
            model = QuantileErrorModel(
                0.28 * scale,
                np.zeros(n),
                years.astype(float),
                none.copy(),
                np.eye(n),
                np.zeros(n),
                none,
                none,
            )
            fit = fit_gls(y, np.ones((n, 1)), quantile_sampling_covariance(model, 0.01), "moments")
            line.append(fit.coefficients[0] - 2.3)
        lines.append(line)
    pooled, own = np.mean(lines, axis=0)
    se = np.std(np.diff(lines, axis=1)) / np.sqrt(len(lines))
    # Simulated with cross-correlation elsewhere: -0.006 with pooled, -0.033 with own standard deviations.
    assert own - pooled < -5 * se
    assert abs(pooled) < 0.5 * abs(own)


def test_wrong_signs_and_collinear_attributes_are_not_chosen():
    rng = np.random.default_rng(1)
    n = 80
    area, rain = rng.normal(2, 0.6, n), rng.normal(3, 0.2, n)
    twin = area + rng.normal(0, 0.02, n)
    y = area - 1.0 * rain + rng.normal(0, 0.1, n)
    candidates, names = np.column_stack([area, rain, twin]), ("area", "rain", "twin")
    sampling = np.full(n, 0.003)
    free = choose_attributes(y, np.ones((n, 1)), candidates, names, ("any",) * 3, sampling, 3, 5.0)
    assert "rain" in free.best.attributes
    assert len({"area", "twin"} & set(free.best.attributes)) == 1
    bound = choose_attributes(
        y, np.ones((n, 1)), candidates, names, ("any", "positive", "any"), sampling, 3, 5.0
    )
    assert "rain" not in bound.best.attributes
    assert any("sign of rain" in subset.objections for subset in bound.subsets)
    both = [s for s in free.subsets if {"area", "twin"} <= set(s.attributes)]
    assert all(any("inflation" in objection for objection in s.objections) for s in both)


def test_region_of_influence_of_all_others_is_the_left_out_equation():
    _, design, errors, flow = region()
    sampling = quantile_sampling_covariance(errors, 0.1)
    (trial,) = try_regions_of_influence(flow[:, 2], design, design[:, 1:], sampling, (39,))
    kept = np.arange(40) != 5
    fit = fit_gls(flow[kept, 2], design[kept], sampling[np.ix_(kept, kept)], "moments")
    assert fit.predict(design[5:6])[0][0] == pytest.approx(trial.predicted[5], rel=1e-6)


def test_spatial_structure_is_found_where_it_is_and_not_where_it_is_not():
    distance, *_ = region(60, 4)
    rng = np.random.default_rng(0)
    smooth = np.linalg.cholesky(np.exp(-distance / 150) + 1e-9 * np.eye(60)) @ rng.normal(size=60)
    assert measure_spatial_structure(smooth, distance, np.random.default_rng(1)).p_value < 0.01
    p_values = [
        measure_spatial_structure(rng.normal(size=60), distance, rng, permutations=99).p_value
        for _ in range(40)
    ]
    # Uniform p-values: 40 draws have a mean of 0.5 with standard error 0.046.
    assert np.mean(p_values) == pytest.approx(0.5, abs=0.16)


def test_separate_equations_repeat_the_columns_for_every_region():
    plan = DesignPlan(("area",), ("log10",), ("north", "south"), separate=True)
    design = plan.design({"area": np.array([10.0, 100.0])}, ["north", "south"])
    assert (
        "region north",
        "region south",
        "log10(area) in region north",
        "log10(area) in region south",
    ) == plan.columns
    np.testing.assert_array_equal(design, [[1, 0, 1, 0], [0, 1, 0, 2]])


def test_sites_outside_the_gauges_joint_range_are_told():
    corner = np.array([[0.0, 0.0], [1.0, 0.0], [1.0, 1.0], [0.0, 1.0], [0.5, 0.5]])
    triangle = corner[[0, 1, 2, 4]]
    space = describe_space(("area", "rain"), triangle, np.full(4, 0.1))
    notes = space.notes(np.array([[0.2, 0.8], [0.8, 0.4], [2.0, 0.5]]), np.full(3, 0.05))
    assert ["within the gauges' range one by one, but not together: area with rain"] == notes[0]
    assert [] == notes[1]
    assert ["area is above the gauges' range"] == notes[2]
    assert not lies_outside(convex_hull(corner), 0.5, 0.999)
