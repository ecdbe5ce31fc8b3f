"""The whole at-site chain: invariances, options, refusals, warnings, coverage."""

from dataclasses import replace

import numpy as np
import pytest

from wrackline.hydrology.at_site import fit_records
from wrackline.hydrology.at_site_bootstrap import bootstrap_fit, draw_samples
from wrackline.hydrology.records import PeakRecords, exact_records
from wrackline.stats.moment_covariance import group_thresholds
from wrackline.stats.pearson3 import frequency_factor
from wrackline.stats.streams import random_stream


def peaks(n, skew=0.2, unit="", sd=0.3):
    stream = random_stream(5, "test_at_site_fits", unit)
    return 10 ** (2 + sd * frequency_factor(stream.random(n), skew))


def records(*flows) -> PeakRecords:
    offsets = np.concatenate([[0], np.cumsum([len(f) for f in flows])])
    years = np.concatenate([np.arange(len(f)) + 1950 for f in flows])
    return exact_records([f"g{i}" for i in range(len(flows))], offsets, years, np.concatenate(flows))


def add_years(
    base: PeakRecords, low, high, perception_low, perception_high=np.inf, historic=True, observed=False
):
    """One gauge with years added in front, all with the same knowledge but their own intervals."""
    m = len(low)
    front = {
        "water_year": np.arange(1949 - m, 1949),
        "flow_low": np.asarray(low, float),
        "flow_high": np.asarray(high, float),
        "perception_low": np.full(m, float(perception_low)),
        "perception_high": np.full(m, float(perception_high)),
        "historic": np.full(m, historic),
        "observed": np.full(m, observed),
        "cause": np.full(m, "unknown"),
    }
    merged = {name: np.concatenate([value, getattr(base, name)]) for name, value in front.items()}
    return replace(base, offsets=np.array([0, len(merged["water_year"])]), **merged)


def test_weighted_skew_lies_between_and_follows_the_mean_square_errors():
    fits = fit_records(records(peaks(40)), 0.5, [0.1])
    station, weighted = fits.station.moments.skew[0], fits.weighted.moments.skew[0]
    mse = fits.weighted.station_skew_mse[0]
    assert (0.1 * station + mse * 0.5) / (0.1 + mse) == pytest.approx(weighted, abs=1e-9)
    assert 0.1 * mse / (0.1 + mse) == pytest.approx(fits.weighted.skew_mse[0])


def test_generalized_skew_without_error_replaces_the_station_skew():
    fits = fit_records(records(peaks(40)), -0.3, 0.0)
    assert -0.3 == pytest.approx(fits.weighted.moments.skew[0])


def test_useless_generalized_skew_leaves_the_station_fit():
    fits = fit_records(records(peaks(40)), 0.0, 1e12)
    np.testing.assert_allclose(fits.station.log10_quantile, fits.weighted.log10_quantile, atol=1e-8)
    np.testing.assert_allclose(fits.station.log10_lower, fits.weighted.log10_lower, atol=1e-6)


def test_weighting_under_censoring_solves_its_own_definition():
    flows = peaks(60, -0.5, "censored")
    fits = fit_records(records(flows), -0.2, 0.12, low_flood_thresholds=[np.quantile(flows, 0.4)])
    own, mse = fits.weighted.moments.station_skew[0], fits.weighted.station_skew_mse[0]
    assert (0.12 * own + mse * -0.2) / (0.12 + mse) == pytest.approx(fits.weighted.moments.skew[0], abs=1e-8)
    assert fits.censoring_ratio[0] > 1


def test_gauge_without_generalized_skew_keeps_its_station_fit_and_says_so():
    fits = fit_records(records(peaks(30, unit="a"), peaks(40, unit="b")), [np.nan, 0.1], [0.1, 0.1])
    assert np.isnan(fits.weighted.log10_quantile[0]).all()
    np.testing.assert_array_equal(fits.station.log10_quantile[0], fits.best.log10_quantile[0])
    np.testing.assert_array_equal(fits.weighted.log10_quantile[1], fits.best.log10_quantile[1])
    assert "not_weighted" in [warning.code for warning in fits.warnings[0]]
    assert fits.refusal == ("", "")


