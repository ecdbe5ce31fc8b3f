"""Minimum covariance determinant against scikit-learn's randomised search."""

import numpy as np
import pytest
from sklearn.covariance import MinCovDet

from wrackline.stats.robust import fit_robust_scatter


@pytest.mark.parametrize("seed", range(6))
@pytest.mark.parametrize("n", [12, 20, 40])
def test_core_is_at_least_as_tight_as_the_peers(n, seed):
    points = np.random.default_rng(seed).standard_normal((n, 3)) @ np.array(
        [[1, 0.5, 0.2], [0, 1, 0.7], [0, 0, 0.4]]
    )
    core = fit_robust_scatter(points, share=0.75).core
    # scikit-learn takes int(share n) points, as here
    peer = MinCovDet(support_fraction=0.75, random_state=0).fit(points).raw_support_
    assert core.sum() == peer.sum()
    own, other = (np.linalg.det(np.cov(points[chosen].T)) for chosen in (core, peer))
    assert own <= other * (1 + 1e-9)


def test_scatter_of_many_normal_points_is_consistent():
    points = np.random.default_rng(0).standard_normal((1500, 3)) * [1.0, 2.0, 3.0]
    found = fit_robust_scatter(points)
    # 1,500 points: standard error of a variance 3.7 %
    assert pytest.approx(np.diag(found.scatter), rel=0.13) == [1.0, 4.0, 9.0]


def test_a_fifth_of_wild_points_does_not_move_the_centre():
    points = np.random.default_rng(3).standard_normal((40, 3))
    points[:8] += 50
    found = fit_robust_scatter(points)
    assert np.abs(found.centre).max() < 0.6
    assert found.distance[:8].min() > 10


def test_moving_and_stretching_the_cloud_changes_no_distance():
    points = np.random.default_rng(5).standard_normal((25, 3))
    moved = points * [10.0, 0.1, 3.0] + [5.0, -2.0, 100.0]
    assert pytest.approx(fit_robust_scatter(moved).distance, rel=1e-6) == fit_robust_scatter(points).distance


def test_points_in_a_plane_are_refused():
    points = np.random.default_rng(5).standard_normal((25, 3))
    points[:, 2] = points[:, 0]
    with pytest.raises(ValueError, match="plane"):
        fit_robust_scatter(points)


def test_too_few_points_are_refused():
    with pytest.raises(ValueError, match="too few"):
        fit_robust_scatter(np.zeros((6, 3)))
