"""Expected moments algorithm: log-Pearson III moments of records with censored years, many gauges at once."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from wrackline.stats.censored_sample import CensoredSample
from wrackline.stats.pearson3 import conditional_moments, support

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]
BoolArray = NDArray[np.bool_]
SkewRule = Callable[[FloatArray, IntArray], FloatArray]

LARGEST_SKEW = 3.0
_ITERATION_SKEW = 9.0
_ACCELERATED_ITERATIONS = 60
_NEWTON_ITERATIONS = 30
_MOST_ITERATIONS = 5000


@dataclass(frozen=True)
class ExpectedMoments:
    """Fitted moments of many gauges; NaN with a reason in `refusal` where there is no fit.

    Attributes
    ----------
    mean, sd, skew : float arrays (g,)
        Moments of the fitted distribution. `skew` is the one used: station, weighted or generalized.
    station_skew : float array (g,)
        The record's own skew within this fit. With censored years and a weighted skew it differs from
        the skew of a fit without weighting.
    iterations : int array (g,)
        Evaluations of the moment update.
    converged : bool array (g,)
    clamped : bool array (g,)
        True where the bound on the skew took effect.
    beyond_support : bool array (g,)
        True where an exact value lies outside the fitted distribution.
    refusal : tuple of str, length g
        Why there is no fit; empty where there is one.
    """

    mean: FloatArray
    sd: FloatArray
    skew: FloatArray
    station_skew: FloatArray
    iterations: IntArray
    converged: BoolArray
    clamped: BoolArray
    beyond_support: BoolArray
    refusal: tuple[str, ...]

    @property
    def fitted(self) -> BoolArray:
        return np.isfinite(self.mean)


def fit_expected_moments(
    sample: CensoredSample,
    skew_rule: SkewRule | None = None,
    tolerance: float = 1e-10,
    skew_bound: float = np.inf,
    parent: tuple[float, float, float] | None = None,
) -> ExpectedMoments:
    """Fit mean, standard deviation and skew of Pearson III to censored samples.

    Parameters
    ----------
    sample : CensoredSample
        Logarithms.
    skew_rule : function, optional
        Maps station skews and the gauge numbers they belong to onto the skews to use, inside the
        iteration (`weight_skew`, or a constant generalized skew). Without it the station skew is used.
    tolerance : float
        Bound on the estimated error of each moment, in units of the standard deviation of the exact values.
    skew_bound : float
        Station skews are held within plus and minus this bound; unbounded by default.
    parent : tuple of mean, standard deviation and skew, optional
        Where the search starts when all gauges are replicates of one; the answer does not depend on it.

    Returns
    -------
    ExpectedMoments
        Gauges with fewer than 3 exact values, with no spread, or with a skew beyond 3 in absolute value
        are refused with the reason.

    Notes
    -----
    Cohn, Lane and Baier (1997, Water Resour. Res. 33(9)); regional skew inside the iteration as Griffis,
    Stedinger and Cohn (2004, Water Resour. Res. 40). Bias factors are on the number of exactly known values,
    which reproduces the published moments of Bulletin 17C (England and others, 2019), appendix 10. Without
    censored years the result is the product moments with the bias-corrected skew. The fixed point is found
    by Broyden's method with the plain update as its first guess and fall-back.
    """
    usable = (sample.exact_count >= 3) & (sample.exact_squares > 0)
    gauges = np.flatnonzero(usable)
    reduced = _standardise(sample.keep_gauges(gauges))

    def rule(skew: FloatArray, rows: IntArray) -> FloatArray:
        skew = np.clip(skew, -skew_bound, skew_bound)
        return skew if skew_rule is None else skew_rule(skew, gauges[rows])

    start = np.stack(
        [np.zeros(len(gauges)), np.ones(len(gauges)), rule(np.zeros(len(gauges)), np.arange(len(gauges)))]
    )
    if parent is not None:
        mean, sd = sample.exact_mean[gauges], sample.exact_sd[gauges]
        start = np.stack([(parent[0] - mean) / sd, parent[1] / sd, np.full(len(gauges), parent[2])])
    state = _find_fixed_point(reduced, rule, tolerance, start, alike=parent is not None)
    return _gather(sample, gauges, state, skew_bound)


def _standardise(sample: CensoredSample) -> CensoredSample:
    """Shift and scale every gauge to mean 0 and standard deviation 1 of its exact values."""
    mean, sd = sample.exact_mean, sample.exact_sd
    of_class = sample.class_gauge
    return replace(
        sample,
        exact_mean=np.zeros_like(mean),
        exact_squares=sample.exact_squares / sd**2,
        exact_cubes=sample.exact_cubes / sd**3,
        class_low=(sample.class_low - mean[of_class]) / sd[of_class],
        class_high=(sample.class_high - mean[of_class]) / sd[of_class],
    )


def _find_fixed_point(
    sample: CensoredSample, rule: SkewRule, tolerance: float, start: FloatArray, alike: bool
) -> _State:
    """Solve ``update(theta) = theta`` for every gauge; theta is (mean, sd, skew) as rows (3, g)."""
    g = sample.n_gauges
    every = np.arange(g)
    state = _State(start.copy(), np.zeros(g), np.zeros(g, dtype=np.int64), np.zeros(g, dtype=bool))
    inverse = _identity(g)
    if alike and g:
        # One gauge's slope serves all replicates as Broyden's first guess.
        one, first = sample.keep_gauges(every[:1]), start[:, :1]
        slope = _slope(one, rule, every[:1], first)[0]
        if abs(np.linalg.det(slope)) > 1e-6:
            inverse = np.repeat(-np.linalg.inv(slope)[:, :, None], g, axis=2)
    _accelerate(sample, rule, tolerance, state, every, inverse)
    if not state.converged.all():
        _finish_by_newton(sample, rule, tolerance, state, np.flatnonzero(~state.converged))
    left = np.flatnonzero(~state.converged)
    if len(left):
        # The plain iteration is slow but hardly ever fails, from its own start.
        state.theta[:, left] = start[:, left]
        _accelerate(sample, rule, tolerance, state, left, _identity(len(left)), accelerated=False)
    return state


@dataclass
class _State:
    """Where the search stands: theta (3, g) and, per gauge, station skew, evaluations and success."""

    theta: FloatArray
    station: FloatArray
    iterations: IntArray
    converged: BoolArray


def _accelerate(
    sample: CensoredSample,
    rule: SkewRule,
    tolerance: float,
    state: _State,
    active: IntArray,
    inverse: FloatArray,
    accelerated: bool = True,
) -> None:
    """Iterate the active gauges by Broyden's method, or plainly with Broyden's estimate of the error."""
    part, x = sample.keep_gauges(active), state.theta[:, active]
    old_x = old_f = np.full(x.shape, np.nan)
    plain = reset = np.zeros(len(active), dtype=bool)
    for iteration in range(_ACCELERATED_ITERATIONS if accelerated else _MOST_ITERATIONS):
        f, own_skew = _residual(part, rule, active, x)
        state.iterations[active] += 1
        if iteration:
            inverse, x, f, reset = _improve_inverse(inverse, x, f, old_x, old_f, plain)
        step = np.einsum("ijg,jg->ig", inverse, f)
        small = (np.abs(f).max(axis=0) < tolerance) & (np.abs(step).max(axis=0) < tolerance) & ~reset
        state.theta[:, active], state.station[active] = np.where(small, x + f, x), own_skew
        state.converged[active] = small
        old_x, old_f = x, f
        plain = reset if accelerated else np.ones(len(active), dtype=bool)
        x = _bound_step(x, step if accelerated else f)
        if small.any():
            keep = np.flatnonzero(~small)
            if not len(keep):
                return
            active, part, plain, reset = active[keep], part.keep_gauges(keep), plain[keep], reset[keep]
            x, old_x, old_f, inverse = x[:, keep], old_x[:, keep], old_f[:, keep], inverse[:, :, keep]


def _finish_by_newton(
    sample: CensoredSample, rule: SkewRule, tolerance: float, state: _State, active: IntArray
) -> None:
    """Finish the few stiff gauges (a handful of peaks against centuries below a level) by Newton's method."""
    for _ in range(_NEWTON_ITERATIONS):
        part, x = sample.keep_gauges(active), state.theta[:, active]
        f, own_skew = _residual(part, rule, active, x)
        slope = _slope(part, rule, active, x)
        regular = np.abs(np.linalg.det(slope)) > 1e-12
        slope[~regular] = -np.eye(3)
        step = -np.linalg.solve(slope, f.T[:, :, None])[:, :, 0].T.astype(float)
        small = (np.abs(f).max(axis=0) < tolerance) & (np.abs(step).max(axis=0) < tolerance)
        state.station[active], state.converged[active] = own_skew, small
        state.iterations[active] += 5
        best, best_x = np.full(len(active), np.inf), x
        for fraction in (1.0, 0.5, 0.2, 0.05):
            trial = _bound_step(x, fraction * step)
            size = np.abs(_residual(part, rule, active, trial)[0]).max(axis=0)
            best_x, best = np.where(size < best, trial, best_x), np.minimum(size, best)
        state.iterations[active] += 4
        state.theta[:, active] = np.where(small, x, best_x)
        active = active[~small]
        if not len(active):
            return


