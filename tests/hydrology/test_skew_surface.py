"""The spatial skew surface: a computed example, its limit without correlation, a Gaussian-process library, refits."""

import numpy as np
import pytest
from sklearn.gaussian_process import GaussianProcessRegressor
from sklearn.gaussian_process.kernels import ConstantKernel, Matern

from wrackline.hydrology.generalized_skew import StationSkews
from wrackline.hydrology.skew_surface import _surface_at, fit_skew_surface, spatial_correlation

KM = np.array([[0, 0], [60, 0], [0, 80], [90, 90.0]])
V = np.array([0.15, 0.12, 0.09, 0.20])
Y = np.array([-0.3, 0.1, -0.05, 0.4])
TARGET = np.array([[40.0, 40.0]])


def distances(a, b):
    return np.hypot(a[:, None, 0] - b[:, 0], a[:, None, 1] - b[:, 1])


def four_stations(covariance=None):
    return StationSkews(Y, np.full(4, 50.0), V, np.diag(V) if covariance is None else covariance)


def surface(range_km, variance=0.08, covariance=None):
    stations = four_stations(covariance)
    return _surface_at(stations, np.ones((4, 1)), distances(KM, KM), variance, range_km, 0.0)


def test_computed_example_with_and_without_spatial_error():
    # Computed in double precision for this project: s2 = .08, exp(-d / 70).
    fitted = surface(70.0)
    mean, variance = fitted.predict(np.ones((1, 1)), distances(TARGET, KM))
    assert fitted.coefficients[0] == pytest.approx(0.0224031065561, rel=1e-9)
    assert mean[0] == pytest.approx(0.0167430334478, rel=1e-9)
    assert variance[0] == pytest.approx(0.0774042390656, rel=1e-9)
    plain = surface(0.0)
    assert plain.coefficients[0] == pytest.approx(0.0175573260785, rel=1e-9)
    assert plain.predict(np.ones((1, 1)), distances(TARGET, KM))[1][0] == pytest.approx(
        0.1331869413136, rel=1e-9
    )


def test_a_vanishing_range_is_weighted_least_squares():
    near_zero, zero = surface(1e-6), surface(0.0)
    d = distances(TARGET, KM)
    assert near_zero.predict(np.ones((1, 1)), d)[0] == pytest.approx(
        zero.predict(np.ones((1, 1)), d)[0], rel=1e-12
    )


def test_agrees_with_a_gaussian_process_library_under_a_nearly_flat_mean():
    wide = 1e4
    process = GaussianProcessRegressor(
        ConstantKernel(0.08, "fixed") * Matern(70.0, "fixed", nu=0.5) + ConstantKernel(wide, "fixed"),
        alpha=V,
        optimizer=None,
    ).fit(KM, Y)
    mean, sd = process.predict(TARGET, return_std=True)
    found_mean, found_variance = surface(70.0).predict(np.ones((1, 1)), distances(TARGET, KM))
    # The library's mean has variance 1e4 where ours is flat: they differ by the order of V / 1e4.
    assert found_mean[0] == pytest.approx(mean[0], abs=1e-5)
    assert found_variance[0] == pytest.approx(sd[0] ** 2, abs=1e-5)


def test_leave_one_out_in_closed_form_is_a_refit_without_the_station():
    covariance = np.diag(V) + 0.03 * (1 - np.eye(4))
    whole = surface(70.0, covariance=covariance)
    for i in range(4):
        rest = np.delete(np.arange(4), i)
        part = _surface_at(
            StationSkews(Y[rest], np.full(3, 50.0), V[rest], covariance[np.ix_(rest, rest)]),
            np.ones((3, 1)), distances(KM[rest], KM[rest]), 0.08, 70.0, 0.0,
        )  # fmt: skip
        mean, variance = part.predict(np.ones((1, 1)), distances(KM[[i]], KM[rest]))
        assert whole.leave_one_out[i] == pytest.approx(mean[0], rel=1e-9)
        assert whole.leave_one_out_variance[i] == pytest.approx(variance[0], rel=1e-9)


def test_the_fit_finds_a_strong_pattern_and_a_plausible_variance():
    rng = np.random.default_rng(4)
    km = rng.uniform(0, 400, size=(150, 2))
    d = distances(km, km)
    truth = rng.multivariate_normal(np.zeros(150), 0.2 * spatial_correlation(d, 100.0))
    v = rng.uniform(0.03, 0.08, 150)
    skew = truth + rng.normal(size=150) * np.sqrt(v)
    fitted = fit_skew_surface(StationSkews(skew, np.full(150, 50.0), v, np.diag(v)), np.ones((150, 1)), d)
    assert 50 <= fitted.range_km <= 300
    assert 0.1 < fitted.model_variance < 0.4
    rmse = np.sqrt(np.mean((fitted.leave_one_out - truth) ** 2))
    assert rmse == pytest.approx(np.sqrt(fitted.leave_one_out_variance.mean()), rel=0.2)
