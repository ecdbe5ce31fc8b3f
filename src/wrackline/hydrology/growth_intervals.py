"""How wrong a regional growth curve is at a site of its region that has no gauge, by simulation."""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray
from scipy.special import gammaln

from wrackline.hydrology.between_sites import BetweenSites
from wrackline.hydrology.growth_curves import (
    SMALLEST_FACTOR,
    Choice,
    GrowthCurve,
    Ratios,
    Statistic,
    growth_factors,
)
from wrackline.hydrology.homogeneity import (
    LARGEST_ACCEPTED_Z,
    FitMeasures,
    Parent,
    PresortedDraws,
    SimulatedRatios,
    simulate_independent,
)
from wrackline.hydrology.records import FloatArray, IntArray
from wrackline.stats import distributions
from wrackline.stats.distributions import kappa


@dataclass(frozen=True)
class GrowthErrors:
    """Growth factors with intervals for a site of the region that was not in the pool, each (a,).

    Attributes
    ----------
    factor : (a,)
    lower, upper : (a,)
        Interval for the true growth factor of a new site, relative to its own true index flood.
    ln_sd_new_site : (a,)
        Root mean square error of the natural logarithm of the factor at a new site.
    ln_sd_region : (a,)
        The same against the region's own average curve: what more gauges and years would reduce.
    """

    factor: FloatArray
    lower: FloatArray
    upper: FloatArray
    ln_sd_new_site: FloatArray
    ln_sd_region: FloatArray


@dataclass(frozen=True)
class LawFamily:
    """Kappa laws that share the parent's second shape: one law for every L-CV and L-skew.

    Arrays along a grid of the first shape; L-skew rises along it.
    """

    second_shape: float
    shape: FloatArray
    lskew: FloatArray
    lkurtosis: FloatArray
    mean: FloatArray
    lscale: FloatArray

    def lkurtosis_at(self, lskew: FloatArray) -> FloatArray:
        return np.interp(lskew, self.lskew, self.lkurtosis)

    def law(self, lcv: FloatArray, lskew: FloatArray) -> FloatArray:
        """Return parameters (s, 4) of the laws with mean one and these ratios (s,)."""
        k, mean, lscale = (np.interp(lskew, self.lskew, of) for of in (self.shape, self.mean, self.lscale))
        scale = lcv / lscale
        return np.stack([1 - scale * mean, scale, k, np.full_like(k, self.second_shape)], axis=-1)

    def factors(
        self, lcv: FloatArray, lskew: FloatArray, aep: FloatArray, statistic: Statistic
    ) -> FloatArray:
        """Return true growth factors (s, a) of sites with the given true ratios (s,)."""
        laws = self.law(lcv, lskew)
        factor = np.array(kappa.quantile(laws[:, None, :], 1 - aep))
        if statistic == "median":
            factor /= np.asarray(kappa.quantile(laws, 0.5))[:, None]
        return factor


def tabulate_family(parent: Parent) -> LawFamily:
    """Tabulate the L-moments of all kappa laws with the parent's second shape (Hosking, 1994)."""
    h, at = float(parent.parameters[3]), float(parent.parameters[2])
    largest = min(max(4.0, at + 1.0), -1 / h - 0.01 if h < 0 else np.inf)
    # a hair's shift keeps k = 0, where the formulas are quotients of zeros, off the grid
    k = np.linspace(max(-0.97, at - 2.0), largest, 1500) + 1e-7
    g1, g2 = _kappa_integral(1, k, h), _kappa_integral(2, k, h)
    lskew, lkurtosis = kappa.ratios(k, h)
    columns = np.stack([k, lskew, lkurtosis, (1 - g1) / k, (g1 - g2) / k])
    here = int(np.argmin(np.abs(k - at)))
    rising = np.flatnonzero(np.diff(lskew) >= 0)
    begin = max((i + 1 for i in rising if i < here), default=0)
    end = min((i + 1 for i in rising if i >= here), default=len(k))
    return LawFamily(h, *columns[:, begin:end][:, ::-1])


