"""Routes weighed by their errors, intervals judged, records weighed with regions."""

import numpy as np
import pytest
from scipy.special import ndtri

from wrackline.hydrology.quantile_regression import order_floods, smooth_over_aeps
from wrackline.hydrology.routes import (
    RoutePredictions,
    calibrate_intervals,
    combine_routes,
    fit_combination,
    out_of_block_error,
    split_by_space,
    weigh_with_record,
)
from wrackline.stats.pearson3 import frequency_factor, frequency_factor_slope


def draw_routes(n, sd_growth, sd_quantile, correlation, sampling=0.1, seed=0):
    """Errors of two routes at n gauges and three probabilities, wholly common to the probabilities."""
    rng = np.random.default_rng(seed)
    cover = np.array([[1, correlation], [correlation, 1]])
    errors = rng.multivariate_normal(np.zeros(2), cover, n) * [sd_growth, sd_quantile]
    truth = rng.normal(2, 0.5, (n, 1)) + np.array([0.0, 0.3, 0.6])
    observed = truth + rng.normal(0, sampling, (n, 1))

    def route(column, sd):
        return RoutePredictions(truth + errors[:, [column]], np.full((n, 3), sd**2), 10**6)

    return observed, route(0, sd_growth), route(1, sd_quantile)


def test_equally_good_routes_get_equal_weights():
    combination = fit_combination(*draw_routes(4000, 0.2, 0.2, 0.5))
    assert combination.weight == pytest.approx(0.5, abs=4 * combination.own_se)
    # Correlation from the mean square difference: standard error about 0.01 with 4,000 gauges.
    np.testing.assert_allclose(combination.correlation, 0.5, atol=0.04)


def test_weight_is_that_of_least_error_variance_whatever_the_records_own_error():
    for sampling in (0.0, 0.3):
        combination = fit_combination(*draw_routes(20000, 0.2, 0.1, 0.3, sampling))
        c = 0.3 * 0.2 * 0.1
        best = (0.2**2 - c) / (0.2**2 + 0.1**2 - 2 * c)
        assert combination.own_weight == pytest.approx(best, abs=4 * combination.own_se)


def test_few_gauges_draw_the_weight_towards_one_half():
    combination = fit_combination(*draw_routes(12, 0.2, 0.1, 0.8))
    assert abs(combination.weight - 0.5) < abs(combination.own_weight - 0.5)
    assert 0 <= combination.weight <= 1


def test_combined_variance_is_that_of_the_weighted_mean():
    observed, growth, quantile = draw_routes(20000, 0.2, 0.15, 0.5, sampling=0.0)
    combined = combine_routes(fit_combination(observed, growth, quantile), growth, quantile)
    measured = (combined.log10_flow - observed).var(axis=0)
    # Standard error of a variance from 20,000 normal values is 1 %.
    np.testing.assert_allclose(combined.variance.mean(axis=0), measured, rtol=0.04)


def test_honest_intervals_are_left_alone():
    observed, growth, _ = draw_routes(400, 0.2, 0.1, 0.3)
    block = np.arange(400) % 8
    found = calibrate_intervals(observed, np.full((400, 3), 0.01), growth, block, 0.9)
    assert found.factor == 1.0
    assert found.coverage == pytest.approx(0.9, abs=0.05)


def test_narrow_intervals_are_widened_by_about_what_they_lack():
    observed, growth, _ = draw_routes(4000, 0.2, 0.1, 0.3, sampling=0.0)
    narrow = RoutePredictions(growth.log10_flow, growth.variance / 4, growth.degrees_of_freedom)
    found = calibrate_intervals(observed, np.zeros((4000, 3)), narrow, np.arange(4000) % 8, 0.9)
    assert found.factor == pytest.approx(2.0, rel=0.05)
    assert found.judged_coverage == pytest.approx(0.9, abs=0.015)
    assert found.coverage < 0.65


def test_errors_out_of_block_name_the_better_route():
    found = out_of_block_error(*draw_routes(400, 0.3, 0.1, 0.2), np.arange(400) % 8)
    assert found["routes_combined"] <= found["quantile_regression"] * 1.02
    assert found["quantile_regression"] < found["growth_curve"]


def test_blocks_are_of_neighbours_and_about_equal():
    rng = np.random.default_rng(2)
    latitude, longitude = rng.uniform(40, 44, 103), rng.uniform(-8, 2, 103)
    block = split_by_space(latitude, longitude, 8)
    counts = np.bincount(block)
    assert len(counts) == 8
    assert counts.min() >= 12
    assert counts.max() <= 14
    within = np.mean([longitude[block == b].std() for b in range(8)])
    assert within < 0.5 * longitude.std()


def test_record_and_region_are_weighed_by_inverse_variances():
    # Computed: y 3.60 (0.0081) and 3.45 (0.025).
    y, v = weigh_with_record(*(np.array([x]) for x in (3.60, 0.0081, 3.45, 0.025)))
    assert y[0] == pytest.approx(3.56329305135952, rel=1e-12)
    assert v[0] == pytest.approx(0.0061178247734139, rel=1e-12)


def test_values_that_a_pearson3_family_gives_pass_the_smoothing_unchanged():
    aeps = np.array([0.5, 0.2, 0.1, 0.04, 0.01, 0.002])
    curve = 2 + 0.3 * frequency_factor(aeps, -0.1) + 0.05 * frequency_factor_slope(aeps, -0.1)
    smoothing = smooth_over_aeps(aeps, -0.1, np.linspace(0.01, 0.03, 6))
    np.testing.assert_allclose(smoothing @ curve, curve, rtol=1e-10)
    np.testing.assert_allclose(smoothing @ smoothing, smoothing, atol=1e-10)


def test_crossing_floods_are_pooled_and_others_left():
    crossing = np.array([[1.0, 2.0, 1.5, 3.0], [1.0, 1.1, 1.2, 1.3]])
    ordered, changed = order_floods(crossing)
    np.testing.assert_allclose(ordered, [[1.0, 1.75, 1.75, 3.0], [1.0, 1.1, 1.2, 1.3]])
    assert changed.tolist() == [True, False]


def test_intervals_of_the_normal_law_reach_as_far_as_its_quantiles():
    observed, growth, _ = draw_routes(50, 0.2, 0.1, 0.3)
    from wrackline.hydrology.routes import interval_reach

    np.testing.assert_allclose(interval_reach(growth, 0.9), float(ndtri(0.95)) * 0.2, rtol=1e-4)
    assert observed.shape == (50, 3)
