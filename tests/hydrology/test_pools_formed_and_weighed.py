"""Which gauges form a pool, how they are weighed, and what a look at them suggests."""

import numpy as np
import pytest

from wrackline.hydrology.homogeneity import (
    PresortedDraws,
    fit_parent,
    h1_without_each,
    measure_heterogeneity,
    simulate_independent,
)
from wrackline.hydrology.pool_forming import (
    choose_clusters,
    choose_influence,
    distances,
    form_clusters,
    place_sites,
)
from wrackline.hydrology.pool_records import take_records
from wrackline.hydrology.pool_suggestions import chance_of_largest, suggest
from wrackline.hydrology.pool_weights import sum_pairs, weigh_members
from wrackline.hydrology.pools import Membership, PoolSettings, analyse_pool
from wrackline.hydrology.records import exact_records
from wrackline.hydrology.vector_bootstrap import bootstrap_years
from wrackline.stats.distributions import gev
from wrackline.stats.lmoments import sample_lmoments

QUICK = PoolSettings(
    aep=(0.5, 0.1, 0.01), simulations=300, close_call_simulations=300, growth_simulations=300
)


def made_records(g=12, odd=None, seed=3):
    rng = np.random.default_rng(seed)
    n = rng.integers(25, 60, g)
    flow = [
        gev.quantile(gev.fit(1.0, 0.5 if i == odd else 0.25, 0.2), rng.random(k)) for i, k in enumerate(n)
    ]
    years = np.concatenate([np.arange(2020 - k, 2020) for k in n])
    offsets = np.concatenate([[0], np.cumsum(n)])
    return exact_records(
        [f"G{i:02}" for i in range(g)], offsets, years, np.maximum(np.concatenate(flow), 0.01)
    )


def test_clusters_find_two_clouds_whatever_the_order_of_gauges():
    rng = np.random.default_rng(1)
    sites = np.concatenate([rng.standard_normal((9, 2)), rng.standard_normal((7, 2)) + 8])
    label, centre = form_clusters(sites, 2)
    assert [0] * 9 + [1] * 7 == label.tolist()
    order = rng.permutation(16)
    again, same = form_clusters(sites[order], 2)
    assert label[order].tolist() == again.tolist()
    assert pytest.approx(centre) == same


def test_every_gauge_is_in_the_cluster_whose_centre_is_nearest():
    sites = np.random.default_rng(2).standard_normal((60, 3))
    label, centre = form_clusters(sites, 4)
    assert np.array_equal(label, distances(sites, centre).argmin(axis=1))


def test_the_number_of_clusters_is_the_one_with_least_h_among_those_of_good_size_and_said_to_be_selected():
    sites = np.random.default_rng(4).standard_normal((60, 2))
    found = choose_clusters(sites, np.full(60, 40), 20, 500, lambda rows: float(len(rows)))
    good = [t for t in found.trials if t.fit_to_size]
    assert min(t.mean_h1 for t in good) == pytest.approx(
        next(t.mean_h1 for t in good if t.n_clusters == len(found.centre))
    )
    assert found.after_selection
    assert all(t.smallest_gauges >= 5 for t in good)


def test_influence_takes_the_nearest_gauges_until_the_years_suffice():
    distance = np.array([0.3, 0.1, np.inf, 0.2, 0.9, 0.0])
    years = np.array([40, 30, 99, 50, 60, 20])
    assert [1, 3, 5] == choose_influence(distance, years, 100, 2, None).tolist()
    assert [0, 1, 3, 5] == choose_influence(distance, years, 101, 2, None).tolist()
    assert [1, 4, 5] == choose_influence(distance, years, 100, 3, own=4).tolist()
    assert [0, 1, 3, 4, 5] == choose_influence(distance, years, 9999, 2, None).tolist()


def test_attributes_are_scaled_by_their_spread_and_weight_and_places_by_theirs():
    gauges, targets = np.array([[1.0, 10.0], [3.0, 30.0]]), np.array([[2.0, 40.0]])
    places = np.array([[45.0, 7.0], [45.0, 7.0]])
    space = place_sites(["a", "b"], gauges, targets, [1.0, 0.25], places, places[:1], 0.0)
    assert ("a", "b") == space.names
    # one standard deviation is 1 and 10; two apart in both, the second with half the weight in distance
    assert pytest.approx(np.sqrt(2.0**2 + (0.5 * 2) ** 2)) == distances(space.gauges, space.gauges)[0, 1]
    again = space.reweigh(np.array([4.0, 0.25]))
    assert pytest.approx(np.sqrt(4 * 2.0**2 + (0.5 * 2) ** 2)) == distances(again.gauges, again.gauges)[0, 1]


