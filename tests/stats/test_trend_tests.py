import itertools

import numpy as np
import pytest
from scipy import stats

from wrackline.stats.trends import (
    false_discovery_p,
    lag_one,
    mann_kendall,
    pettitt,
    sen_slope,
    serial_inflation,
)


@pytest.fixture(scope="module")
def ragged():
    """Forty records of 2 to 60 values with gaps and many ties."""
    rng = np.random.default_rng(20)
    lengths = rng.integers(2, 61, 40)
    offsets = np.concatenate([[0], np.cumsum(lengths)])
    values = np.round(rng.gamma(2.0, 5.0, offsets[-1]))
    years = np.concatenate([np.sort(rng.choice(np.arange(1900, 1990), n, replace=False)) for n in lengths])
    return values, years, offsets


def one_by_one(ragged):
    values, years, offsets = ragged
    for a, b in itertools.pairwise(offsets):
        yield values[a:b], years[a:b]


def test_mann_kendall_s_and_variance_agree_with_counting_pairs(ragged):
    test = mann_kendall(ragged[0], ragged[2])
    for i, (x, _) in enumerate(one_by_one(ragged)):
        n = len(x)
        s = sum(np.sign(x[k] - x[j]) for j in range(n) for k in range(j + 1, n))
        ties = sum(t * (t - 1) * (2 * t + 5) for t in np.unique(x, return_counts=True)[1])
        assert s == test.s[i]
        np.testing.assert_allclose((n * (n - 1) * (2 * n + 5) - ties) / 18, test.s_var[i], rtol=1e-12)


def test_tau_is_that_of_scipy_where_nothing_is_tied():
    rng = np.random.default_rng(3)
    x = rng.normal(size=(5, 30))
    expected = [stats.kendalltau(np.arange(30), row).statistic for row in x]
    np.testing.assert_allclose(expected, mann_kendall(x.ravel(), np.arange(0, 151, 30)).tau, rtol=1e-12)


def test_p_is_near_the_exact_one_of_scipy():
    rng = np.random.default_rng(5)
    x = rng.normal(size=30) + 0.04 * np.arange(30)
    expected = stats.kendalltau(np.arange(30), x, method="exact").pvalue
    # The normal approximation with continuity correction is within 2 % in p for 30 values.
    np.testing.assert_allclose(expected, mann_kendall(x, [0, 30]).p[0], rtol=0.02)


def test_p_values_of_independent_records_are_uniform():
    rng = np.random.default_rng(11)
    p = mann_kendall(rng.normal(size=4000 * 40), np.arange(0, 4000 * 40 + 1, 40)).p
    # Three standard errors of a share of 4,000.
    np.testing.assert_allclose(0.05, (p < 0.05).mean(), atol=3 * np.sqrt(0.05 * 0.95 / 4000))


def test_sen_slope_is_that_of_scipy(ragged):
    expected = [stats.theilslopes(x, t).slope for x, t in one_by_one(ragged)]
    np.testing.assert_allclose(expected, sen_slope(*ragged), rtol=1e-12, atol=1e-14)


def test_pettitt_agrees_with_a_double_loop(ragged):
    test = pettitt(*ragged)
    for i, (x, t) in enumerate(one_by_one(ragged)):
        n = len(x)
        u = np.array([np.sign(x[: k + 1, None] - x[k + 1 :]).sum() for k in range(n - 1)])
        expected = np.abs(u).max()
        assert expected == test.k[i]
        assert (t[np.abs(u).argmax()] if expected > 0 else 0) == test.last_year[i]
        np.testing.assert_allclose(
            min(1, 2 * np.exp(-6 * expected**2 / (n**3 + n**2))), test.p[i], rtol=1e-12
        )


def test_pettitt_p_never_exceeds_one():
    assert pettitt([1.0, 2.0, 1.0, 2.0], [1, 2, 3, 4], [0, 4]).p[0] == 1.0


def test_lag_one_uses_only_years_that_follow_each_other():
    x = np.array([1.0, 4.0, 2.0, 8.0, 5.0, 7.0, 3.0])
    years = np.array([2000, 2001, 2002, 2005, 2006, 2007, 2010])
    d = x - x.mean()
    pairs = [d[0] * d[1], d[1] * d[2], d[3] * d[4], d[4] * d[5]]
    expected = np.mean(pairs) / ((d**2).sum() / 6)
    lag = lag_one(x, years, [0, 7])
    assert lag.pairs[0] == 4
    np.testing.assert_allclose(expected, lag.r1[0], rtol=1e-12)


