"""Error variances of the sample skew: the published formulas, simulation, and the change between them."""

import json
from pathlib import Path

import numpy as np
import pytest

from wrackline.stats.skew_variance import (
    bulletin17b_skew_mse,
    correct_skew_bias,
    griffis_stedinger_variance,
    skew_weight,
    station_skew_mse,
    weighted_skew_mse,
)
from wrackline.stats.streams import random_stream

TABLE = json.loads((Path(__file__).parents[1] / "reference" / "at_site_tables.json").read_text())[
    "station_skew_mse"
]


def test_both_formulas_reproduce_their_computed_table_to_its_four_decimals():
    for row in TABLE["rows"]:
        assert row["b17b"] == pytest.approx(float(bulletin17b_skew_mse(row["n"], row["skew"])), abs=5.1e-5)
        assert row["griffis_stedinger"] == pytest.approx(
            float(griffis_stedinger_variance(row["n"], row["skew"])), abs=5.1e-5
        )


def test_bulletin_17b_table_for_zero_skew_from_memory():
    # Bulletin 17B (1982), table 1, first column, from memory: three printed decimals.
    for n, expected in ((10, 0.468), (20, 0.244), (50, 0.103), (100, 0.054)):
        assert expected == pytest.approx(float(bulletin17b_skew_mse(n, 0.0)), abs=5.1e-4)


def test_polynomial_is_the_variance_that_simulation_finds():
    # 40,000 samples: standard error of a variance about 1 %; 3 % allows for the fit of the polynomial.
    for row in TABLE["monte_carlo"]:
        if "var" in row:
            assert row["var"] == pytest.approx(
                float(griffis_stedinger_variance(row["n"], row["skew"])), rel=0.03
            )


def test_large_skews_get_the_simulated_error_not_the_polynomial():
    stream = random_stream(3, "test_skew_mse")
    n, skew = 25, 2.2
    x = stream.standard_gamma(4 / skew**2, size=(20_000, n))
    d = x - x.mean(axis=1, keepdims=True)
    g = n * (d**3).sum(axis=1) / ((n - 1) * (n - 2) * ((d**2).sum(axis=1) / (n - 1)) ** 1.5)
    simulated = float(np.mean((g - skew) ** 2))
    assert simulated == pytest.approx(float(station_skew_mse(n, skew)), rel=0.05)
    assert simulated > 1.5 * float(griffis_stedinger_variance(n, skew))


def test_error_grows_without_a_jump_as_the_simulated_values_take_over():
    skew = np.linspace(1.3, 3.0, 400)
    mse = station_skew_mse(30, skew)
    steps = np.diff(mse) / mse[:-1]
    assert steps.min() > 0
    assert steps.max() < 0.02


def test_error_falls_with_the_length_of_the_record_at_every_skew():
    years = np.arange(3, 400)[:, None]
    assert (np.diff(station_skew_mse(years, np.array([0.0, 1.0, 1.5, 2.0, 3.0])), axis=0) < 0).all()


def test_weighting_of_the_first_example_of_bulletin_17b():
    # Bulletin 17B (1982), appendix 12, example 1: 0.668, printed 0.7.
    weight = skew_weight(bulletin17b_skew_mse(24, 0.73), 0.302)
    assert 0.7 == round(float(weight * 0.73 + (1 - weight) * 0.6), 1)
    assert weighted_skew_mse(0.3, 0.3) == pytest.approx(0.15)


def test_bias_factor_of_tasker_and_stedinger():
    skew, variance = correct_skew_bias(60, 0.5, 0.1)
    assert (0.55, 0.121) == pytest.approx((float(skew), float(variance)))
