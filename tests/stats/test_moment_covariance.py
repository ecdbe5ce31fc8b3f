"""Covariance of expected moments: textbook formula without censoring, simulation with it."""

import json
from pathlib import Path

import numpy as np
import pytest

from wrackline.stats.censored_sample import compress_sample
from wrackline.stats.expected_moments import fit_expected_moments
from wrackline.stats.moment_covariance import (
    complete_quantile_variance,
    complete_skew_variance,
    group_thresholds,
    moment_covariance,
    quantile_variance,
)
from wrackline.stats.pearson3 import frequency_factor
from wrackline.stats.streams import random_stream

TABLES = json.loads((Path(__file__).parents[1] / "reference" / "at_site_tables.json").read_text())


def open_thresholds(n, base=-np.inf):
    return group_thresholds(np.zeros(n, dtype=int), np.full(n, base), np.full(n, np.inf), 1)


def test_complete_record_gives_the_formula_of_bobee_to_eight_digits():
    for row in TABLES["quantile_variance_complete_sample"]["rows"]:
        sd, skew = np.array([row["sd"]]), np.array([float(row["skew"])])
        covariance = moment_covariance(open_thresholds(row["n"]), np.array([2.0]), sd, skew)
        variance = float(quantile_variance(covariance, sd, skew, np.array([row["aep"]]))[0, 0])
        assert float(
            complete_quantile_variance(row["n"], row["sd"], row["skew"], row["aep"])
        ) == pytest.approx(variance, rel=1e-8)
        assert row["var"] == pytest.approx(variance, abs=5.1e-9)


def test_censored_example_gives_the_computed_skew_variance():
    # Orestimba Creek 1932-2013 with threshold 782 ft3/s; computed by separate code: 0.19443 and 0.18496.
    covariance = moment_covariance(
        open_thresholds(82, np.log10(782)), np.array([3.022663]), np.array([0.682087]), np.array([-0.92911])
    )
    assert pytest.approx(float(covariance[0, 2, 2]), abs=6e-6) == 0.19443
    assert pytest.approx(float(complete_skew_variance(82, -0.92911)), abs=6e-6) == 0.18496


def test_threshold_far_below_everything_is_no_censoring():
    sd, skew = np.array([0.3]), np.array([0.4])
    complete = moment_covariance(open_thresholds(50), np.array([2.0]), sd, skew)
    censored = moment_covariance(open_thresholds(50, -5.0), np.array([2.0]), sd, skew)
    np.testing.assert_allclose(complete, censored, rtol=1e-9)


@pytest.mark.parametrize(("skew", "weight"), [(0.2, 1.0), (-0.4, 0.3)])
def test_simulated_variance_of_a_quantile_with_half_the_years_censored(skew, weight):
    replicates, n, mse = 2500, 300, 0.1
    stream = random_stream(11, "test_moment_covariance", f"{skew} {weight}")
    base = float(frequency_factor(0.5, skew))
    x = frequency_factor(stream.random((replicates, n)), skew)
    low, high = np.where(x < base, -np.inf, x).ravel(), np.maximum(x, base).ravel()
    sample = compress_sample(np.repeat(np.arange(replicates), n), low, high, replicates)
    drawn = skew + np.sqrt(mse) * stream.standard_normal(replicates)
    fit = fit_expected_moments(sample, lambda own, rows: weight * own + (1 - weight) * drawn[rows])
    made = fit.fitted
    x_p = (fit.mean + fit.sd * frequency_factor(0.01, np.where(made, fit.skew, 0.0)))[made]
    one = np.ones(1)
    covariance = moment_covariance(
        open_thresholds(n, base), 0 * one, one, skew * one, weight * one if weight < 1 else None, mse * one
    )
    predicted = float(quantile_variance(covariance, one, skew * one, np.array([0.01]))[0, 0])
    # First-order theory at 150 known peaks, against simulation whose own standard error is 2.8 %.
    assert float(x_p.var()) == pytest.approx(predicted, rel=0.10)
