"""Distance model of a computed example; figures and their source in cross_correlation_expected.json."""

import json
from pathlib import Path

import numpy as np
import pytest

from wrackline.hydrology.dependence import fit_distance_model
from wrackline.stats.correlation import list_pairs

HERE = Path(__file__).parent
EXPECTED = json.loads((HERE / "cross_correlation_expected.json").read_text(encoding="utf-8"))
TOLERANCE = 1e-8
# The figures stopped short of the minimum: their own gradient is not zero (-1.4e-3 in b, against 2e-10 here), which
# leaves them 6e-8 from it.
COEFFICIENT_TOLERANCE = 1e-7


@pytest.fixture(scope="module")
def pairs():
    peaks = np.genfromtxt(HERE / "cross_correlation_log10_peaks.csv", delimiter=",", skip_header=1)[:, 1:].T
    return list_pairs(peaks, minimum=EXPECTED["minimum_common_years"])


@pytest.fixture(scope="module")
def distances(pairs):
    place = np.genfromtxt(HERE / "cross_correlation_sites.csv", delimiter=",", skip_header=1)[:, 1:]
    return np.hypot(*(place[pairs.first] - place[pairs.second]).T)


@pytest.fixture(scope="module")
def fitted(pairs, distances):
    return fit_distance_model(distances, np.arctanh(pairs.correlation), pairs.common - 3.0, 18, 30)


def test_pairs_with_thirty_years_in_common(pairs):
    assert len(pairs.first) == EXPECTED["pairs"]
    np.testing.assert_allclose(EXPECTED["mean_r"], pairs.correlation.mean(), rtol=TOLERANCE)


def test_coefficients_of_the_exponential_form(fitted):
    model = next(m for m in fitted if m.form == "exponential")
    np.testing.assert_allclose([EXPECTED["a"], EXPECTED["b"]], [model.a, model.b], atol=COEFFICIENT_TOLERANCE)
    np.testing.assert_allclose(EXPECTED["weighted_sse"], model.weighted_sse, rtol=TOLERANCE)
    np.testing.assert_allclose(EXPECTED["reduced_chi2"], model.reduced_chi2, rtol=TOLERANCE)
    np.testing.assert_allclose(EXPECTED["rho_at_50km"], model.correlation(50.0), rtol=TOLERANCE)


def test_the_coefficients_are_the_minimum_itself(pairs, distances, fitted):
    model = next(m for m in fitted if m.form == "exponential")
    curve = np.exp(model.a - model.b * distances)
    pull = (pairs.common - 3.0) * (np.arctanh(pairs.correlation) - curve) * curve
    # Rounding of sums of terms of size 100.
    np.testing.assert_allclose([0.0, 0.0], [pull.sum(), (pull * distances).sum()], atol=1e-8)


def test_the_exponential_form_is_kept_where_box_cox_gains_little(fitted):
    chosen, other = fitted
    assert (chosen.form, other.form) == ("exponential", "box_cox")
    assert other.weighted_sse <= chosen.weighted_sse
