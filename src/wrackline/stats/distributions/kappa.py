"""Four-parameter kappa distribution: location, scale, shapes k and h (Hosking, 1994).

x = location + (scale / k) (1 - ((1 - F^h) / h)^k). The generalized logistic is h = -1, the generalized
extreme value h = 0, the generalized Pareto h = 1.
"""

from functools import lru_cache

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.special import gammaln, psi

from wrackline.stats.distributions._power_form import FloatArray, bend, broadcast_lmoments, split, unbend

NAME = "KAP"
TITLE = "four-parameter kappa"
PARAMETERS = ("location", "scale", "shape_k", "shape_h")

_NODES, _NODE_WEIGHTS = np.polynomial.legendre.leggauss(10)
_UNIT_NODES, _UNIT_WEIGHTS = (1 + _NODES) / 2, _NODE_WEIGHTS / 2
_SHIFT = 5
_STARTS = 4
_LARGEST_SHAPE = 60.0
_TOLERANCE = 1e-12


def fit(
    l1: ArrayLike, l2: ArrayLike, t3: ArrayLike, t4: ArrayLike, t5: ArrayLike | None = None
) -> FloatArray:
    """Fit to four L-moments by damped Newton steps, all at once, from the best points of a grid.

    `t5` is not used. A fit is returned only if its own L-skewness and L-kurtosis, recomputed, meet the
    ones asked for to 1e-10.

    Returns
    -------
    array, shape (..., 4)
        Location and scale in the unit of `l1`, k, h, with k > -1, h > -1, h k > -1 where h < 0 and
        k + 0.725 h > -1 (which makes the solution unique). NaN where ``l2 <= 0``, on or above the line of
        the generalized logistic law, ``t4 >= (1 + 5 t3^2) / 6``, below ``(5 t3^2 - 1) / 4``, or where no
        start converged (extremely low L-kurtosis): the caller falls back on a law with fewer parameters.

    Notes
    -----
    Source: Hosking (1994); Hosking and Wallis (1997), appendix A.10.
    """
    l1, l2, t3, t4 = broadcast_lmoments(l1, l2, t3, t4)
    feasible = (np.abs(t3) < 1) & (t4 < (1 + 5 * t3**2) / 6) & (t4 > (5 * t3**2 - 1) / 4)
    shapes = np.full((*t3.shape, 2), np.nan)
    shapes[feasible] = _solve_shapes(t3[feasible], t4[feasible])
    k, h = shapes[..., 0], shapes[..., 1]
    with np.errstate(all="ignore"):
        first, second, _, _ = _log_moments_over_k(k, h)
        scale = l2 * np.exp(-k * first) / bend(first - second, k)
        return np.stack([l1 - scale * bend(-first, k), scale, k, h], axis=-1)


def quantile(parameters: ArrayLike, p: ArrayLike) -> FloatArray:
    """Return the value not exceeded with probability `p`; `p` of 0 or 1 gives the bounds of the law."""
    with np.errstate(divide="ignore"):
        return quantile_from_log_p(parameters, np.log(np.asarray(p, dtype=float)))


def quantile_from_log_p(parameters: ArrayLike, log_p: ArrayLike) -> FloatArray:
    """Return the value not exceeded with probability exp(`log_p`).

    For simulation: minus a standard exponential variate is the logarithm of a uniform one, exact near
    both ends. One parameter set, shape (4,), with a large array takes a short cut through memory.
    """
    location, scale, k, h = split(parameters)
    log_p = np.asarray(log_p, dtype=float)
    if location.ndim == 0 and log_p.ndim > 0 and min(abs(float(k)), abs(float(h))) > 1e-100:
        return _quantile_in_place(float(location), float(scale), float(k), float(h), log_p)
    with np.errstate(divide="ignore"):
        reduced = -np.log(bend(-log_p, h))
    return location + scale * bend(reduced, k)


def cdf(parameters: ArrayLike, x: ArrayLike) -> FloatArray:
    """Return the probability that `x` is not exceeded."""
    location, scale, k, h = split(parameters)
    reduced = unbend((np.asarray(x, dtype=float) - location) / scale, k)
    with np.errstate(over="ignore"):
        return np.exp(-unbend(np.exp(-reduced), h))