def test_independent_weights_are_the_inverse_of_departure_plus_sampling_variance():
    departure, n = np.array([0.0, 0.001, 0.004]), np.array([20, 40, 80])
    expected = 1 / (departure + 0.05 / n)
    assert pytest.approx(expected / expected.sum()) == weigh_members(departure, n, 0.05, None)


def test_correlated_weights_minimise_the_variance_of_the_average():
    rng = np.random.default_rng(5)
    n = np.array([30, 50, 40, 60])
    shared = 0.3 * np.outer(n**-0.5, n**-0.5) + 0.7 * np.diag(1 / n)
    departure = np.array([0.001, 0.0005, 0.002, 0.001])
    s = np.diag(departure) + 0.06 * shared
    weight = weigh_members(departure, n, 0.06, shared)
    trials = rng.dirichlet(np.ones(4), 2000)
    assert pytest.approx(1.0) == weight.sum()
    assert weight @ s @ weight <= np.einsum("ij,jk,ik->i", trials, s, trials).min()


def test_how_sites_differ_is_found_again_and_a_gauge_left_out_leaves_no_trace():
    rng = np.random.default_rng(6)
    place = np.sort(rng.random(200))
    distance = np.abs(place[:, None] - place[None, :])
    n = rng.integers(30, 60, 200)
    # a random walk along the line: mean square differences are 0.004 times the distance
    true = np.cumsum(rng.standard_normal(200) * np.sqrt(0.004 * np.diff(place, prepend=0.0)))
    sample = true + rng.standard_normal(200) * np.sqrt(0.05 / n)
    pairs = sum_pairs(sample, sample, n, distance, np.array([0.05, 0.05]))
    slopes = []
    for seed in range(30):
        r = np.random.default_rng([6, seed])
        walk = np.cumsum(r.standard_normal(200) * np.sqrt(0.004 * np.diff(place, prepend=0.0)))
        noisy = walk + r.standard_normal(200) * np.sqrt(0.05 / n)
        found = sum_pairs(noisy, noisy, n, distance, np.array([0.05, 0.05])).fit()
        slopes.append(found.base[0] + found.slope[0] * 0.3)
    # thirty walks: the standard error of the mean is about a seventh of it
    assert 0.004 * 0.3 == pytest.approx(np.mean(slopes), rel=0.4)
    rest = np.delete(np.arange(200), 17)
    without = sum_pairs(
        sample[rest], sample[rest], n[rest], distance[np.ix_(rest, rest)], np.array([0.05, 0.05])
    )
    assert pytest.approx(without.fit().slope, rel=1e-9) == pairs.fit(without=17).slope
    assert pytest.approx(without.fit().base, abs=1e-12) == pairs.fit(without=17).base


def test_h_without_a_gauge_equals_h_computed_anew_with_the_same_draws():
    records = made_records(odd=4)
    lm = sample_lmoments(records.flow_low, records.offsets)
    simulated = simulate_independent(lm.n, fit_parent(0.27, 0.2, 0.16), PresortedDraws(2, 400))
    found = h1_without_each(lm.n, lm.t, simulated)
    for i in (0, 4, 11):
        rest = np.delete(np.arange(12), i)
        fewer = type(simulated)(
            *(r[:, rest] for r in (simulated.lcv, simulated.lskew, simulated.lkurtosis, simulated.l5))
        )
        anew = measure_heterogeneity(lm.n[rest], lm.t[rest], lm.t3[rest], lm.t4[rest], fewer)
        assert anew.h[0] == pytest.approx(found[i], abs=1e-9)


def test_the_gauge_that_drives_heterogeneity_is_suggested_and_stays():
    pool = analyse_pool(made_records(odd=4), None, QUICK, np.random.default_rng(1))
    drivers = [s for s in suggest(pool) if "drives_h" in s.kinds]
    assert "G04" in [s.gauge_id for s in drivers]
    assert "G04" in pool.gauge_ids
    worst = max(drivers, key=lambda s: s.h1 - s.h1_without)
    assert "G04" == worst.gauge_id
    assert f"H1 is {worst.h1:.2f} with it and {worst.h1_without:.2f} without it" in worst.words


def test_a_flood_keyed_ten_times_too_large_is_suspicious():
    records = made_records()
    flow = records.flow_low.copy()
    at = records.offsets[2]
    flow[at] = 12 * flow[records.offsets[2] : records.offsets[3]].max()
    again = exact_records(records.gauge_ids, records.offsets, records.water_year, flow)
    pool = analyse_pool(again, None, QUICK, np.random.default_rng(1))
    assert ["G02"] == [s.gauge_id for s in suggest(pool) if "suspicious_flood" in s.kinds]


