import numpy as np
import pandas as pd
import pytest

from wrackline.stats.correlation import bin_pairs, concurrent_correlation, list_pairs, pair_blocks


@pytest.fixture(scope="module")
def values():
    """Thirty-seven records of 50 years with gaps, correlated through a shared part, one of them short."""
    rng = np.random.default_rng(31)
    x = rng.normal(size=(37, 50)) + 0.8 * rng.normal(size=50) + rng.normal(0, 5, size=(37, 1))
    x[rng.uniform(size=x.shape) < 0.35] = np.nan
    x[4, 3:] = np.nan
    return x


def far_apart(first, second):
    return np.abs(first[:, None] - second).astype(float)


def test_correlation_is_that_of_a_data_frame(values):
    expected = pd.DataFrame(values.T).corr(min_periods=12).to_numpy()
    r, _ = concurrent_correlation(values, block=8, minimum=12)
    np.testing.assert_allclose(expected, r, rtol=1e-11, atol=1e-12)


def test_common_years_are_counted(values):
    known = np.isfinite(values)
    expected = [[int((a & b).sum()) for b in known] for a in known]
    np.testing.assert_array_equal(expected, concurrent_correlation(values, block=10)[1])


@pytest.mark.parametrize("block", [1, 7, 37, 500])
def test_the_block_size_changes_nothing(values, block):
    expected, counts = concurrent_correlation(values, block=16)
    r, n = concurrent_correlation(values, block=block)
    np.testing.assert_allclose(expected, r, rtol=1e-12, atol=1e-13)
    np.testing.assert_array_equal(counts, n)


def test_result_is_symmetric_with_a_unit_diagonal(values):
    r, n = concurrent_correlation(values, block=8, minimum=5)
    np.testing.assert_array_equal(r, r.T)
    np.testing.assert_array_equal(n, n.T)
    np.testing.assert_allclose(1.0, np.delete(np.diag(r), 4), rtol=1e-12)
    assert np.isnan(r[4, 4])


def test_shift_scale_and_order_change_nothing(values):
    order = np.random.default_rng(2).permutation(len(values))
    expected, _ = concurrent_correlation(values)
    r, _ = concurrent_correlation(1e6 + 250.0 * values[order])
    # A shift of 1e6 over a spread of 250 costs four digits of the input itself.
    np.testing.assert_allclose(expected[np.ix_(order, order)], r, rtol=1e-9, atol=1e-10)


def test_a_record_constant_over_the_shared_years_has_no_correlation():
    x = np.array([[0.1] * 6 + [3.0, 7.0], [1.0, 2, 3, 4, 5, 6, np.nan, np.nan]])
    r, n = concurrent_correlation(x)
    assert n[0, 1] == 6
    assert np.isnan(r[0, 1])


def test_records_that_never_meet_have_no_correlation():
    x = np.array([[1.0, 2, 4, np.nan, np.nan, np.nan], [np.nan, np.nan, np.nan, 3.0, 1, 2]])
    r, n = concurrent_correlation(x)
    assert n[0, 1] == 0
    assert np.isnan(r[0, 1])


def test_every_pair_is_in_one_block_once(values):
    seen = np.zeros((37, 37), dtype=int)
    for pairs in pair_blocks(values, block=10):
        seen[np.ix_(pairs.first, pairs.second)] += pairs.distinct
    np.testing.assert_array_equal(np.triu(np.ones((37, 37), dtype=int), k=1), seen)


def test_listed_pairs_are_those_of_the_matrix(values):
    r, n = concurrent_correlation(values, minimum=20)
    first, second = np.nonzero(np.triu(np.isfinite(r), k=1))
    pairs = list_pairs(values, minimum=20, block=9)
    np.testing.assert_array_equal([first, second], [pairs.first, pairs.second])
    np.testing.assert_array_equal(n[first, second], pairs.common)
    np.testing.assert_allclose(r[first, second], pairs.correlation, rtol=1e-12)


def test_no_record_gives_no_pair():
    assert len(list_pairs(np.zeros((0, 5)), minimum=3).first) == 0


def test_bins_add_up_to_sums_over_listed_pairs(values):
    edges = np.array([0.0, 5, 10, 20, 40])
    bins = bin_pairs(values, far_apart, edges, minimum=15, block=11)
    pairs = list_pairs(values, minimum=15)
    d, w, z = (pairs.second - pairs.first).astype(float), pairs.common - 3.0, np.arctanh(pairs.correlation)
    for expected, got in (
        (np.ones_like(d), bins.pairs),
        (pairs.common, bins.common),
        (w, bins.weight),
        (w * d, bins.distance),
        (w * z, bins.z),
        (w * z**2, bins.z_squared),
    ):
        np.testing.assert_allclose(np.histogram(d, edges, weights=expected)[0], got, rtol=1e-11)
    every = far_apart(np.arange(37), np.arange(37))[np.triu_indices(37, k=1)]
    np.testing.assert_array_equal(np.histogram(every, edges)[0], bins.all_pairs)
    np.testing.assert_allclose(every.sum(), bins.all_distance.sum(), rtol=1e-12)


def test_density_counts_every_pair_at_its_place(values):
    edges = np.array([0.0, 40.0])
    bins = bin_pairs(values, far_apart, edges, minimum=15, density=(4, 5), block=11)
    pairs = list_pairs(values, minimum=15)
    expected, _, _ = np.histogram2d(
        pairs.second - pairs.first, pairs.correlation, bins=[np.linspace(0, 40, 5), np.linspace(-1, 1, 6)]
    )
    np.testing.assert_array_equal(expected, bins.density)


def test_copies_of_a_record_are_left_out_and_counted():
    x = np.random.default_rng(6).normal(size=(3, 30))
    x[2] = 3 * x[0] + 1
    bins = bin_pairs(x, far_apart, np.array([0.0, 3.0]), minimum=10)
    assert bins.identical == 1
    assert bins.pairs[0] == 2
