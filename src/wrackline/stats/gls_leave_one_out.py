"""Leave-one-out predictions of generalized least squares in closed form."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

import numpy as np

from wrackline.stats.gls import (
    FloatArray,
    GlsFit,
    SpectralSystem,
    factor_cover,
    turn_system,
)

_TOLERANCE = 1e-11
_MOST_TRIALS = 25


@dataclass(frozen=True)
class LeftOut:
    """Every site predicted by the regression of all others.

    Attributes
    ----------
    predicted : (n,)
        ``x_i b`` with the coefficients fitted without site i; the sampling error that site i shares with its
        neighbours is not predicted, since it is no part of the truth.
    variance : (n,)
        Variance of prediction at a site that was left out, model error included, its own sampling error not.
    model_variance : (n,)
        The model-error variance behind each.
    coefficients : (n, k)
        Of the regression without each site.
    """

    predicted: FloatArray
    variance: FloatArray
    model_variance: FloatArray
    coefficients: FloatArray


def leave_one_out(y: FloatArray, design: FloatArray, sampling: FloatArray, fit: GlsFit) -> LeftOut:
    """Leave every site out in turn with the model-error variance held; exact, at the cost of one more factoring.

    Parameters
    ----------
    y : (n,)
    design : (n, k)
    sampling : (n,) or (n, n)
    fit : GlsFit
        Of the same data.

    Notes
    -----
    Without site i the precision of the others is ``K - k k' / K_ii`` (block inversion), so the coefficients move
    by ``-C z_i (K e)_i / P_ii`` with ``z_i`` the i-th row of ``K X``, ``e`` the residuals, ``C`` the coefficient
    covariance and ``P_ii = K_ii - z_i' C z_i``.
    """
    factor = factor_cover(sampling, fit.model_variance)
    scores = factor.unwhiten(factor.whiten(np.column_stack([design, fit.residuals])))
    z, pulled = scores[:, :-1], scores[:, -1]
    moved = z @ fit.coefficient_covariance
    own = factor.precision_diagonal() - np.einsum("ij,ij->i", moved, z)
    coefficients = fit.coefficients - moved * (pulled / own)[:, None]
    grown = np.einsum("ij,ij->i", design, moved) ** 2 / own
    return LeftOut(
        predicted=np.einsum("ij,ij->i", design, coefficients),
        variance=fit.prediction_variance + grown,
        model_variance=np.full(len(y), fit.model_variance),
        coefficients=coefficients,
    )


def leave_one_out_refitted(
    y: FloatArray, design: FloatArray, sampling: FloatArray, method: Literal["moments", "reml"] = "reml"
) -> LeftOut:
    """Leave every site out in turn and estimate the model-error variance anew each time; exact.

    Notes
    -----
    One eigendecomposition; then all sites' estimating equations are solved together by a secant, each trial
    a few products of whole matrices.
    """
    system = turn_system(y, design, sampling)
    axes = np.eye(len(y)) if system.axes is None else system.axes
    at_zero = _dropped_at(system, axes, np.zeros(len(y)), method, shared=True)
    variance = _solve_all(system, axes, at_zero[0], method)
    _, coefficients, covariance = _dropped_at(system, axes, variance, method)
    predicted = np.einsum("ij,ij->i", design, coefficients)
    grown = np.einsum("ij,ijk,ik->i", design, covariance, design)
    return LeftOut(predicted, variance + grown, variance, coefficients)


def _solve_all(system: SpectralSystem, axes: FloatArray, at_zero: FloatArray, method: str) -> FloatArray:
    """Secants for all sites at once, safeguarded by brackets; zero where the ratio is one or more at zero."""
    n, k = system.design.shape
    ols = system.y - system.design @ np.linalg.lstsq(system.design, system.y, rcond=None)[0]
    scale = float(ols @ ols) / (n - k) + 1e-300
    guess = scale - system.eigenvalues.mean()
    x0, r0 = np.zeros(n), at_zero.copy()
    x1 = np.full(n, guess if guess > 0 else 0.25 * scale)
    low, high = np.zeros(n), np.full(n, np.inf)
    open_ = at_zero < 1.0
    x1[~open_] = 0.0
    r1 = _dropped_at(system, axes, x1, method)[0]
    for _ in range(_MOST_TRIALS):
        low = np.where(r1 < 1, np.maximum(low, x1), low)
        high = np.where(r1 >= 1, np.minimum(high, x1), high)
        moving = open_ & (np.abs(r1 - 1) > _TOLERANCE) & (r1 != r0)
        if not moving.any():
            break
        with np.errstate(divide="ignore", invalid="ignore"):
            x = x1 + (1 - r1) * (x1 - x0) / (r1 - r0)
        fallback = np.where(np.isfinite(high), 0.5 * (low + high), 2 * np.maximum(low, scale))
        x = np.where((x > low) & (x < high), x, fallback)
        at = np.flatnonzero(moving)
        x0[at], r0[at] = x1[at], r1[at]
        x1[at] = x[at]
        r1[at] = _dropped_at(system, axes[at], x1[at], method)[0]
    return x1


def _dropped_at(
    system: SpectralSystem,
    axes: FloatArray,
    variance: FloatArray,
    method: str,
    *,
    shared: bool = False,
) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Estimating ratio, coefficients and their covariance without one site, for m sites at their own variances.

    ``axes`` (m, n) are the rows of the sites. All sums run over the axes of the sampling covariance.
    """
    n, k = system.design.shape
    x, y = system.design, system.y
    floor = 1e-13 * max(float(system.eigenvalues.max()), 1e-300)
    cover = np.maximum(system.eigenvalues, floor) + variance[: 1 if shared else None, None]
    weight = 1.0 / cover
    columns = np.column_stack([x, y])
    pairs = (columns[:, :, None] * columns[:, None, :]).reshape(n, -1)
    gram = (weight @ pairs).reshape(-1, k + 1, k + 1)
    own_weight = axes * weight
    own = np.einsum("ij,ij->i", axes, own_weight)
    z = own_weight @ columns
    gram_left = gram - z[:, :, None] * z[:, None, :] / own[:, None, None]
    covariance = np.linalg.inv(gram_left[:, :k, :k])
    coefficients = np.einsum("ikl,il->ik", covariance, gram_left[:, :k, k])
    contrast = np.column_stack([-coefficients, np.ones(len(coefficients))])
    squares = np.einsum("ik,ikl,il->i", contrast, gram_left, contrast)
    if method == "moments":
        return (n - 1 - k) / np.maximum(squares, 1e-300), coefficients, covariance
    second = own_weight * weight
    gram_2 = ((weight**2) @ pairs).reshape(-1, k + 1, k + 1)
    z_2 = second @ columns
    own_2 = np.einsum("ij,ij->i", axes, second)
    # Between columns, the square of the others' precision K - k k' / K_ii.
    z = z / own[:, None]
    own_3 = own_2[:, None, None] * z[:, :, None] * z[:, None, :]
    gram_2_left = gram_2 - z_2[:, :, None] * z[:, None, :] - z[:, :, None] * z_2[:, None, :] + own_3
    scores = np.einsum("ik,ikl,il->i", contrast, gram_2_left, contrast)
    trace = weight.sum(axis=1) - own_2 / own
    trace = trace - np.einsum("ikl,ilk->i", covariance, gram_2_left[:, :k, :k])
    return trace / np.maximum(scores, 1e-300), coefficients, covariance
