"""Gaussian-copula draws for ragged records."""

import numpy as np
import pytest

from wrackline.stats.copula import draw_sorted_records, factor_correlation


def test_values_of_a_common_year_have_the_correlation_asked_for():
    rho = np.array([[1.0, 0.6, 0.2], [0.6, 1.0, 0.4], [0.2, 0.4, 1.0]])
    # records of one year each: sorting changes nothing, so the pairing by year is visible
    years = [np.array([0])] * 3
    records = draw_sorted_records(np.random.default_rng(1), factor_correlation(rho), years, 1, 40000)
    drawn = np.corrcoef([record[:, 0] for record in records])
    assert pytest.approx(drawn, abs=4 / np.sqrt(40000)) == rho


def test_records_without_common_years_are_independent():
    rho = np.array([[1.0, 0.9], [0.9, 1.0]])
    years = [np.array([0]), np.array([1])]
    one, other = draw_sorted_records(np.random.default_rng(1), factor_correlation(rho), years, 2, 40000)
    assert abs(np.corrcoef(one[:, 0], other[:, 0])[0, 1]) < 4 / np.sqrt(40000)


def test_means_of_partly_overlapping_records_correlate_by_their_overlap():
    rho, n, common = 0.7, 20, 12
    years = [np.arange(n), np.arange(n - common, 2 * n - common)]
    lower = factor_correlation(np.array([[1.0, rho], [rho, 1.0]]))
    records = draw_sorted_records(np.random.default_rng(2), lower, years, 2 * n - common, 20000)
    drawn = np.corrcoef([record.mean(axis=1) for record in records])[0, 1]
    assert rho * common / n == pytest.approx(drawn, abs=4 / np.sqrt(20000))


def test_every_record_is_sorted_and_standard_normal():
    years = [np.arange(30), np.arange(5, 25)]
    records = draw_sorted_records(np.random.default_rng(2), np.eye(2), years, 30, 2000)
    assert [record.shape for record in records] == [(2000, 30), (2000, 20)]
    for record in records:
        assert (np.diff(record, axis=1) >= 0).all()
        assert abs(record.mean()) < 4 / np.sqrt(record.size)
        assert record.std() == pytest.approx(1, abs=4 / np.sqrt(2 * record.size))


@pytest.mark.parametrize(
    ("matrix", "reason"),
    [
        ([[1.0, 0.9, -0.9], [0.9, 1.0, 0.9], [-0.9, 0.9, 1.0]], "not positive definite"),
        ([[1.0, 0.5], [0.4, 1.0]], "symmetric"),
        ([[2.0, 0.5], [0.5, 1.0]], "ones on its diagonal"),
        ([[1.0, np.nan], [np.nan, 1.0]], "missing"),
    ],
)
def test_what_is_no_correlation_matrix_is_refused(matrix, reason):
    with pytest.raises(ValueError, match=reason):
        factor_correlation(np.array(matrix))
