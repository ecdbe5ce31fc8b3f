"""Sample L-moments: the definition by subsets, identities, undefined cases, agreement with lmoments3."""

from itertools import combinations, pairwise
from math import comb

import lmoments3
import numpy as np
import pytest
from numpy.testing import assert_allclose, assert_array_equal

from wrackline.stats.lmoments import average_ratios, order_weights, sample_lmoments, sample_lmoments_of_rows

RATIOS = ("t", "t3", "t4", "t5")


def ragged(lengths, seed=3):
    rng = np.random.default_rng(seed)
    offsets = np.concatenate([[0], np.cumsum(lengths)])
    return rng.gumbel(100.0, 35.0, size=offsets[-1]), offsets


def lmoment_by_subsets(record, order):
    subsets = [sorted(subset) for subset in combinations(record, order)]
    terms = [
        sum((-1) ** k * comb(order - 1, k) * subset[order - 1 - k] for k in range(order)) / order
        for subset in subsets
    ]
    return np.mean(terms)


def test_equal_the_mean_over_all_subsets_that_defines_them():
    # Hosking (1990): l_r is the mean over r-subsets of contrasts of order statistics; 1e-12 is rounding.
    record = [2.0, 3.0, 4.0, 2.4, 5.5, 1.2, 5.4, 2.2, 7.1, 1.3, 1.5]
    l1, l2, l3, l4, l5 = (lmoment_by_subsets(record, order) for order in range(1, 6))
    lm = sample_lmoments(record, [0, len(record)])
    assert_allclose([l1, l2], [lm.l1[0], lm.l2[0]], rtol=1e-12)
    assert_allclose(
        [l2 / l1, l3 / l2, l4 / l2, l5 / l2], [getattr(lm, name)[0] for name in RATIOS], rtol=0, atol=1e-12
    )


def test_agree_with_lmoments3_record_by_record():
    lengths = np.random.default_rng(0).integers(5, 90, size=60)
    values, offsets = ragged(lengths)
    lm = sample_lmoments(values, offsets)
    expected = np.array([lmoments3.lmom_ratios(values[a:b], nmom=5) for a, b in pairwise(offsets)])
    assert_allclose(expected[:, 0], lm.l1, rtol=1e-12)
    assert_allclose(expected[:, 1], lm.l2, rtol=1e-12)
    # lmoments3 loses some digits of the higher ratios in its alternating sums.
    assert_allclose(expected[:, 2:], np.stack([lm.t3, lm.t4, lm.t5], axis=1), rtol=0, atol=1e-10)


def test_multiplying_a_record_changes_its_mean_and_scale_only():
    values, offsets = ragged([30, 12, 30, 55])
    before, after = sample_lmoments(values, offsets), sample_lmoments(values * 37.3, offsets)
    assert_allclose(before.l1 * 37.3, after.l1, rtol=1e-13)
    assert_allclose(before.l2 * 37.3, after.l2, rtol=1e-13)
    for name in RATIOS:
        assert_allclose(getattr(before, name), getattr(after, name), rtol=0, atol=1e-13)


def test_adding_a_constant_changes_the_mean_only():
    values, offsets = ragged([30, 12, 30, 55])
    before, after = sample_lmoments(values, offsets), sample_lmoments(values + 1e6, offsets)
    # Adding 1e6 rounds the values themselves by 1e-10.
    assert_allclose(before.l1 + 1e6, after.l1, rtol=1e-14)
    assert_allclose(before.l2, after.l2, rtol=1e-10)
    assert_allclose(before.t3, after.t3, rtol=0, atol=1e-10)


def test_turning_the_signs_turns_the_odd_ratios():
    values, offsets = ragged([25, 40])
    before, after = sample_lmoments(values, offsets), sample_lmoments(-values, offsets)
    assert_allclose(-before.l1, after.l1, rtol=1e-13)
    assert_allclose(before.l2, after.l2, rtol=1e-13)
    assert_allclose([-before.t3, before.t4, -before.t5], [after.t3, after.t4, after.t5], rtol=0, atol=1e-13)


def test_order_of_years_does_not_matter():
    values, offsets = ragged([31, 8, 31])
    shuffled = values.copy()
    rng = np.random.default_rng(9)
    for a, b in pairwise(offsets):
        rng.shuffle(shuffled[a:b])
    before, after = sample_lmoments(values, offsets), sample_lmoments(shuffled, offsets)
    for name in ("l1", "l2", *RATIOS):
        assert_array_equal(getattr(before, name), getattr(after, name))


def test_order_of_gauges_does_not_matter():
    lengths = [31, 8, 31, 50]
    values, offsets = ragged(lengths)
    records = [values[a:b] for a, b in pairwise(offsets)]
    turned = sample_lmoments(np.concatenate(records[::-1]), np.concatenate([[0], np.cumsum(lengths[::-1])]))
    straight = sample_lmoments(values, offsets)
    assert_array_equal(straight.n[::-1], turned.n)
    # A batch of another shape may add in another order: rounding only.
    for name in ("l1", "l2", *RATIOS):
        assert_allclose(getattr(straight, name)[::-1], getattr(turned, name), rtol=1e-12)


