"""Parametric bootstrap of one gauge's fit: what other records of the same river could have said."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from wrackline.hydrology.at_site import describe_observation, weighting
from wrackline.hydrology.record_fits import RecordFits
from wrackline.stats.censored_sample import CensoredSample
from wrackline.stats.expected_moments import ExpectedMoments, fit_expected_moments
from wrackline.stats.moment_covariance import ThresholdClasses
from wrackline.stats.pearson3 import EXPANSION_SKEW, frequency_factor

FloatArray = NDArray[np.float64]


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
    refits = fit_expected_moments(sample, rule, tolerance=1e-6)
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
    x = mean + sd * _draw_standardised(skew, (replicates, int(years.sum())), stream)
    low, high = np.repeat(classes.low, years), np.repeat(classes.high, years)
    starts = np.concatenate([[0], np.cumsum(years)[:-1]])
    below, above = x < low, x > high
    exact = ~(below | above)
    count = exact.sum(axis=1)
    known = np.where(exact, x, 0.0)
    centre = known.sum(axis=1) / np.maximum(count, 1)
    deviation = np.where(exact, x - centre[:, None], 0.0)
    square = deviation * deviation
    pieces = []
    for outside, ends in (
        (below, (np.full(len(years), -np.inf), classes.low)),
        (above, (classes.high, np.full(len(years), np.inf))),
    ):
        if outside.any():
            counts = np.add.reduceat(outside, starts, axis=1, dtype=np.int64)
            row, column = np.nonzero(counts)
            pieces.append((row, ends[0][column], ends[1][column], counts[row, column]))
    row = np.concatenate([piece[0] for piece in pieces]) if pieces else np.zeros(0, dtype=np.int64)
    order = np.argsort(row, kind="stable")

    def column_of(i: int) -> NDArray[np.float64]:
        return np.concatenate([piece[i] for piece in pieces])[order] if pieces else np.zeros(0)

    return CensoredSample(
        exact_count=count,
        exact_mean=centre,
        exact_squares=square.sum(axis=1),
        exact_cubes=np.einsum("ij,ij->i", square, deviation),
        exact_smallest=np.where(exact, x, np.inf).min(axis=1),
        exact_largest=np.where(exact, x, -np.inf).max(axis=1),
        class_gauge=row[order],
        class_low=column_of(1),
        class_high=column_of(2),
        class_years=column_of(3).astype(np.int64),
    )


def _draw_standardised(skew: float, size: tuple[int, int], stream: np.random.Generator) -> FloatArray:
    """Standardised Pearson III variates."""
    if abs(skew) < EXPANSION_SKEW:
        z = stream.standard_normal(size)
        return z + skew / 6 * (z * z - 1)
    c = 0.5 * skew
    return c * (stream.standard_gamma(c**-2, size=size) - c**-2)
