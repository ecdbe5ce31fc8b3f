"""How well fitted families agree with the peaks on record, with critical values from simulation."""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray

from wrackline.hydrology.alternatives import GUMBEL_LSKEW, LOG_PEARSON3, Family, FamilyFits
from wrackline.hydrology.plotting_positions import NUMERATORS, plot_positions
from wrackline.hydrology.records import PeakRecords
from wrackline.stats.censored_sample import compress_sample
from wrackline.stats.distributions import gev, glo, pe3
from wrackline.stats.expected_lmoments import fit_expected_lmoments
from wrackline.stats.expected_moments import fit_expected_moments
from wrackline.stats.streams import random_stream

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]
BoolArray = NDArray[np.bool_]

LEVEL = 0.05
"""Of each of the two tests."""
LARGEST = 3
"""Largest floods whose relative error is averaged."""
_REPLICATES = 400
_FEWEST_FEASIBLE = 50
_N_CLASSES = np.array(
    [5, 6, 7, 8, 9, 10, 12, 14, 16, 18, 20, 23, 26, 30, 34, 38, 43, 48, 55, 62, 70, 80, 92, 105, 120, 150, 200]
)  # fmt: skip
_CENSORED_SHARES = np.array([0.05, 0.1, 0.2, 0.3, 0.4, 0.5])
# Step and range of the classes of shape of a law.
_SHAPES = {gev.NAME: (0.1, -0.6, 0.5), glo.NAME: (0.1, -0.6, 0.4), pe3.NAME: (0.5, -3.0, 4.0)}
_CLOSEST_TO_ONE = 1e-12


@dataclass(frozen=True)
class Agreement:
    """Agreement of one family with the records of all gauges; arrays of shape (g,), NaN where it is not fitted.

    Attributes
    ----------
    family : Family
    ppcc : float array
        Probability-plot correlation coefficient: of the plotted peaks and the fitted quantiles at their
        plotting positions, in flows or in logarithms as the family has them.
    ppcc_critical : float array
        Its lower 5 % point when the family is true.
    anderson_darling : float array
        Anderson-Darling statistic of the exactly known systematic peaks within their year's perception threshold, each
        by its probability under the fit given that it lies within it.
    anderson_darling_critical : float array
        Its upper 5 % point when the family is true and no peak lies beyond the bound of its fit.
    largest_floods_error : float array
        Mean of ``|fitted quantile - peak| / peak`` of the three largest plotted peaks, at their plotting positions.
    beyond_bound : bool array
        An exactly known peak lies where the fit has no probability.
    """

    family: Family
    ppcc: FloatArray
    ppcc_critical: FloatArray
    anderson_darling: FloatArray
    anderson_darling_critical: FloatArray
    largest_floods_error: FloatArray
    beyond_bound: BoolArray

    @property
    def judged(self) -> BoolArray:
        return np.isfinite(self.ppcc) & np.isfinite(self.anderson_darling)

    @property
    def serves(self) -> BoolArray:
        """True where neither test rejects the family and no peak lies beyond its bound."""
        return (
            self.judged
            & (self.ppcc >= self.ppcc_critical)
            & (self.anderson_darling <= self.anderson_darling_critical)
            & ~self.beyond_bound
        )


def judge_families(
    families: tuple[FamilyFits, ...], records: PeakRecords, numerator: str, seed: int
) -> tuple[Agreement, ...]:
    """Compare fitted families with the peaks of all gauges.

    Parameters
    ----------
    families : tuple of FamilyFits
    records : PeakRecords
        As they entered the fits, low floods set apart.
    numerator : {"weibull", "cunnane", "gringorten", "hazen"}
        Of the plotting positions.
    seed : int
        Of the simulated critical values.

    Notes
    -----
    Probability-plot correlation: Filliben (1975), Vogel (1986); plotting positions that heed thresholds: Hirsch and
    Stedinger (1987). Critical values are simulated per family for classes of record length, of the share of
    low floods and of the fitted shape, with the parameters fitted anew to every sample. Historic
    thresholds are not part of the simulation.
    """
    aep = plot_positions(records, numerator)
    n_plotted = np.bincount(records.gauge_index[np.isfinite(aep)], minlength=records.n_gauges)
    n_low = _low_years(records, aep)
    return tuple(_judge(fits, records, aep, n_plotted, n_low, numerator, seed) for fits in families)