def _slope(part: CensoredSample, rule: SkewRule, active: IntArray, x: FloatArray) -> FloatArray:
    """Derivative of the residual by theta, shape (g, 3, 3), by forward differences."""
    slope = np.empty((len(active), 3, 3))
    here = _residual(part, rule, active, x)[0]
    for i in range(3):
        shift = np.where(np.arange(3)[:, None] == i, 1e-7, 0.0)
        slope[:, :, i] = ((_residual(part, rule, active, x + shift)[0] - here) / 1e-7).T
    return slope


def _residual(
    part: CensoredSample, rule: SkewRule, active: IntArray, x: FloatArray
) -> tuple[FloatArray, FloatArray]:
    """How far the update moves from x, and the station skew it finds."""
    f, own_skew = _update(part, x)
    f[2] = rule(own_skew, active)
    return f - x, own_skew


def _update(sample: CensoredSample, theta: FloatArray) -> tuple[FloatArray, FloatArray]:
    """One pass of the algorithm: new (mean, sd, -) and the new station skew."""
    mu, sd, skew = theta
    g, own = sample.n_gauges, sample.class_gauge
    n_exact = sample.exact_count.astype(float)
    years, mu_c, sd_c = sample.class_years.astype(float), mu[own], sd[own]
    _, moments = conditional_moments(
        (sample.class_low - mu_c) / sd_c, (sample.class_high - mu_c) / sd_c, skew[own]
    )
    n = n_exact + np.bincount(own, weights=years, minlength=g)

    def total(values: FloatArray) -> FloatArray:
        return np.bincount(own, weights=years * values, minlength=g).astype(float)

    # Products instead of powers throughout: they cost a tenth.
    variance_c = sd_c * sd_c
    m1, m2, m3 = sd_c * moments[0], variance_c * moments[1], variance_c * sd_c * moments[2]
    new_mu = (n_exact * sample.exact_mean + total(mu_c + m1)) / n
    shift, delta = mu_c - new_mu[own], sample.exact_mean - new_mu
    exact_2 = sample.exact_squares + n_exact * delta * delta
    exact_3 = sample.exact_cubes + delta * (3 * sample.exact_squares + n_exact * delta * delta)
    c2 = n_exact / (n_exact - 1)
    c3 = c2 * n_exact / (n_exact - 2)
    variance = (c2 * exact_2 + total(m2 + shift * (2 * m1 + shift))) / n
    third = (c3 * exact_3 + total(m3 + shift * (3 * m2 + shift * (3 * m1 + shift)))) / n
    new_sd = np.sqrt(variance)
    station = np.clip(third / (variance * new_sd), -_ITERATION_SKEW, _ITERATION_SKEW)
    return np.stack([new_mu, new_sd, station]), station


