"""Heterogeneity and fit measures: invariances, seeds, correlation, fall-backs."""

import numpy as np
import pytest

from wrackline.hydrology.homogeneity import (
    PresortedDraws,
    fit_parent,
    measure_dispersion,
    measure_heterogeneity,
    simulate_concurrent,
    simulate_independent,
)
from wrackline.stats.distributions import kappa
from wrackline.stats.lmoments import sample_lmoments_of_rows

PARENT = fit_parent(0.3, 0.22, 0.17)


def test_presorted_draws_are_sorted_log_uniforms():
    draws = PresortedDraws(3, 20000).log_uniforms(10, 0)
    assert (np.diff(draws, axis=1) >= 0).all()
    # the j-th of n sorted uniforms has mean j / (n + 1)
    expected = np.arange(1, 11) / 11
    assert pytest.approx(np.exp(draws).mean(axis=0), abs=4 * 0.15 / np.sqrt(20000)) == expected


def test_presorted_draws_do_not_depend_on_what_was_asked_before_or_kept():
    one, other = PresortedDraws(3, 50), PresortedDraws(3, 50, memory_mb=0)
    first = one.log_uniforms(30, 2)
    other.log_uniforms(31, 0)
    assert np.array_equal(first, other.log_uniforms(30, 2))
    assert not np.array_equal(first, one.log_uniforms(30, 1))


def test_simulated_ratios_are_those_of_the_sorted_samples():
    draws = PresortedDraws(9, 40)
    found = simulate_independent(np.array([25]), PARENT, draws)
    direct = sample_lmoments_of_rows(kappa.quantile_from_log_p(PARENT.parameters, draws.log_uniforms(25, 0)))
    for expected, ratio in ((direct.t, found.lcv), (direct.t3, found.lskew), (direct.t4, found.lkurtosis)):
        assert pytest.approx(ratio[:, 0], rel=1e-9) == expected


def test_dispersion_of_two_gauges_by_hand():
    # weights 1/4 and 3/4; averages 0.35, 0.25, 0.15
    n = np.array([10, 30])
    v = measure_dispersion(n, np.array([0.2, 0.4]), np.array([0.1, 0.3]), np.array([0.15, 0.15]))
    departures = np.array([0.15, 0.05])
    expected = [
        np.sqrt(0.25 * 0.15**2 + 0.75 * 0.05**2),
        0.25 * np.sqrt(2) * departures[0] + 0.75 * np.sqrt(2) * departures[1],
        0.25 * departures[0] + 0.75 * departures[1],
    ]
    assert pytest.approx(v, rel=1e-12) == expected


def test_one_gauge_alone_has_no_heterogeneity():
    draws = simulate_independent(np.array([40]), PARENT, PresortedDraws(1, 100))
    one = (np.array([x]) for x in (0.3, 0.2, 0.15))
    assert np.isnan(measure_heterogeneity(np.array([40]), *one, draws).h).all()


def test_parent_on_or_above_the_generalized_logistic_line_is_that_law():
    parent = fit_parent(0.3, 0.2, 0.25)
    assert parent.name == "GLO"
    assert [-0.2, -1.0] == pytest.approx(parent.parameters[2:])
    # and it can be simulated from
    assert np.isfinite(simulate_independent(np.array([20]), parent, PresortedDraws(1, 50)).lcv).all()


def test_ratios_that_no_law_has_are_refused():
    with pytest.raises(ValueError, match="no law"):
        fit_parent(-0.1, 0.2, 0.15)


def test_homogeneous_pools_have_h_near_zero_and_correlation_makes_it_negative():
    # mean H1 of homogeneous, correlated regions; expected shift -sqrt(2 (N - 1)) (1 - sqrt(1 - rho^2)), from the
    # chi-square form of V^2; an independent simulation of 20 gauges of 30 years gave -1.45 at rho 0.7
    g, n, rho = 20, 30, 0.7
    lengths, years = np.full(g, n), [np.arange(n)] * g
    reference = simulate_independent(lengths, PARENT, PresortedDraws(1, 1000))
    base = measure_dispersion(lengths, reference.lcv, reference.lskew, reference.lkurtosis)[0]
    lower = np.linalg.cholesky(np.full((g, g), rho) + (1 - rho) * np.eye(g))
    correlated = simulate_concurrent(np.random.default_rng(4), years, lower, PARENT, 400)
    v = measure_dispersion(lengths, correlated.lcv, correlated.lskew, correlated.lkurtosis)[0]
    h = (v - base.mean()) / base.std()
    assert -1.45 == pytest.approx(h.mean(), abs=0.25)


def test_sample_ratios_of_gauges_that_share_floods_correlate_as_the_model_of_shared_error_says():
    # the between-site model takes n_ij rho^2 / sqrt(n_i n_j) for the correlation of sample L-CVs
    parent = fit_parent(0.2, 0.0, 0.1226)
    rho = 0.8
    lower = np.linalg.cholesky(np.array([[1.0, rho], [rho, 1.0]]))
    years = [np.arange(40), np.arange(20, 60)]
    found = simulate_concurrent(np.random.default_rng(4), years, lower, parent, 6000)
    drawn = np.corrcoef(found.lcv.T)[0, 1]
    # 6,000 simulations: standard error 0.012; the form itself is good to a few percent
    assert rho**2 * 20 / 40 == pytest.approx(drawn, abs=0.05)
