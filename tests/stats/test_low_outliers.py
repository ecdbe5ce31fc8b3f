"""Multiple Grubbs-Beck test: p-values against simulation, sweeps, ties, zeros."""

import json
from pathlib import Path

import numpy as np
import pytest
from scipy.special import ndtri

from wrackline.stats.low_outlier_exact import low_outlier_p
from wrackline.stats.low_outliers import (
    approximate_low_outlier_p,
    grubbs_beck_critical_value,
    grubbs_beck_statistics,
    screen_low_outliers,
    sweep,
)
from wrackline.stats.streams import random_stream

REFERENCE = Path(__file__).parents[1] / "reference"
P_VALUES = json.loads((REFERENCE / "at_site_low_outlier_p.json").read_text())["rows"]
KN = json.loads((REFERENCE / "at_site_tables.json").read_text())["grubbs_beck_KN_10pct"]["rows"]


@pytest.mark.parametrize("row", P_VALUES, ids=lambda r: f"{r['n']}-{r['k']}-{r['eta']}")
def test_accurate_p_agrees_with_a_million_simulated_samples(row):
    # The statistic is printed to three decimals, worth up to half a percent of p; then four standard errors.
    assert row["p_monte_carlo"] == pytest.approx(
        low_outlier_p(row["n"], row["k"], row["eta"]), abs=4 * row["se"] + 0.005 * row["p_monte_carlo"]
    )


def test_approximate_p_agrees_with_its_own_fine_quadrature():
    # The reference used several hundred nodes; the 512 to 1024 here are within 3 %, far below what decisions feel.
    for row in P_VALUES:
        assert row["p_quadrature"] == pytest.approx(
            float(approximate_low_outlier_p(row["n"], row["k"], row["eta"])), rel=0.03
        )


def test_approximation_errs_as_documented():
    for row in P_VALUES:
        ratio = float(approximate_low_outlier_p(row["n"], row["k"], row["eta"])) / row["p_monte_carlo"]
        assert 0.70 < ratio < 1.60
        if row["n"] >= 40 and row["k"] <= row["n"] / 3:
            assert 0.87 < ratio < 1.11


@pytest.mark.parametrize("n", [10, 25, 58, 120, 200])
def test_p_is_a_probability_that_falls_with_the_statistic(n):
    eta = -np.geomspace(0.01, 1000, 60)
    for k in sorted({1, 2, n // 4, n // 2}):
        p = approximate_low_outlier_p(n, k, eta)
        assert np.isfinite(p).all()
        assert ((p >= 0) & (p <= 1)).all()
        assert (np.diff(p) <= 1e-12).all()


def test_smallest_value_test_is_the_single_grubbs_beck_test_at_ten_percent():
    # Bulletin 17B (1982), appendix 4, after Grubbs and Beck (1972), from memory.
    for row in KN[::6]:
        n, kn = row["n"], row["kn_table"]
        assert kn == pytest.approx(float(grubbs_beck_critical_value(n)), abs=0.007)
        # K_N compares with mean and deviation of all n; the statistic here with those of the n - 1 larger values.
        variance = (n - 1 - kn**2 * n / (n - 1)) / (n - 2)
        eta = -kn * n / (n - 1) / np.sqrt(variance)
        assert low_outlier_p(n, 1, eta) == pytest.approx(0.10, abs=0.002)


def test_statistic_by_hand():
    # Larger values of the smallest: 2, 3, 4, mean 3, deviation 1; of the second: 3, 4, mean 3.5, deviation 0.7071.
    np.testing.assert_allclose(
        [[-3.0, -1.5 / np.sqrt(0.5)]], grubbs_beck_statistics(np.array([[0.0, 2.0, 3.0, 4.0]]))
    )


def test_equal_values_have_no_statistic_and_no_outliers():
    result = screen_low_outliers(np.full(20, 1.5), [0, 20])
    assert result.count[0] == 0


def test_sweeps_keep_the_larger_count_and_start_where_they_should():
    p = np.array(
        [
            [0.5, 0.5, 0.001, 0.5],  # outward stops at the largest rejected rank
            [0.05, 0.09, 0.5, 0.01],  # inward passes two
            [0.05, 0.09, 0.05, 0.06],  # inward passes all
            [0.5, 0.05, 0.05, 0.05],  # inward stops at the smallest value
        ]
    )
    outward, inward = sweep(p)
    np.testing.assert_array_equal([3, 0, 0, 0], outward)
    np.testing.assert_array_equal([0, 2, 4, 0], inward)


def test_zeros_count_as_low_and_mask_one_another_in_the_inward_sweep():
    values = np.append(2 + 0.3 * ndtri((np.arange(40) + 0.5) / 40), [-np.inf] * 10)
    result = screen_low_outliers(values, [0, 50])
    assert result.zeros[0] == 10 <= result.count[0]
    assert result.inward[0] == 0
    assert result.p_inward[0] > 0.1


def test_batch_equals_each_record_alone_and_order_does_not_matter():
    stream = random_stream(3, "test_low_outliers")
    records = [
        2 + 0.4 * stream.standard_normal(n) - 2.0 * (np.arange(n) < m)
        for n, m in ((30, 2), (30, 0), (57, 5), (4, 0))
    ]
    offsets = np.concatenate([[0], np.cumsum([len(r) for r in records])])
    batch = screen_low_outliers(np.concatenate(records), offsets)
    for i, record in enumerate(records):
        alone = screen_low_outliers(stream.permutation(record), [0, len(record)])
        assert alone.count[0] == batch.count[i]
    assert batch.count[0] >= 2
    assert batch.count[2] >= 5


def test_adding_a_constant_to_the_logarithms_changes_no_count():
    values = np.append(2 + 0.3 * ndtri((np.arange(30) + 0.5) / 30), [0.2, 0.5])
    shifted = screen_low_outliers(values + 1.4517, [0, 32])
    # The two low values, and the third that inherits their rank.
    assert shifted.count[0] == screen_low_outliers(values, [0, 32]).count[0] == 3


def test_false_alarm_rate_on_normal_samples():
    # Outward at 0.005 over all ranks and inward at 0.10 flag at least one value in 10 to 20 % of normal samples.
    stream = random_stream(5, "test_low_outliers")
    result = screen_low_outliers(stream.standard_normal(600 * 40), np.arange(601) * 40)
    assert 0.08 < (result.count > 0).mean() < 0.22
    assert (result.accurate_count != result.count).mean() < 0.03
