"""Pools of gauges: from records to tests, a distribution and a growth curve with its errors."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from wrackline.hydrology.between_sites import BetweenSites, estimate_between_sites
from wrackline.hydrology.dependence import repair_correlation
from wrackline.hydrology.discordancy import Discordancy, measure_discordancy
from wrackline.hydrology.growth_curves import (
    Choice,
    GrowthCurve,
    Ratios,
    Statistic,
    check_curve,
    choose_distribution,
    fit_curve,
    growth_factors,
    largest_scaled_flood,
)
from wrackline.hydrology.growth_intervals import GrowthErrors, simulate_growth_errors
from wrackline.hydrology.homogeneity import (
    FitMeasures,
    Heterogeneity,
    Parent,
    PresortedDraws,
    SimulatedRatios,
    fit_parent,
    measure_fit,
    measure_heterogeneity,
    simulate_concurrent,
    simulate_independent,
)
from wrackline.hydrology.records import FloatArray, IntArray, PeakRecords
from wrackline.stats import distributions
from wrackline.stats.copula import factor_correlation
from wrackline.stats.lmoments import SampleLMoments, average_ratios, sample_lmoments

FEW_GAUGES = 7
SMALLEST_EIGENVALUE = 1e-6


@dataclass(frozen=True)
class PoolSettings:
    """What an analysis of a pool is asked for."""

    aep: tuple[float, ...] = (0.9, 0.8, 0.5, 0.2, 0.1, 0.04, 0.02, 0.01, 0.005, 0.002)
    statistic: Statistic = "median"
    confidence: float = 0.90
    simulations: int = 1000
    close_call_simulations: int = 10000
    growth_simulations: int = 1000
    minimum_peaks: int = 10
    rechoose: bool = True


@dataclass(frozen=True)
class PoolAnalysis:
    """All that is found out about one pool; arrays have one entry per gauge used, in order of identifier.

    Attributes
    ----------
    gauge_ids : tuple of str, length g
    left_out : dict
        Gauge to the reason why it is not in the averages.
    warnings : tuple of str
    lmoments : SampleLMoments, arrays (g,)
    weight : (g,)
        Sums to one.
    ratios : Ratios of the pool
    correlated : Heterogeneity or None
        H with correlated simulated regions; None when no correlation was given.
    fit_correlated : FitMeasures or None
    curves : dict
        Growth factors (a,) by every law that could be fitted, by name.
    """

    gauge_ids: tuple[str, ...]
    left_out: dict[str, str]
    warnings: tuple[str, ...]
    lmoments: SampleLMoments
    weight: FloatArray
    ratios: Ratios
    discordancy: Discordancy
    parent: Parent
    heterogeneity: Heterogeneity
    correlated: Heterogeneity | None
    fit: FitMeasures
    fit_correlated: FitMeasures | None
    choice: Choice
    curve: GrowthCurve
    curves: dict[str, FloatArray]
    between: BetweenSites
    growth: GrowthErrors
    aep: FloatArray
    largest_scaled_flood: float
    statistic: Statistic

    @property
    def station_years(self) -> int:
        return int(self.lmoments.n.sum())

    @property
    def heterogeneous(self) -> bool:
        return bool(self.heterogeneity.h[0] >= 2)

    @property
    def verdict(self) -> str:
        return describe_heterogeneity(self.heterogeneity, self.correlated)

    @property
    def accepted(self) -> tuple[str, ...]:
        """Names of the three-parameter laws that the fit measures accept."""
        return tuple(name for name, yes in zip(self.fit.names, self.fit.accepted, strict=True) if yes)

    @property
    def index_relative_sd(self) -> float:
        """Standard error of the index flood of one year's record over the index flood, from the growth curve."""
        if self.statistic == "mean":
            return self.curve.coefficient_of_variation()
        return 1 / (2 * self.curve.density_at_median)


def describe_heterogeneity(independent: Heterogeneity, correlated: Heterogeneity | None = None) -> str:
    """Say in words what H1 means (Hosking and Wallis, 1997): guide values, not significance levels."""
    h1, n_sim = float(independent.h[0]), independent.n_simulations
    if not np.isfinite(h1):
        return "not tested: one gauge alone"
    if h1 < -2:
        return "homogeneous; H1 below -2 points to strong intersite correlation, not to strong homogeneity"
    words = _grade(h1)
    near = [limit for limit in (1, 2) if abs(h1 - limit) <= 2 * independent.h_se[0]]
    if near:
        words += f"; H1 is within two simulation errors of {near[0]} ({n_sim} simulations)"
    if correlated is not None and _grade(float(correlated.h[0])) != _grade(h1):
        words += f"; {_grade(float(correlated.h[0]))} once intersite correlation is allowed for"
    return words


