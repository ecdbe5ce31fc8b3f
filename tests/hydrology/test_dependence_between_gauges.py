import json

import numpy as np
import pytest
from scipy.optimize import minimize

from wrackline.hydrology import dependence
from wrackline.hydrology.dependence import (
    DistanceModel,
    fit_dependence,
    fit_distance_model,
    log_peak_matrix,
    repair_correlation,
)
from wrackline.hydrology.distances import great_circle_km
from wrackline.hydrology.records import exact_records


def region(g, years, seed, a=0.3, b=0.006, first_years=None):
    """Gauges on about 300 km x 300 km whose log peaks are correlated by a known model."""
    rng = np.random.default_rng(seed)
    lat, lon = 45 + rng.uniform(0, 2.7, g), 7 + rng.uniform(0, 3.8, g)
    distance = great_circle_km(lat[:, None], lon[:, None], lat, lon)
    rho = np.tanh(np.exp(a - b * distance))
    np.fill_diagonal(rho, 1.0)
    log10_peak = 2 + 0.25 * np.linalg.cholesky(rho) @ rng.normal(size=(g, years))
    starts = np.zeros(g, dtype=int) if first_years is None else first_years
    keep = np.arange(years) >= starts[:, None]
    offsets = np.concatenate([[0], np.cumsum(keep.sum(axis=1))])
    year = np.broadcast_to(1950 + np.arange(years), keep.shape)[keep]
    records = exact_records([f"G{i:03d}" for i in range(g)], offsets, year, 10 ** log10_peak[keep])
    return records, lat, lon


def test_coefficients_of_a_noiseless_curve_come_back():
    d = np.linspace(5, 300, 40)
    chosen, _ = fit_distance_model(d, np.exp(0.2 - 0.01 * d), np.full(40, 30.0), 20, 25)
    np.testing.assert_allclose([0.2, 0.01], [chosen.a, chosen.b], rtol=1e-10)
    np.testing.assert_allclose(1.0, chosen.pseudo_r2, rtol=1e-12)


def test_least_squares_are_those_of_a_general_minimiser():
    rng = np.random.default_rng(1)
    d, w = rng.uniform(1, 400, 200), rng.integers(20, 60, 200) - 3.0
    z = np.exp(0.1 - 0.008 * d) + rng.normal(0, 1, 200) / np.sqrt(w)
    fits = fit_distance_model(d, z, w, 30, 25)
    found = next(m for m in fits if m.form == "exponential")
    best = minimize(
        lambda c: (w * (z - np.exp(c[0] - c[1] * d / 100)) ** 2).sum(),
        [0.0, 0.5],
        method="Nelder-Mead",
        options={"xatol": 1e-9, "fatol": 1e-12, "maxiter": 4000},
    )
    np.testing.assert_allclose(best.fun, found.weighted_sse, rtol=1e-10)
    # A minimiser without derivatives finds the place of a flat minimum to half its digits.
    np.testing.assert_allclose(best.x, [found.a, found.b * 100], rtol=1e-5)


def test_box_cox_is_taken_when_the_curve_is_steep_near_and_flat_far():
    d = np.linspace(1, 400, 300)
    z = np.exp(1.0 - 0.5 * (d**0.3 - 1) / 0.3)
    chosen, _ = fit_distance_model(d, z, np.full(300, 30.0), 25, 25)
    assert chosen.form == "box_cox"
    np.testing.assert_allclose(0.3, chosen.exponent)
    np.testing.assert_allclose(np.tanh(z), chosen.correlation(d), rtol=1e-8)


def test_a_known_model_comes_back_from_simulated_peaks():
    records, lat, lon = region(40, 80, seed=5)
    found = fit_dependence(records, lat, lon)
    assert found.model.n_pairs == 780
    # Within three times the spread of the estimate over other seeds, 0.05 at each of these distances.
    d = np.array([20.0, 100.0, 250.0])
    np.testing.assert_allclose(np.tanh(np.exp(0.3 - 0.006 * d)), found.model.correlation(d), atol=0.15)
    distance = great_circle_km(lat[:, None], lon[:, None], lat, lon)[np.triu_indices(40, k=1)]
    # The average is taken over narrow bins of distance.
    np.testing.assert_allclose(found.model.correlation(distance).mean(), found.average_correlation, rtol=1e-6)


