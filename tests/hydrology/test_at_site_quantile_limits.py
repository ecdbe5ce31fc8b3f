"""Limits of quantiles: checks by the noncentral t, and expected probability."""

import json
from pathlib import Path

import numpy as np
import pytest

from wrackline.hydrology.quantile_limits import (
    expected_probability,
    expected_probability_aep,
    known_skew_limits,
    standard_error_moments,
    student_limits,
)
from wrackline.stats.moment_covariance import complete_quantile_variance, group_thresholds
from wrackline.stats.pearson3 import frequency_factor

ROWS = json.loads((Path(__file__).parents[1] / "reference" / "at_site_tables.json").read_text())[
    "expected_probability"
]["rows"]


def complete(n):
    return group_thresholds(np.zeros(n, dtype=int), np.full(n, -np.inf), np.full(n, np.inf), 1)


def test_expected_probability_of_the_normal_case():
    for row in ROWS:
        assert row["exact_t"] == pytest.approx(
            float(expected_probability(row["n"], row["nominal"])), abs=5.1e-6
        )


def test_expected_probability_is_inverted():
    nominal = expected_probability_aep([10, 40], [0.01, 0.01])
    np.testing.assert_allclose([0.01, 0.01], expected_probability([10, 40], nominal), rtol=1e-9)


def test_known_skew_limits_equal_students_limits_when_the_skew_has_no_error():
    # The weighted fit with a generalized skew free of error is the known-skew case. Two approximations of different
    # kind: within 8 % of the width of the interval at 50 years.
    n, mean, sd, skew = 50, np.array([2.0]), np.array([0.3]), np.array([0.3])
    aeps = np.array([0.1, 0.01])
    moments = standard_error_moments(complete(n), mean, sd, skew, aeps, np.zeros(1), np.zeros(1))
    quantile = mean + sd * frequency_factor(aeps, skew)[None]
    ours = np.array(student_limits(quantile, *moments, 0.90))[:, 0]
    theirs = np.array(known_skew_limits(2.0, 0.3, 0.3, n, aeps, 0.90))
    np.testing.assert_allclose(theirs, ours, atol=0.08 * float((ours[1] - ours[0]).min()))


def test_variance_of_the_quantile_is_that_of_the_textbook_formula():
    aeps = np.array([0.5, 0.1, 0.01])
    variance, _, _ = standard_error_moments(
        complete(60), np.array([2.0]), np.array([0.3]), np.array([0.5]), aeps
    )
    np.testing.assert_allclose(complete_quantile_variance(60, 0.3, 0.5, aeps), variance[0], rtol=1e-7)


def test_variance_of_the_standard_error_in_the_normal_known_skew_case():
    # se = s sqrt((1 + z**2 / 2) / n), so Var(se) = se**2 / (2 n) and Cov(x, se) = z s se / (2 n), by hand.
    n, z = 40, 2.3263479
    variance, own, shared = standard_error_moments(
        complete(n), np.zeros(1), np.ones(1), np.zeros(1), np.array([0.01]), np.zeros(1), np.zeros(1)
    )
    se = np.sqrt((1 + 0.5 * z**2) / n)
    assert se == pytest.approx(float(np.sqrt(variance[0, 0])), rel=1e-6)
    assert se**2 / (2 * n) == pytest.approx(float(own[0, 0]), rel=1e-4)
    assert z * se / (2 * n) == pytest.approx(float(shared[0, 0]), rel=1e-4)


def test_extreme_covariances_give_finite_limits_on_the_right_sides():
    one = np.ones((1, 1))
    for covariance in (-5.0, 0.0, 5.0):
        lower, upper = student_limits(2 * one, one, 40 * one, covariance * one, 0.90)
        assert lower[0, 0] < 2 < upper[0, 0]
