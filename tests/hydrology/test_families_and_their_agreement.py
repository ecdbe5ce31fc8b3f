"""Families beside log-Pearson III: fitted to the same observations, rejected about as often as they should be."""

from __future__ import annotations

import numpy as np
import pytest

from wrackline.hydrology.alternatives import (
    ALTERNATIVES,
    GEV,
    GUMBEL,
    LOG_PEARSON3,
    LOGNORMAL,
    NORMAL,
    PEARSON3,
    fit_families,
)
from wrackline.hydrology.at_site import fit_records
from wrackline.hydrology.goodness_of_fit import critical_values, judge_families
from wrackline.hydrology.records import PeakRecords, exact_records
from wrackline.stats.distributions import gev, pe3


def records_of(flows: np.ndarray) -> PeakRecords:
    """Records of equal length, one row of flows a gauge."""
    g, n = flows.shape
    return exact_records(
        [f"G{i}" for i in range(g)], np.arange(g + 1) * n, np.tile(np.arange(1900, 1900 + n), g), flows.ravel()
    )  # fmt: skip


def judge(flows: np.ndarray, families=ALTERNATIVES, **options):
    fits = fit_records(records_of(flows), **options)
    fitted = fit_families(fits, families)
    return fits, fitted, {a.family: a for a in judge_families(fitted, fits.fitted_records, "weibull", 1)}


@pytest.fixture(scope="module")
def skewed():
    """Sixty gauges of a heavy-tailed law, no low floods set apart."""
    flows = gev.quantile(np.array([100.0, 35.0, -0.1]), np.random.default_rng(2).random((60, 60)))
    return judge(np.maximum(flows, 1.0), low_flood_thresholds=np.zeros(60))


def test_log_pearson3_comes_first_and_keeps_its_own_moments(skewed) -> None:
    fits, fitted, _ = skewed
    assert [LOG_PEARSON3, *ALTERNATIVES] == [one.family for one in fitted]
    np.testing.assert_allclose(fits.station.flow[:, 7], fitted[0].flow([0.01])[:, 0], rtol=1e-9)


def test_lognormal_of_a_complete_record_is_the_textbook_one(skewed) -> None:
    fits, fitted, _ = skewed
    logs = np.log10(fits.fitted_records.flow_low[:60])
    i, j = np.triu_indices(60, 1)
    # l2 is half of Gini's mean difference, and the standard deviation sqrt(pi) times it (Hosking, 1990).
    sd = np.sqrt(np.pi) * 0.5 * np.mean(np.abs(logs[i] - logs[j]))
    lognormal = next(one for one in fitted if one.family is LOGNORMAL)
    assert 10 ** (logs.mean() + 2.3263479 * sd) == pytest.approx(lognormal.flow([0.01])[0, 0], rel=1e-6)


def test_a_true_family_is_rejected_about_as_often_as_the_two_tests_allow(skewed) -> None:
    agreement = skewed[2][GEV]
    # Each test rejects 5 % of 60; five standard errors of that count.
    assert 60 * 0.05 + 5 * 1.7 >= (agreement.ppcc < agreement.ppcc_critical).sum()
    assert 60 * 0.05 + 5 * 1.7 >= (agreement.anderson_darling > agreement.anderson_darling_critical).sum()


def test_a_wrong_family_is_found_out(skewed) -> None:
    agreements = skewed[2]
    assert 0.1 > agreements[NORMAL].serves.mean()
    assert 0.8 < agreements[GEV].serves.mean()
    assert np.median(agreements[GEV].largest_floods_error) < np.median(
        agreements[NORMAL].largest_floods_error
    )


def test_low_floods_count_as_below_the_threshold_in_every_family() -> None:
    rng = np.random.default_rng(9)
    flows = np.exp(rng.normal(4.6, 0.4, (30, 50)))
    spoiled = flows.copy()
    spoiled[:, :5] = np.sort(flows, axis=1)[:, :5] / np.linspace(3, 30, 5)
    # Both see five floods below the smallest of the others, whatever their size.
    order = np.sort(spoiled, axis=1)
    threshold = order[:, 5]
    shrunk = np.where(spoiled < threshold[:, None], spoiled / 7, spoiled)
    one = judge(spoiled, low_flood_thresholds=threshold)
    other = judge(shrunk, low_flood_thresholds=threshold)
    for family, (a, b) in enumerate(zip(one[1], other[1], strict=True)):
        np.testing.assert_allclose(a.parameters, b.parameters, rtol=1e-6, err_msg=str(family))
    assert (5 == one[0].low_floods.count).all()
    agreement = one[2][LOGNORMAL]
    assert np.isfinite(agreement.anderson_darling).all()