def test_fitting_bins_or_pairs_makes_no_difference_worth_the_name(monkeypatch):
    records, lat, lon = region(40, 60, seed=6, first_years=np.arange(40) // 2)
    pairs = fit_dependence(records, lat, lon).model
    monkeypatch.setattr(dependence, "LISTED_PAIRS", 0)
    bins = fit_dependence(records, lat, lon).model
    assert (pairs.form, pairs.n_pairs) == (bins.form, bins.n_pairs)
    # Bins of 0.1 km against distances of 200 km.
    np.testing.assert_allclose([pairs.a, pairs.b], [bins.a, bins.b], rtol=1e-4)
    np.testing.assert_allclose(pairs.weighted_sse, bins.weighted_sse, rtol=1e-4)


def test_the_unit_of_flow_and_the_order_of_gauges_change_nothing():
    records, lat, lon = region(15, 50, seed=7)
    expected = fit_dependence(records, lat, lon).model
    order = np.random.default_rng(0).permutation(15)
    shuffled = records.keep_gauges(order)
    in_feet = exact_records(
        shuffled.gauge_ids, shuffled.offsets, shuffled.water_year, shuffled.flow_low / 0.3048**3
    )
    found = fit_dependence(in_feet, lat[order], lon[order]).model
    np.testing.assert_allclose([expected.a, expected.b], [found.a, found.b], rtol=1e-8)


def test_fewer_common_years_serve_with_a_warning_where_pairs_are_few():
    records, lat, lon = region(12, 30, seed=8, first_years=np.array([0, 0, 0] + [12] * 9))
    found = fit_dependence(records, lat, lon, minimum_common_years=25, fallback_common_years=15)
    assert found.model.minimum_common_years == 15
    assert found.model.n_pairs == 66
    assert [code for code, _ in found.warnings] == ["few_common_years"]


def test_too_few_pairs_mean_independence_and_a_warning():
    records, lat, lon = region(4, 60, seed=9)
    found = fit_dependence(records, lat, lon)
    assert found.model.form == "independent"
    assert "gauges_taken_as_independent" in [code for code, _ in found.warnings]
    np.testing.assert_array_equal([0.0, 0.0], found.model.correlation([0.0, 50.0]))
    # A reader that knows the exponential form only gets zero too.
    assert np.tanh(np.exp(found.model.a - found.model.b * 50.0)) == 0.0


def test_a_single_gauge_is_a_study_without_pairs():
    records, lat, lon = region(1, 20, seed=1)
    found = fit_dependence(records, lat, lon)
    assert (found.model.n_pairs, found.average_correlation) == (0, 0.0)


def test_correlation_that_rises_with_distance_is_fitted_by_a_constant():
    rising, _ = fit_distance_model(np.arange(1.0, 20), np.linspace(0.1, 0.9, 19), np.ones(19), 10, 25)
    assert rising.b == 0.0
    np.testing.assert_allclose([np.tanh(0.5)] * 2, rising.correlation([1.0, 500.0]), rtol=1e-9)


def test_correlation_below_zero_everywhere_is_fitted_by_none():
    negative, _ = fit_distance_model(np.arange(1.0, 20), np.full(19, -0.2), np.ones(19), 10, 25)
    np.testing.assert_allclose([0.0, 0.0], negative.correlation([1.0, 500.0]), atol=1e-8)


def test_a_region_whose_correlation_does_not_fall_is_told_so():
    records, lat, lon = region(12, 40, seed=3, a=-0.2, b=0.0)
    scattered = np.random.default_rng(0).permutation(12)
    found = fit_dependence(records, lat[scattered], lon[scattered])
    flat = found.model.b == 0
    assert flat == ("correlation_does_not_fall" in [code for code, _ in found.warnings])
    np.testing.assert_allclose(np.tanh(np.exp(-0.2)), found.average_correlation, atol=0.1)


def test_zero_flows_are_left_out_and_counted():
    records = exact_records(
        ["A", "B"], [0, 3, 6], [2000, 2001, 2003, 2001, 2002, 2003], [10.0, 0, 100, 1, 1000, 0]
    )
    matrix, n_zero = log_peak_matrix(records)
    nan = np.nan
    assert n_zero == 2
    np.testing.assert_allclose([[1, nan, nan, 2], [nan, 0, 3, nan]], matrix)


def test_copies_of_a_record_are_reported_and_left_out():
    records, lat, lon = region(10, 40, seed=4)
    twin = records.keep_gauges([*range(10), 3])
    found = fit_dependence(twin, np.append(lat, lat[3]), np.append(lon, lon[3]))
    assert "identical_records" in [code for code, _ in found.warnings]
    assert found.model.n_pairs == 54


@pytest.mark.parametrize(
    "model",
    [
        DistanceModel(0.2, 0.01, "exponential", 25, 90, 1.0, 50.0, 0.6, 0.4),
        DistanceModel(0.2, 0.3, "box_cox", 25, 90, 0.4, 50.0, 0.6, 0.4),
        DistanceModel(-1000.0, 0.0, "independent", 15, 3),
    ],
)
def test_a_model_survives_being_written_down(model):
    read = DistanceModel.from_dict(json.loads(json.dumps(model.to_dict(), allow_nan=False)))
    np.testing.assert_array_equal(model.correlation([0.0, 10.0, 200.0]), read.correlation([0.0, 10.0, 200.0]))
    assert (model.form, model.n_pairs) == (read.form, read.n_pairs)


def test_a_sound_matrix_is_returned_untouched():
    sound = np.array([[1.0, 0.5], [0.5, 1.0]])
    matrix, repaired = repair_correlation(sound)
    assert not repaired
    np.testing.assert_array_equal(sound, matrix)


def test_an_indefinite_matrix_becomes_the_published_nearest_one():
    # Higham (2002, IMA J. Numer. Anal. 22, 329-343), the 3 x 3 example, from memory: nearest correlations
    # 0.7607 and 0.1573, printed to four digits; the floor on eigenvalues moves them by less than 1e-7.
    given = np.array([[1.0, 1.0, 0.0], [1.0, 1.0, 1.0], [0.0, 1.0, 1.0]])
    expected = np.array([[1.0, 0.7607, 0.1573], [0.7607, 1.0, 0.7607], [0.1573, 0.7607, 1.0]])
    matrix, repaired = repair_correlation(given)
    assert repaired
    np.testing.assert_allclose(expected, matrix, atol=5e-5)


def test_a_repaired_matrix_can_be_factored_and_has_a_unit_diagonal():
    rng = np.random.default_rng(12)
    raw = rng.uniform(-1, 1, (30, 30))
    raw = (raw + raw.T) / 2
    np.fill_diagonal(raw, 1.0)
    matrix, repaired = repair_correlation(raw)
    assert repaired
    np.testing.assert_array_equal(np.ones(30), np.diag(matrix))
    assert np.linalg.eigvalsh(matrix)[0] > 0
    np.linalg.cholesky(matrix)
    assert np.abs(matrix).max() <= 1.0
