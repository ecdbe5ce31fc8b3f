"""Sampling covariance of log10 quantiles: computed values, limiting cases, simulation."""

import numpy as np
import pytest
from scipy.stats import pearson3

from wrackline.hydrology.quantile_covariance import QuantileErrorModel, quantile_sampling_covariance
from wrackline.stats.skew_variance import griffis_stedinger_variance

N, SD, SKEW = 40.0, 0.25, 0.2


def one_gauge(weight, skew_variance, generalized_variance, skew=SKEW):
    ones = np.ones(1)
    return QuantileErrorModel(
        SD * ones, skew * ones, N * ones, np.array([[N]]), np.eye(1), weight * ones,
        np.array([[skew_variance]]), np.array([[generalized_variance]]),
    )  # fmt: skip


def variance(*args, aep=0.01, **kwargs):
    return quantile_sampling_covariance(one_gauge(*args, **kwargs), aep)[0, 0]


# Computed for this project with 40 digits: s = .25, n = 40, g = .2, AEP .01.
ASYMPTOTIC = (6 + 9 * SKEW**2 + 15 * SKEW**4 / 8) / N


def test_known_skew():
    assert variance(0.0, 0.0, 0.0) == pytest.approx(0.0072533706564471, rel=1e-8)


def test_station_skew_with_asymptotic_variance():
    assert variance(1.0, ASYMPTOTIC, 0.0) == pytest.approx(0.0141455361094, rel=1e-8)


def test_weighted_skew_with_generalized_skew_error():
    assert variance(0.7, ASYMPTOTIC, 0.15) == pytest.approx(0.0114272733009, rel=1e-8)


def test_generalized_skew_alone():
    assert variance(0.0, 0.0, 0.15) == pytest.approx(0.0121560734381, rel=1e-8)


def test_a_median_of_normal_logs_errs_as_their_mean():
    assert variance(0.0, 0.0, 0.0, skew=0.0, aep=0.5) == pytest.approx(SD**2 / N, rel=1e-12)


def pair(g, rho, w, n=60, shared=None):
    shared = n if shared is None else shared
    corr = np.array([[1, rho], [rho, 1.0]])
    variance_of_skew = float(griffis_stedinger_variance(n, g))
    skew_corr = corr**3 * shared / n
    np.fill_diagonal(skew_corr, 1.0)
    two = np.ones(2)
    return QuantileErrorModel(
        0.25 * two, g * two, n * two, np.array([[n, shared], [shared, n]], dtype=float), corr, w * two,
        variance_of_skew * skew_corr, np.zeros((2, 2)),
    )  # fmt: skip


@pytest.mark.parametrize("g", [-0.5, 0.0, 0.5])
def test_identical_records_have_the_covariance_of_one(g):
    covariance = quantile_sampling_covariance(pair(g, 1.0, 0.7), 0.01)
    assert covariance[0, 1] == pytest.approx(covariance[0, 0], rel=1e-12)


def test_covariance_of_two_quantiles_matches_simulation():
    # Known skew, partly overlapping records of normal logs: the moments are those of the samples.
    g, rho, n, shared, runs = 0.0, 0.7, 50, 30, 40000
    rng = np.random.default_rng(5)
    common = rng.multivariate_normal([0, 0], [[1, rho], [rho, 1]], size=(runs, shared))
    x = 0.25 * np.concatenate([common, rng.normal(size=(runs, n - shared, 2))], axis=1)
    q = x.mean(axis=1) + float(pearson3.isf(0.01, g)) * x.std(axis=1, ddof=1)
    simulated = np.cov(q.T)
    covariance = quantile_sampling_covariance(pair(g, rho, 0.0, n, shared), 0.01)
    # Three standard errors of the simulated covariance, and 2 % for the first-order formula at n = 50.
    assert covariance[0, 1] == pytest.approx(
        simulated[0, 1], rel=0.02, abs=3 * simulated[0, 0] / np.sqrt(runs)
    )
    assert covariance[0, 0] == pytest.approx(simulated[0, 0], rel=0.04)
