"""The k-sample statistic against its definition and scipy; the bootstrap's size, power and invariances."""

from itertools import pairwise

import numpy as np
import pytest
from numpy.testing import assert_allclose

from wrackline.stats.anderson_darling import bootstrap_homogeneity, ksample_statistic
from wrackline.stats.streams import random_stream


def records(lengths, seed=2, decimals=None):
    rng = np.random.default_rng(seed)
    offsets = np.concatenate([[0], np.cumsum(lengths)])
    values = rng.gumbel(100.0, 30.0, size=offsets[-1])
    return (values if decimals is None else np.round(values, decimals)), offsets


def statistic_by_definition(values, offsets):
    # Scholz and Stephens (1987), sum over the distinct values but the largest, each with its multiplicity.
    total = len(values)
    distinct, counts = np.unique(values, return_counts=True)
    statistic = 0.0
    for value, count in zip(distinct[:-1], counts[:-1], strict=True):
        up_to = np.sum(values <= value)
        for a, b in pairwise(offsets):
            n = b - a
            own = np.sum(values[a:b] <= value)
            statistic += count * (total * own - n * up_to) ** 2 / (n * up_to * (total - up_to)) / total
    return statistic


@pytest.mark.parametrize("decimals", [None, 0, -1])
def test_equals_the_double_sum_with_and_without_ties(decimals):
    values, offsets = records([12, 30, 5, 18], decimals=decimals)
    assert_allclose(statistic_by_definition(values, offsets), ksample_statistic(values, offsets), rtol=1e-11)


def test_replicates_along_leading_axes_equal_one_at_a_time():
    offsets = np.array([0, 10, 25])
    values = np.random.default_rng(0).normal(size=(3, 2, 25)).round(1)
    together = ksample_statistic(values, offsets)
    for i in np.ndindex(3, 2):
        assert ksample_statistic(values[i], offsets) == pytest.approx(together[i], rel=1e-13)


def test_any_rising_transformation_of_all_values_leaves_it_unchanged():
    values, offsets = records([12, 30, 18])
    assert_allclose(
        ksample_statistic(values, offsets), ksample_statistic(np.exp(values / 50), offsets), rtol=1e-13
    )


def test_equal_values_give_zero():
    assert ksample_statistic(np.full(10, 3.0), [0, 4, 10]) == 0.0


def test_single_record_or_an_empty_one_is_refused():
    with pytest.raises(ValueError, match="two records"):
        ksample_statistic([1.0, 2.0], [0, 2])
    with pytest.raises(ValueError, match="empty"):
        ksample_statistic([1.0, 2.0], [0, 2, 2])
    with pytest.raises(ValueError, match="finite"):
        ksample_statistic([1.0, np.nan], [0, 1, 2])


def test_unit_of_a_gauge_does_not_matter():
    values, offsets = records([40, 25, 60])
    factors = np.repeat([1.0, 35.3, 0.02], np.diff(offsets))
    one = bootstrap_homogeneity(values, offsets, random_stream(1, "pool"), replicates=100)
    other = bootstrap_homogeneity(values * factors, offsets, random_stream(1, "pool"), replicates=100)
    assert one.statistic == pytest.approx(other.statistic, rel=1e-9)
    assert one.probability == pytest.approx(other.probability, abs=0.011)


def test_same_stream_gives_the_same_probability():
    values, offsets = records([40, 25, 60])
    first, second = (
        bootstrap_homogeneity(values, offsets, random_stream(4, "pool", "a"), replicates=50) for _ in range(2)
    )
    assert first == second


def test_homogeneous_pools_are_rejected_about_as_often_as_announced():
    probabilities = []
    for seed in range(60):
        values, offsets = records([30, 40, 25, 50], seed=seed)
        probabilities.append(
            bootstrap_homogeneity(values, offsets, random_stream(seed, "pool"), replicates=200).probability
        )
    # 60 pools at 5 %: three expected, at most eight with probability 0.993.
    assert np.sum(np.array(probabilities) > 0.95) <= 8
    assert 0.3 < np.mean(probabilities) < 0.7


def test_pools_of_unlike_spread_are_rejected():
    values, offsets = records([60, 60, 60])
    values[:60] = 100.0 * (values[:60] / 100.0) ** 3
    test = bootstrap_homogeneity(values, offsets, random_stream(1, "pool"), replicates=200)
    assert test.probability > 0.99
    assert test.replicates == 200
    assert test.probability_se < 0.01


def test_index_must_be_positive_and_known():
    with pytest.raises(ValueError, match="positive"):
        bootstrap_homogeneity([0.0, 0.0, 0.0, 1.0, 2.0], [0, 3, 5], random_stream(1, "pool"))
    with pytest.raises(ValueError, match="index must be"):
        bootstrap_homogeneity([1.0, 2.0, 3.0], [0, 1, 3], random_stream(1, "pool"), index="mode")