def _grade(h1: float) -> str:
    return (
        "acceptably homogeneous"
        if h1 < 1
        else "possibly heterogeneous"
        if h1 < 2
        else "definitely heterogeneous"
    )


def analyse_pool(
    records: PeakRecords,
    correlation: FloatArray | None,
    settings: PoolSettings,
    rng: np.random.Generator,
    pinned: str | None = None,
    why: str = "",
) -> PoolAnalysis:
    """Analyse one pool of gauges: averages, discordancy, heterogeneity, fit, growth curve and its errors.

    Parameters
    ----------
    records : PeakRecords
        Of the pool's gauges; exactly known systematic peaks are used.
    correlation : (g, g) or None
        Correlation of the concurrent peaks of ``records``' gauges; None takes them as independent.
    settings : PoolSettings
    rng : numpy.random.Generator
        The pool's own stream. The order of gauges does not matter, only the set of them.
    pinned, why : str
        A law fixed by the analyst and the written reason.

    Raises
    ------
    ValueError
        When no gauge has enough peaks.
    """
    kept, order, left_out = _select_gauges(records, settings.minimum_peaks)
    if not order.size:
        raise ValueError(f"no gauge has {settings.minimum_peaks} exactly known peaks that differ")
    warnings = _warn_of_zeros(kept)
    lm = sample_lmoments(kept.flow_low, kept.offsets)
    n, weight = lm.n, lm.n / lm.n.sum()
    average = average_ratios(lm, n)
    ratios = Ratios(*(float(ratio) for ratio in (average.t, average.t3, average.t4, average.t5)))
    years = np.split(kept.water_year, kept.offsets[1:-1])
    matrix = None if correlation is None else correlation[np.ix_(order, order)]
    if matrix is not None:
        given, (matrix, repaired) = matrix, repair_correlation(matrix, SMALLEST_EIGENVALUE)
        if repaired:
            warnings.append(
                "the correlation matrix was not positive definite and was repaired; no correlation changed by more "
                f"than {np.abs(matrix - given).max():.2g}"
            )

    parent = fit_parent(*ratios[:3])
    heterogeneity, fit, independent = _test_pool(lm, ratios, parent, settings, int(rng.integers(2**62)))
    correlated, fit_correlated, growth_draws = None, None, independent
    if matrix is not None:
        wanted = max(settings.simulations, settings.growth_simulations)
        growth_draws = simulate_concurrent(rng, years, factor_correlation(matrix), parent, wanted)
        correlated = measure_heterogeneity(n, lm.t, lm.t3, lm.t4, _first(growth_draws, settings.simulations))
        fit_correlated = measure_fit(n, ratios[1], ratios[2], _first(growth_draws, settings.simulations))
    growth_draws = _first(growth_draws, settings.growth_simulations)
    between = estimate_between_sites(lm.t, lm.t3, ratios[0], years, matrix, growth_draws)

    aep = np.asarray(settings.aep, dtype=float)
    choice = choose_distribution(fit, float(heterogeneity.h[0]), pinned, why)
    curve = fit_curve(choice.distribution, ratios, settings.statistic)
    growth = simulate_growth_errors(
        rng, n, ratios, curve, choice, parent, fit, growth_draws, between, aep,
        settings.statistic, settings.confidence, settings.rechoose,
    )  # fmt: skip
    largest = largest_scaled_flood(kept.flow_low, kept.offsets, settings.statistic)
    warnings += _warn_of_tests(heterogeneity, choice, parent, len(n)) + check_curve(curve, aep, largest)
    return PoolAnalysis(
        gauge_ids=kept.gauge_ids,
        left_out=left_out,
        warnings=tuple(warnings),
        lmoments=lm,
        weight=weight,
        ratios=ratios,
        discordancy=measure_discordancy(lm.t, lm.t3, lm.t4),
        parent=parent,
        heterogeneity=heterogeneity,
        correlated=correlated,
        fit=fit,
        fit_correlated=fit_correlated,
        choice=choice,
        curve=curve,
        curves=_all_curves(ratios, aep, settings.statistic),
        between=between,
        growth=growth,
        aep=aep,
        largest_scaled_flood=largest,
        statistic=settings.statistic,
    )


