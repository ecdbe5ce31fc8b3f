"""Whether the gauges of a pool could share one law, and which law: simulated heterogeneity and fit measures."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.special import log_ndtr

from wrackline.hydrology.law_fits import fit_law
from wrackline.hydrology.records import FloatArray, IntArray
from wrackline.stats import distributions
from wrackline.stats.copula import draw_sorted_records
from wrackline.stats.lmoments import order_weights
from wrackline.stats.streams import random_stream

LARGEST_ACCEPTED_Z = 1.64
_NEAR_ZERO = 0.003
"""Shape below which quantiles are taken by functions that are exact near zero."""
BLOCK = 250
"""Simulated regions per block of the correlated simulation: what a core's cache holds well."""


@dataclass(frozen=True)
class Parent:
    """The law that simulated gauges share: a kappa law with mean one.

    Attributes
    ----------
    name : {"kappa", "GLO"}
        ``GLO`` where no kappa law has the pool's L-kurtosis and its limit, the generalized logistic, is used.
    parameters : (4,)
        Location, scale, and the two shapes ``k`` and ``h``.
    """

    name: str
    parameters: FloatArray


@dataclass(frozen=True)
class SimulatedRatios:
    """Sample L-moment ratios of s simulated regions of g gauges, each (s, g)."""

    lcv: FloatArray
    lskew: FloatArray
    lkurtosis: FloatArray
    l5: FloatArray

    @property
    def n_simulations(self) -> int:
        return len(self.lcv)


@dataclass(frozen=True)
class Heterogeneity:
    """Heterogeneity measures H1, H2, H3 of a pool, each array (3,).

    ``dispersion`` is the observed scatter V between gauges (of L-CV; L-CV and L-skew; L-skew and L-kurtosis),
    ``simulated_mean`` and ``simulated_sd`` that of homogeneous regions, ``h`` their standardised difference and
    ``h_se`` the simulation error of ``h``.
    """

    dispersion: FloatArray
    simulated_mean: FloatArray
    simulated_sd: FloatArray
    h: FloatArray
    h_se: FloatArray
    n_simulations: int


@dataclass(frozen=True)
class FitMeasures:
    """Goodness-of-fit measures Z of the three-parameter candidates.

    Attributes
    ----------
    names : tuple of str, length c
    lkurtosis : (c,)
        L-kurtosis of every candidate at the pool's L-skew.
    z, z_se : (c,)
        The measure and its simulation error.
    bias, sd : float
        Bias and standard deviation of the regional average L-kurtosis, from the simulation.
    """

    names: tuple[str, ...]
    lkurtosis: FloatArray
    z: FloatArray
    z_se: FloatArray
    bias: float
    sd: float

    @property
    def accepted(self) -> NDArray[np.bool_]:
        return np.abs(self.z) <= LARGEST_ACCEPTED_Z


class PresortedDraws:
    """Sorted log-uniform samples that pools share, made once for every record length.

    The k-th gauge of a given record length gets the same draws in every pool, so H is comparable between
    neighbouring pools, does not depend on the order of gauges, and costs no new draws after the first pool.

    Parameters
    ----------
    seed : int
    n_simulations : int
    memory_mb : float
        What may be kept; draws beyond it are made again when asked for, to the same numbers.
    """

    def __init__(self, seed: int, n_simulations: int, memory_mb: float = 400.0) -> None:
        self.seed = seed
        self.n_simulations = n_simulations
        self._room = int(memory_mb * 2**20)
        self._kept: dict[tuple[int, int], FloatArray] = {}

    def log_uniforms(self, length: int, rank: int) -> FloatArray:
        """Return logarithms of sorted uniforms (n_simulations, length), ascending, read-only."""
        found = self._kept.get((length, rank))
        if found is None:
            found = self._draw(length, rank)
            if found.nbytes <= self._room:
                self._room -= found.nbytes
                self._kept[length, rank] = found
        return found

    def more(self, n_simulations: int) -> PresortedDraws:
        """Return draws for more simulations from the same seed, kept only as long as they are used."""
        return PresortedDraws(self.seed, n_simulations, 0)

    def _draw(self, length: int, rank: int) -> FloatArray:
        stream = random_stream(self.seed, "presorted", f"{length}:{rank}")
        gaps = stream.standard_exponential((self.n_simulations, length))
        # Renyi (1953): sorted exponentials are running sums of scaled exponentials, so nothing needs sorting;
        # a gap of exactly zero would put the largest value at certainty
        np.maximum(gaps, np.finfo(float).tiny, out=gaps)
        gaps /= -np.arange(length, 0, -1.0)
        np.cumsum(gaps, axis=1, out=gaps)
        draws = np.ascontiguousarray(gaps[:, ::-1])
        draws.flags.writeable = False
        return draws