def test_lag_one_of_independent_records_lies_within_its_bounds_as_often_as_stated():
    rng = np.random.default_rng(8)
    n, g = 50, 4000
    lag = lag_one(rng.normal(size=n * g), np.tile(np.arange(n), g), np.arange(0, n * g + 1, n))
    inside = ((lag.r1 > lag.lower) & (lag.r1 < lag.upper)).mean()
    # Anderson's bounds are of a circular series; for 50 values they hold to about one percent.
    np.testing.assert_allclose(0.95, inside, atol=0.015)
    np.testing.assert_array_equal((lag.r1 > lag.lower) & (lag.r1 < lag.upper), lag.p > 0.05)


def test_records_never_run_into_each_other(ragged):
    values, years, offsets = ragged
    together = lag_one(values, years, offsets).r1
    alone = [lag_one(x, t, [0, len(x)]).r1[0] for x, t in one_by_one(ragged)]
    np.testing.assert_allclose(alone, together, rtol=1e-12)


def test_equal_values_are_no_trend_no_change_and_no_correlation():
    x, years = np.full(12, 0.1), np.arange(12)
    assert (mann_kendall(x, [0, 12]).z[0], mann_kendall(x, [0, 12]).p[0]) == (0.0, 1.0)
    assert sen_slope(x, years, [0, 12])[0] == 0.0
    assert (pettitt(x, years, [0, 12]).k[0], pettitt(x, years, [0, 12]).p[0]) == (0.0, 1.0)
    assert np.isnan(lag_one(x, years, [0, 12]).r1[0])


def test_empty_and_single_valued_records_are_not_tested():
    offsets = [0, 0, 1, 4]
    values, years = [5.0, 1.0, 2.0, 3.0], [1990, 1990, 1991, 1992]
    np.testing.assert_array_equal([True, True, False], np.isnan(mann_kendall(values, offsets).p))
    np.testing.assert_array_equal([np.nan, np.nan, 1.0], sen_slope(values, years, offsets))
    np.testing.assert_array_equal([True, True, False], np.isnan(pettitt(values, years, offsets).p))
    np.testing.assert_array_equal([True, True, True], np.isnan(lag_one(values, years, offsets).r1))


def test_the_order_of_records_and_the_unit_do_not_matter(ragged):
    values, years, offsets = ragged
    order = np.random.default_rng(1).permutation(len(offsets) - 1)
    parts = [np.arange(offsets[i], offsets[i + 1]) for i in order]
    rows, shuffled = np.concatenate(parts), np.concatenate([[0], np.cumsum([len(p) for p in parts])])
    np.testing.assert_array_equal(
        mann_kendall(values, offsets).p[order], mann_kendall(values[rows] * 35.3, shuffled).p
    )
    np.testing.assert_allclose(
        35.3 * sen_slope(values, years, offsets)[order],
        sen_slope(values[rows] * 35.3, years[rows], shuffled),
        rtol=1e-12,
    )
    np.testing.assert_array_equal(
        pettitt(values, years, offsets).last_year[order],
        pettitt(values[rows] * 35.3, years[rows], shuffled).last_year,
    )


def test_serial_inflation_is_the_sum_it_stands_for():
    r, n = 0.4, 35
    expected = 1 + 2 * sum((1 - k / n) * r**k for k in range(1, n))
    np.testing.assert_allclose([expected, 1.0, 1.0], serial_inflation([r, -0.3, np.nan], n), rtol=1e-12)


def test_inflated_variance_tames_false_trends_of_correlated_records():
    rng = np.random.default_rng(9)
    g, n, r = 2000, 60, 0.4
    x = rng.normal(size=(g, n))
    for t in range(1, n):
        x[:, t] = r * x[:, t - 1] + np.sqrt(1 - r**2) * x[:, t]
    offsets = np.arange(0, g * n + 1, n)
    plain = (mann_kendall(x.ravel(), offsets).p < 0.05).mean()
    tamed = (mann_kendall(x.ravel(), offsets, serial_inflation(r, n)).p < 0.05).mean()
    assert plain > 0.15
    # Three standard errors of a share of 2,000, and 0.01 for the approximation itself.
    np.testing.assert_allclose(0.05, tamed, atol=0.01 + 3 * np.sqrt(0.05 * 0.95 / g))


def test_false_discovery_p_is_that_of_scipy():
    p = np.random.default_rng(2).uniform(size=50) ** 3
    np.testing.assert_allclose(stats.false_discovery_control(p), false_discovery_p(p), rtol=1e-12)


def test_untested_records_do_not_count_as_tests():
    np.testing.assert_array_equal([0.02, np.nan, 0.02], false_discovery_p([0.01, np.nan, 0.02]))
