"""Which skew model the evidence chooses, and how the evidence is reckoned."""

from dataclasses import replace

import numpy as np
import pytest
from scipy.integrate import quad

from wrackline.hydrology.generalized_skew import prepare_station_skews
from wrackline.hydrology.skew_candidates import (
    Stations,
    compare_candidates,
    measure_evidence,
    plan_candidates,
)

N = 60


def stations(levels=(0.0, 0.0, 0.0), slope=0.0, seed=3):
    """Three regions side by side, independent gauges of 50 years whose skews err as samples do."""
    rng = np.random.default_rng(seed)
    region = np.arange(N) % 3
    place = np.column_stack([region * 200 + rng.uniform(0, 200, N), rng.uniform(0, 200, N)])
    height = rng.uniform(0.1, 2.0, N)
    true = np.array(levels)[region] + slope * (height - 1.0)
    return Stations(
        skew=(true + rng.normal(0, 0.35, N)) / (1 + 6 / 50),
        record_length=np.full(N, 50.0),
        correlation=np.eye(N),
        common_years=np.full((N, N), 50.0),
        distance_km=np.hypot(*(place[:, None] - place).transpose(2, 0, 1)),
        attributes={"height": height, "noise": rng.normal(size=N)},
        regions=("a", "b", "c"),
        shares=(region[:, None] == np.arange(3)).astype(float),
    )


TRANSFORMS = {"height": "none", "noise": "none"}


def compare(given, regressions=(("height",), ("noise",)), pinned=""):
    plans, refused = plan_candidates(given, regressions, TRANSFORMS)
    return compare_candidates(given, plans, refused, pinned)


def test_one_level_keeps_the_constant():
    found = compare(stations())
    assert found.chosen.plan.name == "constant"
    assert {"constant", "region", "height", "noise", "surface"} == {c.plan.name for c in found.candidates}


def test_regions_that_differ_get_a_constant_each():
    chosen = compare(stations((-0.5, 0.0, 0.5))).chosen
    assert chosen.plan.name == "region"
    assert chosen.log_evidence > chosen.required_evidence
    assert chosen.gain > 0
    np.testing.assert_allclose([-0.5, 0.0, 0.5], chosen.model.coefficients, atol=0.25)


def test_a_real_slope_is_found_among_useless_columns():
    assert compare(stations(slope=0.6)).chosen.plan.name == "height"


def test_a_fixed_model_stays_and_the_evidence_is_told():
    found = compare(stations((-0.5, 0.0, 0.5)), pinned="constant")
    assert (found.chosen.plan.name, found.evidence) == ("constant", "region")
    with pytest.raises(ValueError, match="no such model"):
        compare(stations(), pinned="moon")


def test_models_that_the_gauges_cannot_carry_are_refused_with_reasons():
    given = stations()
    shares = given.shares.copy()
    shares[shares[:, 2] == 1] = [0.0, 1.0, 0.0]
    holes = {**given.attributes, "height": np.where(np.arange(N) < 2, np.nan, given.attributes["height"])}
    _, refused = plan_candidates(
        replace(given, shares=shares, attributes=holes), [("height",), ("noise",)], TRANSFORMS
    )
    reasons = dict(refused)
    assert reasons["region"] == "fewer than 5 gauges in c"
    assert reasons["height"].startswith("2 gauges of the model lack a value")
    with pytest.raises(ValueError, match="lack a value"):
        compare(replace(given, attributes=holes), pinned="height")


def test_evidence_of_regions_equals_direct_integration():
    given = stations((-0.3, 0.0, 0.3))
    plans, _ = plan_candidates(given, [], TRANSFORMS, surface=False)
    base, found = measure_evidence(given, plans, 10.0)
    one = np.ones(N)
    prepared = prepare_station_skews(
        given.skew, given.record_length, one[:, None], given.correlation, given.common_years
    )
    y = prepared.skew

    def density(s2, added):
        cover = prepared.covariance + added + s2 * np.eye(N)
        inverse = np.linalg.inv(cover)
        b = one @ inverse @ y / (one @ inverse @ one)
        r = y - b
        log = -0.5 * (np.linalg.slogdet(cover)[1] + np.log(one @ inverse @ one) + r @ inverse @ r)
        return 10.0 * np.exp(-10.0 * s2 + log - 20.0)

    without = quad(density, 0, 4, args=(0.0,), limit=200)[0]
    with_regions = quad(density, 0, 4, args=(0.1 * given.shares @ given.shares.T,), limit=200)[0]
    assert np.log(with_regions / without) == pytest.approx(found[1] - base, abs=1e-6)


def test_candidates_do_not_depend_on_the_order_of_gauges():
    given = stations((-0.4, 0.0, 0.4))
    order = np.random.default_rng(0).permutation(N)
    shuffled = Stations(
        given.skew[order],
        given.record_length[order],
        given.correlation[np.ix_(order, order)],
        given.common_years[np.ix_(order, order)],
        given.distance_km[np.ix_(order, order)],
        {name: values[order] for name, values in given.attributes.items()},
        given.regions,
        given.shares[order],
    )
    for a, b in zip(compare(given).candidates, compare(shuffled).candidates, strict=True):
        assert a.log_evidence == pytest.approx(b.log_evidence, abs=1e-8)
        assert a.score == pytest.approx(b.score, abs=1e-8)
