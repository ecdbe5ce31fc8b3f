"""Screening statistics of the Nile at Aswan, 1871-1970; figures and their sources in nile_screening.json.

Tolerances are half of the last digit given there.
"""

import json
from pathlib import Path

import numpy as np
import pytest
from scipy.special import ndtr
from statsmodels.datasets import nile

from wrackline.stats.trends import lag_one, mann_kendall, pettitt, sen_slope

EXPECTED = json.loads((Path(__file__).parent / "nile_screening.json").read_text(encoding="utf-8"))


@pytest.fixture(scope="module")
def series():
    data = nile.load_pandas().data
    return data["volume"].to_numpy(float), data["year"].to_numpy(int), np.array([0, len(data)])


def test_the_series_is_the_one_the_figures_belong_to(series):
    values, years, _ = series
    assert (EXPECTED["n"], EXPECTED["sum"]) == (len(values), values.sum())
    assert {1871, 1970} == {years.min(), years.max()}


def test_mann_kendall(series):
    values, _, offsets = series
    test, expected = mann_kendall(values, offsets), EXPECTED["mann_kendall"]
    assert expected["S"] == test.s[0]
    np.testing.assert_allclose(expected["var_S"], test.s_var[0], atol=5e-5)
    np.testing.assert_allclose(expected["Z"], test.z[0], atol=5e-7)
    np.testing.assert_allclose(expected["p_two_sided"], test.p[0], atol=5e-12)
    np.testing.assert_allclose(expected["tau_a"], test.tau[0], atol=5e-7)


def test_sen_slope(series):
    values, years, offsets = series
    np.testing.assert_allclose(EXPECTED["sen_slope"], sen_slope(values, years, offsets)[0], rtol=1e-12)


def test_pettitt_finds_the_published_break(series):
    values, years, offsets = series
    test, expected = pettitt(values, years, offsets), EXPECTED["pettitt"]
    assert expected["K"] == test.k[0]
    assert expected["last_year_of_first_segment"] == test.last_year[0]
    np.testing.assert_allclose(expected["p_approx"], test.p[0], atol=5e-11)


def test_lag_one_correlation_and_its_bounds(series):
    values, years, offsets = series
    # The figures were made with 1.96 for the normal deviate.
    expected = EXPECTED["lag1"]
    lag = lag_one(values, years, offsets, confidence=2 * ndtr(1.96) - 1)
    np.testing.assert_allclose(expected["r1"], lag.r1[0], atol=5e-7)
    np.testing.assert_allclose(expected["lower95"], lag.lower[0], atol=5e-7)
    np.testing.assert_allclose(expected["upper95"], lag.upper[0], atol=5e-7)
