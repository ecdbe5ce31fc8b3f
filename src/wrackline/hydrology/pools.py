"""Pools of gauges: from records to tests, a distribution and a growth curve with its errors."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from wrackline.hydrology.between_sites import BetweenSites, estimate_between_sites, shared_sampling
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
    largest_scaled_floods,
)
from wrackline.hydrology.growth_intervals import (
    GrowthErrors,
    measure_answer,
    simulate_growth_errors,
    tabulate_family,
)
from wrackline.hydrology.homogeneity import (
    FitMeasures,
    Heterogeneity,
    Parent,
    PresortedDraws,
    SimulatedRatios,
    fit_parent,
    h1_without_each,
    measure_fit,
    measure_heterogeneity,
    sampling_constants,
    simulate_concurrent,
    simulate_independent,
)
from wrackline.hydrology.pool_records import PoolRecords, take_records
from wrackline.hydrology.pool_verdicts import SKEWED, describe_heterogeneity, warn_of_tests
from wrackline.hydrology.pool_weights import weigh_members
from wrackline.hydrology.records import FloatArray, PeakRecords
from wrackline.stats import distributions
from wrackline.stats.anderson_darling import AndersonDarlingTest, bootstrap_homogeneity
from wrackline.stats.copula import factor_correlation
from wrackline.stats.lmoments import SampleLMoments

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
    anderson_darling_replicates: int = 500


@dataclass(frozen=True)
class Membership:
    """How the gauges of a pool stand to the site that the pool is for.

    Attributes
    ----------
    departure : (2, g)
        Mean square difference of true L-CV and L-skew between each gauge and the site, in the order of the records.
    sampling : (2,) or None
        Years times the sampling variance of L-CV and L-skew; None: from the pool's own average ratios.
    own : str
        The site's own gauge if it is a member; blank: the site is ungauged or left out.
    after_selection : bool
        Whether H had a say in who is a member.
    """

    departure: FloatArray | None = None
    sampling: FloatArray | None = None
    own: str = ""
    after_selection: bool = False


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
    weight, weight_lskew : (g,)
        Of the averages of L-CV, and of L-skew and higher ratios; each sums to one.
    h1_without : (g,)
        H1 of the pool without each gauge, by the same simulated regions.
    ratios : Ratios of the pool
    correlated : Heterogeneity or None
        H with correlated simulated regions; None when no correlation was given.
    fit_correlated : FitMeasures or None
    largest_scaled : (g,)
        Largest flood of every gauge over its index flood.
    curves : dict
        Growth factors (a,) by every law that could be fitted, by name.
    """

    gauge_ids: tuple[str, ...]
    left_out: dict[str, str]
    warnings: tuple[str, ...]
    lmoments: SampleLMoments
    completed: dict[str, str]
    weight: FloatArray
    weight_lskew: FloatArray
    ratios: Ratios
    discordancy: Discordancy
    parent: Parent
    heterogeneity: Heterogeneity
    h1_without: FloatArray
    correlated: Heterogeneity | None
    second_opinion: AndersonDarlingTest | None
    after_selection: bool
    fit: FitMeasures
    fit_correlated: FitMeasures | None
    choice: Choice
    curve: GrowthCurve
    curves: dict[str, FloatArray]
    between: BetweenSites
    growth: GrowthErrors
    aep: FloatArray
    largest_scaled: FloatArray
    statistic: Statistic

    @property
    def largest_scaled_flood(self) -> float:
        return float(self.largest_scaled.max())

    @property
    def station_years(self) -> int:
        return int(self.lmoments.n.sum())

    @property
    def heterogeneous(self) -> bool:
        return bool(self.heterogeneity.h[0] >= 2)

    @property
    def verdict(self) -> str:
        return describe_heterogeneity(
            self.heterogeneity, self.correlated, self.second_opinion, self.after_selection
        )

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


