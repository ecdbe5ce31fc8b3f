"""Ways of pooling compared: how well each predicts the growth curves of gauges that it has not seen."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from wrackline.hydrology.growth_curves import SMALLEST_FACTOR, Ratios, Statistic, growth_factors
from wrackline.hydrology.homogeneity import PresortedDraws, fit_parent, simulate_independent
from wrackline.hydrology.records import BoolArray, FloatArray, IntArray
from wrackline.stats import distributions
from wrackline.stats.lmoments import SampleLMoments


@dataclass(frozen=True)
class OwnCurves:
    """Growth factors of gauges from their own records alone, by one law for all.

    Attributes
    ----------
    distribution : str
    ln_factor : (g, a)
        Natural logarithm; NaN where the law cannot be fitted.
    ln_sd : (g, a)
        Its sampling standard deviation, by simulation from the region's law.
    """

    distribution: str
    ln_factor: FloatArray
    ln_sd: FloatArray


@dataclass(frozen=True)
class PoolingScore:
    """Leave-one-out score of one way of pooling at one probability.

    Attributes
    ----------
    method : str
    aep : float
    n_gauges : int
    bias : float
        Mean of ln predicted minus ln observed, weighted by record length.
    rmse : float
        Root mean square of the same.
    own_sampling : float
        Root mean square of the sampling error of the gauges' own factors: part of ``rmse``.
    net : float
        ``sqrt(rmse^2 - own_sampling^2)``: the pooled uncertainty measure net of the gauges' own sampling error.
    net_se : float
        Standard error of ``net``, leaving out one gauge at a time.
    covered : float
        Share of gauges whose own factor lies in the interval, its own sampling error allowed for; NaN without intervals.
    """

    method: str
    aep: float
    n_gauges: int
    bias: float
    rmse: float
    own_sampling: float
    net: float
    net_se: float
    covered: float


def fit_own_curves(
    lm: SampleLMoments, aep: FloatArray, statistic: Statistic, draws: PresortedDraws
) -> OwnCurves:
    """Fit every gauge's own growth curve and simulate its sampling error.

    Parameters
    ----------
    lm : SampleLMoments, arrays (g,)
    aep : (a,)
    statistic : {"median", "mean"}
    draws : PresortedDraws

    Notes
    -----
    The law is the three-parameter candidate whose L-kurtosis is nearest to the average of all gauges, the same for
    every way of pooling. Sampling errors are those of records of the gauge's length from the law of the
    average ratios with the gauge's L-CV drawn halfway to it.
    """
    n = lm.n / lm.n.sum()
    average = [float(n @ ratio) for ratio in (lm.t, lm.t3, lm.t4)]
    miss = {
        name: abs(float(law.fourth_ratio(average[1])) - average[2])
        for name, law in distributions.CANDIDATES.items()
    }
    name = min(miss, key=lambda law: miss[law])
    own = np.log(
        np.maximum(growth_factors(name, Ratios(lm.t, lm.t3, lm.t4, lm.t5), aep, statistic), SMALLEST_FACTOR)
    )
    sd = np.empty_like(own)
    for length in np.unique(lm.n):
        of = np.flatnonzero(lm.n == length)
        for lcv in np.unique(np.round((lm.t[of] + average[0]) / 2, 2)):
            here = of[np.round((lm.t[of] + average[0]) / 2, 2) == lcv]
            simulated = simulate_independent(np.array([length]), fit_parent(lcv, *average[1:]), draws)
            ratios = Ratios(
                *(r[:, 0] for r in (simulated.lcv, simulated.lskew, simulated.lkurtosis, simulated.l5))
            )
            factor = growth_factors(name, ratios, aep, statistic)
            sd[here] = np.nanstd(np.log(np.maximum(factor, SMALLEST_FACTOR)), axis=0)
    return OwnCurves(name, own, sd)


def predict_without(
    distribution: Sequence[str], ratios: Sequence[Ratios], aep: FloatArray, statistic: Statistic
) -> FloatArray:
    """Return ln growth factors (g, a) of pools that lack the gauge they are for.

    Parameters
    ----------
    distribution : g names of laws
    ratios : g sets of ratios
    aep : (a,)
    statistic : {"median", "mean"}
    """
    names = np.array(distribution)
    out = np.full((len(names), len(aep)), np.nan)
    for name in np.unique(names):
        of = np.flatnonzero(names == name)
        columns = Ratios(*(np.array([ratios[int(i)][c] for i in of], dtype=float) for c in range(4)))
        out[of] = np.log(np.maximum(growth_factors(str(name), columns, aep, statistic), SMALLEST_FACTOR))
    return out


def score(
    method: str,
    predicted: FloatArray,
    predicted_sd: FloatArray | None,
    own: OwnCurves,
    n: IntArray,
    aep: FloatArray,
    judged: BoolArray,
    confidence: float,
) -> tuple[PoolingScore, ...]:
    """Score one way of pooling over the gauges judged.

    Parameters
    ----------
    method : str
    predicted, predicted_sd : (g, a)
        ln growth factors without the gauge, and their standard errors for a new site.
    own : OwnCurves
    n : (g,)
        Record lengths, the weights.
    aep : (a,)
    judged : bool (g,)
        Gauges with records long enough to be compared with.
    confidence : float

    Notes
    -----
    The pooled uncertainty measure of Robson and Reed (1999), which contains the gauge's own sampling error;
    that part is subtracted.
    """
    from scipy.special import ndtri

    z = float(ndtri((1 + confidence) / 2))
    scores = []
    for j, p in enumerate(aep):
        error, own_sd = predicted[:, j] - own.ln_factor[:, j], own.ln_sd[:, j]
        of = np.flatnonzero(judged & np.isfinite(error) & np.isfinite(own_sd))
        if not of.size:
            continue
        weight, e, s = n[of].astype(float), error[of], own_sd[of]
        square, sampling = weight * e**2, weight * s**2
        total = weight.sum()
        net = _net(square.sum() - sampling.sum(), total)
        if len(of) > 1:
            without = _net(square.sum() - square - sampling.sum() + sampling, total - weight)
            net_se = float(np.sqrt((len(of) - 1) / len(of) * ((without - without.mean()) ** 2).sum()))
        else:
            net_se = float("nan")
        covered = float("nan")
        if predicted_sd is not None:
            spread = np.sqrt(predicted_sd[of, j] ** 2 + s**2)
            known = np.isfinite(spread)
            if known.any():
                covered = float((np.abs(e[known]) <= z * spread[known]).mean())
        scores.append(
            PoolingScore(
                method, float(p), len(of), float(weight @ e / total), float(np.sqrt(square.sum() / total)),
                float(np.sqrt(sampling.sum() / total)), float(net), net_se, covered,
            )
        )  # fmt: skip
    return tuple(scores)


def _net(excess: FloatArray, total: FloatArray) -> FloatArray:
    return np.sqrt(np.maximum(excess / total, 0.0))
