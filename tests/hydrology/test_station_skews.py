"""Pseudo record lengths of censored and historic records, who serves in the skew model, floods by cause."""

from dataclasses import replace

import numpy as np
import pytest

from wrackline.hydrology.at_site import fit_records
from wrackline.hydrology.records import exact_records
from wrackline.hydrology.station_skews import measure_skew_records, tabulate_causes, tell_who_serves


def normal_records(years=(40, 60), seed=2):
    rng = np.random.default_rng(seed)
    flow = np.concatenate([10 ** rng.normal(2, 0.3, n) for n in years])
    offsets = np.concatenate([[0], np.cumsum(years)])
    water_year = np.concatenate([np.arange(1960, 1960 + n) for n in years])
    return exact_records([f"{i:02d}" for i in range(len(years))], offsets, water_year, flow)


def measure(records, thresholds=None):
    fits = fit_records(records, aeps=[0.5], low_flood_thresholds=thresholds)
    moments = fits.station.moments
    return measure_skew_records(records, fits.low_floods.threshold, moments.mean, moments.sd, moments.skew)


def test_a_complete_record_is_worth_its_years():
    measured = measure(normal_records(), thresholds=[0.0, 0.0])
    np.testing.assert_allclose([40, 60], measured.record_length, rtol=1e-9)


def test_low_floods_shorten_the_record_and_leave_it_positive():
    records = normal_records()
    measured = measure(records, thresholds=[10**1.9, 0.0])
    assert 0 < measured.record_length[0] < 40
    assert measured.record_length[1] == pytest.approx(60)
    assert measured.all_mse[0] > measured.systematic_mse[0]


def with_history(records, year, flow, first, level):
    """The first gauge with a historic flood and the years since, in which it would have been recorded above a level."""
    n = len(range(first, 1960))
    years = np.arange(first, 1960)
    historic = years == year
    own = slice(0, int(records.offsets[1]))
    rest = slice(own.stop, None)

    def put(name, before):
        values = getattr(records, name)
        return np.concatenate([before, values[own], values[rest]])

    return replace(
        records,
        offsets=records.offsets + np.array([0, *[n] * records.n_gauges]),
        water_year=put("water_year", years),
        flow_low=put("flow_low", np.where(historic, flow, 0.0)),
        flow_high=put("flow_high", np.where(historic, flow, level)),
        perception_low=put("perception_low", np.full(n, level)),
        perception_high=put("perception_high", np.full(n, np.inf)),
        historic=put("historic", historic),
        observed=put("observed", historic),
        cause=put("cause", np.full(n, "unknown")),
    )


def test_historic_knowledge_lengthens_the_record_up_to_the_historical_period():
    records = with_history(normal_records(), 1910, 900.0, 1900, 800.0)
    measured = measure(records, thresholds=[0.0, 0.0])
    assert measured.historical_years.tolist() == [100, 60]
    assert 40 < measured.record_length[0] < 100
    assert measured.record_length[1] == pytest.approx(60)


def test_a_gauge_without_fit_has_no_length():
    records = normal_records()
    nothing = np.array([np.nan, 0.0])
    measured = measure_skew_records(records, np.zeros(2), nothing + 2, nothing + 0.3, nothing)
    assert np.isnan(measured.record_length[0])
    assert measured.record_length[1] == pytest.approx(60)


def test_every_gauge_that_does_not_serve_has_a_reason():
    measured = measure(normal_records((40, 60, 20, 50, 30), seed=5), thresholds=np.zeros(5))
    told = tell_who_serves(
        measured,
        np.array([True, False, True, True, True]),
        ["", "regulated", "", "trend change_point", "extreme_flood"],
        ["", "floods are regulated", "", "peaks rise", "flagged"],
        25,
        ("trend", "change_point"),
    )
    assert told[0] == ""
    assert told[1] == "not used by the screening: floods are regulated"
    assert told[2] == "its record is worth 20 years, fewer than 25"
    assert told[3] == "flagged by the screening: trend, change point"
    assert told[4] == ""


def test_the_rounding_of_a_length_decides_on_no_gauge():
    measured = measure(normal_records((25,)), thresholds=np.zeros(1))
    barely_less = replace(measured, record_length=np.array([np.nextafter(25.0, 0.0)]))
    assert [""] == tell_who_serves(barely_less, np.array([True]), [""], [""], 25, ())


def test_causes_are_tabulated_with_their_largest_flood_and_its_rank():
    records = normal_records((12, 60))
    cause = np.full(72, "rain", dtype="<U16")
    cause[:12] = "snowmelt"
    cause[5] = "tropical_storm"
    flow = records.flow_low.copy()
    flow[5] = 5000.0
    records = replace(records, flow_low=flow, flow_high=flow, cause=cause)
    found = tabulate_causes(records)
    rows = {(int(g), str(c)): i for i, (g, c) in enumerate(zip(found.gauge, found.cause, strict=True))}
    storm, snow, rain = rows[0, "tropical_storm"], rows[0, "snowmelt"], rows[1, "rain"]
    assert (1, 1, 5000.0, 1965) == (
        found.n_peaks[storm], found.largest_rank[storm], found.largest[storm], found.largest_year[storm],
    )  # fmt: skip
    assert found.largest_rank[snow] == 2
    assert np.isnan(found.skew[storm])
    x = np.log10(flow[12:])
    d = x - x.mean()
    expected = 60 * (d**3).sum() / (59 * 58 * x.std(ddof=1) ** 3)
    assert expected == pytest.approx(found.skew[rain], rel=1e-10)