def test_chances_of_largest_floods_are_even_where_the_pool_is_right():
    pools = [analyse_pool(made_records(seed=s), None, QUICK, np.random.default_rng(s)) for s in range(8)]
    chance = np.concatenate([chance_of_largest(pool) for pool in pools])
    # four standard errors of the mean of 96 uniform numbers
    assert 0.5 == pytest.approx(chance.mean(), abs=4 * np.sqrt(1 / 12 / 96))


def test_members_are_weighed_for_the_site_and_the_own_record_most():
    records, own = made_records(), "G05"
    departure = np.full((2, 12), 0.002)
    departure[:, 5] = 0.0
    pool = analyse_pool(
        records, None, QUICK, np.random.default_rng(1), membership=Membership(departure, own=own)
    )
    by_length = pool.lmoments.n / pool.lmoments.n.sum()
    assert 5 == int(np.argmax(pool.weight / by_length))
    assert pytest.approx(1.0) == pool.weight.sum()
    left = analyse_pool(
        records, None, QUICK, np.random.default_rng(1), membership=Membership(np.full((2, 12), 0.002))
    )
    assert pool.growth.ln_sd_new_site[-1] < left.growth.ln_sd_new_site[-1]


def test_leaving_a_gauge_out_equals_a_pool_that_never_had_it():
    records = made_records()
    rest = np.delete(np.arange(12), 3)
    draws = PresortedDraws(4, 300)
    by_position, alone = (
        analyse_pool(r, None, QUICK, np.random.default_rng(1), draws=draws)
        for r in (records.keep_gauges(rest), made_records().keep_gauges(rest[::-1]))
    )
    assert by_position.ratios == alone.ratios
    assert np.array_equal(by_position.growth.upper, alone.growth.upper)
    assert np.array_equal(by_position.heterogeneity.h, alone.heterogeneity.h)


def test_resampled_years_give_the_lmoments_of_the_resampled_records():
    records = made_records(3)
    years = np.split(records.water_year, records.offsets[1:-1])
    flow, weights = records.flow_low, (np.array([0.0, 1.0, 0.0]),) * 2
    found = bootstrap_years(
        np.random.default_rng(8),
        flow,
        records.offsets,
        years,
        weights,
        "GEV",
        np.array([0.5, 0.01]),
        "median",
        5,
    )
    every = np.unique(np.concatenate(years))
    chosen = np.random.default_rng(8).integers(0, len(every), (5, len(every)))
    own = dict(zip(years[1].tolist(), flow[records.offsets[1] : records.offsets[2]].tolist(), strict=True))
    for row, factor in zip(chosen, found, strict=True):
        sample = np.array([own[y] for y in every[row].tolist() if y in own])
        lm = sample_lmoments(sample, np.array([0, len(sample)]))
        law = gev.fit(lm.l1, lm.l2, lm.t3)[0]
        assert pytest.approx(gev.quantile(law, 0.99) / gev.quantile(law, 0.5), rel=1e-9) == factor[1]


def test_low_years_are_completed_near_the_whole_records_ratios():
    rng = np.random.default_rng(9)
    law = gev.fit(1.0, 0.3, 0.25)
    flow = np.sort(gev.quantile(law, rng.random(4000)))
    whole = sample_lmoments(flow, np.array([0, 4000]))
    records = exact_records(["a"], np.array([0, 4000]), np.arange(4000), flow)
    low, high, exact = flow.copy(), flow.copy(), flow >= flow[1000]
    low[~exact], high[~exact] = 0.0, flow[1000] * (1 - 1e-12)
    censored = type(records)(**{**records.__dict__, "flow_low": low, "flow_high": high})
    found = take_records(censored, 10)
    assert 3000 == found.lmoments.n[0]
    # 4,000 values: the partial moments lose little where a quarter lies below the threshold
    assert whole.t[0] == pytest.approx(found.lmoments.t[0], rel=0.01)
    assert whole.t3[0] == pytest.approx(found.lmoments.t3[0], abs=0.01)
    assert {"a": "1000 of 4000 years low or without flow"} == found.completed
    low[flow < flow[2500]], high[flow < flow[2500]] = 0.0, flow[2500] * (1 - 1e-12)
    with pytest.raises(ValueError, match="no gauge has 10"):
        take_records(type(records)(**{**records.__dict__, "flow_low": low, "flow_high": high}), 10)
