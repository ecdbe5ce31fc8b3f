"""Limiting cases of the regional skew model, and its equality with general statistics libraries."""

import numpy as np
import pytest

from wrackline.hydrology.generalized_skew import (
    StationSkews,
    fit_skew_model,
    generalized_skew_error_covariance,
    prepare_station_skews,
    score_left_out,
)
from wrackline.hydrology.skew_diagnostics import diagnose_skew_model, pseudo_anova
from wrackline.stats.gls import estimate_model_variance
from wrackline.stats.skew_variance import skew_weight, weighted_skew_mse

RNG = np.random.default_rng(4)
N = 25
PLACE = RNG.uniform(0, 300, (N, 2))
KM = np.hypot(*(PLACE[:, None] - PLACE).transpose(2, 0, 1))
YEARS = RNG.integers(25, 90, N).astype(float)
COMMON = np.minimum(YEARS[:, None], YEARS)
SKEW = RNG.normal(-0.1, 0.4, N)
X = np.column_stack([np.ones(N), RNG.normal(2.0, 0.7, N)])
ONE = np.ones((N, 1))


def correlation(near=0.9):
    r = near * np.exp(-KM / 100)
    np.fill_diagonal(r, 1.0)
    return r


def prepared(design=X, near=0.9, skew=SKEW):
    return prepare_station_skews(skew, YEARS, design, correlation(near), COMMON)


def scaled(stations, factor):
    return StationSkews(
        factor * stations.skew,
        stations.record_length,
        factor**2 * stations.variance,
        factor**2 * stations.covariance,
    )


def test_equal_sampling_variances_give_ordinary_least_squares():
    stations = StationSkews(SKEW, YEARS, np.full(N, 0.05), 0.05 * np.eye(N))
    model = fit_skew_model(stations, X)
    ols, squares = np.linalg.lstsq(X, SKEW, rcond=None)[:2]
    np.testing.assert_allclose(ols, model.coefficients, atol=1e-12)
    # s2 by moments is the residual variance less the sampling variance; restricted likelihood gives the same.
    expected = max(0.0, squares[0] / (N - 2) - 0.05)
    for method in ("moments", "reml"):
        found = estimate_model_variance(SKEW, X, stations.variance, method)
        assert expected == pytest.approx(found, rel=1e-6)


def test_without_correlation_generalized_is_weighted_least_squares():
    model = fit_skew_model(prepared(near=0.0), X, variant="marginal")
    assert model.model_variance_weighted == pytest.approx(model.model_variance, rel=1e-10)
    w = 1 / (model.model_variance + model.stations.variance)
    np.testing.assert_allclose(np.linalg.inv(X.T @ (w[:, None] * X)), model.coefficient_covariance, rtol=1e-9)
    constant = fit_skew_model(prepared(ONE, near=0.0), ONE, variant="marginal")
    found = diagnose_skew_model(constant, constant)
    assert found.beta_variance_misrepresentation == pytest.approx(1.0, rel=1e-9)


def test_leverages_add_up_to_the_number_of_coefficients():
    model = fit_skew_model(prepared(), X)
    assert diagnose_skew_model(model, fit_skew_model(prepared(ONE), ONE)).leverage.sum() == pytest.approx(2.0)


def test_influence_is_that_of_leaving_the_station_out():
    stations, i = prepared(), 7
    model = fit_skew_model(stations, X)
    rest = np.delete(np.arange(N), i)
    w = 1 / (model.model_variance_weighted + stations.variance[rest])
    moved = model.coefficients - np.linalg.solve(
        X[rest].T @ (w[:, None] * X[rest]), X[rest].T @ (w * stations.skew[rest])
    )
    expected = moved @ np.linalg.solve(model.coefficient_covariance, moved) / 2
    assert expected == pytest.approx(diagnose_skew_model(model, model).influence[i], rel=1e-8)


def test_scaling_skews_and_prior_scales_the_model():
    stations = prepared()
    plain, twice = fit_skew_model(stations, X), fit_skew_model(scaled(stations, 2.0), X, prior_rate=10.0 / 4)
    assert 4 * plain.model_variance == pytest.approx(twice.model_variance, rel=1e-9)
    np.testing.assert_allclose(2 * plain.coefficients, twice.coefficients, rtol=1e-9)


def test_order_of_stations_does_not_matter():
    order = np.random.default_rng(1).permutation(N)
    stations = prepare_station_skews(
        SKEW[order], YEARS[order], X[order], correlation()[np.ix_(order, order)], COMMON[np.ix_(order, order)]
    )
    shuffled, plain = fit_skew_model(stations, X[order]), fit_skew_model(prepared(), X)
    np.testing.assert_allclose(plain.coefficients, shuffled.coefficients, rtol=1e-9)
    np.testing.assert_allclose(plain.leave_one_out[order], shuffled.leave_one_out, rtol=1e-8)


def test_a_constant_added_moves_the_intercept_alone_and_centring_changes_no_fit():
    stations = prepared()
    plain = fit_skew_model(stations, X)
    moved = StationSkews(stations.skew + 0.3, YEARS, stations.variance, stations.covariance)
    np.testing.assert_allclose(
        plain.coefficients + np.array([0.3, 0.0]), fit_skew_model(moved, X).coefficients, atol=1e-10
    )
    centred = X - [0.0, X[:, 1].mean()]
    again = fit_skew_model(stations, centred)
    np.testing.assert_allclose(plain.fitted, again.fitted, atol=1e-10)
    assert plain.model_variance == pytest.approx(again.model_variance, rel=1e-9)
    np.testing.assert_allclose(plain.predict(X)[1], again.predict(centred)[1], rtol=1e-9)


