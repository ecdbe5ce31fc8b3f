"""Which attributes a regression takes: all subsets ranked, the sound ones fitted, the best named."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from wrackline.hydrology.records import FloatArray
from wrackline.stats.gls import Method, fit_gls
from wrackline.stats.gls_leave_one_out import leave_one_out
from wrackline.stats.subset_search import rank_subsets, variance_inflation

SHOWN = 20
SMALLEST_RATIO = 2.0
"""Coefficients of a chosen subset are at least this many standard errors from zero."""


@dataclass(frozen=True)
class SubsetFit:
    """One subset of attributes, fitted.

    Attributes
    ----------
    attributes : tuple of str
    model_variance, prediction_variance : float
        Model-error variance, and average variance of prediction, log10 squared.
    left_out_error : float
        Mean square difference between gauges and their prediction without themselves, sampling error of the
        gauges included.
    smallest_ratio : float
        Smallest coefficient over its standard error; NaN without attributes.
    largest_inflation : float
    wrong_signs : tuple of str
        Attributes whose coefficients have a sign that the analyst ruled out.
    objections : tuple of str
        Why the subset cannot be chosen; empty: sound.
    """

    attributes: tuple[str, ...]
    model_variance: float
    prediction_variance: float
    left_out_error: float
    smallest_ratio: float
    largest_inflation: float
    wrong_signs: tuple[str, ...]
    objections: tuple[str, ...]


@dataclass(frozen=True)
class AttributeChoice:
    """The best subsets by average variance of prediction, and the one that the evidence chooses.

    Attributes
    ----------
    subsets : up to twenty of `SubsetFit`
        Smallest average variance of prediction first.
    best : SubsetFit
        Smallest average variance of prediction among all sound subsets; the empty one where none is sound.
    tried : int
    """

    subsets: tuple[SubsetFit, ...]
    best: SubsetFit
    tried: int


def choose_attributes(
    y: FloatArray,
    base: FloatArray,
    candidates: FloatArray,
    names: Sequence[str],
    signs: Sequence[str],
    sampling: FloatArray,
    largest: int,
    largest_inflation: float,
    method: Method = "reml",
) -> AttributeChoice:
    """Rank all subsets of up to ``largest`` attributes by average variance of prediction, and choose one.

    Parameters
    ----------
    y : (n,)
    base : (n, k0)
        Intercepts.
    candidates : (n, c)
        Transformed attributes.
    names, signs : c each
        ``signs``: ``any``, ``positive`` or ``negative``.
    sampling : (n, n)

    Notes
    -----
    A subset is sound when every coefficient is two standard errors from zero, has a physical sign, and no
    variance inflation factor is above the limit. The chosen one has the smallest average variance of
    prediction among the sound ones.
    """
    ranking = rank_subsets(y, base, candidates, sampling, largest)
    wanted = np.array([{"positive": 1.0, "negative": -1.0}.get(sign, 0.0) for sign in signs])
    wrong = (np.sign(np.nan_to_num(ranking.coefficients)) * wanted < 0).any(axis=1)
    weak = (np.abs(ranking.ratios) < SMALLEST_RATIO).any(axis=1)
    best: int | None = None
    for i in np.flatnonzero(~wrong & ~weak).tolist():
        taken = ranking.members[i]
        if variance_inflation(candidates[:, taken]).max(initial=1.0) <= largest_inflation:
            best = i
            break
    shown = list(range(min(SHOWN, len(ranking.members))))
    if best is None:
        best = int(np.flatnonzero(~ranking.members.any(axis=1))[0])
    fitted = {
        i: _fit_subset(
            y, base, candidates, names, wanted, sampling, ranking.members[i], largest_inflation, method
        )
        for i in sorted({*shown, best})
    }
    subsets = sorted((fitted[i] for i in shown), key=lambda subset: subset.prediction_variance)
    sound = [subset for subset in subsets if not subset.objections]
    return AttributeChoice(tuple(subsets), sound[0] if sound else fitted[best], len(ranking.members))


def _fit_subset(
    y: FloatArray,
    base: FloatArray,
    candidates: FloatArray,
    names: Sequence[str],
    wanted: FloatArray,
    sampling: FloatArray,
    taken: np.ndarray,
    largest_inflation: float,
    method: Method,
) -> SubsetFit:
    design = np.column_stack([base, candidates[:, taken]])
    fit = fit_gls(y, design, sampling, method)
    left_out = leave_one_out(y, design, sampling, fit)
    k0 = base.shape[1]
    coefficients = fit.coefficients[k0:]
    ratios = np.abs(coefficients) / np.sqrt(np.diagonal(fit.coefficient_covariance))[k0:]
    chosen = [name for name, take in zip(names, taken, strict=True) if take]
    inflation = variance_inflation(candidates[:, taken]).max(initial=1.0)
    wrong = tuple(
        name for name, b, sign in zip(chosen, coefficients, wanted[taken], strict=True) if b * sign < 0
    )
    objections = [f"sign of {name}" for name in wrong]
    if (ratios < SMALLEST_RATIO).any():
        objections.append(
            f"weak: {', '.join(n for n, r in zip(chosen, ratios, strict=True) if r < SMALLEST_RATIO)}"
        )
    if inflation > largest_inflation:
        objections.append(f"inflation {inflation:.1f}")
    return SubsetFit(
        attributes=tuple(chosen),
        model_variance=fit.model_variance,
        prediction_variance=float(fit.prediction_variance.mean()),
        left_out_error=float(((y - left_out.predicted) ** 2).mean()),
        smallest_ratio=float(ratios.min()) if len(ratios) else float("nan"),
        largest_inflation=float(inflation),
        wrong_signs=wrong,
        objections=tuple(objections),
    )
