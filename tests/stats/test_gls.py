"""Limiting cases and independent routes for regression with known sampling covariance."""

import numpy as np
import pytest
import statsmodels.api as sm
from scipy.optimize import minimize_scalar

from wrackline.stats.gls import fit_gls


@pytest.fixture
def region():
    rng = np.random.default_rng(7)
    n = 40
    design = np.column_stack([np.ones(n), rng.normal(size=n), rng.normal(size=n)])
    root = rng.normal(size=(n, n)) / np.sqrt(n)
    sampling = 0.3 * root @ root.T + 0.1 * np.diag(rng.uniform(0.5, 2, n))
    y = design @ [1.0, 0.5, -0.3] + rng.multivariate_normal(np.zeros(n), sampling + 0.4 * np.eye(n))
    return y, design, sampling


@pytest.mark.parametrize("method", ["moments", "reml"])
def test_equal_variances_give_ordinary_least_squares(region, method):
    y, design, _ = region
    v = 0.05
    fit = fit_gls(y, design, np.full(len(y), v), method)
    ols = sm.OLS(y, design).fit()
    np.testing.assert_allclose(fit.coefficients, ols.params, rtol=1e-10)
    assert fit.model_variance == pytest.approx(ols.mse_resid - v, rel=1e-9)
    np.testing.assert_allclose(fit.leverage, ols.get_influence().hat_matrix_diag, atol=1e-12)


@pytest.mark.parametrize("method", ["moments", "reml"])
def test_equals_a_general_library_at_the_same_model_variance(region, method):
    y, design, sampling = region
    fit = fit_gls(y, design, sampling, method)
    gls = sm.GLS(y, design, sigma=sampling + fit.model_variance * np.eye(len(y))).fit()
    np.testing.assert_allclose(fit.coefficients, gls.params, rtol=1e-9)
    np.testing.assert_allclose(fit.coefficient_covariance, gls.normalized_cov_params, rtol=1e-8)


def test_moment_estimate_sets_the_weighted_squares_to_their_expectation(region):
    y, design, sampling = region
    fit = fit_gls(y, design, sampling, "moments")
    precision = np.linalg.inv(sampling + fit.model_variance * np.eye(len(y)))
    assert fit.residuals @ precision @ fit.residuals == pytest.approx(fit.degrees_of_freedom, rel=1e-9)


def test_restricted_likelihood_has_its_maximum_at_the_estimate(region):
    y, design, sampling = region

    def deviance(variance):
        cover = sampling + variance * np.eye(len(y))
        precision = np.linalg.inv(cover)
        information = design.T @ precision @ design
        b = np.linalg.solve(information, design.T @ precision @ y)
        e = y - design @ b
        return np.linalg.slogdet(cover)[1] + np.linalg.slogdet(information)[1] + e @ precision @ e

    best = minimize_scalar(deviance, bounds=(0, 5), method="bounded", options={"xatol": 1e-9})
    # The likelihood is flat at its top: a bounded search finds the place to about the root of its precision.
    assert fit_gls(y, design, sampling, "reml").model_variance == pytest.approx(best.x, rel=1e-5)


def test_diagonal_matrix_and_vector_of_variances_are_the_same_thing(region):
    y, design, sampling = region
    variances = np.diag(sampling).copy()
    a, b = fit_gls(y, design, variances), fit_gls(y, design, np.diag(variances))
    np.testing.assert_allclose(a.coefficients, b.coefficients, rtol=1e-9)
    assert a.model_variance == pytest.approx(b.model_variance, rel=1e-8)


def test_leverages_add_up_to_the_number_of_coefficients(region):
    assert fit_gls(*region).leverage.sum() == pytest.approx(3, rel=1e-10)


def test_scaling_the_response_scales_everything(region):
    y, design, sampling = region
    one, ten = fit_gls(y, design, sampling), fit_gls(10 * y, design, 100 * sampling)
    np.testing.assert_allclose(ten.coefficients, 10 * one.coefficients, rtol=1e-8)
    assert ten.model_variance == pytest.approx(100 * one.model_variance, rel=1e-8)


def test_order_of_sites_does_not_matter(region):
    y, design, sampling = region
    order = np.random.default_rng(1).permutation(len(y))
    one, other = (
        fit_gls(y, design, sampling),
        fit_gls(y[order], design[order], sampling[np.ix_(order, order)]),
    )
    np.testing.assert_allclose(other.coefficients, one.coefficients, rtol=1e-9)


def test_a_duplicated_site_does_not_crash(region):
    y, design, sampling = region
    again = np.r_[np.arange(len(y)), 0]
    fit = fit_gls(y[again], design[again], sampling[np.ix_(again, again)])
    assert np.isfinite(fit.coefficients).all()


def test_too_few_sites_and_dependent_columns_are_refused():
    with pytest.raises(ValueError, match="3 sites cannot carry 3 coefficients"):
        fit_gls(np.zeros(3), np.eye(3), np.ones(3))
    with pytest.raises(ValueError, match="combinations"):
        fit_gls(np.zeros(5), np.ones((5, 2)), np.ones(5))
