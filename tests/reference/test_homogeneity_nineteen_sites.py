"""Discordancy, heterogeneity and fit of the worked example of 19 annual-precipitation sites (Hosking and Wallis, 1997)."""

import json
from pathlib import Path

import numpy as np
import pytest

from wrackline.hydrology.discordancy import measure_discordancy
from wrackline.hydrology.homogeneity import (
    PresortedDraws,
    fit_parent,
    measure_fit,
    measure_heterogeneity,
    simulate_concurrent,
    simulate_independent,
)

EXAMPLE = json.loads((Path(__file__).parent / "homogeneity_nineteen_sites.json").read_text(encoding="utf-8"))
N = np.array([row[1] for row in EXAMPLE["rows"]])
LCV, LSKEW, LKURTOSIS, _, D = np.array([row[2:7] for row in EXAMPLE["rows"]], dtype=float).T
AVERAGE = [float(ratio @ N / N.sum()) for ratio in (LCV, LSKEW, LKURTOSIS)]
SIMULATIONS = 2000


def monte_carlo_tolerance(value: float, published_simulations: int) -> float:
    """Three standard errors of the difference of two simulations, plus half the last printed digit."""
    return 3 * np.sqrt((1 + value**2 / 2) * (1 / SIMULATIONS + 1 / published_simulations)) + 0.005


@pytest.fixture(scope="module")
def parent():
    return fit_parent(*AVERAGE)


@pytest.fixture(scope="module")
def simulated(parent):
    return simulate_independent(N, parent, PresortedDraws(1, SIMULATIONS))


def test_discordancy_agrees_with_all_19_printed_values():
    # two printed decimals of D, from ratios printed to four: half a digit and a hair
    assert pytest.approx(measure_discordancy(LCV, LSKEW, LKURTOSIS).measure, abs=0.0051) == D


def test_parent_kappa_has_the_published_parameters(parent):
    assert pytest.approx(parent.parameters, abs=6e-5) == EXAMPLE["kappa"]


@pytest.mark.parametrize(("key", "simulations"), [("h_500_simulations", 500), ("h_computed", 20000)])
def test_heterogeneity_lies_within_simulation_error_of_the_published_values(simulated, key, simulations):
    found = measure_heterogeneity(N, LCV, LSKEW, LKURTOSIS, simulated)
    assert pytest.approx(found.dispersion, abs=6e-5) == EXAMPLE["dispersion"]
    for expected, h in zip(EXAMPLE[key], found.h, strict=True):
        assert expected == pytest.approx(h, abs=monte_carlo_tolerance(expected, simulations))


@pytest.mark.parametrize(("key", "simulations"), [("z_500_simulations", 500), ("z_computed", 20000)])
def test_fit_measures_lie_within_simulation_error_of_the_published_values(simulated, key, simulations):
    found = measure_fit(N, AVERAGE[1], AVERAGE[2], simulated)
    # the published Z used polynomials for the laws' L-kurtosis, off by up to 5e-4, 0.06 in Z here
    allowance = 0.06 if key == "z_500_simulations" else 0.01
    for name, z in zip(found.names, found.z, strict=True):
        expected = EXAMPLE[key][name]
        assert expected == pytest.approx(z, abs=monte_carlo_tolerance(expected, simulations) + allowance)
    assert EXAMPLE["accepted"] == [name for name, yes in zip(found.names, found.accepted, strict=True) if yes]


def test_concurrent_simulation_without_correlation_gives_the_same_measures(parent, simulated):
    years = [np.arange(n) for n in N]
    concurrent = simulate_concurrent(np.random.default_rng(3), years, np.eye(len(N)), parent, SIMULATIONS)
    one = measure_heterogeneity(N, LCV, LSKEW, LKURTOSIS, simulated)
    other = measure_heterogeneity(N, LCV, LSKEW, LKURTOSIS, concurrent)
    for h, again in zip(one.h, other.h, strict=True):
        assert h == pytest.approx(again, abs=monte_carlo_tolerance(h, SIMULATIONS))