def _select_gauges(records: PeakRecords, minimum_peaks: int) -> tuple[PeakRecords, IntArray, dict[str, str]]:
    """Keep exact systematic peaks of gauges with enough of them, in order of identifier."""
    exact = records.keep_rows(records.systematic_exact)
    order = np.array(sorted(range(exact.n_gauges), key=exact.gauge_ids.__getitem__), dtype=np.int64)
    used, left_out = [], {}
    for i in order:
        flow = exact.flow_low[exact.offsets[i] : exact.offsets[i + 1]]
        if len(flow) < minimum_peaks:
            left_out[exact.gauge_ids[i]] = (
                f"{len(flow)} exactly known systematic peaks, fewer than {minimum_peaks}"
            )
        elif flow.min() == flow.max():
            left_out[exact.gauge_ids[i]] = "all peaks are equal"
        else:
            used.append(i)
    chosen = np.array(used, dtype=np.int64)
    return exact.keep_gauges(chosen), chosen, left_out


def _test_pool(
    lm: SampleLMoments, ratios: Ratios, parent: Parent, settings: PoolSettings, seed: int
) -> tuple[Heterogeneity, FitMeasures, SimulatedRatios]:
    """Run the tests with independent gauges; a close call on H1 is decided with more simulations."""
    n_simulations = settings.simulations
    draws = simulate_independent(lm.n, parent, PresortedDraws(seed, n_simulations))
    heterogeneity = measure_heterogeneity(lm.n, lm.t, lm.t3, lm.t4, draws)
    h1, se = heterogeneity.h[0], heterogeneity.h_se[0]
    close = bool(min(abs(h1 - 1), abs(h1 - 2)) <= 2 * se)
    more = draws
    if close and settings.close_call_simulations > n_simulations:
        more = simulate_independent(lm.n, parent, PresortedDraws(seed, settings.close_call_simulations, 0))
        heterogeneity = measure_heterogeneity(lm.n, lm.t, lm.t3, lm.t4, more)
    if settings.growth_simulations > draws.n_simulations:
        draws = simulate_independent(lm.n, parent, PresortedDraws(seed, settings.growth_simulations, 0))
    return heterogeneity, measure_fit(lm.n, ratios[1], ratios[2], more), draws


def _first(simulated: SimulatedRatios, count: int) -> SimulatedRatios:
    return SimulatedRatios(
        simulated.lcv[:count], simulated.lskew[:count], simulated.lkurtosis[:count], simulated.l5[:count]
    )


def _all_curves(ratios: Ratios, aep: FloatArray, statistic: Statistic) -> dict[str, FloatArray]:
    one = Ratios(*(np.array([ratio]) for ratio in ratios))
    curves = {name: growth_factors(name, one, aep, statistic)[0] for name in distributions.BY_NAME}
    return {name: factor for name, factor in curves.items() if np.isfinite(factor).all()}


def _warn_of_zeros(records: PeakRecords) -> list[str]:
    zero = np.bincount(records.gauge_index[records.flow_low <= 0], minlength=records.n_gauges)
    if not zero.any():
        return []
    listed = ", ".join(f"{records.gauge_ids[i]} ({zero[i]})" for i in np.flatnonzero(zero))
    return [
        f"peaks of zero are in the L-moments as they are: {listed}; ratios of records with many zeros do not "
        "compare with those of others"
    ]


def _warn_of_tests(heterogeneity: Heterogeneity, choice: Choice, parent: Parent, n_gauges: int) -> list[str]:
    warnings, h1 = [], heterogeneity.h[0]
    if h1 >= 2:
        warnings.append(
            f"the pool is definitely heterogeneous (H1 = {h1:.2f}); form other pools or read the interval as wide"
        )
    if h1 < -2:
        warnings.append(f"H1 = {h1:.2f} is below -2, which points to strong intersite correlation")
    if n_gauges < FEW_GAUGES:
        warnings.append(
            f"the pool has {n_gauges} gauge{'s' * (n_gauges > 1)}; heterogeneity tests are weak below {FEW_GAUGES}"
        )
    if parent.name == "GLO":
        warnings.append(
            "no kappa law has the pool's L-kurtosis; regions were simulated from the generalized logistic law"
        )
    if choice.pinned and choice.distribution != choice.by_evidence:
        warnings.append(
            f"the analyst fixed {choice.distribution}; the tests would now choose {choice.by_evidence}"
        )
    return warnings
