"""Pearson III: against published tables, quadrature and its own symmetries."""

import json
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy.integrate import quad

from wrackline.stats.pearson3 import (
    EXPANSION_SKEW,
    cdf,
    conditional_moments,
    frequency_factor,
    frequency_factor_slope,
    partial_moments,
    pdf,
    sf,
    support,
)

TABLE = json.loads((Path(__file__).parents[1] / "reference" / "at_site_pearson3_factors.json").read_text())
SKEWS = st.floats(-2.9, 2.9)
AEPS = st.floats(1e-4, 1 - 1e-4)


def test_factors_remembered_from_harter_1969_to_five_printed_decimals():
    for row in TABLE["remembered"]:
        assert row["K"] == pytest.approx(float(frequency_factor(row["exceedance"], row["skew"])), abs=6e-6)


@pytest.mark.parametrize("skew", list(TABLE["computed"]))
def test_factors_of_the_table_from_minus_three_to_three(skew):
    np.testing.assert_allclose(
        TABLE["computed"][skew], frequency_factor(TABLE["exceedance"], float(skew)), rtol=0, atol=5.1e-6
    )


@given(AEPS, SKEWS)
def test_factor_changes_sign_with_skew_and_tail(aep, skew):
    # 1 - aep loses digits that the flat end of a strongly skewed curve magnifies.
    assert float(-frequency_factor(1 - aep, -skew)) == pytest.approx(
        float(frequency_factor(aep, skew)), abs=1e-8
    )


@given(AEPS, SKEWS)
def test_probability_of_the_quantile_is_the_probability_asked_for(aep, skew):
    assert aep == pytest.approx(float(sf(frequency_factor(aep, skew), skew)), abs=1e-9)


@pytest.mark.parametrize("at", [0.0, EXPANSION_SKEW, -EXPANSION_SKEW])
def test_factor_and_probability_are_continuous_where_the_expansion_takes_over(at):
    aep = np.array([0.999, 0.9, 0.5, 0.1, 1e-3, 1e-5])
    w = np.linspace(-4, 4, 17)
    for function, argument in ((frequency_factor, aep), (cdf, w), (sf, w), (pdf, w)):
        step = 1e-9
        np.testing.assert_allclose(
            function(argument, at - step), function(argument, at + step), rtol=0, atol=1e-8
        )


def test_zero_skew_is_the_normal_distribution():
    # Normal deviates of 0.1 and 0.01 from any table.
    np.testing.assert_allclose([1.281552, 2.326348], frequency_factor([0.1, 0.01], 0.0), atol=5e-7)


def test_slope_of_the_factor_at_zero_skew_is_that_of_the_cornish_fisher_expansion():
    z = np.array([-2.0, 0.0, 1.0, 3.0])
    from scipy.special import ndtr

    np.testing.assert_allclose((z**2 - 1) / 6, frequency_factor_slope(ndtr(-z), 0.0), atol=1e-8)


@pytest.mark.parametrize("skew", [-1.9, -1.4, -0.5, 0.0, 1e-6, 0.02, 0.9, 1.9])
@pytest.mark.parametrize(("low", "high"), [(-np.inf, -0.6), (-0.4, 0.8), (0.3, np.inf), (-np.inf, np.inf)])
def test_partial_moments_equal_quadrature(skew, low, high):
    bottom, top = support(skew)
    start, end = max(low, float(bottom), -60), min(high, float(top), 60)
    for k, value in enumerate(partial_moments(low, high, skew, order=6)):
        expected = 0.0
        for a, b in ((start, min(-1.0, end)), (max(-1.0, start), min(2.0, end)), (max(2.0, start), end)):
            if a < b:
                expected += quad(lambda w, k=k: w**k * pdf(w, skew), a, b, epsabs=1e-11, limit=300)[0]
        assert expected == pytest.approx(float(value), abs=1e-7)


@given(SKEWS)
def test_full_range_moments_are_polynomials_of_the_skew(g):
    expected = [1, 0, 1, g, 3 + 1.5 * g**2, 10 * g + 3 * g**3, 15 + 32.5 * g**2 + 7.5 * g**4]
    np.testing.assert_allclose(expected, partial_moments(-np.inf, np.inf, g, order=6), rtol=1e-12, atol=1e-12)


@given(SKEWS, st.floats(-3, 3), st.floats(0.01, 3))
def test_moments_within_an_interval_lie_within_it(skew, low, width):
    _, moments = conditional_moments(low, low + width, skew)
    assert low - 1e-6 <= float(moments[0]) <= low + width + 1e-6


def test_interval_outside_the_support_puts_its_mass_at_the_near_end():
    # Skew 1: nothing below -2.
    probability, moments = conditional_moments(-np.inf, -2.5, 1.0)
    assert float(probability) == 0
    np.testing.assert_allclose([-2.5, 6.25, -15.625], moments)


def test_far_tail_interval_keeps_its_digits():
    # Mean of a standard normal beyond 20: 20 + 1/20 - 2/20**3 + ...
    _, moments = conditional_moments(20.0, np.inf, 0.0)
    assert float(moments[0]) == pytest.approx(20.049753, abs=1e-5)