def test_ties_count_as_often_as_they_occur():
    assert sample_lmoments([5.0, 5.0, 5.0, 8.0], [0, 4]).l2[0] == pytest.approx(0.75, rel=1e-14)


def test_short_records_have_the_moments_they_have_values_for():
    values = [7.0, 1.0, 4.0, 1.0, 2.0, 6.0, 1.0, 2.0, 4.0, 8.0]
    lm = sample_lmoments(values, [0, 0, 1, 3, 6, 10])
    assert_array_equal([0, 1, 2, 3, 4], lm.n)
    assert_array_equal([True, False, False, False, False], np.isnan(lm.l1))
    assert_array_equal([True, True, False, False, False], np.isnan(lm.l2))
    assert_array_equal([True, True, True, False, False], np.isnan(lm.t3))
    assert_array_equal([True, True, True, True, False], np.isnan(lm.t4))
    assert np.isnan(lm.t5).all()
    assert lm.l2[2] == pytest.approx(1.5)


def test_equal_values_have_no_scale_and_undefined_shape():
    lm = sample_lmoments([12.1] * 9, [0, 9])
    assert lm.l1[0] == 12.1
    assert lm.l2[0] == 0.0
    assert lm.t[0] == 0.0
    assert np.isnan([lm.t3[0], lm.t4[0], lm.t5[0]]).all()


def test_lcv_is_undefined_without_a_positive_mean():
    lm = sample_lmoments([-3.0, -1.0, 1.0, 3.0, -9.0, -8.0, -5.0, -7.0], [0, 4, 8])
    assert np.isnan(lm.t).all()
    assert np.isfinite(lm.t3).all()


@pytest.mark.parametrize("bad", [np.nan, np.inf, -np.inf])
def test_values_that_are_not_finite_are_refused(bad):
    with pytest.raises(ValueError, match="finite"):
        sample_lmoments([1.0, bad, 3.0], [0, 3])
    with pytest.raises(ValueError, match="finite"):
        sample_lmoments_of_rows([[1.0, bad, 3.0]])


@pytest.mark.parametrize("offsets", [[0, 2], [1, 3], [0, 2, 1, 3], []])
def test_offsets_that_do_not_cover_the_values_are_refused(offsets):
    with pytest.raises(ValueError, match="offset"):
        sample_lmoments([1.0, 2.0, 3.0], offsets)


def test_rows_give_the_same_as_ragged_records():
    array = np.random.default_rng(5).gumbel(50.0, 10.0, size=(3, 4, 17))
    rows = sample_lmoments_of_rows(array)
    ragged_form = sample_lmoments(array.ravel(), np.arange(0, array.size + 1, 17))
    in_order = sample_lmoments_of_rows(np.sort(array, axis=-1), is_sorted=True)
    assert rows.t.shape == (3, 4)
    for name in ("n", "l1", "l2", *RATIOS):
        assert_allclose(getattr(ragged_form, name).reshape(3, 4), getattr(rows, name), rtol=1e-11)
        assert_array_equal(getattr(rows, name), getattr(in_order, name))


def test_weights_are_orthogonal_to_lower_powers_of_rank():
    # l_r of a record that is a polynomial of degree below r - 1 in the rank must vanish.
    weights = order_weights(40)
    rank = np.linspace(0.0, 1.0, 40)
    for order in range(1, 5):
        for power in range(order):
            assert_allclose(0.0, weights[:, order] @ rank**power, atol=1e-14)


def test_average_weighs_the_ratios_and_not_the_moments():
    lm = sample_lmoments([1.0, 3.0, 10.0, 20.0, 90.0], [0, 2, 5])
    expected = (2 * lm.t[0] + 3 * lm.t[1]) / 5
    assert average_ratios(lm, lm.n).t == pytest.approx(expected, rel=1e-15)


def test_average_of_several_pools_equals_each_pool_alone():
    values, offsets = ragged([30, 12, 30, 55])
    lm = sample_lmoments(values, offsets)
    weights = np.array([[1.0, 2.0, 0.0, 4.0], [0.0, 1.0, 1.0, 0.0]])
    together = average_ratios(lm, weights)
    for i, row in enumerate(weights):
        alone = average_ratios(lm, row)
        for name in RATIOS:
            assert_allclose(getattr(alone, name), getattr(together, name)[i], rtol=1e-14)


def test_average_ignores_gauges_without_weight_even_if_undefined():
    lm = sample_lmoments([5.0, 5.0, 5.0, 1.0, 2.0, 4.0, 9.0, 11.0], [0, 3, 8])
    assert average_ratios(lm, [0.0, 1.0]).t3 == pytest.approx(lm.t3[1])
    assert np.isnan(average_ratios(lm, [1.0, 1.0]).t3)


@pytest.mark.parametrize("weights", [[0.0, 0.0], [-1.0, 2.0], [np.nan, 1.0]])
def test_average_refuses_weights_that_are_none(weights):
    lm = sample_lmoments([5.0, 6.0, 1.0, 2.0], [0, 2, 4])
    with pytest.raises(ValueError, match="weight"):
        average_ratios(lm, weights)