def density(parameters: ArrayLike, x: ArrayLike) -> FloatArray:
    """Return the probability density at `x`, zero outside the bounds."""
    location, scale, k, h = split(parameters)
    reduced = unbend((np.asarray(x, dtype=float) - location) / scale, k)
    inside = ~np.isinf(reduced)
    reduced = np.where(inside, reduced, 0.0)
    with np.errstate(over="ignore", invalid="ignore"):
        minus_log_f = unbend(np.exp(-reduced), h)
        inside &= ~np.isinf(minus_log_f)
        value = np.exp(-(1 - h) * minus_log_f - (1 - k) * reduced) / scale
    return np.where(inside, value, 0.0)


def ratios(k: ArrayLike, h: ArrayLike) -> tuple[FloatArray, FloatArray]:
    """Return L-skewness and L-kurtosis of the law with shapes `k` and `h` (NaN where they do not exist)."""
    k, h = np.broadcast_arrays(np.asarray(k, dtype=float), np.asarray(h, dtype=float))
    exists = (k > -1) & ((h >= 0) | (h * k > -1))
    return _ratios(np.where(exists, k, np.nan), np.where(exists, h, np.nan))


def _quantile_in_place(location: float, scale: float, k: float, h: float, log_p: FloatArray) -> FloatArray:
    x = np.multiply(log_p, h)
    with np.errstate(divide="ignore", over="ignore", invalid="ignore"):
        np.expm1(x, out=x)
        x *= -1 / h
        np.log(x, out=x)
        x *= k
        np.expm1(x, out=x)
        x *= -scale / k
    x += location
    return np.asarray(x)


def _mean_digamma(z: FloatArray, k: FloatArray) -> FloatArray:
    """Return (ln Gamma(z + k) - ln Gamma(z)) / k, for z > 0 and z + k > 0, smooth through k = 0.

    It is the mean of the digamma function between z and z + k: no difference of large logarithms. The
    recurrence moves the interval away from the poles, where ten nodes give it to rounding.
    """
    z, k = np.broadcast_arrays(z, k)
    nodes = z[..., None] + _SHIFT + k[..., None] * _UNIT_NODES
    mean = psi(nodes) @ _UNIT_WEIGHTS - unbend(1 / (z[..., None] + np.arange(_SHIFT)), -k[..., None]).sum(
        axis=-1
    )
    wide = np.abs(k) > 3
    if np.any(wide):
        mean = np.where(wide, (gammaln(z + k) - gammaln(z)) / np.where(wide, k, 1.0), mean)
    return np.asarray(mean)


def _log_moments_over_k(k: FloatArray, h: FloatArray) -> list[FloatArray]:
    """Return ln(g_r) / k for r = 1..4, Hosking's moments of 1 - k (x - location) / scale."""
    at_zero = np.abs(h) < 1e-14
    size = np.where(at_zero, 1.0, np.abs(h))
    positive = h >= 0
    common = _mean_digamma(np.ones_like(k), k) - np.log(size)
    order = np.arange(1, 5).reshape(4, *[1] * np.ndim(k))
    log_g_over_k = common - _mean_digamma(
        np.where(positive, 1.0, 0.0) + order / size, np.where(positive, k, -k)
    )
    return list(np.where(at_zero, common - np.log(order), log_g_over_k))


def _ratios(k: FloatArray, h: FloatArray) -> tuple[FloatArray, FloatArray]:
    with np.errstate(all="ignore"):
        first, second, third, fourth = _log_moments_over_k(k, h)
        # (g_1 - g_r) / (k g_1): no cancellation however small the g_r, smooth through k = 0.
        d2, d3, d4 = bend(first - second, k), bend(first - third, k), bend(first - fourth, k)
        return 2 * d3 / d2 - 3, 6 - (10 * d3 - 5 * d4) / d2


def _allowed(k: FloatArray, h: FloatArray) -> NDArray[np.bool_]:
    unique = (k > -1) & (h > -1) & ((h >= 0) | (h * k > -1)) & (k + 0.725 * h > -1)
    return unique & (k < _LARGEST_SHAPE) & (h < _LARGEST_SHAPE)