def test_censored_records_of_a_true_family_keep_the_level() -> None:
    rng = np.random.default_rng(10)
    flows = np.exp(rng.normal(4.6, 0.4, (120, 40)))
    threshold = np.sort(flows, axis=1)[:, 10]
    agreement = judge(flows, (LOGNORMAL,), low_flood_thresholds=threshold)[2][LOGNORMAL]
    rejected = (agreement.ppcc < agreement.ppcc_critical).mean()
    beyond = (agreement.anderson_darling > agreement.anderson_darling_critical).mean()
    # 5 %, with three standard errors of 120 trials and of the simulated critical value.
    assert 0.05 == pytest.approx(rejected, abs=0.075)
    assert 0.05 == pytest.approx(beyond, abs=0.075)


def test_a_peak_beyond_the_bound_means_the_family_does_not_serve() -> None:
    flows = np.random.default_rng(1).gamma(0.6, 100.0, (40, 30)) + 50.0
    agreement = judge(flows, (PEARSON3,), low_flood_thresholds=np.zeros(40))[2][PEARSON3]
    assert agreement.beyond_bound.any()
    assert not (agreement.serves & agreement.beyond_bound).any()


def test_gauge_without_a_fit_is_not_judged() -> None:
    flows = np.full((2, 12), 7.0)
    flows[1] = np.arange(12) + 20.0
    _, fitted, agreements = judge(flows)
    for one in fitted:
        assert [False, True] == one.fitted.tolist()
    assert all([False, True] == a.judged.tolist() for a in agreements.values())
    assert all(not a.serves[0] for a in agreements.values())


# Values from memory of the sources. Their plotting positions are a little different from Weibull's.
@pytest.mark.parametrize(("n", "published"), [(20, 0.951), (30, 0.964), (48, 0.976)])
def test_simulated_correlation_of_normal_samples_is_near_the_published_point(
    n: int, published: float
) -> None:
    """Filliben (1975), 5 % points of the probability-plot correlation; 400 samples give 0.002."""
    found, _ = critical_values("PE3", 0.0, n, 0, False, "hazen", 5)
    assert published == pytest.approx(found, abs=0.006)


def test_simulated_anderson_darling_of_normal_samples_is_near_the_published_point() -> None:
    """Stephens (1974): 0.752 / (1 + 0.75/n + 2.25/n^2) at 5 % with mean and deviation estimated."""
    n = 48
    _, found = critical_values("PE3", 0.0, n, 0, False, "weibull", 5)
    # 400 samples: a standard error of about 0.03.
    assert 0.752 / (1 + 0.75 / n + 2.25 / n**2) == pytest.approx(found, abs=0.09)


def test_critical_values_depend_on_the_seed_alone() -> None:
    arguments = ("GEV", -0.1, 20, 2, True, "weibull")
    first = critical_values(*arguments, 7)
    critical_values.cache_clear()
    critical_values("GLO", -0.1, 20, 2, True, "weibull", 7)
    assert first == critical_values(*arguments, 7)
    assert first != critical_values(*arguments, 8)


@pytest.mark.parametrize("family", [NORMAL, GUMBEL, LOG_PEARSON3])
def test_density_over_logarithms_encloses_one(family) -> None:
    parameters = np.array([1.6, 0.2, 0.4]) if family is LOG_PEARSON3 else np.array([50.0, 12.0, 0.0])
    x = np.linspace(-1, 3.5, 40_001)
    total = np.trapezoid(family.density(parameters, x), x)
    # Of the normal law a ten-thousandth lies below zero flow, which no logarithm shows.
    assert 1 == pytest.approx(total, abs=1e-3)


def test_pearson3_and_its_logarithmic_sister_share_their_law() -> None:
    parameters = np.array([2.0, 0.3, 0.5])
    assert pe3.cdf(parameters, 2.4) == pytest.approx(float(LOG_PEARSON3.cdf(parameters, 10**2.4)))
    assert [0.0, 1.0] == LOG_PEARSON3.cdf(parameters, np.array([0.0, np.inf])).tolist()