def test_change_of_unit_moves_the_mean_alone():
    flows = peaks(45, unit="unit")
    feet, metres = fit_records(records(flows), 0.1, 0.2), fit_records(records(flows * 0.028316847), 0.1, 0.2)
    shift = np.log10(0.028316847)
    np.testing.assert_allclose(feet.best.log10_upper + shift, metres.best.log10_upper, atol=1e-9)
    assert feet.best.moments.sd[0] == pytest.approx(metres.best.moments.sd[0], rel=1e-10)
    assert feet.low_floods.count[0] == metres.low_floods.count[0]


def test_order_of_years_and_of_gauges_changes_nothing():
    a, b = peaks(35, 0.4, "x"), peaks(52, -0.4, "y")
    one = fit_records(records(a, b), [0.1, 0.2], 0.15)
    other = fit_records(records(b[::-1], a[::-1]), [0.2, 0.1], 0.15)
    np.testing.assert_allclose(one.best.log10_lower, other.best.log10_lower[::-1], atol=1e-9)


def test_limits_enclose_the_quantile_and_widen_towards_rare_floods():
    fits = fit_records(records(peaks(50)), 0.2, 0.15)
    assert (fits.best.lower < fits.best.flow).all()
    assert (fits.best.flow < fits.best.upper).all()
    width = (fits.best.log10_upper - fits.best.log10_lower)[0, 2:]
    assert (np.diff(width) > 0).all()


def test_historic_knowledge_narrows_the_limits_of_rare_floods():
    base = records(peaks(30, 0.1, "history"))
    level = float(base.flow_high.max()) * 1.2
    longer = add_years(base, np.zeros(150), np.full(150, level), level)
    short, long = fit_records(base, 0.1, 0.15), fit_records(longer, 0.1, 0.15)
    assert long.best.log10_se[0, -1] < 0.9 * short.best.log10_se[0, -1]
    assert (30, 0, 180) == (long.n_peaks[0], long.n_historic[0], long.record_years[0])


def test_gauge_that_notices_only_floods_beyond_any_level_tells_nothing():
    base = records(peaks(30, 0.1, "nothing"))
    wider = add_years(base, np.zeros(50), np.full(50, 1e9), 1e9)
    np.testing.assert_allclose(
        fit_records(base).station.log10_quantile, fit_records(wider).station.log10_quantile, atol=2e-3
    )


def test_unbounded_years_are_left_out_of_the_record_length():
    base = records(peaks(30, 0.1, "open"))
    wider = add_years(base, np.zeros(50), np.full(50, np.inf), np.inf)
    assert fit_records(wider).record_years[0] == 30
    np.testing.assert_array_equal(
        fit_records(base).station.log10_upper, fit_records(wider).station.log10_upper
    )


def test_flood_known_only_to_exceed_a_level_raises_the_curve():
    base = records(peaks(30, 0.1, "above"))
    top = float(base.flow_high.max())
    more = add_years(base, [top], [np.inf], 0.0, observed=True, historic=False)
    assert (fit_records(more).station.flow[0, -3:] > fit_records(base).station.flow[0, -3:]).all()


def test_two_thresholds_and_an_interval_in_one_record_are_fitted():
    base = records(peaks(30, 0.1, "two"))
    twice = add_years(base, np.zeros(40), np.full(40, 400.0), 400.0)
    thrice = add_years(twice, [0.0, 0.0, 90.0], [60.0, 60.0, 120.0], 60.0, historic=False, observed=True)
    fits = fit_records(thrice, 0.1, 0.2)
    assert fits.refusal == ("",)
    assert np.isfinite(fits.best.log10_upper).all()


@pytest.mark.parametrize(
    ("flows", "reason"),
    [
        (np.zeros(20), "20 of 20 systematic peaks are zero"),
        (np.append(np.zeros(15), peaks(10)), "15 of 25 systematic peaks are zero"),
        (np.full(20, 35.0), "no spread"),
        (np.array([10.0, 20.0]), "at least 3"),
    ],
)
def test_records_that_need_a_decision_are_refused_beside_others_that_are_fitted(flows, reason):
    fits = fit_records(records(flows, peaks(40)), 0.1, 0.2)
    assert reason in fits.refusal[0]
    assert np.isnan(fits.best.log10_quantile[0]).all()
    assert fits.warnings[0][0].code == "not_fitted"
    assert fits.refusal[1] == ""
    assert np.isfinite(fits.best.log10_quantile[1]).all()


