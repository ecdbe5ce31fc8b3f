"""Fits by L-moments with intervals: plain where nothing is hidden, right on average where much is."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import stats

from wrackline.stats.distributions import gev, glo, gno, gpa, pe3
from wrackline.stats.expected_lmoments import fit_expected_lmoments
from wrackline.stats.lmoments import sample_lmoments

GUMBEL_LSKEW = np.log(9 / 8) / np.log(2)
TRUTHS = {gev: (100.0, 30.0, -0.15), glo: (100.0, 20.0, -0.2), pe3: (100.0, 40.0, 0.8)}


def hide_below(x: np.ndarray, level: float) -> tuple[np.ndarray, np.ndarray]:
    below = x < level
    return np.where(below, -np.inf, x), np.where(below, level, x)


@pytest.mark.parametrize("law", [gev, glo, gno, gpa, pe3])
def test_without_intervals_it_is_the_plain_fit(law) -> None:
    x = np.random.default_rng(4).gamma(3.0, 20.0, 90)
    offsets = np.array([0, 12, 30, 90])
    lmoments = sample_lmoments(x, offsets)
    expected = law.fit(lmoments.l1, lmoments.l2, lmoments.t3)
    parameters, converged = fit_expected_lmoments(law, x, x, offsets)
    np.testing.assert_array_equal(expected, parameters)
    assert converged.all()


@pytest.mark.parametrize("law", [gev, glo, pe3])
def test_finds_the_truth_in_a_large_sample_with_thresholds_and_intervals(law) -> None:
    truth = np.array(TRUTHS[law])
    x = law.quantile(truth, np.random.default_rng(11).random(40_000))
    low, high = hide_below(x, float(law.quantile(truth, 0.3)))
    # One part of the record is binned, another has a level above which nothing is known.
    binned = (np.arange(len(x)) % 3 == 0) & np.isfinite(low)
    low[binned], high[binned] = np.floor(x[binned] / 25) * 25, np.floor(x[binned] / 25) * 25 + 25
    lost = (np.arange(len(x)) % 3 == 1) & (x > law.quantile(truth, 0.95))
    low[lost], high[lost] = law.quantile(truth, 0.95), np.inf
    parameters, converged = fit_expected_lmoments(law, low, high, [0, len(x)])
    assert converged.all()
    for p in (0.5, 0.9, 0.99):
        # About four standard errors of a quantile at 40,000 values.
        assert law.quantile(truth, p) == pytest.approx(float(law.quantile(parameters[0], p)), rel=0.02)


def test_agrees_with_maximum_likelihood_for_a_censored_normal_sample() -> None:
    x = np.random.default_rng(3).normal(50, 10, 4000)
    low, high = hide_below(x, 47.0)
    parameters, _ = fit_expected_lmoments(pe3, low, high, [0, len(x)], lskew=0.0)
    data = stats.CensoredData(uncensored=x[x >= 47], left=np.full(int((x < 47).sum()), 47.0))
    mean, sd = stats.norm.fit(data)
    # Standard error of the mean is 0.2; the two estimators differ by a part of it.
    assert mean == pytest.approx(parameters[0, 0], abs=0.15)
    assert sd == pytest.approx(parameters[0, 1], abs=0.15)


def test_a_law_without_shape_keeps_its_own() -> None:
    x = np.random.default_rng(8).gumbel(10, 2, 60)
    gumbel, _ = fit_expected_lmoments(gev, x, x, [0, 60], lskew=GUMBEL_LSKEW)
    assert 0 == pytest.approx(gumbel[0, 2], abs=1e-12)
    # Hosking (1990): the scale of the Gumbel law is l2 / ln 2.
    l2 = sample_lmoments(x, [0, 60]).l2[0]
    assert l2 / np.log(2) == pytest.approx(gumbel[0, 1])


def test_scaling_shifting_and_shuffling_change_nothing_else() -> None:
    rng = np.random.default_rng(5)
    x = rng.gumbel(100, 30, 50)
    low, high = hide_below(x, 85.0)
    plain, _ = fit_expected_lmoments(gev, low, high, [0, 50])
    scaled, _ = fit_expected_lmoments(gev, 7 * low + 3, 7 * high + 3, [0, 50])
    np.testing.assert_allclose([7 * plain[0, 0] + 3, 7 * plain[0, 1], plain[0, 2]], scaled[0], rtol=1e-6)
    order = rng.permutation(50)
    shuffled, _ = fit_expected_lmoments(gev, low[order], high[order], [0, 50])
    np.testing.assert_allclose(plain, shuffled, rtol=1e-9)


def test_records_do_not_touch_each_other() -> None:
    rng = np.random.default_rng(6)
    x = rng.gumbel(100, 30, 120)
    low, high = hide_below(x, 90.0)
    together, _ = fit_expected_lmoments(glo, low, high, [0, 40, 120])
    apart = [
        fit_expected_lmoments(glo, low[s], high[s], [0, n])[0][0]
        for s, n in ((slice(40), 40), (slice(40, 120), 80))
    ]
    np.testing.assert_allclose(apart, together, rtol=1e-12)


@pytest.mark.parametrize("x", [[], [1.0, 2.0], [5.0] * 8])
def test_too_few_or_equal_values_have_no_fit(x: list[float]) -> None:
    parameters, converged = fit_expected_lmoments(gev, x, x, [0, len(x)])
    assert np.isnan(parameters).all()
    assert not converged.any()
