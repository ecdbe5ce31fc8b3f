"""All subsets at once against single fits."""

import numpy as np
import pytest

from wrackline.stats.gls import fit_gls
from wrackline.stats.subset_search import rank_subsets, variance_inflation


@pytest.fixture(scope="module")
def region():
    rng = np.random.default_rng(4)
    n = 60
    candidates = rng.normal(size=(n, 5)) * [1, 20, 0.1, 3, 1] + [0, 500, 3, 0, 2]
    base = np.ones((n, 1))
    place = rng.uniform(0, 300, (n, 2))
    distance = np.hypot(*(place[:, None] - place).transpose(2, 0, 1))
    variance = 0.2 / rng.integers(10, 80, n)
    sampling = 0.9 * np.exp(-distance / 100) * np.sqrt(np.outer(variance, variance))
    np.fill_diagonal(sampling, variance)
    y = 2 + candidates @ [0.6, 0.01, 0, 0, 0.02] + rng.normal(0, 0.12, n)
    return y + np.linalg.cholesky(sampling) @ rng.normal(size=n), base, candidates, sampling


def test_every_subset_is_there_once_and_none_is_larger_than_asked(region):
    members = rank_subsets(*region, 3).members
    assert len(members) == 1 + 5 + 10 + 10
    assert len(np.unique(members, axis=0)) == len(members)
    assert members.sum(axis=1).max() == 3


def test_figures_are_those_of_single_fits(region):
    y, base, candidates, sampling = region
    ranking = rank_subsets(*region, 5)
    for i, taken in enumerate(ranking.members):
        fit = fit_gls(y, np.column_stack([base, candidates[:, taken]]), sampling, "moments")
        # Interpolated between trial variances: one in a thousand is promised.
        assert ranking.model_variance[i] == pytest.approx(fit.model_variance, rel=1e-3)
        assert ranking.prediction_variance[i] == pytest.approx(fit.prediction_variance.mean(), rel=1e-3)
        np.testing.assert_allclose(ranking.coefficients[i, taken], fit.coefficients[1:], rtol=1e-3)
        error = np.sqrt(np.diag(fit.coefficient_covariance))[1:]
        np.testing.assert_allclose(ranking.ratios[i, taken], fit.coefficients[1:] / error, rtol=2e-3)


def test_ranking_goes_from_small_to_large_variance_of_prediction(region):
    ranking = rank_subsets(*region, 5)
    assert (np.diff(ranking.prediction_variance) >= 0).all()
    assert ranking.members[0, :2].all()


def test_scatter_that_sampling_explains_leaves_no_model_error_in_any_subset(region):
    _, base, candidates, sampling = region
    rng = np.random.default_rng(1)
    y = candidates[:, 0] + 0.2 * np.linalg.cholesky(sampling) @ rng.normal(size=len(candidates))
    ranking = rank_subsets(y, base, candidates, sampling, 5)
    with_first = ranking.members[:, 0]
    assert ranking.model_variance[with_first].max() < 1e-6
    assert ranking.model_variance[~with_first].min() > 0.1


def test_columns_that_depend_on_each_other_are_never_taken_together(region):
    y, base, candidates, sampling = region
    doubled = np.column_stack([candidates[:, :2], 2 * candidates[:, 0] - 1, np.full(len(y), 3.0)])
    members = rank_subsets(y, base, doubled, sampling, 4).members
    assert not (members[:, 0] & members[:, 2]).any()
    assert not members[:, 3].any()


def test_variance_inflation_is_one_over_what_the_others_leave_unexplained(region):
    candidates = region[2].copy()
    candidates[:, 1] += 30 * candidates[:, 0]
    n = len(candidates)
    for j, found in enumerate(variance_inflation(candidates)):
        others = np.column_stack([np.ones(n), np.delete(candidates, j, axis=1)])
        left = candidates[:, j] - others @ np.linalg.lstsq(others, candidates[:, j], rcond=None)[0]
        assert found == pytest.approx(candidates[:, j].var() / left.var(), rel=1e-9)
    assert np.isinf(variance_inflation(np.column_stack([candidates[:, 0], candidates[:, 0]]))).all()