@lru_cache(maxsize=1)
def _start_grid() -> tuple[FloatArray, ...]:
    """Return shapes k, h and their L-moment ratios over the region of unique solutions."""
    k_axis = np.concatenate([np.linspace(-0.98, 2.0, 61), np.geomspace(2.2, 40.0, 30)])
    h_axis = np.concatenate([np.linspace(-0.999, 2.0, 61), np.geomspace(2.2, 40.0, 30)])
    k, h = (axis.ravel() for axis in np.meshgrid(k_axis, h_axis))
    keep = _allowed(k, h)
    k, h = k[keep], h[keep]
    t3, t4 = _ratios(k, h)
    fine = np.isfinite(t3) & np.isfinite(t4)
    return k[fine], h[fine], t3[fine], t4[fine]


def _solve_shapes(t3: FloatArray, t4: FloatArray) -> FloatArray:
    """Return shapes (m, 2) with these L-moment ratios, NaN where no start leads to them."""
    shapes = np.full((t3.size, 2), np.nan)
    for rank in range(_STARTS):
        failed = np.flatnonzero(np.isnan(shapes[:, 0]))
        if failed.size == 0:
            break
        starts = np.array([_nearest_start(t3[i], t4[i], rank) for i in failed])
        shapes[failed] = _newton(starts, t3[failed], t4[failed])
    return shapes


def _nearest_start(t3: float, t4: float, rank: int) -> FloatArray:
    """Return the grid point whose ratios are nearest, or the next best of another neighbourhood."""
    grid_k, grid_h, grid_t3, grid_t4 = _start_grid()
    distance = (grid_t3 - t3) ** 2 + (grid_t4 - t4) ** 2
    best = int(np.argmin(distance)) if rank == 0 else int(np.argpartition(distance, 6 * rank)[6 * rank])
    return np.array([grid_k[best], grid_h[best]])


def _newton(start: FloatArray, t3: FloatArray, t4: FloatArray) -> FloatArray:
    with np.errstate(all="ignore"):
        return _damped_newton(start[:, 0].copy(), start[:, 1].copy(), t3, t4)


def _damped_newton(k: FloatArray, h: FloatArray, t3: FloatArray, t4: FloatArray) -> FloatArray:
    target = np.stack([t3, t4])
    miss = np.stack(_ratios(k, h)) - target
    size = np.abs(miss).max(axis=0)
    active = np.flatnonzero(size > _TOLERANCE)
    for _ in range(60):
        if active.size == 0:
            break
        step_k, step_h = _newton_step(k[active], h[active], miss[:, active])
        shorter = np.ones(active.size)
        open_ = np.arange(active.size)
        moved = np.zeros(active.size, dtype=bool)
        for _ in range(25):
            rows = active[open_]
            new_k, new_h = k[rows] - shorter[open_] * step_k[open_], h[rows] - shorter[open_] * step_h[open_]
            allowed = _allowed(new_k, new_h)
            new_k, new_h = np.where(allowed, new_k, np.nan), np.where(allowed, new_h, np.nan)
            new_miss = np.stack(_ratios(new_k, new_h)) - target[:, rows]
            new_size = np.abs(new_miss).max(axis=0)
            better = new_size < size[rows]
            hit = rows[better]
            k[hit], h[hit], size[hit] = new_k[better], new_h[better], new_size[better]
            miss[:, hit] = new_miss[:, better]
            moved[open_[better]] = True
            open_ = open_[~better]
            shorter[open_] *= 0.5
            if open_.size == 0:
                break
        # What can no longer improve is as near as rounding allows, or stuck: the size decides below.
        active = active[moved & (size[active] > _TOLERANCE)]
    good = size < 1e-10
    return np.where(good[:, None], np.stack([k, h], axis=-1), np.nan)


def _newton_step(k: FloatArray, h: FloatArray, miss: FloatArray) -> tuple[FloatArray, FloatArray]:
    width_k, width_h = 1e-6 * (1 + np.abs(k)), 1e-6 * (1 + np.abs(h))
    base = np.stack(_ratios(k, h))
    by_k = (np.stack(_ratios(k + width_k, h)) - base) / width_k
    by_h = (np.stack(_ratios(k, h + width_h)) - base) / width_h
    determinant = by_k[0] * by_h[1] - by_k[1] * by_h[0]
    step_k = (by_h[1] * miss[0] - by_h[0] * miss[1]) / determinant
    step_h = (by_k[0] * miss[1] - by_k[1] * miss[0]) / determinant
    return step_k, step_h