def _improve_inverse(
    inverse: FloatArray, x: FloatArray, f: FloatArray, old_x: FloatArray, old_f: FloatArray, plain: BoolArray
) -> tuple[FloatArray, FloatArray, FloatArray, BoolArray]:
    """Broyden's update of the inverse of ``1 - d update``; falls back to the plain update where it went astray.

    A plain step may pass through larger residuals on its way, so only accelerated steps are taken back.
    """
    worse = ~plain & (np.abs(f).max(axis=0) > 2 * np.abs(old_f).max(axis=0))
    dx, df = x - old_x, f - old_f
    inverse_df = np.einsum("ijg,jg->ig", inverse, df)
    dx_inverse = np.einsum("ig,ijg->jg", dx, inverse)
    scale = -np.einsum("ig,ig->g", dx, inverse_df)
    sound = ~worse & (np.abs(scale) > 1e-300)
    gain = (dx + inverse_df) * np.where(sound, 1 / np.where(sound, scale, 1.0), 0.0)
    inverse = inverse + gain[:, None] * dx_inverse[None]
    if worse.any():
        inverse[:, :, worse] = _identity(int(worse.sum()))
        x, f = np.where(worse, old_x, x), np.where(worse, old_f, f)
    return inverse, x, f, worse


def _bound_step(x: FloatArray, step: FloatArray) -> FloatArray:
    """Take the step, no further than keeps the standard deviation positive and the skew finite."""
    new = x + np.clip(step, -2.0, 2.0)
    new[1] = np.clip(new[1], 0.3 * x[1], 3 * x[1])
    new[2] = np.clip(new[2], -_ITERATION_SKEW, _ITERATION_SKEW)
    return new