def analyse_pool(
    records: PeakRecords,
    correlation: FloatArray | None,
    settings: PoolSettings,
    rng: np.random.Generator,
    pinned: str | None = None,
    why: str = "",
    draws: PresortedDraws | None = None,
    membership: Membership | None = None,
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
    draws : PresortedDraws or None
        Draws that pools share, so that their H can be compared; None takes the pool's own.
    membership : Membership or None
        None: a fixed pool, averages weighted by record length.

    Raises
    ------
    ValueError
        When no gauge has enough peaks.
    """
    membership = membership or Membership()
    taken = take_records(records, settings.minimum_peaks)
    if not taken.order.size:
        raise ValueError(f"no gauge has {settings.minimum_peaks} exactly known peaks that differ")
    kept, lm, n = taken.records, taken.lmoments, taken.lmoments.n
    years = np.split(kept.water_year, kept.offsets[1:-1])
    matrix, warnings = _correlate(correlation, taken)
    warnings = _tell_completed(taken) + warnings
    draws = draws or PresortedDraws(int(rng.integers(2**62)), settings.simulations)
    weight, weight_lskew = _weigh(taken, matrix, membership, draws)
    ratios = _average(lm, weight, weight_lskew)

    parent = fit_parent(*ratios[:3])
    heterogeneity, fit, independent = _test_pool(lm, ratios, parent, settings, draws, weight_lskew)
    h1_without = h1_without_each(n, lm.t, independent)
    correlated, fit_correlated, growth_draws = None, None, independent
    if matrix is not None:
        wanted = max(settings.simulations, settings.growth_simulations)
        growth_draws = simulate_concurrent(rng, years, factor_correlation(matrix), parent, wanted)
        correlated = measure_heterogeneity(n, lm.t, lm.t3, lm.t4, _first(growth_draws, settings.simulations))
        fit_correlated = measure_fit(
            weight_lskew, ratios[1], ratios[2], _first(growth_draws, settings.simulations)
        )
    growth_draws = _first(growth_draws, settings.growth_simulations)
    family = tabulate_family(parent)
    answer = measure_answer(family, ratios, n, draws)
    between = estimate_between_sites(lm.t, lm.t3, ratios[0], years, matrix, growth_draws, answer)

    aep = np.asarray(settings.aep, dtype=float)
    choice = choose_distribution(fit, float(heterogeneity.h[0]), pinned, why)
    curve = fit_curve(choice.distribution, ratios, settings.statistic)
    growth = simulate_growth_errors(
        rng, (weight, weight_lskew), ratios, curve, choice, family, fit, growth_draws, between, aep,
        settings.statistic, settings.confidence, settings.rechoose, _number_of(membership.own, kept.gauge_ids), answer,
    )  # fmt: skip
    largest = largest_scaled_floods(kept.flow_low, kept.offsets, settings.statistic)
    warnings += warn_of_tests(heterogeneity, choice, parent, len(n)) + check_curve(
        curve, aep, float(largest.max())
    )
    return PoolAnalysis(
        gauge_ids=kept.gauge_ids,
        left_out=taken.left_out,
        warnings=tuple(warnings),
        lmoments=lm,
        completed=taken.completed,
        weight=weight,
        weight_lskew=weight_lskew,
        ratios=ratios,
        discordancy=measure_discordancy(lm.t, lm.t3, lm.t4),
        parent=parent,
        heterogeneity=heterogeneity,
        h1_without=h1_without,
        correlated=correlated,
        second_opinion=_second_opinion(kept, ratios, settings, rng),
        after_selection=membership.after_selection,
        fit=fit,
        fit_correlated=fit_correlated,
        choice=choice,
        curve=curve,
        curves=_all_curves(ratios, aep, settings.statistic),
        between=between,
        growth=growth,
        aep=aep,
        largest_scaled=largest,
        statistic=settings.statistic,
    )


def _correlate(correlation: FloatArray | None, taken: PoolRecords) -> tuple[FloatArray | None, list[str]]:
    """Correlation of the gauges used, positive definite, with a word on what was repaired."""
    if correlation is None:
        return None, []
    given = correlation[np.ix_(taken.order, taken.order)]
    matrix, repaired = repair_correlation(given, SMALLEST_EIGENVALUE)
    if not repaired:
        return matrix, []
    change = np.abs(matrix - given).max()
    return matrix, [
        "the correlation matrix was not positive definite and was repaired; no correlation changed by more "
        f"than {change:.2g}"
    ]


def _weigh(
    taken: PoolRecords, matrix: FloatArray | None, membership: Membership, draws: PresortedDraws
) -> tuple[FloatArray, FloatArray]:
    """Weights of L-CV and of the higher ratios: record lengths, or least error for the pool's site."""
    lm = taken.lmoments
    by_length = lm.n / lm.n.sum()
    if membership.departure is None:
        return by_length, by_length
    departure = membership.departure[:, taken.order]
    sampling = membership.sampling
    if sampling is None:
        sampling = sampling_constants(fit_parent(*_average(lm, by_length, by_length)[:3]), lm.n, draws)
    years = np.split(taken.records.water_year, taken.records.offsets[1:-1])
    shared = shared_sampling(years, matrix)
    first, second = (weigh_members(departure[i], lm.n, sampling[i], shared) for i in range(2))
    return first, second


def _average(lm: SampleLMoments, weight: FloatArray, weight_lskew: FloatArray) -> Ratios:
    return Ratios(float(weight @ lm.t), *(float(weight_lskew @ ratio) for ratio in (lm.t3, lm.t4, lm.t5)))


def _number_of(own: str, gauge_ids: tuple[str, ...]) -> int | None:
    return gauge_ids.index(own) if own in gauge_ids else None


def _second_opinion(
    kept: PeakRecords, ratios: Ratios, settings: PoolSettings, rng: np.random.Generator
) -> AndersonDarlingTest | None:
    """The test without a parent law, where floods are so skewed that H1 loses power."""
    if ratios.lskew <= SKEWED or kept.n_gauges < 2 or not settings.anderson_darling_replicates:
        return None
    try:
        return bootstrap_homogeneity(
            kept.flow_low, kept.offsets, rng, settings.anderson_darling_replicates, settings.statistic
        )
    except ValueError:
        # a record without a positive index has no place in a test of scaled floods
        return None


def _test_pool(
    lm: SampleLMoments,
    ratios: Ratios,
    parent: Parent,
    settings: PoolSettings,
    draws: PresortedDraws,
    weight_lskew: FloatArray,
) -> tuple[Heterogeneity, FitMeasures, SimulatedRatios]:
    """Run the tests with independent gauges; a close call on H1 is decided with more simulations."""
    simulated = simulate_independent(lm.n, parent, draws)
    heterogeneity = measure_heterogeneity(lm.n, lm.t, lm.t3, lm.t4, simulated)
    h1, se = heterogeneity.h[0], heterogeneity.h_se[0]
    close = bool(min(abs(h1 - 1), abs(h1 - 2)) <= 2 * se)
    more = simulated
    if close and settings.close_call_simulations > draws.n_simulations:
        more = simulate_independent(lm.n, parent, draws.more(settings.close_call_simulations))
        heterogeneity = measure_heterogeneity(lm.n, lm.t, lm.t3, lm.t4, more)
    if settings.growth_simulations > simulated.n_simulations:
        simulated = simulate_independent(lm.n, parent, draws.more(settings.growth_simulations))
    return heterogeneity, measure_fit(weight_lskew, ratios[1], ratios[2], more), simulated


def _first(simulated: SimulatedRatios, count: int) -> SimulatedRatios:
    return SimulatedRatios(
        simulated.lcv[:count], simulated.lskew[:count], simulated.lkurtosis[:count], simulated.l5[:count]
    )


def _all_curves(ratios: Ratios, aep: FloatArray, statistic: Statistic) -> dict[str, FloatArray]:
    curves = {}
    for name in distributions.BY_NAME:
        try:
            curves[name] = fit_curve(name, ratios, statistic).factor(aep)
        except ValueError:
            continue
    return curves


def _tell_completed(taken: PoolRecords) -> list[str]:
    if not taken.completed:
        return []
    listed = ", ".join(f"{gauge} ({what})" for gauge, what in taken.completed.items())
    return [
        "records with low years, or years without flow (a law fitted to the floods above stands in for them, unless they "
        f"are few): {listed}"
    ]
