"""A pool from records to growth curve: invariances, choice of law, intervals, warnings."""

from dataclasses import replace

import numpy as np
import pytest

from wrackline.hydrology.growth_curves import Ratios, check_curve, choose_distribution, fit_curve
from wrackline.hydrology.growth_intervals import tabulate_family
from wrackline.hydrology.homogeneity import FitMeasures, Heterogeneity, fit_parent
from wrackline.hydrology.pool_verdicts import describe_heterogeneity
from wrackline.hydrology.pools import PoolSettings, analyse_pool
from wrackline.hydrology.records import PeakRecords, exact_records
from wrackline.stats.distributions import BY_NAME

QUICK = PoolSettings(
    aep=(0.9, 0.5, 0.1, 0.01), simulations=300, close_call_simulations=300, growth_simulations=300
)
RHO = 0.5


def made_records(g: int = 12, lcv_sd: float = 0.0, seed: int = 1, scale: float = 1.0) -> PeakRecords:
    """GEV records of 20 to 60 years ending in the same year, with correlation 0.5 and, if asked, differing L-CV."""
    rng = np.random.default_rng(seed)
    n = rng.integers(20, 61, g)
    z = np.sqrt(RHO) * rng.standard_normal(60) + np.sqrt(1 - RHO) * rng.standard_normal((g, 60))
    from scipy.special import ndtr

    lcv = np.clip(0.3 + lcv_sd * rng.standard_normal(g), 0.1, 0.6)
    flows = BY_NAME["GEV"].quantile(BY_NAME["GEV"].fit(np.ones(g), lcv, np.full(g, 0.2))[:, None, :], ndtr(z))
    flows = scale * 100 * np.maximum(flows, 0.01)
    offsets = np.concatenate([[0], np.cumsum(n)])
    years = np.concatenate([np.arange(60 - k, 60) for k in n])
    return exact_records(
        [f"G{i:02}" for i in range(g)],
        offsets,
        years,
        np.concatenate([f[60 - k :] for f, k in zip(flows, n, strict=True)]),
    )


def equal_correlation(g: int) -> np.ndarray:
    return np.full((g, g), RHO) + (1 - RHO) * np.eye(g)


@pytest.fixture(scope="module")
def pool():
    return analyse_pool(made_records(), equal_correlation(12), QUICK, np.random.default_rng(7))


def test_order_of_gauges_changes_no_digit(pool):
    order = np.random.default_rng(2).permutation(12)
    again = analyse_pool(
        made_records().keep_gauges(order),
        equal_correlation(12)[np.ix_(order, order)],
        QUICK,
        np.random.default_rng(7),
    )
    assert pool.gauge_ids == again.gauge_ids
    assert np.array_equal(pool.heterogeneity.h, again.heterogeneity.h)
    assert np.array_equal(pool.correlated.h, again.correlated.h)
    assert np.array_equal(pool.growth.upper, again.growth.upper)


def test_the_same_stream_gives_the_same_pool_and_another_stream_another(pool):
    again, other = (
        analyse_pool(made_records(), equal_correlation(12), QUICK, np.random.default_rng(seed))
        for seed in (7, 8)
    )
    assert np.array_equal(pool.growth.lower, again.growth.lower)
    assert not np.array_equal(pool.heterogeneity.h, other.heterogeneity.h)


def test_multiplying_one_gauges_flows_changes_nothing_but_its_mean(pool):
    records = made_records()
    flow = records.flow_low.copy()
    flow[records.offsets[3] : records.offsets[4]] *= 0.3048**-3
    scaled = analyse_pool(
        replace(records, flow_low=flow, flow_high=flow),
        equal_correlation(12),
        QUICK,
        np.random.default_rng(7),
    )
    assert pool.lmoments.l1[3] * 0.3048**-3 == pytest.approx(scaled.lmoments.l1[3], rel=1e-12)
    assert pytest.approx(scaled.heterogeneity.h, rel=1e-9) == pool.heterogeneity.h
    assert pytest.approx(scaled.discordancy.measure, rel=1e-9) == pool.discordancy.measure
    assert pytest.approx(scaled.growth.upper, rel=1e-9) == pool.growth.upper


