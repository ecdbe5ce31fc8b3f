"""Parametric bootstrap of one gauge's fit: what other records of the same river could have said."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from wrackline.hydrology.at_site import describe_observation, weighting
from wrackline.hydrology.record_fits import RecordFits
from wrackline.stats.censored_sample import CensoredSample
from wrackline.stats.expected_moments import ExpectedMoments, fit_expected_moments
from wrackline.stats.moment_covariance import ThresholdClasses
from wrackline.stats.pearson3 import EXPANSION_SKEW, frequency_factor

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

_TOLERANCE = 1e-4


@dataclass(frozen=True)
class BootstrapFits:
    """Refits of simulated records of one gauge.

    Attributes
    ----------
    moments : ExpectedMoments
        Of the replicates, shape (r,) each.
    log10_quantile : float array (r, a)
        NaN where a replicate could not be fitted.
    log10_lower, log10_upper : float arrays (a,)
        Percentiles of the refitted quantiles.
    refused : int
        Replicates without a fit.
    """

    moments: ExpectedMoments
    log10_quantile: FloatArray
    log10_lower: FloatArray
    log10_upper: FloatArray
    refused: int


def bootstrap_fit(
    fits: RecordFits, gauge: int, replicates: int, stream: np.random.Generator, aeps: FloatArray | None = None
) -> BootstrapFits:
    """Draw records from a gauge's fitted distribution, observe them through its thresholds, and refit each.

    Parameters
    ----------
    fits : RecordFits
    gauge : int
        Number of the gauge.
    replicates : int
    stream : numpy.random.Generator
    aeps : float array (a,), optional
        Those of the fits by default.

    Returns
    -------
    BootstrapFits

    Raises
    ------
    ValueError
        When the gauge has no fit.

    Notes
    -----
    A generalized skew is drawn anew for each replicate with its mean square error. The low-flood threshold is
    kept. The percentiles show the spread of the estimate; coverage was measured for the limits
    of `RecordFits`, which are the ones to publish.
    """
    if fits.refusal[gauge]:
        raise ValueError(f"gauge {fits.gauge_ids[gauge]} has no fit: {fits.refusal[gauge]}")
    aeps = fits.aeps if aeps is None else np.asarray(aeps, dtype=float)
    moments = fits.best.moments
    mean, sd, skew = float(moments.mean[gauge]), float(moments.sd[gauge]), float(moments.skew[gauge])
    _, classes = describe_observation(fits.fitted_records.keep_gauges([gauge]))
    sample = draw_samples(classes, mean, sd, skew, replicates, stream)
    rule = None
    if fits.weighted is not None and fits.generalized_skew_mse is not None:
        mse = fits.generalized_skew_mse[gauge]
        if np.isfinite(mse):
            drawn = skew + np.sqrt(mse) * stream.standard_normal(replicates)
            ratio = np.full(replicates, fits.censoring_ratio[gauge])
            rule = weighting(drawn, np.full(replicates, mse), sample.years, ratio)
    refits = fit_expected_moments(sample, rule, tolerance=_TOLERANCE, parent=(mean, sd, skew))
    quantile = refits.mean[:, None] + refits.sd[:, None] * frequency_factor(
        aeps[None, :], refits.skew[:, None]
    )
    tail = 0.5 * (1 - fits.confidence)
    made = quantile[refits.fitted]
    lower, upper = (
        np.quantile(made, [tail, 1 - tail], axis=0) if len(made) else np.full((2, len(aeps)), np.nan)
    )
    return BootstrapFits(refits, quantile, lower, upper, int(np.sum(~refits.fitted)))


def draw_samples(
    classes: ThresholdClasses,
    mean: float,
    sd: float,
    skew: float,
    replicates: int,
    stream: np.random.Generator,
) -> CensoredSample:
    """Draw Pearson III samples of one gauge and censor them by its thresholds.

    The replicates are the gauges of the result.
    """
    years = classes.years
    # Deviations from the parent's mean, worked on in place: the passes over this array are most of the cost.
    d = _draw_standardised(skew, (replicates, int(years.sum())), stream)
    d *= sd
    low, high = np.repeat(classes.low, years) - mean, np.repeat(classes.high, years) - mean
    starts = np.concatenate([[0], np.cumsum(years)[:-1]])
    open_end = np.full(len(years), np.inf)
    count = np.full(replicates, d.shape[1], dtype=np.int64)
    pieces: list[tuple[IntArray, FloatArray, FloatArray, IntArray]] = []
    outside_any = np.zeros(d.shape, dtype=bool)
    for outside, bottom, top in ((d < low, -open_end, classes.low), (d > high, classes.high, open_end)):
        if not outside.any():
            continue
        counts = np.add.reduceat(outside, starts, axis=1, dtype=np.int64)
        row, column = np.nonzero(counts)
        pieces.append((row, bottom[column], top[column], counts[row, column]))
        count -= counts.sum(axis=1)
        outside_any |= outside
    if pieces:
        smallest = np.where(outside_any, np.inf, d).min(axis=1)
        largest = np.where(outside_any, -np.inf, d).max(axis=1)
        d *= ~outside_any
    else:
        smallest, largest = d.min(axis=1), d.max(axis=1)
    square = d * d
    share = np.maximum(count, 1)
    first, second, third = d.sum(axis=1) / share, square.sum(axis=1), np.einsum("ij,ij->i", square, d)
    return CensoredSample(
        exact_count=count,
        exact_mean=mean + first,
        exact_squares=second - count * first**2,
        exact_cubes=third - 3 * first * second + 2 * count * first**3,
        exact_smallest=mean + smallest,
        exact_largest=mean + largest,
        **_join_classes(pieces),
    )


def _join_classes(pieces: list[tuple[IntArray, FloatArray, FloatArray, IntArray]]) -> dict[str, Any]:
    """Classes of censored years below and above, in the order of the replicates."""
    row, bottom, top, years = (
        (np.concatenate(column) for column in zip(*pieces, strict=True)) if pieces else (np.zeros(0),) * 4
    )
    order = np.argsort(row, kind="stable")
    return {
        "class_gauge": row[order].astype(np.int64),
        "class_low": bottom[order],
        "class_high": top[order],
        "class_years": years[order].astype(np.int64),
    }


def _draw_standardised(skew: float, size: tuple[int, int], stream: np.random.Generator) -> FloatArray:
    """Standardised Pearson III variates."""
    if abs(skew) < EXPANSION_SKEW:
        z = stream.standard_normal(size)
        return z + skew / 6 * (z * z - 1)
    c = 0.5 * skew
    w = stream.standard_gamma(c**-2, size=size)
    w -= c**-2
    w *= c
    return w
