"""Batches that a real network contains: gauges without rows, without flow, with four peaks, with half a record."""

from dataclasses import replace

import numpy as np

from wrackline.hydrology.at_site import fit_records
from wrackline.hydrology.at_site_bootstrap import bootstrap_fit
from wrackline.hydrology.records import exact_records
from wrackline.stats.streams import random_stream


def test_gauge_without_rows_is_refused_and_its_neighbour_fitted():
    records = exact_records(["a", "b"], np.array([0, 0, 15]), np.arange(15), np.geomspace(10, 300, 15))
    fits = fit_records(records, 0.1, 0.2)
    assert "at least 3" in fits.refusal[0]
    assert fits.refusal[1] == ""


def test_no_gauges_give_empty_results():
    fits = fit_records(exact_records([], np.array([0]), np.zeros(0, int), np.zeros(0)), 0.1, 0.2)
    assert fits.best.flow.shape == (0, 10)


def test_zero_flow_of_a_historic_year_is_a_low_flood():
    records = exact_records(
        ["a"], np.array([0, 15]), np.arange(15), np.append(0.0, np.geomspace(10, 300, 14))
    )
    fits = fit_records(replace(records, historic=np.arange(15) == 0))
    assert (1, 10.0) == (fits.low_floods.zeros[0], fits.low_floods.threshold[0])


def test_four_peaks_are_fitted_flagged_and_can_be_bootstrapped():
    fits = fit_records(
        exact_records(["a"], np.array([0, 4]), np.arange(4), np.array([1.0, 2, 3, 7])), 0.0, 0.1
    )
    assert [warning.code for warning in fits.warnings[0]] == ["few_peaks", "limits_untested"]
    assert bootstrap_fit(fits, 0, 50, random_stream(1, "test_four")).refused < 5


def test_record_censored_from_both_sides_is_fitted():
    stream = random_stream(8, "test_both_sides")
    flows = 10 ** stream.normal(2, 0.3, 40)
    records = exact_records(["a"], np.array([0, 40]), np.arange(40), flows)
    records = replace(records, perception_high=np.full(40, flows.max() * 1.1))
    fits = fit_records(records, 0.0, 0.1, low_flood_thresholds=[np.median(flows)])
    assert np.isfinite(fits.best.log10_upper).all()
    assert fits.weighted.station_skew_mse[0] > fits.weighted.skew_mse[0] > 0


def test_flood_known_only_as_above_a_level_among_the_low_floods_adds_no_information():
    flows = 10 ** random_stream(9, "test_no_information").normal(2, 0.3, 43)
    records = exact_records(["a"], np.array([0, 43]), np.arange(43), flows)
    vague = np.arange(43) < 3
    records = replace(
        records,
        flow_low=np.where(vague, 2.0, records.flow_low),
        flow_high=np.where(vague, np.inf, records.flow_high),
    )
    known = records.keep_rows(~vague)
    expected, found = (fit_records(r, low_flood_thresholds=[60.0]).station for r in (known, records))
    np.testing.assert_allclose(expected.log10_quantile, found.log10_quantile, rtol=1e-6)
    np.testing.assert_allclose(expected.log10_se, found.log10_se, rtol=1e-3)
