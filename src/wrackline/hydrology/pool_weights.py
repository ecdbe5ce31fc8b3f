"""Weights of the gauges in a pool's averages, from how far each is off: by sampling, and because it is another site."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from wrackline.hydrology.records import FloatArray, IntArray


@dataclass(frozen=True)
class Unlikeness:
    """How the true ratios of two sites differ with their distance in attributes: mean square ``base + slope d``.

    Attributes
    ----------
    base, slope : (2,)
        Of L-CV and of L-skew; not negative.
    sampling : (2,)
        Years times the sampling variance of a record's L-CV and L-skew.
    """

    base: FloatArray
    slope: FloatArray
    sampling: FloatArray

    def square(self, distance: FloatArray) -> FloatArray:
        """Return mean square differences (2, ...)."""
        shape = (2,) + (1,) * np.ndim(distance)
        return self.base.reshape(shape) + self.slope.reshape(shape) * distance


@dataclass(frozen=True)
class PairSums:
    """Sums over pairs of gauges from which `Unlikeness` follows, per gauge, so that any gauge can be left out.

    Attributes
    ----------
    gram : (g, 3)
        Sums of weight, weight times distance, weight times distance squared over a gauge's pairs.
    product : (g, 2, 2)
        The same with the squared difference net of sampling, L-CV and L-skew: times one, times distance.
    """

    gram: FloatArray
    product: FloatArray
    sampling: FloatArray

    def fit(self, without: int | None = None) -> Unlikeness:
        """Fit the straight lines, without the pairs of one gauge if asked: nothing of that gauge is left in them."""
        gram, product = self.gram.sum(axis=0) / 2, self.product.sum(axis=0) / 2
        if without is not None:
            gram, product = gram - self.gram[without], product - self.product[without]
        lines = np.array([_fit_line(gram, product[i]) for i in range(2)])
        return Unlikeness(lines[:, 0], lines[:, 1], self.sampling)


def sum_pairs(
    lcv: FloatArray, lskew: FloatArray, n: IntArray, distance: FloatArray, sampling: FloatArray
) -> PairSums:
    """Gather what all pairs of gauges say about how sites differ with distance.

    Parameters
    ----------
    lcv, lskew : (g,)
    n : (g,)
        Record lengths.
    distance : (g, g)
    sampling : (2,)
        Years times the sampling variance of L-CV and L-skew.

    Notes
    -----
    The squared difference of two gauges' sample ratios exceeds that of their true ratios by the two sampling
    variances; pairs are weighted by the inverse of the square of that excess. Sampling errors that two
    gauges share make the difference a little too small: the lines are on the low side where gauges are near.
    """
    excess = sampling[:, None, None] * (1.0 / n[:, None] + 1.0 / n[None, :])
    weight = 1.0 / (1.0 / n[:, None] + 1.0 / n[None, :]) ** 2
    np.fill_diagonal(weight, 0.0)
    net = np.stack([(r[:, None] - r[None, :]) ** 2 for r in (lcv, lskew)]) - excess
    gram = np.stack([(weight * distance**power).sum(axis=1) for power in range(3)], axis=1)
    product = np.stack([[(weight * z * distance**power).sum(axis=1) for power in range(2)] for z in net])
    return PairSums(gram, np.moveaxis(product, -1, 0), sampling)


def weigh_members(
    departure: FloatArray, n: IntArray, sampling: float, shared: FloatArray | None
) -> FloatArray:
    """Weigh the gauges of a pool so that the average has the smallest error for the pool's site.

    Parameters
    ----------
    departure : (g,)
        Mean square difference between each gauge's true ratio and the site's; zero for the site's own record.
    n : (g,)
        Record lengths.
    sampling : float
        Years times the sampling variance of the ratio.
    shared : (g, g) or None
        Sampling errors in common: ``n_ij rho_ij^2 / (n_i n_j)``, with ``1 / n_i`` on the diagonal. None:
        independent records.

    Returns
    -------
    (g,)
        Sum to one; none negative.

    Notes
    -----
    ``w ~ S^-1 1`` with ``S = diag(departure) + sampling shared``: the minimum-variance unbiased average when
    ``true_i = true_site + departure_i``. With independent records that is ``1 / (b_i + c_i)``. Strong
    correlation can ask for negative weights; such gauges get none and the rest are weighed again.
    """
    c = np.diag(1.0 / n) if shared is None else shared
    s = np.diag(departure) + sampling * c
    active = np.ones(len(n), dtype=bool)
    weight = np.zeros(len(n))
    while True:
        inside = np.flatnonzero(active)
        w = np.linalg.solve(s[np.ix_(inside, inside)], np.ones(len(inside)))
        if (w >= 0).all() or len(inside) == 1:
            weight[inside] = np.abs(w)
            return np.asarray(weight / weight.sum())
        active[inside[w < 0]] = False


def _fit_line(gram: FloatArray, product: FloatArray) -> tuple[float, float]:
    """Least-squares base and slope, neither negative."""
    s0, s1, s2 = gram
    p0, p1 = product
    det = s0 * s2 - s1**2
    if det > 1e-12 * s0 * s2:
        base, slope = (s2 * p0 - s1 * p1) / det, (s0 * p1 - s1 * p0) / det
        if base >= 0 and slope >= 0:
            return float(base), float(slope)
    if s0 <= 0:
        return 0.0, 0.0
    through_zero = max(p1 / s2, 0.0) if s2 > 0 else 0.0
    level = max(p0 / s0, 0.0)
    # of the two ends of the quarter plane the one with the smaller sum of squares
    cost_slope = -2 * through_zero * p1 + through_zero**2 * s2
    cost_level = -2 * level * p0 + level**2 * s0
    return (0.0, float(through_zero)) if cost_slope < cost_level else (float(level), 0.0)
