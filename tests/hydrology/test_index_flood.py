"""Index floods of records: known answers, sampling errors against simulation, correlated medians."""

from dataclasses import replace

import numpy as np
import pytest

from wrackline.hydrology.attributes import DesignPlan
from wrackline.hydrology.index_flood import (
    LOG10_E,
    count_common_years,
    index_sampling_covariance,
    sample_index_floods,
)
from wrackline.hydrology.records import exact_records
from wrackline.hydrology.ungauged import scale_growth_curve, state_intervals


def records_of(*floods, years=None):
    offsets = np.cumsum([0, *(len(f) for f in floods)])
    years = np.concatenate(years) if years else np.concatenate([1990 + np.arange(len(f)) for f in floods])
    return exact_records(
        [f"g{i}" for i in range(len(floods))], offsets, years, np.concatenate(floods).astype(float)
    )


def test_median_of_odd_even_and_empty_records():
    index = sample_index_floods(records_of([3, 1, 2], [4, 1, 2, 3], []), np.full(3, 0.5))
    np.testing.assert_array_equal(index.flow, [2.0, 2.5, np.nan])
    np.testing.assert_array_equal(index.usable, [True, True, False])


def test_mean_of_records_with_an_empty_one_between():
    index = sample_index_floods(records_of([3, 1, 2], [], [4, 8]), np.full(3, 0.5), "mean")
    np.testing.assert_array_equal(index.flow, [2.0, np.nan, 6.0])


def test_a_record_whose_median_is_zero_has_no_logarithm_but_stays():
    index = sample_index_floods(records_of([0, 0, 5], [1, 2, 3]), np.full(2, 0.5))
    np.testing.assert_array_equal(index.usable, [False, True])
    assert index.flow[0] == 0.0


def test_variance_of_the_log_median_matches_simulation():
    # Lognormal peaks: f(m) m = 1 / (s sqrt(2 pi)), so one year's relative sd is s sqrt(pi / 2).
    s, n = 0.6, 60
    rng = np.random.default_rng(3)
    simulated = np.var(np.log10(np.median(np.exp(s * rng.normal(size=(20000, n))), axis=1)))
    index = sample_index_floods(records_of(np.ones(n)), np.array([s * np.sqrt(np.pi / 2)]))
    # Asymptotic formula at n = 60: within 3 %, of which 1 % is the simulation's own error.
    assert index.log10_variance[0] == pytest.approx(simulated, rel=0.03)


def test_years_below_a_gauge_base_keep_their_rank_in_the_median():
    records = records_of([10, 12, 14, 16, 5, 5, 5])
    low = np.array([False] * 4 + [True] * 3)
    censored = replace(records, flow_low=np.where(low, 0.0, records.flow_low))
    assert sample_index_floods(censored, np.full(1, 0.5)).flow[0] == 10.0
    assert sample_index_floods(censored, np.full(1, 0.5), "mean").flow[0] == 13.0


def test_historic_years_below_a_high_threshold_say_nothing_about_the_median():
    records = records_of([10, 12, 14, 90, 90])
    silent = np.array([False] * 3 + [True] * 2)
    censored = replace(records, flow_low=np.where(silent, 0.0, records.flow_low), observed=~silent)
    assert sample_index_floods(censored, np.full(1, 0.5)).flow[0] == 12.0


@pytest.mark.parametrize("rho", [0.3, 0.8])
def test_covariance_of_two_log_medians_matches_simulation(rho):
    s, n, shared = 0.5, 50, 30
    rng = np.random.default_rng(11)
    common = rng.multivariate_normal([0, 0], [[1, rho], [rho, 1]], size=(20000, shared))
    own = rng.normal(size=(20000, n - shared, 2))
    medians = np.median(np.concatenate([common, own], axis=1), axis=1) * s * LOG10_E
    simulated = np.cov(medians.T)[0, 1]
    variance = np.full(2, (LOG10_E * s) ** 2 * np.pi / 2 / n)
    counts, n_each = np.array([[n, shared], [shared, n]]), np.array([n, n])
    covariance = index_sampling_covariance(variance, counts, n_each, np.array([[1, rho], [rho, 1.0]]))
    # Tolerance: three standard errors of the simulated covariance.
    tolerance = 3 * variance[0] / np.sqrt(20000)
    assert covariance[0, 1] == pytest.approx(simulated, abs=tolerance)


def test_common_years_are_counted_pair_by_pair():
    records = records_of([1, 2, 3], [4, 5], years=[np.array([2000, 2001, 2003]), np.array([2001, 2003])])
    np.testing.assert_array_equal(count_common_years(records), [[3, 2], [2, 2]])


def test_design_repeats_for_new_sites_and_refuses_unknown_regions():
    plan = DesignPlan(("area", "rain"), ("log10", "none"), ("north", "south"))
    assert plan.columns == ("region north", "region south", "log10(area)", "rain")
    design = plan.design({"area": np.array([100.0, 10.0]), "rain": np.array([5.0, 6.0])}, ["south", "east"])
    np.testing.assert_array_equal(design, [[0, 1, 2, 5], [np.nan, np.nan, 1, 6]])


def test_interval_adds_the_two_variances_in_log_space():
    e = state_intervals(
        scale_growth_curve(np.array([2.0]), np.array([0.01]), 10**6, np.array([[2.0]]), np.array([[0.3]])),
        0.90,
    )
    se = np.sqrt(0.01 + (0.3 * LOG10_E) ** 2)
    assert e.se_log10[0, 0] == pytest.approx(se, rel=1e-12)
    assert e.flow[0, 0] == pytest.approx(200.0, rel=1e-12)
    assert e.upper[0, 0] == pytest.approx(200 * 10 ** (1.6448536 * se), rel=1e-5)
    assert e.lower[0, 0] * e.upper[0, 0] == pytest.approx(200.0**2, rel=1e-9)
