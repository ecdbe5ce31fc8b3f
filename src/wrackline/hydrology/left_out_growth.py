"""Growth factors of a pool without one gauge, or without a block of gauges, from averages taken apart again."""

from __future__ import annotations

import numpy as np

from wrackline.hydrology.growth_curves import SMALLEST_FACTOR, Ratios, Statistic, fit_curve
from wrackline.hydrology.records import FloatArray
from wrackline.stats import distributions


def left_out_growth_factors(
    distribution: str,
    ratios: FloatArray,
    weight: FloatArray,
    left_out: FloatArray,
    aeps: FloatArray,
    statistic: Statistic,
    weight_lskew: FloatArray | None = None,
) -> FloatArray:
    """Growth factors (m, p) of the pool's law fitted without some of its gauges.

    Parameters
    ----------
    distribution : str
        The pool's law: its choice is kept.
    ratios : (n, 4)
        L-CV, L-skew, L-kurtosis and fifth ratio of the pool's gauges.
    weight : (n,)
        Weights of the gauges in the averages.
    left_out : (m, n) of 0 and 1
        Which gauges each of the m pools lacks.
    aeps : (p,)
    weight_lskew : (n,), optional
        Weights in the averages of L-skew and higher ratios; by default those of L-CV.

    Notes
    -----
    Averages are linear in the gauges' ratios, so leaving some out is exact. Where the law does not exist for the
    remaining averages the factors are NaN.
    """
    first = _averages(ratios[:, :1], weight, left_out)
    rest = _averages(ratios[:, 1:], weight if weight_lskew is None else weight_lskew, left_out)
    averages = np.column_stack([first, rest])
    averages[~np.isfinite(averages).all(axis=1)] = np.nan
    unique, inverse = np.unique(np.nan_to_num(averages, nan=-9.0), axis=0, return_inverse=True)
    law = distributions.BY_NAME[distribution]
    lcv, lskew, lkurtosis, l5 = unique.T
    with np.errstate(all="ignore"):
        parameters = np.asarray(law.fit(np.ones(len(unique)), lcv, lskew, lkurtosis, l5), dtype=float)
    factors = np.full((len(unique), len(aeps)), np.nan)
    fitted = np.isfinite(parameters).all(axis=1) & (lcv > 0)
    if fitted.any():
        own = parameters[fitted][:, None, :]
        quantiles = law.quantile(own, 1.0 - np.asarray(aeps))
        scale = law.quantile(own, np.array([0.5])) if statistic == "median" else 1.0
        factors[fitted] = np.maximum(quantiles / scale, SMALLEST_FACTOR)
    for i in np.flatnonzero(~fitted & (lcv > 0)):
        try:
            curve = fit_curve(distribution, Ratios(*unique[i]), statistic)
        except ValueError:
            continue
        factors[i] = np.maximum(curve.factor(np.asarray(aeps)), SMALLEST_FACTOR)
    return factors[inverse.ravel()]


def _averages(ratios: FloatArray, weight: FloatArray, left_out: FloatArray) -> FloatArray:
    kept = (1.0 - left_out) * weight
    with np.errstate(invalid="ignore", divide="ignore"):
        return np.asarray(kept @ np.nan_to_num(ratios) / kept.sum(axis=1)[:, None])