def test_curve_is_one_at_the_index_and_interval_holds_it(pool):
    at = QUICK.aep.index(0.5)
    assert [1.0, 1.0, 1.0] == pytest.approx(
        [pool.growth.factor[at], pool.growth.lower[at], pool.growth.upper[at]]
    )
    assert pool.growth.ln_sd_new_site[at] == pytest.approx(0.0, abs=1e-9)
    assert (pool.growth.lower <= pool.growth.factor).all()
    assert (pool.growth.factor <= pool.growth.upper).all()
    assert (pool.growth.ln_sd_region <= pool.growth.ln_sd_new_site + 0.01).all()


def test_spread_between_sites_is_found_and_never_zero(pool):
    mixed = analyse_pool(
        made_records(20, lcv_sd=0.08), equal_correlation(20), QUICK, np.random.default_rng(7)
    )
    assert 0 < pool.between.mean_lcv_sd < 0.03
    # true spread 0.08; 20 gauges tell it to about a quarter
    assert mixed.between.mean_lcv_sd == pytest.approx(0.08, abs=0.04)
    assert mixed.growth.ln_sd_new_site[3] > 1.5 * pool.growth.ln_sd_new_site[3]
    assert mixed.heterogeneous
    assert mixed.choice.distribution == "KAP"
    assert any("heterogeneous" in warning for warning in mixed.warnings)


def test_interval_covers_most_true_growth_factors_of_the_regions_other_sites():
    # 20 regions whose sites differ in L-CV by 0.04; the benchmark of coverage has many more
    covered = []
    for seed in range(20):
        found = analyse_pool(
            made_records(15, 0.04, seed), equal_correlation(15), QUICK, np.random.default_rng(seed)
        )
        lcv = 0.3 + 0.04 * np.random.default_rng(seed + 500).standard_normal(200)
        sites = BY_NAME["GEV"].fit(np.ones(200), lcv, np.full(200, 0.2))
        truth = (
            BY_NAME["GEV"].quantile(sites[:, None, :], np.array([0.9, 0.99]))
            / BY_NAME["GEV"].quantile(sites, np.full(1, 0.5))[:, None]
        )
        covered.append(((truth >= found.growth.lower[2:]) & (truth <= found.growth.upper[2:])).mean(axis=0))
    # nominal 0.90; regions differ, 20 of them leave a standard error of about 0.025
    assert np.mean(covered, axis=0).min() > 0.82


def test_short_and_constant_records_are_left_out_with_reasons():
    records = made_records()
    flow = records.flow_low.copy()
    flow[records.offsets[0] : records.offsets[1]] = 5.0
    historic = records.historic.copy()
    historic[records.offsets[1] : records.offsets[2] - 6] = True
    found = analyse_pool(
        replace(records, flow_low=flow, flow_high=flow, historic=historic),
        None,
        QUICK,
        np.random.default_rng(1),
    )
    assert {
        "G00": "all peaks are equal",
        "G01": "6 exactly known systematic peaks, fewer than 10",
    } == found.left_out
    assert len(found.gauge_ids) == 10
    assert found.weight.sum() == pytest.approx(1)


def test_years_without_flow_are_completed_by_a_law_above_them_and_said():
    records = made_records()
    flow = records.flow_low.copy()
    flow[:8] = 0.0
    found = analyse_pool(
        replace(records, flow_low=flow, flow_high=flow), None, QUICK, np.random.default_rng(1)
    )
    n = np.diff(records.offsets)[0]
    assert found.lmoments.n[0] == n - 8
    assert found.completed == {"G00": f"8 of {n} years low or without flow"}
    assert any(f"G00 (8 of {n}" in warning for warning in found.warnings)


def test_a_few_years_without_flow_stay_in_as_they_are_and_are_said():
    records = made_records()
    flow = records.flow_low.copy()
    flow[:1] = 0.0
    found = analyse_pool(
        replace(records, flow_low=flow, flow_high=flow), None, QUICK, np.random.default_rng(1)
    )
    assert found.lmoments.n[0] == np.diff(records.offsets)[0]
    assert any("G00 (1 of" in warning for warning in found.warnings)


def test_a_pool_without_usable_gauges_is_refused():
    records = made_records().keep_rows(np.zeros(made_records().offsets[-1], dtype=bool))
    with pytest.raises(ValueError, match="no gauge has 10"):
        analyse_pool(records, None, QUICK, np.random.default_rng(1))


