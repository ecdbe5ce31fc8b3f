"""Weights of catchment attributes in regions of influence, fitted by leave-one-out error of growth factors."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from wrackline.hydrology.growth_curves import SMALLEST_FACTOR, Ratios, Statistic, growth_factors
from wrackline.hydrology.pool_forming import SiteSpace, distances
from wrackline.hydrology.records import FloatArray, IntArray
from wrackline.stats.lmoments import SampleLMoments

MULTIPLES = (0.25, 0.5, 2.0, 4.0)
_SWEEPS = 3
_NEGLIGIBLE_GAIN = 0.001
_LARGEST_RATIO = 64.0


@dataclass(frozen=True)
class FittedWeights:
    """Attribute weights that predict growth factors best, gauges left out one at a time.

    Attributes
    ----------
    weights : (d,)
        In the order of the space's names.
    error, error_before : float
        Root mean square error of ln growth factors with the fitted and with the given weights.
    error_crossed : float
        The same over both halves of the gauges, each with the weights fitted to the other half: what the fit is worth.
    """

    weights: FloatArray
    error: float
    error_before: float
    error_crossed: float

    @property
    def pays(self) -> bool:
        """Whether gauges that had no say in the fit are predicted better with it."""
        return self.error_crossed < self.error_before


def fit_attribute_weights(
    space: SiteSpace,
    lm: SampleLMoments,
    ln_factor: FloatArray,
    distribution: str,
    aep: float,
    statistic: Statistic,
    wanted_years: int,
    fewest: int,
) -> FittedWeights:
    """Search the attribute weights with the smallest leave-one-out error of growth factors.

    Parameters
    ----------
    space : SiteSpace
    lm : SampleLMoments, arrays (g,)
    ln_factor : (g,)
        Natural logarithm of the gauges' own growth factors at ``aep``; NaN is not scored.
    distribution : str
        Law of the predicted curves.
    aep : float
    statistic : {"median", "mean"}
    wanted_years, fewest : int
        Size of a region of influence.

    Notes
    -----
    One weight at a time is multiplied or divided by 2 or 4 as long as the error falls. Easting and northing are one.
    In the search gauges of a region count by record length.
    """

    def error(weights: FloatArray, scored: IntArray) -> float:
        away = distances(*(space.reweigh(weights).gauges,) * 2)
        predicted = _predict(away, lm, distribution, aep, statistic, wanted_years, fewest)
        square = (predicted - ln_factor)[scored] ** 2
        known = np.isfinite(square)
        n = lm.n[scored][known]
        return float(np.sqrt(n @ square[known] / n.sum()))

    def search(scored: IntArray) -> FloatArray:
        weights, best = space.weights.copy(), error(space.weights, scored)
        for _ in range(_SWEEPS):
            before = best
            for columns in _together(space.names):
                for multiple in MULTIPLES:
                    trial = weights.copy()
                    trial[columns] *= multiple
                    if trial.max() > _LARGEST_RATIO * trial.min():
                        continue
                    found = error(trial, scored)
                    if found < best * (1 - 1e-9):
                        kept, best = trial, found
                        weights = kept
            if before - best < _NEGLIGIBLE_GAIN * before:
                break
        return weights

    every = np.arange(len(lm.n))
    halves = every[::2], every[1::2]
    crossed = [(error(search(a), b) ** 2, lm.n[b].sum()) for a, b in (halves, halves[::-1])]
    weights = search(every)
    return FittedWeights(
        weights,
        error(weights, every),
        error(space.weights, every),
        float(np.sqrt(sum(e * n for e, n in crossed) / sum(n for _, n in crossed))),
    )


def _predict(
    away: FloatArray,
    lm: SampleLMoments,
    distribution: str,
    aep: float,
    statistic: Statistic,
    wanted_years: int,
    fewest: int,
) -> FloatArray:
    """Ln growth factors (g,) of every gauge from the gauges most like it."""
    np.fill_diagonal(away, np.inf)
    near = min(len(away) - 1, max(fewest, int(np.ceil(2.5 * wanted_years / lm.n.mean()))))
    nearest = np.argpartition(away, near - 1, axis=1)[:, :near]
    order = np.take_along_axis(
        nearest, np.argsort(np.take_along_axis(away, nearest, 1), axis=1, kind="stable"), 1
    )
    years = lm.n[order]
    before = np.cumsum(years, axis=1) - years
    weight = np.where((before < wanted_years) | (np.arange(near) < fewest), years, 0).astype(float)
    weight /= weight.sum(axis=1, keepdims=True)
    ratios = Ratios(*((weight * ratio[order]).sum(axis=1) for ratio in (lm.t, lm.t3, lm.t4, lm.t5)))
    factor = growth_factors(distribution, ratios, np.array([aep]), statistic)[:, 0]
    return np.log(np.maximum(factor, SMALLEST_FACTOR))


def _together(names: tuple[str, ...]) -> list[list[int]]:
    places = [i for i, name in enumerate(names) if name in ("easting", "northing")]
    return [[i] for i in range(len(names)) if i not in places] + ([places] if places else [])