def fit_parent(lcv: float, lskew: float, lkurtosis: float) -> Parent:
    """Fit the kappa law with mean one to a pool's L-moment ratios (Hosking, 1994).

    Where the L-kurtosis lies on or above that of the generalized logistic law no kappa law exists and that
    law, its limit, is taken (Hosking and Wallis, 1997, section 5.2).

    Raises
    ------
    ValueError
        When the ratios belong to no law at all.
    """
    parameters = fit_law("KAP", lcv, lskew, lkurtosis)
    if np.isfinite(parameters).all():
        return Parent("kappa", parameters)
    parameters = np.append(fit_law("GLO", lcv, lskew, lkurtosis), -1.0)
    if not np.isfinite(parameters).all():
        raise ValueError(f"no law has L-CV {lcv:.4g}, L-skew {lskew:.4g}, L-kurtosis {lkurtosis:.4g}")
    return Parent("GLO", parameters)


def simulate_independent(n: IntArray, parent: Parent, draws: PresortedDraws) -> SimulatedRatios:
    """Simulate regions of independent gauges that share one law.

    Parameters
    ----------
    n : int array (g,)
        Record lengths.
    parent : Parent
    draws : PresortedDraws
    """
    ratios = np.empty((4, draws.n_simulations, len(n)))
    seen: dict[int, int] = {}
    for i, length in enumerate(n.tolist()):
        rank = seen.get(length, 0)
        seen[length] = rank + 1
        ratios[:, :, i] = _sample_ratios(draws.log_uniforms(length, rank), parent)
    return SimulatedRatios(*ratios)


def simulate_concurrent(
    rng: np.random.Generator,
    years: Sequence[IntArray],
    lower: FloatArray,
    parent: Parent,
    n_simulations: int,
) -> SimulatedRatios:
    """Simulate regions whose gauges share one law and, in the years they have in common, correlated floods.

    Parameters
    ----------
    rng : numpy.random.Generator
    years : sequence of g int arrays
        Water years of every record.
    lower : (g, g)
        Cholesky factor of the correlation of the Gaussian copula.
    parent : Parent
    n_simulations : int
    """
    numbers, n_years = number_years(years)
    ratios = np.empty((4, n_simulations, len(years)))
    for begin in range(0, n_simulations, BLOCK):
        block = slice(begin, min(begin + BLOCK, n_simulations))
        size = block.stop - block.start
        for i, record in enumerate(draw_sorted_records(rng, lower, numbers, n_years, size)):
            ratios[:, block, i] = _sample_ratios(log_ndtr(record, out=record), parent)
    return SimulatedRatios(*ratios)


def number_years(years: Sequence[IntArray]) -> tuple[list[IntArray], int]:
    """Number the years that any gauge has from zero; returns each gauge's numbers and how many there are."""
    every = np.unique(np.concatenate(list(years)))
    return [np.searchsorted(every, held) for held in years], len(every)


def measure_dispersion(n: IntArray, lcv: FloatArray, lskew: FloatArray, lkurtosis: FloatArray) -> FloatArray:
    """Measure the scatter of L-moment ratios between gauges: V1, V2, V3 along the first axis, (3, ...).

    Parameters
    ----------
    n : (g,)
        Record lengths, the weights.
    lcv, lskew, lkurtosis : (..., g)

    Notes
    -----
    Hosking and Wallis (1993); V1 is a standard deviation, with the square root.
    """
    weight = n / n.sum()
    away2, away3, away4 = ((r - (r @ weight)[..., None]) ** 2 for r in (lcv, lskew, lkurtosis))
    return np.stack(
        [np.sqrt(away2 @ weight), np.sqrt(away2 + away3) @ weight, np.sqrt(away3 + away4) @ weight]
    )


def measure_heterogeneity(
    n: IntArray, lcv: FloatArray, lskew: FloatArray, lkurtosis: FloatArray, simulated: SimulatedRatios
) -> Heterogeneity:
    """Compare the observed scatter between gauges with that of simulated homogeneous regions.

    Parameters
    ----------
    n, lcv, lskew, lkurtosis : (g,)
    simulated : SimulatedRatios of the same gauges

    Notes
    -----
    Hosking and Wallis (1993, 1997). One gauge alone gives NaN. The simulation error of H is ``sqrt(1 / s + H^2 / (2 s))``.
    """
    observed = measure_dispersion(n, lcv, lskew, lkurtosis)
    v = measure_dispersion(n, simulated.lcv, simulated.lskew, simulated.lkurtosis)
    mean, sd, s = v.mean(axis=1), v.std(axis=1, ddof=1), simulated.n_simulations
    h = (observed - mean) / sd if len(n) > 1 else np.full(3, np.nan)
    return Heterogeneity(observed, mean, sd, h, np.sqrt((1 + h**2 / 2) / s), s)


