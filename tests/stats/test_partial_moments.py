"""Partial and censored L-moments: no-censoring identity, recovery of parameters, zeros."""

import numpy as np
import pytest
from numpy.testing import assert_allclose
from scipy.integrate import quad

from wrackline.stats.distributions import gev, glo
from wrackline.stats.lmoments import sample_lmoments
from wrackline.stats.partial_moments import (
    censored_lmoments,
    fit_gev_partial,
    gev_partial_moments,
    partial_moments,
    quantile_with_zeros,
)

SHAPES = [-0.5, -0.15, -0.021, -0.019, 0.0, 1e-9, 0.019, 0.021, 0.1, 0.6]


def test_without_censoring_they_are_the_ordinary_moments():
    record = np.random.default_rng(1).gumbel(100.0, 30.0, size=35)
    b0, b1, b2 = partial_moments(record, -np.inf, orders=3).moments
    lm = sample_lmoments(record, [0, 35])
    assert_allclose([lm.l1[0], lm.l2[0], lm.t3[0]], [b0, 2 * b1 - b0, (6 * b2 - 6 * b1 + b0) / (2 * b1 - b0)])


@pytest.mark.parametrize("k", SHAPES)
@pytest.mark.parametrize("share", [0.0, 0.3])
def test_extreme_value_moments_equal_their_integrals(k, share):
    found = gev_partial_moments([100.0, 30.0, k], share)
    for order in range(4):
        expected, error = quad(
            lambda p, r=order: gev.quantile([100.0, 30.0, k], p) * p**r, share, 1.0, epsabs=1e-10, limit=400
        )
        assert_allclose(expected, found[order], rtol=0, atol=max(1e-7, 10 * error))


@pytest.mark.parametrize("k", SHAPES)
@pytest.mark.parametrize("share", [0.0, 0.2, 0.5])
def test_fit_returns_the_parameters(k, share):
    moments = gev_partial_moments([100.0, 30.0, k], share, orders=3)
    assert_allclose([100.0, 30.0, k], fit_gev_partial(moments, share), rtol=1e-8, atol=1e-8)


def test_fit_without_censoring_is_the_lmoment_fit():
    record = np.random.default_rng(7).gumbel(100.0, 30.0, size=60)
    lm = sample_lmoments(record, [0, 60])
    expected = gev.fit(lm.l1, lm.l2, lm.t3)[0]
    found = partial_moments(record, -np.inf)
    assert_allclose(expected, fit_gev_partial(found.moments, found.censored_share), rtol=1e-8, atol=1e-9)


def test_batch_equals_one_at_a_time():
    records = np.random.default_rng(7).gumbel(100.0, 30.0, size=(4, 50))
    limits = np.array([60.0, 80.0, 90.0, 100.0])
    found = partial_moments(records, limits)
    fits = fit_gev_partial(found.moments, found.censored_share)
    for i in range(4):
        alone = partial_moments(records[i], limits[i])
        assert_allclose(alone.moments, found.moments[i], rtol=1e-13)
        assert_allclose(fit_gev_partial(alone.moments, alone.censored_share), fits[i], rtol=1e-9)


def test_impossible_moments_give_nan():
    assert np.isnan(fit_gev_partial([1.0, 5.0, -3.0], 0.0)).all()
    assert np.isnan(fit_gev_partial([100.0, 60.0, 45.0], 1.0)).all()


def test_records_too_short_or_with_gaps_are_refused():
    with pytest.raises(ValueError, match="at least 4"):
        partial_moments([1.0, 2.0, 3.0], 0.0)
    with pytest.raises(ValueError, match="finite"):
        partial_moments([1.0, np.nan, 3.0, 4.0], 0.0)


def test_kinds_a_and_b_are_lmoments_of_the_rest_and_of_the_raised_record():
    values, offsets = [5.0, 1.0, 9.0, 7.0, 2.0, 30.0, 10.0, 20.0, 40.0], [0, 5, 9]
    a = censored_lmoments(values, offsets, [3.0, 0.0], "A")
    assert_allclose(a.n, [3, 4])
    assert_allclose(sample_lmoments([5.0, 9.0, 7.0], [0, 3]).l2[0], a.l2[0])
    b = censored_lmoments(values, offsets, [3.0, 0.0], "B")
    expected = sample_lmoments([5.0, 3.0, 9.0, 7.0, 3.0], [0, 5])
    assert_allclose([expected.l1[0], expected.t3[0]], [b.l1[0], b.t3[0]])
    assert_allclose(sample_lmoments(values[5:], [0, 4]).t3[0], [a.t3[1], b.t3[1]])


def test_unknown_kind_or_missing_thresholds_are_refused():
    with pytest.raises(ValueError, match="kind"):
        censored_lmoments([1.0, 2.0], [0, 2], [0.0], "C")
    with pytest.raises(ValueError, match="threshold"):
        censored_lmoments([1.0, 2.0], [0, 2], [0.0, 1.0], "A")


def test_zero_years_shift_the_probabilities_of_the_others():
    parameters = glo.fit(1.0, 0.3, 0.2)
    p = np.array([0.1, 0.25, 0.5, 0.99])
    expected = [0.0, 0.0, glo.quantile(parameters, 1 / 3), glo.quantile(parameters, 0.74 / 0.75)]
    assert_allclose(expected, quantile_with_zeros(glo, parameters, 0.25, p), rtol=1e-13)
    assert_allclose(glo.quantile(parameters, p), quantile_with_zeros(glo, parameters, 0.0, p), rtol=1e-14)