def measure_answer(
    family: LawFamily, ratios: Ratios, n: IntArray, draws: PresortedDraws
) -> tuple[float, float]:
    """Return how much the mean sample L-CV and L-skew change for a unit change of the true ones, at the middle length.

    A sample L-skew answers with a slope of 0.92 to 0.95 at usual lengths: rare floods that make a law skew are
    missing from most records.
    """
    middle = np.array([int(np.sort(n)[len(n) // 2])])

    def mean(lcv: float, lskew: float) -> tuple[float, float]:
        law = Parent("kappa", family.law(np.array([lcv]), np.array([lskew]))[0])
        simulated = simulate_independent(middle, law, draws)
        return float(simulated.lcv.mean()), float(simulated.lskew.mean())

    t, t3 = float(ratios.lcv), float(ratios.lskew)
    low, high = max(t3 - 0.05, float(family.lskew[0])), min(t3 + 0.05, float(family.lskew[-1]))
    of_lcv = (mean(1.15 * t, t3)[0] - mean(0.85 * t, t3)[0]) / (0.3 * t)
    of_lskew = (mean(t, high)[1] - mean(t, low)[1]) / (high - low)
    return of_lcv, of_lskew


def simulate_growth_errors(
    rng: np.random.Generator,
    weights: tuple[FloatArray, FloatArray],
    ratios: Ratios,
    curve: GrowthCurve,
    choice: Choice,
    family: LawFamily,
    fit: FitMeasures,
    simulated: SimulatedRatios,
    between: BetweenSites,
    aep: FloatArray,
    statistic: Statistic,
    confidence: float,
    rechoose: bool = True,
    own: int | None = None,
    answer: tuple[float, float] = (1.0, 1.0),
) -> GrowthErrors:
    """Repeat the regional analysis on simulated regions and compare each with the truth of one more site.

    Parameters
    ----------
    rng : numpy.random.Generator
    weights : two of (g,)
        Of the averages of L-CV, and of the higher ratios.
    ratios : Ratios of the pool
    curve, choice, family, fit : the analysis of the observed pool
    simulated : SimulatedRatios
        Sample ratios of homogeneous regions with the pool's correlation over the years that gauges share.
    between : BetweenSites
    aep : (a,)
    statistic : {"median", "mean"}
    confidence : float
    rechoose : bool
        Choose the law anew in every simulated region, unless it is pinned or the pool is heterogeneous.
    own : int or None
        The member whose own curve is wanted; None: that of one more site.
    answer : two floats
        Change of the mean sample L-CV and L-skew for a unit change of the true ones.

    Notes
    -----
    In the manner of Hosking and Wallis (1997, section 6.4): in each simulated region the sites' true L-CV and
    L-skew depart from the region's by draws from `between`, their sample ratios by sampling error
    correlated as the records are, the law is chosen and fitted to the averages, and the logarithm of the
    result is compared with the true curve of one more site with departures of its own. The bounds follow
    from the errors ``e = ln(estimate / truth)``: the truth lies between ``estimate / exp(e_95)`` and
    ``estimate / exp(e_05)``; they are stretched to hold the estimate itself where the errors are one-sided.

    A site's sampling error is taken as that of the region's law, moved by its departure; this needs no
    second simulation and keeps a study's intervals to a fraction of a second per pool. The region's true curve is that
    of the parent kappa law, so a wrong choice of law counts as error; a site departs from it as the curves of the
    three-parameter law do whose L-kurtosis is nearest to the pool's (kappa laws with one second shape move
    less with L-skew than log-normal ones: intervals built on them covered too little).
    """
    (weight, weight_lskew), count = weights, simulated.n_simulations
    at = -1 if own is None else own
    away2, away3 = between.draw_departures(rng, count, len(weight) + 1)
    true2 = np.clip(ratios.lcv + away2, 0.1 * ratios.lcv, 0.95)
    true3 = np.clip(ratios.lskew + away3, family.lskew[0], min(0.9, family.lskew[-1]))
    away4 = family.lkurtosis_at(true3) - family.lkurtosis_at(np.array(ratios.lskew))
    sample = Ratios(
        (simulated.lcv + answer[0] * (true2[:, :-1] - ratios.lcv)) @ weight,
        (simulated.lskew + answer[1] * (true3[:, :-1] - ratios.lskew)) @ weight_lskew,
        (simulated.lkurtosis + answer[1] * away4[:, :-1]) @ weight_lskew,
        simulated.l5 @ weight_lskew,
    )
    fixed = not rechoose or choice.pinned or choice.by_evidence not in fit.names
    laws = np.full(count, choice.distribution) if fixed else _choose_again(sample, fit)
    estimate = np.empty((count, len(aep)))
    for law in np.unique(laws):
        of = laws == law
        estimate[of] = growth_factors(str(law), Ratios(*(r[of] for r in sample)), aep, statistic)

    of_region = _log(family.factors(np.array([ratios.lcv]), np.array([ratios.lskew]), aep, statistic))
    at_new_site = of_region + _departures(family, ratios, true2[:, at], true3[:, at], fit, aep, statistic)
    done = np.isfinite(estimate).all(axis=1)
    error = _log(estimate[done]) - at_new_site[done]
    low, high = np.quantile(error, [(1 - confidence) / 2, (1 + confidence) / 2], axis=0)
    factor = curve.factor(aep)
    return GrowthErrors(
        factor=factor,
        lower=np.minimum(factor, factor * np.exp(-high)),
        upper=np.maximum(factor, factor * np.exp(-low)),
        ln_sd_new_site=np.sqrt((error**2).mean(axis=0)),
        ln_sd_region=np.sqrt(((_log(estimate[done]) - of_region) ** 2).mean(axis=0)),
    )


def _departures(
    family: LawFamily,
    ratios: Ratios,
    lcv: FloatArray,
    lskew: FloatArray,
    fit: FitMeasures,
    aep: FloatArray,
    statistic: Statistic,
) -> FloatArray:
    """Ln growth factors of sites with these true ratios less those of the region's average ones, (s, a)."""
    nearest = fit.names[int(np.argmin(np.abs(fit.z)))]

    def of_law(t: FloatArray, t3: FloatArray) -> FloatArray:
        nothing = np.zeros_like(t)
        return _log(growth_factors(nearest, Ratios(t, t3, nothing, nothing), aep, statistic))

    centre = np.array([ratios.lcv]), np.array([ratios.lskew])
    away = of_law(lcv, lskew) - of_law(*centre)
    failed = ~np.isfinite(away).all(axis=1)
    if failed.any():
        by_kappa = _log(family.factors(lcv, lskew, aep, statistic)) - _log(
            family.factors(*centre, aep, statistic)
        )
        away[failed] = by_kappa[failed]
    return away


def _choose_again(sample: Ratios, fit: FitMeasures) -> NDArray[np.str_]:
    """Choose a law for every simulated region by the rule of `choose_distribution`, (s,)."""
    grid, tables = _tabulate_lkurtosis(fit.names)
    of_law = np.stack([np.interp(sample.lskew, grid, table) for table in tables])
    z = np.abs(of_law - sample.lkurtosis + fit.bias) / fit.sd
    return np.where(z.min(axis=0) > LARGEST_ACCEPTED_Z, "KAP", np.array(fit.names)[z.argmin(axis=0)])


@lru_cache(maxsize=4)
def _tabulate_lkurtosis(names: tuple[str, ...]) -> tuple[FloatArray, FloatArray]:
    """L-kurtosis of laws along a grid of L-skew so fine that straight lines between its points err by less than 1e-6."""
    grid = np.linspace(-0.95, 0.95, 1901)
    return grid, np.stack([distributions.BY_NAME[name].fourth_ratio(grid) for name in names])


def _log(factor: FloatArray) -> FloatArray:
    return np.asarray(np.log(np.maximum(factor, SMALLEST_FACTOR)))


def _kappa_integral(r: int, k: FloatArray, h: float) -> FloatArray:
    """Return ``r`` times the integral of ``F^(r-1) ((1 - F^h) / h)^k`` over 0 to 1 (Hosking, 1994)."""
    if abs(h) < 1e-5:
        return np.asarray(r**-k * np.exp(gammaln(1 + k)))
    if h > 0:
        log = gammaln(1 + k) + gammaln(r / h) - gammaln(1 + k + r / h) - (1 + k) * np.log(h)
    else:
        log = gammaln(1 + k) + gammaln(-k - r / h) - gammaln(1 - r / h) - (1 + k) * np.log(-h)
    return np.asarray(r * np.exp(log))