def h1_without_each(n: IntArray, lcv: FloatArray, simulated: SimulatedRatios) -> FloatArray:
    """Return H1 of a pool without each of its gauges in turn, (g,), by the simulated regions of the whole pool.

    Parameters
    ----------
    n, lcv : (g,)
    simulated : SimulatedRatios of the same gauges

    Notes
    -----
    The scatter without a gauge follows from sums over all gauges, so this costs no new simulation; the parent
    law stays that of the whole pool. NaN where fewer than two gauges would be left.
    """
    if len(n) < 3:
        return np.full(len(n), np.nan)
    rest = n.sum() - n
    # about the pool's own average, so that the difference of squares loses no digits
    centre = float(lcv @ n / n.sum())

    def scatter(values: FloatArray) -> FloatArray:
        away = values - centre
        first, second = away @ n, away**2 @ n
        mean = (first[..., None] - n * away) / rest
        return np.sqrt(np.maximum((second[..., None] - n * away**2) / rest - mean**2, 0.0))

    v = scatter(simulated.lcv)
    return np.asarray((scatter(lcv) - v.mean(axis=0)) / v.std(axis=0, ddof=1))


def sampling_constants(parent: Parent, n: IntArray, draws: PresortedDraws) -> FloatArray:
    """Return years times the sampling variance of a record's L-CV and L-skew, (2,), by simulation at the middle length."""
    middle = int(np.sort(n)[len(n) // 2])
    simulated = simulate_independent(np.array([middle]), parent, draws)
    return middle * np.array([simulated.lcv.var(ddof=1), simulated.lskew.var(ddof=1)])


def measure_fit(
    n: IntArray | FloatArray, lskew: float, lkurtosis: float, simulated: SimulatedRatios
) -> FitMeasures:
    """Measure how well each three-parameter law agrees with a pool's average L-kurtosis.

    Parameters
    ----------
    n : (g,)
        Record lengths, or other weights of the averages.
    lskew, lkurtosis : float
        Regional averages.
    simulated : SimulatedRatios of the same gauges

    Notes
    -----
    Hosking and Wallis (1993, 1997, section 5.2), with the exact L-kurtosis of each law instead of the usual
    polynomials.
    """
    average = simulated.lkurtosis @ (n / n.sum())
    bias, sd = float(average.mean() - lkurtosis), float(average.std(ddof=1))
    of_law = np.array([float(law.fourth_ratio(lskew)) for law in distributions.CANDIDATES.values()])
    z = (of_law - lkurtosis + bias) / sd
    z_se = np.sqrt((1 + z**2 / 2) / simulated.n_simulations)
    return FitMeasures(tuple(distributions.CANDIDATES), of_law, z, z_se, bias, sd)


def _sample_ratios(log_p: FloatArray, parent: Parent) -> FloatArray:
    """L-CV, L-skew, L-kurtosis, fifth ratio (4, s) of sorted samples given as log probabilities (s, n)."""
    location, scale, _, _ = parent.parameters
    weights = order_weights(log_p.shape[-1])
    if min(abs(parent.parameters[2]), abs(parent.parameters[3])) > _NEAR_ZERO:
        moments = _moments_of_powers(log_p, parent.parameters, weights)
    else:
        moments = (_reduced_kappa(log_p, parent.parameters) @ weights).T
    ratios = np.empty((4, len(log_p)))
    np.divide(scale * moments[1], location + scale * moments[0], out=ratios[0])
    np.divide(moments[2:], moments[1], out=ratios[1:])
    return ratios


def _moments_of_powers(log_p: FloatArray, parameters: FloatArray, weights: FloatArray) -> FloatArray:
    """L-moments (5, s) of reduced kappa samples, shapes away from zero, by the powers that the quantiles are made of.

    L-moments are linear, so what scales and shifts the powers is applied to them: two passes fewer than `_reduced_kappa`.
    """
    _, _, k, h = parameters
    y = np.expm1(np.multiply(log_p, h))
    np.abs(y, out=y)
    np.log(y, out=y)
    y *= k
    np.exp(y, out=y)
    moments = (y @ weights).T * (-(abs(h) ** -k) / k)
    moments[0] += 1.0 / k
    return np.asarray(moments)


def _reduced_kappa(log_p: FloatArray, parameters: FloatArray) -> FloatArray:
    """Kappa quantiles with location 0 and scale 1 in one buffer: three passes, nothing else allocated."""
    _, _, k, h = parameters
    if h == 0.0:
        y = -log_p
    else:
        y = np.expm1(np.multiply(log_p, h))
        y *= -1.0 / h
    np.log(y, out=y)
    if k == 0.0:
        return np.negative(y, out=y)
    y *= k
    np.expm1(y, out=y)
    y *= -1.0 / k
    return y
