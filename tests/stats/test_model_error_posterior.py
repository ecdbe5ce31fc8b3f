"""Posterior of the model-error variance: closed forms, adaptive quadrature, scaling."""

import numpy as np
import pytest
from scipy.integrate import quad

from wrackline.stats.gls import turn_system
from wrackline.stats.model_error_posterior import posterior_of_model_variance

Y = np.array([0.10, -0.25, 0.40, 0.05, -0.30])


@pytest.mark.parametrize(
    ("shared", "mean", "variance"),
    [(0.0, 0.0649108490581736, 0.00450908035674295), (0.03, 0.0660486370996949, 0.00441952523944699)],
)
def test_equally_correlated_sites_have_a_posterior_in_closed_form(shared, mean, variance):
    # Computed with 40 digits from lam e^{-lam s} (s + v - c)^-2 exp(-SS / (2 (s + v - c))).
    sampling = np.full((5, 5), shared)
    np.fill_diagonal(sampling, 0.10)
    posterior = posterior_of_model_variance(turn_system(Y, np.ones((5, 1)), sampling), 10.0)
    assert posterior.mean == pytest.approx(mean, rel=1e-10)
    assert posterior.variance == pytest.approx(variance, rel=1e-9)


def test_agrees_with_adaptive_quadrature_given_coefficients():
    v = np.array([0.2, 0.1, 0.3, 0.15, 0.05])
    b = np.array([0.02])

    def density(s):
        return np.exp(-10 * s) * np.prod((s + v) ** -0.5) * np.exp(-0.5 * np.sum((Y - 0.02) ** 2 / (s + v)))

    mass = quad(density, 0, 7, epsabs=0, epsrel=1e-12, limit=200)[0]
    mean = quad(lambda s: s * density(s), 0, 7, epsabs=0, epsrel=1e-12, limit=200)[0] / mass
    posterior = posterior_of_model_variance(turn_system(Y, np.ones((5, 1)), v), 10.0, b)
    assert posterior.mean == pytest.approx(mean, rel=1e-9)


def test_scaling_the_response_and_the_prior_scales_the_posterior():
    v = np.full(5, 0.1)
    one = posterior_of_model_variance(turn_system(Y, np.ones((5, 1)), v), 10.0)
    scaled = posterior_of_model_variance(turn_system(3 * Y, np.ones((5, 1)), 9 * v), 10.0 / 9)
    assert scaled.mean == pytest.approx(9 * one.mean, rel=1e-12)


def test_the_mean_is_positive_even_where_sampling_explains_everything():
    posterior = posterior_of_model_variance(turn_system(Y / 100, np.ones((5, 1)), np.full(5, 0.1)), 10.0)
    assert 0 < posterior.mean < 0.1
