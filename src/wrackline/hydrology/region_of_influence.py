"""Region-of-influence regression: every site from the gauges most like it; an alternative to one equation."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from wrackline.hydrology.records import FloatArray

_TRIALS = 8
_BATCH = 200


@dataclass(frozen=True)
class InfluenceTrial:
    """Leave-one-out predictions with the ``n_gauges`` most similar gauges.

    Attributes
    ----------
    n_gauges : int
    predicted : (n,)
    error : float
        Mean square difference from the gauges.
    """

    n_gauges: int
    predicted: FloatArray
    error: float


def try_regions_of_influence(
    y: FloatArray, design: FloatArray, attributes: FloatArray, sampling: FloatArray, sizes: tuple[int, ...]
) -> tuple[InfluenceTrial, ...]:
    """Predict every gauge from the others most like it, for several sizes of its region.

    Parameters
    ----------
    y : (n,)
    design : (n, k)
    attributes : (n, d)
        Columns in which likeness is measured, each over its standard deviation.
    sampling : (n, n)
    sizes : gauges in a region of influence; sizes of n or more are left out

    Notes
    -----
    Burn (1990), Tasker, Hodge and Barks (1996). Model-error variance by moments in every region.
    """
    n = len(y)
    scaled = attributes / np.maximum(attributes.std(axis=0), 1e-12)
    distance = np.sqrt(((scaled[:, None, :] - scaled[None, :, :]) ** 2).sum(axis=2))
    np.fill_diagonal(distance, np.inf)
    order = np.argsort(distance, axis=1, kind="stable")
    trials = []
    for size in sizes:
        if size >= n:
            continue
        near = np.sort(order[:, :size], axis=1)
        predicted = np.concatenate(
            [
                _predict(y, design, sampling, near[at : at + _BATCH], np.arange(at, min(at + _BATCH, n)))
                for at in range(0, n, _BATCH)
            ]
        )
        trials.append(InfluenceTrial(size, predicted, float(((y - predicted) ** 2).mean())))
    return tuple(trials)


def _predict(
    y: FloatArray, design: FloatArray, sampling: FloatArray, near: np.ndarray, sites: np.ndarray
) -> FloatArray:
    """Fit the regions (b, m) as one stack, model-error variances by a secant, and predict their sites."""
    x, response = design[near], y[near]
    cover = sampling[near[:, :, None], near[:, None, :]]
    size, k = x.shape[1:]
    columns = np.concatenate([x, response[:, :, None]], axis=2)
    identity = np.eye(size)

    def fit(variance: FloatArray) -> tuple[FloatArray, FloatArray]:
        white = np.linalg.solve(cover + variance[:, None, None] * identity, columns)
        gram = np.swapaxes(columns, 1, 2) @ white
        b = np.linalg.pinv(gram[:, :k, :k]) @ gram[:, :k, k:]
        squares = gram[:, k, k] - np.einsum("bkj,bk->b", b, gram[:, :k, k])
        return (size - k) / np.maximum(squares, 1e-300), b[:, :, 0]

    scale = response.var(axis=1)
    v0 = np.zeros(len(near))
    r0, b = fit(v0)
    open_ = r0 < 1.0
    v1 = np.where(open_, 0.2 * scale, 0.0)
    for _ in range(_TRIALS):
        r1, b = fit(v1)
        moving = open_ & (np.abs(r1 - 1) > 1e-8) & (r1 != r0)
        with np.errstate(divide="ignore", invalid="ignore"):
            step = v1 + (1 - r1) * (v1 - v0) / (r1 - r0)
        v0, r0, v1 = (
            np.where(moving, v1, v0),
            np.where(moving, r1, r0),
            np.where(moving, np.maximum(step, 0.0), v1),
        )
        if not moving.any():
            break
    return np.einsum("bk,bk->b", design[sites], b)
