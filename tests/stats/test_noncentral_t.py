"""Noncentral t: textbook tolerance factors, and the argument at which a common routine fails."""

import json
from pathlib import Path

import numpy as np
import pytest
from scipy.special import ndtri, stdtr

from wrackline.stats.noncentral_t import noncentral_t_cdf, noncentral_t_quantile

TABLES = json.loads((Path(__file__).parents[1] / "reference" / "at_site_tables.json").read_text())


def test_tolerance_factors_of_the_normal_distribution():
    # Computed; five textbook values agree to 0.001.
    for row in TABLES["normal_tolerance_factors"]["rows"]:
        root_n = np.sqrt(row["n"])
        for key, level in (("upper95", 0.95), ("lower05", 0.05)):
            for aep, factor in row[key].items():
                z = -ndtri(float(aep))
                assert factor == pytest.approx(
                    float(noncentral_t_quantile(level, row["n"] - 1, z * root_n)) / root_n, abs=5.1e-4
                )


def test_without_noncentrality_it_is_students_distribution():
    t = np.linspace(-4, 4, 9)
    for freedom in (2, 5, 40):
        np.testing.assert_allclose(stdtr(freedom, t), noncentral_t_cdf(t, freedom, 0.0), atol=1e-9)


def test_far_tail_is_a_number():
    # Where a general routine returned NaN: freedom 58, noncentrality 58.2, t 9.4.
    assert 0.0 <= float(noncentral_t_cdf(9.4, 58, 58.2)) < 1e-100