def _judge(
    fits: FamilyFits,
    records: PeakRecords,
    aep: FloatArray,
    n_plotted: IntArray,
    n_low: IntArray,
    numerator: str,
    seed: int,
) -> Agreement:
    family, g = fits.family, records.n_gauges
    fitted = fits.fitted & (n_plotted >= LARGEST)
    own = records.gauge_index
    rows = np.flatnonzero(np.isfinite(aep) & fitted[own])
    gauge = own[rows]
    peak = np.sqrt(records.flow_low[rows]) * np.sqrt(records.flow_high[rows])
    expected = family.law.quantile(fits.parameters[gauge], 1 - aep[rows])
    in_space = np.log10(peak) if family.logarithmic else peak
    ppcc = _correlate(gauge, in_space, expected, g)
    as_flow = 10.0**expected if family.logarithmic else np.maximum(expected, 0.0)
    error = _error_of_largest(gauge, peak, as_flow, aep[rows], g)

    exact = np.flatnonzero(records.systematic_exact & fitted[own])
    within = (records.flow_low > records.perception_low) & (records.flow_low < records.perception_high)
    tested = exact[within[exact]]
    probability = [
        family.cdf(fits.parameters[own[tested]], level[tested])
        for level in (records.flow_low, records.perception_low, records.perception_high)
    ]
    with np.errstate(invalid="ignore", divide="ignore"):
        conditional = (probability[0] - probability[1]) / (probability[2] - probability[1])
    statistic = _anderson_darling(own[tested], conditional, g)
    at_peaks = family.cdf(fits.parameters[own[exact]], records.flow_low[exact])
    beyond = np.bincount(own[exact], (at_peaks <= 0) | (at_peaks >= 1), minlength=g) > 0
    critical = np.full((g, 2), np.nan)
    for i in np.flatnonzero(np.isfinite(ppcc)):
        key = _simulation_class(family, int(n_plotted[i]), int(n_low[i]), float(fits.parameters[i, 2]))
        critical[i] = critical_values(*key, numerator, seed)
    return Agreement(family, ppcc, critical[:, 0], statistic, critical[:, 1], error, beyond)


def _low_years(records: PeakRecords, aep: FloatArray) -> IntArray:
    """Years known to lie below the smallest plotted peak: what the simulated records are censored by."""
    own, g = records.gauge_index, records.n_gauges
    plotted = np.isfinite(aep)
    smallest = np.full(g, np.inf)
    np.minimum.at(smallest, own[plotted], records.flow_low[plotted])
    low = ~plotted & (records.flow_high <= smallest[own])
    return np.bincount(own[low], minlength=g)


def _correlate(gauge: IntArray, x: FloatArray, y: FloatArray, g: int) -> FloatArray:
    """Correlation of x and y within every gauge, shape (g,)."""

    def centred(values: FloatArray) -> FloatArray:
        with np.errstate(invalid="ignore"):
            mean = np.bincount(gauge, values, g) / np.bincount(gauge, minlength=g)
            return values - mean[gauge]

    x, y = centred(x), centred(y)
    with np.errstate(invalid="ignore"):
        return np.asarray(
            np.bincount(gauge, x * y, g)
            / np.sqrt(np.bincount(gauge, x * x, g) * np.bincount(gauge, y * y, g))
        )


def _error_of_largest(
    gauge: IntArray, peak: FloatArray, fitted: FloatArray, aep: FloatArray, g: int
) -> FloatArray:
    order = np.lexsort((aep, gauge))
    starts = np.searchsorted(gauge[order], np.arange(g))
    rank = np.arange(len(order)) - starts[gauge[order]]
    top = order[rank < LARGEST]
    with np.errstate(invalid="ignore"):
        total = np.bincount(gauge[top], np.abs(fitted[top] - peak[top]) / peak[top], g)
        return np.asarray(total / np.bincount(gauge[top], minlength=g))


def _anderson_darling(gauge: IntArray, probability: FloatArray, g: int) -> FloatArray:
    """Anderson-Darling statistic of the probabilities of every gauge; NaN with fewer than three."""
    n = np.bincount(gauge, minlength=g)
    order = np.lexsort((probability, gauge))
    u = np.clip(probability[order], _CLOSEST_TO_ONE, 1 - _CLOSEST_TO_ONE)
    starts = np.cumsum(n) - n
    own = gauge[order]
    rank = np.arange(len(u)) - starts[own] + 1
    mirrored = starts[own] + n[own] - rank
    terms = (2 * rank - 1) * (np.log(u) + np.log1p(-u[mirrored]))
    with np.errstate(invalid="ignore", divide="ignore"):
        return np.where(n >= 3, -n - np.bincount(own, terms, g) / n, np.nan)