def test_a_station_that_knows_nothing_changes_nothing():
    stations = prepared(ONE, near=0.0)
    variance = np.append(stations.variance, 1e12)
    more = StationSkews(np.append(stations.skew, 5.0), np.append(YEARS, 30.0), variance, np.diag(variance))
    plain, added = fit_skew_model(stations, ONE), fit_skew_model(more, np.ones((N + 1, 1)))
    assert plain.coefficients[0] == pytest.approx(added.coefficients[0], abs=1e-9)
    assert plain.model_variance == pytest.approx(added.model_variance, rel=1e-6)


def test_a_copied_record_is_repaired_and_told_and_adds_nothing():
    twice = np.append(np.arange(N), 0)
    r = correlation()[np.ix_(twice, twice)]
    stations = prepare_station_skews(SKEW[twice], YEARS[twice], ONE[twice], r, COMMON[np.ix_(twice, twice)])
    assert stations.repaired
    assert not prepared().repaired
    known = np.linalg.inv(stations.covariance[:N, :N]).sum()
    # The repair lifts the smallest eigenvalue from 0 to 1e-8 of a correlation: what is gained is of that order.
    assert known == pytest.approx(np.linalg.inv(stations.covariance).sum(), rel=1e-6)


def test_indefinite_correlations_are_repaired_to_the_nearest_that_can_be_factored():
    r = np.array([[1.0, 0.95, -0.95], [0.95, 1.0, 0.95], [-0.95, 0.95, 1.0]])
    years = np.full(3, 40.0)
    stations = prepare_station_skews(np.zeros(3), years, np.ones((3, 1)), r, np.full((3, 3), 40.0))
    assert stations.repaired
    assert np.linalg.eigvalsh(stations.covariance)[0] > 0
    np.testing.assert_allclose(stations.variance, np.diag(stations.covariance))


@pytest.mark.parametrize(("station", "regional"), [(0.12, 0.14), (0.3, 0.3), (0.05, 2.0)])
def test_weighted_skew_is_surer_than_both(station, regional):
    assert weighted_skew_mse(station, regional) < min(station, regional)


def test_weights_in_the_limits():
    assert skew_weight(0.2, 0.2) == pytest.approx(0.5)
    assert skew_weight(0.2, 1e12) == pytest.approx(1.0)
    # G = .40, R = -.10, mean square errors .12 and .14: computed with 40 digits for this project.
    w = skew_weight(0.12, 0.14)
    assert w * 0.40 + (1 - w) * -0.10 == pytest.approx(0.169230769231, abs=5e-13)
    assert weighted_skew_mse(0.12, 0.14) == pytest.approx(0.0646153846154, abs=5e-14)


def test_left_out_density_is_that_of_the_conditional_normal():
    stations = prepared(ONE)
    cover = stations.covariance + 0.05 * np.eye(N) + 1e4  # a constant of nearly flat prior
    i, rest = 3, np.delete(np.arange(N), 3)
    pull = np.linalg.solve(cover[np.ix_(rest, rest)], cover[rest, i])
    mean, variance = pull @ stations.skew[rest], cover[i, i] - pull @ cover[rest, i]
    expected = -0.5 * (np.log(2 * np.pi * variance) + (stations.skew[i] - mean) ** 2 / variance)
    found = score_left_out(stations.skew, ONE, np.linalg.inv(stations.covariance + 0.05 * np.eye(N)))
    assert expected == pytest.approx(found[i], abs=1e-4)


def test_shared_error_of_generalized_skews_is_the_error_of_the_coefficients():
    model = fit_skew_model(prepared(), X)
    covariance = generalized_skew_error_covariance(model, X)
    np.testing.assert_allclose(model.predict(X)[1], np.diag(covariance), rtol=1e-12)
    assert X[0] @ model.coefficient_covariance @ X[1] == pytest.approx(covariance[0, 1])


def test_analysis_of_variance_adds_up():
    constant, model = fit_skew_model(prepared(ONE), ONE), fit_skew_model(prepared(), X)
    *parts, total = pseudo_anova(model, constant)
    assert total[1] == sum(df for _, df, _ in parts)
    assert total[2] == pytest.approx(sum(value for *_, value in parts), rel=1e-12)


def test_coefficients_and_their_covariance_equal_those_of_a_statistics_library():
    import statsmodels.api as sm

    stations = prepared()
    model = fit_skew_model(stations, X)
    weighted = sm.WLS(stations.skew, X, weights=1 / (model.model_variance_weighted + stations.variance)).fit()
    np.testing.assert_allclose(weighted.params, model.coefficients, rtol=1e-10)
    cover = stations.covariance + model.model_variance * np.eye(N)
    # For any weights, W L W' is never below the generalized least-squares covariance, which the library has unscaled.
    smallest = sm.GLS(stations.skew, X, sigma=cover).fit().normalized_cov_params
    assert np.linalg.eigvalsh(model.coefficient_covariance - smallest)[0] > -1e-12


def test_moments_of_a_constant_equal_the_random_effects_estimate_of_a_statistics_library():
    from statsmodels.stats.meta_analysis import combine_effects

    stations = prepared(ONE)
    wide = 2.0 * stations.skew
    expected = combine_effects(wide, stations.variance, method_re="iterated").tau2
    # The library's default tolerance; 6e-10 seen elsewhere on another set.
    assert expected == pytest.approx(
        estimate_model_variance(wide, ONE, stations.variance, "moments"), abs=1e-5
    )
