"""A whole pool from raw peaks: 12 made records with gaps, ties, correlation and one flood multiplied by 8."""

import csv
import json
from pathlib import Path

import numpy as np
import pytest

from wrackline.hydrology.growth_curves import GrowthCurve, Ratios, fit_curve
from wrackline.hydrology.pools import PoolSettings, analyse_pool
from wrackline.hydrology.records import exact_records

HERE = Path(__file__).parent
EXPECTED = json.loads((HERE / "homogeneity_made_region.json").read_text(encoding="utf-8"))
SIMULATIONS = 4000


@pytest.fixture(scope="module")
def pool():
    with (HERE / "homogeneity_made_region_peaks.csv").open(encoding="utf-8") as file:
        rows = [row for row in csv.DictReader(file) if row["peak"]]
    flows = [[float(row["peak"]) for row in rows if row["site"] == site] for site in EXPECTED["sites"]]
    years = [[int(row["year"]) for row in rows if row["site"] == site] for site in EXPECTED["sites"]]
    offsets = np.concatenate([[0], np.cumsum([len(record) for record in flows])])
    records = exact_records(EXPECTED["sites"], offsets, np.concatenate(years), np.concatenate(flows))
    settings = PoolSettings(
        simulations=SIMULATIONS, close_call_simulations=SIMULATIONS, growth_simulations=200
    )
    return analyse_pool(records, None, settings, np.random.default_rng(5))


def test_sample_and_average_ratios(pool):
    for key, found in (("t", pool.lmoments.t), ("t3", pool.lmoments.t3), ("t4", pool.lmoments.t4)):
        assert pytest.approx(found, abs=6e-7) == EXPECTED[key]
    assert pytest.approx(pool.ratios, abs=6e-6) == [
        EXPECTED["regional"][key] for key in ("t", "t3", "t4", "t5")
    ]


def test_discordancy_misses_what_the_robust_second_look_finds(pool):
    assert pytest.approx(pool.discordancy.measure, abs=6e-5) == EXPECTED["D"]
    assert pytest.approx(pool.discordancy.critical, abs=6e-4) == EXPECTED["D_critical"]
    assert not pool.discordancy.discordant.any()
    assert "S07" in [g for g, hidden in zip(pool.gauge_ids, pool.discordancy.masked, strict=True) if hidden]


def test_parent_kappa(pool):
    assert pytest.approx(pool.parent.parameters, abs=6e-6) == EXPECTED["kappa"][:4]


def test_heterogeneity_and_fit_within_four_simulation_errors(pool):
    def tolerance(value):
        return 4 * np.sqrt((1 + value**2 / 2) * (1 / SIMULATIONS + 1 / EXPECTED["nsim"])) + 0.0005

    for expected, h in zip(EXPECTED["H"], pool.heterogeneity.h, strict=True):
        assert expected == pytest.approx(h, abs=tolerance(expected))
    for name, z in zip(pool.fit.names, pool.fit.z, strict=True):
        expected = EXPECTED["Z"][name]
        # the expected Z used polynomials for the laws' L-kurtosis: up to 5e-4 over a sigma of 0.025
        assert expected == pytest.approx(z, abs=tolerance(expected) + 0.02)


@pytest.mark.parametrize("name", ["GLO", "GEV", "GNO", "PE3", "GPA", "WAK"])
def test_growth_curves_with_mean_one(pool, name):
    curve = fit_curve(name, pool.ratios, "mean")
    expected = EXPECTED["growth"][name]
    # GNO and PE3 were fitted there by rational approximations, about 5e-5 relative
    assert pytest.approx(curve.factor(1 - np.array(EXPECTED["F"])), rel=2e-4) == expected["q"]


@pytest.mark.parametrize(
    ("lcv", "lskew", "name", "expected"),
    [
        # Robson and Reed (1999), Flood Estimation Handbook 3, formulas of chapter 15; computed from them
        (0.25, 0.15, "GLO", [1.0, 1.39525, 1.66756, 2.04439, 2.35565, 2.69674, 3.07287, 3.63218, 4.10867]),
        (0.25, 0.15, "GEV", [1.0, 1.43806, 1.71968, 2.06618, 2.31669, 2.55996, 2.79712, 3.10222, 3.32708]),
        (0.35, 0.30, "GLO", [1.0, 1.61868, 2.11949, 2.91291, 3.65614, 4.56187, 5.67133, 7.53579, 9.32665]),
        (0.35, 0.30, "GEV", [1.0, 1.67328, 2.20723, 3.00234, 3.69356, 4.47895, 5.37401, 6.75437, 7.97228]),
        (0.20, -0.1, "GLO", [1.0, 1.24659, 1.37576, 1.51862, 1.61412, 1.70178, 1.78292, 1.88146, 1.95009]),
    ],
)
def test_growth_curves_with_median_one(lcv, lskew, name, expected):
    period = np.array([2.0, 5.0, 10.0, 25.0, 50.0, 100.0, 200.0, 500.0, 1000.0])
    curve: GrowthCurve = fit_curve(name, Ratios(lcv, lskew, 0.2, 0.05), "median")
    assert pytest.approx(curve.factor(1 / period), abs=6e-6) == expected