def _simulation_class(
    family: Family, plotted: int, low: int, shape: float
) -> tuple[str, float, int, int, bool]:
    """Class of records that share critical values: law, shape, length, low years, and whether the shape is fitted."""
    n = int(_N_CLASSES[np.argmin(np.abs(np.log(_N_CLASSES / (plotted + low))))])
    share = low / (plotted + low)
    censored = 0
    if low:
        censored = max(1, round(n * float(_CENSORED_SHARES[np.argmin(np.abs(_CENSORED_SHARES - share))])))
    if family.lskew is not None:
        return family.law.NAME, 0.0, n, censored, False
    name = LOG_PEARSON3.name if family is LOG_PEARSON3 else family.law.NAME
    step, lowest, highest = _SHAPES[family.law.NAME]
    return name, float(np.clip(round(shape / step) * step, lowest, highest)), n, censored, True


@lru_cache(maxsize=4096)
def critical_values(
    law_name: str, shape: float, n: int, censored: int, fit_shape: bool, numerator: str, seed: int
) -> tuple[float, float]:
    """Return the 5 % points of the two statistics when a family is true: correlation, Anderson-Darling.

    Parameters
    ----------
    law_name : str
        ``GEV``, ``GLO``, ``PE3``, or ``log_pearson3`` for Pearson III fitted by expected moments.
    shape : float
        Of the law (skew for Pearson III).
    n, censored : int
        Length of the records, and how many of the smallest are known only to lie below the next.
    fit_shape : bool
    numerator : str
    seed : int
    """
    law = {gev.NAME: gev, glo.NAME: glo}.get(law_name, pe3)
    stream = random_stream(seed, "atsite", f"critical {law_name} {shape:.3f} {n} {censored} {fit_shape}")
    truth = np.array([0.0, 1.0, shape])
    x = np.sort(law.quantile(truth, stream.random((_REPLICATES, n))), axis=1)
    low, high = x.copy(), x.copy()
    if censored:
        low[:, :censored], high[:, :censored] = -np.inf, x[:, [censored]]
    offsets = np.arange(_REPLICATES + 1) * n
    if law_name == LOG_PEARSON3.name:
        own = np.repeat(np.arange(_REPLICATES), n)
        moments = fit_expected_moments(
            compress_sample(own, low.ravel(), high.ravel(), _REPLICATES), tolerance=1e-6
        )
        parameters = np.stack([moments.mean, moments.sd, moments.skew], axis=-1)
    else:
        lskew = None if fit_shape else GUMBEL_LSKEW if law is gev else 0.0
        # A step of 0.003 L-scales is small beside the sampling error, which is what is simulated.
        parameters, _ = fit_expected_lmoments(
            law, low.ravel(), high.ravel(), offsets, lskew, 3e-3, 50, np.tile(truth, (_REPLICATES, 1))
        )
    fitted = np.isfinite(parameters).all(axis=1)
    x, parameters = x[fitted], parameters[fitted]
    plotted = n - censored
    a = NUMERATORS[numerator]
    aep = plotted / n * (np.arange(plotted, 0, -1) - a) / (plotted + 1 - 2 * a)
    own = np.repeat(np.arange(len(x)), plotted)
    peaks = x[:, censored:].ravel()
    expected = law.quantile(parameters[own], np.tile(1 - aep, len(x)))
    ppcc = _correlate(own, peaks, expected, len(x))
    probability = law.cdf(parameters[own], peaks)
    outside = (probability <= 0) | (probability >= 1)
    feasible = np.bincount(own, outside, minlength=len(x)) == 0
    if censored:
        by_record = probability.reshape(len(x), plotted)
        base = by_record[:, :1]
        probability = ((by_record[:, 1:] - base) / (1 - base)).ravel()
        own = np.repeat(np.arange(len(x)), plotted - 1)
    statistic = _anderson_darling(own, probability, len(x))
    # A fit with a peak beyond its bound does not serve anyway, and its statistic has no size of its own.
    judged = statistic[feasible] if feasible.sum() >= _FEWEST_FEASIBLE else statistic
    return float(np.quantile(ppcc, LEVEL)), float(np.quantile(judged, 1 - LEVEL))
