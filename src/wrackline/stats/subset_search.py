"""All subsets of regression columns under generalized least squares, from one set of factorings."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from wrackline.stats.gls import FloatArray, factor_cover

_NODES = 16
_NEAREST = 5
_SMALLEST_PIVOT = 1e-9


@dataclass(frozen=True)
class SubsetRanking:
    """Regressions on every subset of candidate columns, the smallest average variance of prediction first.

    Attributes
    ----------
    members : bool (m, c)
        Which candidates each subset takes.
    model_variance : (m,)
        By moments.
    prediction_variance : (m,)
        Average variance of prediction over the sites.
    coefficients, ratios : (m, c)
        Coefficients of the candidates, and coefficients over their standard errors; NaN where not taken.
    """

    members: NDArray[np.bool_]
    model_variance: FloatArray
    prediction_variance: FloatArray
    coefficients: FloatArray
    ratios: FloatArray


def rank_subsets(
    y: FloatArray, base: FloatArray, candidates: FloatArray, sampling: FloatArray, largest: int
) -> SubsetRanking:
    """Fit every subset of up to ``largest`` candidate columns and rank them by average variance of prediction.

    Parameters
    ----------
    y : (n,)
    base : (n, k0)
        Columns that every regression has: the intercepts.
    candidates : (n, c)
    sampling : (n,) or (n, n)
    largest : int
        Candidates in a subset, at most.

    Returns
    -------
    SubsetRanking
        The empty subset is among them; subsets whose columns depend on each other are left out.

    Notes
    -----
    The sampling covariance is factored at sixteen trial variances; the cross products of all columns there hold all
    that any subset needs. Residual squares of all subsets follow by elimination along the tree of subsets. The
    number of sites less coefficients over the squares is nearly straight in the variance and the cross products nearly
    straight in one over it, so both are interpolated; the figures agree with single fits to about one in a thousand.
    Fit the few best again.
    """
    n, k0 = base.shape
    # Centred and scaled columns make pivots comparable and keep cross products well conditioned.
    hat = base @ np.linalg.lstsq(base, candidates, rcond=None)[0]
    scale = np.sqrt(((candidates - hat) ** 2).mean(axis=0))
    flat = scale <= 1e-12 * (np.abs(candidates).max(axis=0) + 1e-300)
    scale = np.where(flat, 1.0, scale)
    columns = np.column_stack([base, (candidates - hat) / scale, y])
    own = sampling if sampling.ndim == 1 else np.diagonal(sampling)
    nodes = _trial_variances(y, base, columns[:, :-1], float(own.mean()))
    gram = np.empty((len(nodes), columns.shape[1], columns.shape[1]))
    for i, node in enumerate(nodes):
        white = factor_cover(sampling, node).whiten(columns)
        gram[i] = white.T @ white

    members, squares = _eliminate(gram, k0, min(largest, n - k0 - 1), flat)
    size = members.sum(axis=1)
    ratio = (n - k0 - size)[:, None] / squares
    variance, weights = _interpolate(nodes, ratio, float(own.mean()))
    return _describe(columns, k0, members, variance, weights, gram, scale)


def _trial_variances(y: FloatArray, base: FloatArray, all_columns: FloatArray, sampling: float) -> FloatArray:
    """Trial variances that hold those of every subset: from well below the fullest model's to above the emptiest's."""

    def residual_variance(columns: FloatArray) -> float:
        fit = columns @ np.linalg.lstsq(columns, y, rcond=None)[0]
        return float(((y - fit) ** 2).sum() / max(len(y) - columns.shape[1], 1))

    fullest, emptiest = residual_variance(all_columns), residual_variance(base)
    low = max(0.3 * (fullest - sampling), 0.02 * fullest)
    return np.concatenate([[1e-6 * fullest], np.geomspace(low, 1.5 * emptiest, _NODES - 1)])


def _eliminate(
    gram: FloatArray, k0: int, largest: int, flat: NDArray[np.bool_]
) -> tuple[NDArray[np.bool_], FloatArray]:
    """Residual squares of every subset at every trial variance, by eliminating one candidate after the other."""
    inner = np.linalg.solve(gram[:, :k0, :k0], gram[:, :k0, k0:])
    states = (gram[:, k0:, k0:] - np.swapaxes(gram[:, :k0, k0:], 1, 2) @ inner)[None]
    first = np.einsum("mii->mi", states[0])
    c = states.shape[-1] - 1
    members = np.zeros((1, c), dtype=bool)
    for j in range(c):
        pivot = states[:, :, 0, 0]
        fit = (members.sum(axis=1) < largest) & (pivot > _SMALLEST_PIVOT * first[:, j]).all(axis=1) & ~flat[j]
        swept = states[fit]
        row = swept[:, :, 0, 1:]
        swept = swept[:, :, 1:, 1:] - row[..., :, None] * row[..., None, :] / swept[:, :, :1, :1]
        taken = members[fit]
        taken[:, j] = True
        states = np.concatenate([states[:, :, 1:, 1:], swept])
        members = np.concatenate([members, taken])
    return members, np.maximum(states[:, :, 0, 0], 1e-300)


def _interpolate(nodes: FloatArray, ratio: FloatArray, sampling: float) -> tuple[FloatArray, FloatArray]:
    """Variance where each subset's ratio is one, and weights (m, nodes) that interpolate cross products there."""
    m = len(ratio)
    first = np.clip((ratio < 1.0).sum(axis=1) - _NEAREST // 2, 0, len(nodes) - _NEAREST)
    near = first[:, None] + np.arange(_NEAREST)
    x = ratio[np.arange(m)[:, None], near]
    variance = np.einsum("mj,mj->m", _lagrange(x, np.ones(m)), nodes[near])
    variance = np.clip(np.where(ratio[:, 0] >= 1.0, nodes[0], variance), nodes[0], nodes[-1])
    inverse = 1.0 / (nodes + sampling)
    weights = np.zeros((m, len(nodes)))
    weights[np.arange(m)[:, None], near] = _lagrange(inverse[near], 1.0 / (variance + sampling))
    return variance, weights


def _lagrange(x: FloatArray, at: FloatArray) -> FloatArray:
    """Weights (m, j) that interpolate a polynomial through places ``x`` (m, j) at ``at`` (m,)."""
    weights = np.ones_like(x)
    for j in range(x.shape[1]):
        for other in range(x.shape[1]):
            if other != j:
                weights[:, j] *= (at - x[:, other]) / (x[:, j] - x[:, other])
    return weights


def _describe(
    columns: FloatArray,
    k0: int,
    members: NDArray[np.bool_],
    variance: FloatArray,
    weights: FloatArray,
    gram: FloatArray,
    scale: FloatArray,
) -> SubsetRanking:
    m, c = members.shape
    k = k0 + c
    taken = np.column_stack([np.ones((m, k0), dtype=bool), members])
    own = (weights @ gram.reshape(len(gram), -1)).reshape(m, k + 1, k + 1)
    # Columns not taken become rows of the identity, so that all subsets invert as one stack.
    both = taken[:, :, None] & taken[:, None, :]
    information = np.where(both, own[:, :k, :k], np.eye(k))
    covariance = np.where(both, np.linalg.inv(information), 0.0)
    plain = columns[:, :k].T @ columns[:, :k] / len(columns)
    average = variance + covariance.reshape(m, -1) @ plain.ravel()
    coefficients = np.einsum("mij,mj->mi", covariance, np.where(taken, own[:, :k, k], 0.0))[:, k0:]
    with np.errstate(divide="ignore", invalid="ignore"):
        ratios = coefficients / np.sqrt(np.einsum("mii->mi", covariance)[:, k0:])
    order = np.argsort(average, kind="stable")
    coefficients = np.where(members, coefficients / scale, np.nan)
    return SubsetRanking(
        members=members[order],
        model_variance=variance[order],
        prediction_variance=average[order],
        coefficients=coefficients[order],
        ratios=np.where(members, ratios, np.nan)[order],
    )


def variance_inflation(columns: FloatArray) -> FloatArray:
    """Variance inflation factor of every column (n, c) among the others, intercept understood.

    Examples
    --------
    >>> variance_inflation(np.array([[1.0, 1.0], [1.0, -1.0], [-1.0, 1.0], [-1.0, -1.0]])).round(6).tolist()
    [1.0, 1.0]
    """
    if columns.shape[1] < 2:
        return np.ones(columns.shape[1])
    correlation = np.atleast_2d(np.corrcoef(columns, rowvar=False))
    if np.linalg.matrix_rank(correlation) < len(correlation):
        return np.full(len(correlation), np.inf)
    return np.diagonal(np.linalg.inv(correlation)).copy()
