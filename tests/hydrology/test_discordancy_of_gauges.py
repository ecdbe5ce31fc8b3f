"""Discordancy: critical values, identities, and the robust second look."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from wrackline.hydrology.discordancy import critical_discordancy, measure_discordancy

# Hosking and Wallis (1997), table 3.1, from memory; the last two are the cap
PRINTED = {
    5: 1.333,
    6: 1.648,
    7: 1.917,
    8: 2.140,
    9: 2.329,
    10: 2.491,
    11: 2.632,
    12: 2.757,
    13: 2.869,
    14: 2.971,
}
PRINTED |= {15: 3.0, 100: 3.0}


def made_ratios(n: int, seed: int) -> np.ndarray:
    mix = np.array([[0.03, 0, 0], [0.06, 0.08, 0], [0.03, 0.05, 0.05]])
    return (np.array([0.3, 0.2, 0.17]) + np.random.default_rng(seed).standard_normal((n, 3)) @ mix.T).T


@pytest.mark.parametrize(("n", "expected"), PRINTED.items())
def test_critical_values_are_those_of_the_published_table(n, expected):
    assert expected == pytest.approx(critical_discordancy(n), abs=0.0005)


@given(n=st.integers(5, 60), seed=st.integers(0, 999))
@settings(max_examples=40, deadline=None)
def test_discordancies_sum_to_the_number_of_gauges_and_are_bounded(n, seed):
    d = measure_discordancy(*made_ratios(n, seed)).measure
    assert n == pytest.approx(d.sum(), rel=1e-9)
    assert d.max() <= (n - 1) / 3 * (1 + 1e-9)


def test_four_gauges_are_each_at_one_and_carry_no_information():
    found = measure_discordancy(*made_ratios(4, 1))
    assert pytest.approx(found.measure, rel=1e-8) == np.ones(4)
    assert not found.discordant.any()
    assert "uninformative" in found.note


def test_three_gauges_are_not_computed():
    found = measure_discordancy(*made_ratios(3, 1))
    assert np.isnan(found.measure).all()
    assert found.note.startswith("not computed")


def test_order_of_gauges_does_not_matter():
    ratios, order = made_ratios(20, 4), np.random.default_rng(1).permutation(20)
    found, shuffled = measure_discordancy(*ratios), measure_discordancy(*ratios[:, order])
    assert pytest.approx(shuffled.measure, rel=1e-9) == found.measure[order]
    assert pytest.approx(shuffled.robust_distance, rel=1e-9) == found.robust_distance[order]


def test_second_look_finds_two_gauges_that_hide_each_other():
    ratios = made_ratios(20, 2)
    ratios[:, :2] = [[0.55, 0.56], [0.2, 0.21], [0.45, 0.46]]
    found = measure_discordancy(*ratios)
    assert found.robust_discordant[:2].all()
    assert found.robust_distance[:2].min() > 2 * found.robust_distance[2:].max()


@pytest.mark.parametrize("n", [12, 20, 50])
def test_second_look_rarely_points_to_gauges_without_fault(n):
    share = np.mean(
        [measure_discordancy(*made_ratios(n, seed)).robust_discordant.mean() for seed in range(40)]
    )
    # at most one gauge in ten was measured; 40 pools leave a standard error of about 0.01
    assert share < 0.13