def test_a_single_gauge_gets_a_curve_and_no_test():
    found = analyse_pool(made_records(1), None, QUICK, np.random.default_rng(1))
    assert found.verdict == "not tested: one gauge alone"
    assert np.isfinite(found.growth.upper).all()


def test_an_indefinite_correlation_matrix_is_repaired_and_said():
    matrix = equal_correlation(12)
    matrix[0, 1] = matrix[1, 0] = -0.95
    found = analyse_pool(made_records(), matrix, QUICK, np.random.default_rng(1))
    assert any("not positive definite" in warning for warning in found.warnings)


def test_a_fixed_law_is_used_and_what_the_tests_would_choose_is_said():
    found = analyse_pool(made_records(), None, QUICK, np.random.default_rng(1), "GPA", "older study")
    assert found.curve.distribution == "GPA"
    assert found.choice.by_evidence != "GPA"
    assert any("would now choose" in warning for warning in found.warnings)


def measures(*z: float) -> FitMeasures:
    return FitMeasures(("GLO", "GEV", "GNO", "PE3", "GPA"), np.zeros(5), np.array(z), np.zeros(5), 0.0, 0.02)


@pytest.mark.parametrize(
    ("z", "h1", "expected"),
    [
        ((0.9, -0.3, -1.2, -2.0, -5.0), 0.5, "GEV"),
        ((1.64, -1.7, -2.2, -2.5, -5.0), 1.5, "GLO"),
        ((1.65, -1.7, -2.2, -2.5, -5.0), 0.5, "KAP"),
        ((0.9, -0.3, -1.2, -2.0, -5.0), 2.0, "KAP"),
    ],
)
def test_choice_follows_the_written_rule(z, h1, expected):
    assert expected == choose_distribution(measures(*z), h1).distribution


@pytest.mark.parametrize(
    ("h1", "words"),
    [
        (0.3, "acceptably homogeneous"),
        (1.5, "possibly heterogeneous"),
        (3.0, "definitely heterogeneous"),
        (-2.5, "strong intersite correlation"),
        (1.05, "within two simulation errors of 1"),
    ],
)
def test_verdict_follows_from_the_number(h1, words):
    three = np.array([h1, 0.0, 0.0])
    assert words in describe_heterogeneity(Heterogeneity(three, three, three, three, np.full(3, 0.03), 1000))


def test_doubts_name_negative_floods_and_a_bound_below_a_recorded_flood():
    curve = fit_curve("GPA", Ratios(0.6, 0.1, 0.05, 0.0), "median")
    doubts = check_curve(curve, np.array([0.99, 0.5, 0.01]), largest_scaled_flood=9.0)
    assert "negative floods at AEP 0.99" in doubts[0]
    assert "below the largest flood of the pool (9 times)" in doubts[1]


@pytest.mark.parametrize("lkurtosis", [0.13, 0.17, 0.25])
def test_family_of_true_laws_returns_the_ratios_it_is_asked_for(lkurtosis):
    family = tabulate_family(fit_parent(0.3, 0.2, lkurtosis))
    p = (np.arange(200000) + 0.5) / 200000
    x = family.factors(np.array([0.35]), np.array([0.28]), 1 - p, "mean")[0]
    b0, b1, b2, b3 = (float((x * p**r).mean()) for r in range(4))
    l2 = 2 * b1 - b0
    # the midpoint rule misses a little of the upper tail
    assert [1.0, 0.35, 0.28] == pytest.approx([b0, l2 / b0, (6 * b2 - 6 * b1 + b0) / l2], rel=2e-3)
    assert float(family.lkurtosis_at(np.array(0.28))) == pytest.approx(
        (20 * b3 - 30 * b2 + 12 * b1 - b0) / l2, rel=5e-3
    )


def test_density_at_the_median_is_the_slope_of_the_distribution_there(pool):
    step = 1e-4
    rise = pool.curve.factor(0.5 - step) - pool.curve.factor(0.5 + step)
    assert 2 * step / rise == pytest.approx(pool.curve.density_at_median, rel=1e-5)
    assert pool.index_relative_sd == pytest.approx(1 / (2 * pool.curve.density_at_median))