def test_analyst_threshold_lets_a_mostly_dry_river_be_fitted():
    flows = np.append(np.zeros(15), peaks(12, unit="dry"))
    fits = fit_records(records(flows), low_flood_thresholds=[float(flows[15:].min())])
    assert fits.refusal == ("",)
    assert fits.low_floods.count[0] == 15
    assert "mostly_low_floods" in [warning.code for warning in fits.warnings[0]]


def test_short_and_strongly_skewed_records_carry_warnings():
    short = peaks(8, unit="short")
    skewed = np.append(10 ** np.linspace(1.9, 2.1, 30), [200.0, 260.0, 400.0])
    fits = fit_records(records(short, skewed), 0.0, 0.15)
    assert "few_peaks" in [warning.code for warning in fits.warnings[0]]
    assert {"large_skew", "skews_differ"} <= {warning.code for warning in fits.warnings[1]}


def test_limits_outside_what_was_simulated_are_flagged():
    ordinary, short = peaks(60, 0.1, "ordinary"), peaks(30, 0.1, "brief")

    def flagged(fits):
        return ["limits_untested" in [warning.code for warning in some] for some in fits.warnings]

    assert [False, False] == flagged(fit_records(records(ordinary, short), 0.1, 0.15))
    assert [False, True] == flagged(fit_records(records(ordinary, short)))


def test_clamp_of_the_skew_is_an_option_that_leaves_a_warning():
    skewed = np.append(10 ** np.linspace(1.9, 2.1, 30), [1500.0, 2500.0])
    fits = fit_records(records(skewed), skew_bound=1.41)
    assert fits.station.moments.skew[0] == 1.41
    assert "skew_clamped" in [warning.code for warning in fits.warnings[0]]


def test_generalized_skew_and_its_error_come_together():
    with pytest.raises(ValueError, match="needs its mean square error"):
        fit_records(records(peaks(30)), 0.1)


def test_bootstrap_spread_agrees_with_the_first_order_standard_error():
    fits = fit_records(records(peaks(80, 0.1, "bootstrap")), 0.1, 0.1, aeps=[0.1, 0.01])
    result = bootstrap_fit(fits, 0, 2000, random_stream(1, "test_bootstrap"))
    assert result.refused == 0
    # 2,000 replicates know a standard deviation to 1.6 %; the first-order error is good to about 10 % at 80 years.
    np.testing.assert_allclose(fits.best.log10_se[0], result.log10_quantile.std(axis=0), rtol=0.12)
    assert (result.log10_lower < fits.best.log10_quantile[0]).all()


def test_bootstrap_samples_are_observed_through_the_thresholds():
    low, high = np.array([2.0] * 30 + [-np.inf] * 20), np.array([np.inf] * 30 + [2.4] * 20)
    classes = group_thresholds(np.zeros(50, dtype=int), low, high, 1)
    sample = draw_samples(classes, 2.0, 0.3, 0.0, 500, random_stream(1, "test_draw"))
    assert (sample.years == 50).all()
    below = sample.class_high == 2.0
    # Half of 30 years below the mean, and 9.12 % of 20 above 2.4; standard errors 0.12 and 0.06.
    assert sample.class_years[below].sum() / 500 == pytest.approx(15.0, abs=0.5)
    assert sample.class_years[~below].sum() / 500 == pytest.approx(20 * 0.0912, abs=0.25)


def test_ninety_percent_limits_hold_the_truth_about_nine_times_in_ten():
    replicates, n, skew = 700, 50, 0.2
    flows = [peaks(n, skew, f"coverage {i}") for i in range(replicates)]
    drawn = skew + np.sqrt(0.15) * random_stream(9, "test_coverage").standard_normal(replicates)
    fits = fit_records(records(*flows), drawn, 0.15, aeps=[0.1, 0.01])
    truth = 2 + 0.3 * frequency_factor(np.array([0.1, 0.01]), skew)
    too_high, too_low = (
        (fits.best.log10_lower > truth).mean(axis=0),
        (fits.best.log10_upper < truth).mean(axis=0),
    )
    # Standard error of a coverage: 1.1 %; the stated domain is 86 to 94 %.
    assert (np.abs(1 - too_high - too_low - 0.90) < 0.04).all()
    assert (np.maximum(too_high, too_low) < 0.09).all()
