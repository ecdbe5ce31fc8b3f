"""Closed-form leave-one-out against fitting again without each site."""

import numpy as np
import pytest

from wrackline.stats.gls import fit_gls
from wrackline.stats.gls_leave_one_out import leave_one_out, leave_one_out_refitted


def make_region(model_variance, diagonal=False):
    rng = np.random.default_rng(11)
    n = 30
    design = np.column_stack([np.ones(n), rng.normal(size=(n, 2))])
    root = rng.normal(size=(n, n)) / np.sqrt(n)
    sampling = 0.3 * root @ root.T + 0.1 * np.diag(rng.uniform(0.5, 2, n))
    if diagonal:
        sampling = np.diag(np.diag(sampling))
    noise = rng.multivariate_normal(np.zeros(n), sampling + model_variance * np.eye(n))
    return design @ [1.0, 0.5, -0.3] + noise, design, sampling


def without(i, y, design, sampling):
    kept = np.arange(len(y)) != i
    return y[kept], design[kept], sampling[np.ix_(kept, kept)]


@pytest.mark.parametrize("model_variance", [0.4, 0.0])
@pytest.mark.parametrize("method", ["moments", "reml"])
def test_with_the_model_variance_held_it_equals_refits(model_variance, method):
    region = make_region(model_variance)
    fit = fit_gls(*region, method)
    left_out = leave_one_out(*region, fit)
    for i, row in enumerate(region[1]):
        refit = fit_gls(*without(i, *region), method, model_variance=fit.model_variance)
        predicted, variance = refit.predict(row[None])
        np.testing.assert_allclose(left_out.coefficients[i], refit.coefficients, rtol=1e-9, atol=1e-11)
        assert left_out.predicted[i] == pytest.approx(predicted[0], rel=1e-9, abs=1e-11)
        assert left_out.variance[i] == pytest.approx(variance[0], rel=1e-9)


@pytest.mark.parametrize("model_variance", [0.4, 0.0])
@pytest.mark.parametrize("method", ["moments", "reml"])
def test_with_the_model_variance_estimated_anew_it_equals_refits(model_variance, method):
    region = make_region(model_variance)
    left_out = leave_one_out_refitted(*region, method)
    for i, row in enumerate(region[1]):
        refit = fit_gls(*without(i, *region), method)
        predicted, variance = refit.predict(row[None])
        assert left_out.model_variance[i] == pytest.approx(refit.model_variance, rel=1e-9, abs=1e-11)
        assert left_out.predicted[i] == pytest.approx(predicted[0], rel=1e-9, abs=1e-11)
        assert left_out.variance[i] == pytest.approx(variance[0], rel=1e-9)


def test_variances_in_a_vector_or_on_a_diagonal_are_the_same_thing():
    y, design, sampling = make_region(0.4, diagonal=True)
    variances = np.diag(sampling).copy()
    matrix = leave_one_out(y, design, sampling, fit_gls(y, design, sampling))
    vector = leave_one_out(y, design, variances, fit_gls(y, design, variances))
    np.testing.assert_allclose(vector.predicted, matrix.predicted, rtol=1e-9)
    np.testing.assert_allclose(
        leave_one_out_refitted(y, design, variances).predicted,
        leave_one_out_refitted(y, design, sampling).predicted,
        rtol=1e-9,
    )