def _identity(g: int) -> FloatArray:
    return np.array(np.repeat(np.eye(3)[:, :, None], g, axis=2), dtype=float)


def _gather(
    sample: CensoredSample,
    gauges: IntArray,
    state: _State,
    skew_bound: float,
) -> ExpectedMoments:
    """Put the fits of the usable gauges among all, in the units of the sample, and judge them."""
    g = sample.n_gauges
    theta, station, sd_exact = state.theta, state.station, sample.exact_sd[gauges]
    values = np.full((4, g), np.nan)
    values[:, gauges] = [
        sample.exact_mean[gauges] + sd_exact * theta[0],
        sd_exact * theta[1],
        theta[2],
        np.clip(station, -skew_bound, skew_bound),
    ]
    all_iterations, all_converged = np.zeros(g, dtype=np.int64), np.zeros(g, dtype=bool)
    all_iterations[gauges], all_converged[gauges] = state.iterations, state.converged
    clamped = np.zeros(g, dtype=bool)
    clamped[gauges] = np.abs(station) > skew_bound
    few, flat = sample.exact_count < 3, ~(sample.exact_squares > 0)
    with np.errstate(invalid="ignore"):
        large = np.abs(values[2]) > LARGEST_SKEW
    refusal = [""] * g
    for i in np.flatnonzero(few | flat | ~all_converged | large):
        if few[i]:
            refusal[i] = f"{sample.exact_count[i]} exactly known peaks; a fit with skew needs at least 3"
        elif flat[i]:
            refusal[i] = "all exactly known peaks are equal, so there is no spread to fit"
        elif not all_converged[i]:
            refusal[i] = f"the moments did not settle within {_MOST_ITERATIONS} iterations"
        else:
            refusal[i] = f"skew {values[2, i]:.2f} is beyond {LARGEST_SKEW:g} in absolute value"
    values[:, [bool(reason) for reason in refusal]] = np.nan
    mean, sd, skew, station_skew = values
    bottom, top = support(skew)
    with np.errstate(invalid="ignore"):
        beyond = (sample.exact_largest > mean + sd * top) | (sample.exact_smallest < mean + sd * bottom)
    return ExpectedMoments(
        mean, sd, skew, station_skew, all_iterations, all_converged, clamped, beyond, tuple(refusal)
    )
