"""The published tables of the pools."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
import pandas as pd

from wrackline.hydrology.law_fits import fit_law
from wrackline.hydrology.pool_suggestions import suggest
from wrackline.hydrology.pools import PoolAnalysis
from wrackline.hydrology.records import PeakRecords
from wrackline.stats import distributions
from wrackline.stats.lmoments import sample_lmoments
from wrackline.study.config import StudyConfig
from wrackline.study.pool_plans import PoolPlan
from wrackline.study.tables import Column, Table

if TYPE_CHECKING:
    from wrackline.hydrology.pool_validation import PoolingScore
    from wrackline.hydrology.records import FloatArray

LMOMENT_COLUMNS = (
    Column("gauge_id", "text", "gauge"),
    Column("n", "count", "exactly known systematic peaks"),
    Column("mean", "flow", "mean of the peaks, the first L-moment"),
    Column("lcv", "", "L-CV, second L-moment over the first"),
    Column("lskew", "", "L-skew, third L-moment over the second"),
    Column("lkurtosis", "", "L-kurtosis, fourth L-moment over the second"),
    Column("l5_ratio", "", "fifth L-moment over the second"),
    Column("pool", "text", "pool that the gauge uses; blank: none"),
    Column(
        "pooled_lcv",
        "",
        "L-CV as it enters averages: other than `lcv` where low years were completed; blank: in none",
    ),
    Column("pooled_lskew", "", "L-skew as it enters averages"),
    Column("pooled_lkurtosis", "", "L-kurtosis as it enters averages"),
)
POOL_COLUMNS = (
    Column("pool", "text", "pool"),
    Column("gauge_id", "text", "gauge"),
    Column("weight", "", "weight in the pool's average of L-CV; they sum to one"),
    Column("discordancy", "", "discordancy D (Hosking and Wallis, 1993)"),
    Column("critical", "", "critical value of D for the pool's number of gauges"),
    Column("discordant", "true/false", "whether D exceeds it"),
    Column("robust_distance", "", "distance from the robust centre; above 3.06 asks for a second look"),
    Column("second_look", "true/false", "whether the robust distance asks for a second look"),
    Column("remark", "text", "why a gauge has no weight, was moved, or had its low floods completed"),
    Column("weight_lskew", "", "weight in the averages of L-skew and higher ratios; they sum to one"),
    Column("h1_without", "", "H1 of the pool without the gauge, by the same simulated regions"),
)
TEST_COLUMNS = (
    Column("pool", "text", "pool"),
    Column("n_gauges", "count", "gauges in the averages"),
    Column("station_years", "count", "peaks of these gauges together"),
    Column(
        "h1",
        "",
        "heterogeneity measure of L-CV; below 1 acceptably homogeneous, 2 or more definitely heterogeneous",
    ),
    Column("h2", "", "heterogeneity measure of L-CV and L-skew"),
    Column("h3", "", "heterogeneity measure of L-skew and L-kurtosis"),
    Column("h1_correlated", "", "H1 against simulated regions with the correlation between gauges"),
    Column("simulations", "count", "simulated regions behind H1, H2, H3 and Z"),
    Column("verdict", "text", "H1 in words"),
    Column("h1_se", "", "simulation error of h1"),
    Column("h2_se", "", "simulation error of h2"),
    Column("h3_se", "", "simulation error of h3"),
    Column("h1_correlated_se", "", "simulation error of h1_correlated"),
    Column("parent", "text", "law of the simulated regions"),
    Column("lcv", "", "average L-CV"),
    Column("lskew", "", "average L-skew"),
    Column("lkurtosis", "", "average L-kurtosis"),
    Column("between_lcv_sd", "", "posterior mean of the standard deviation of true L-CV between sites"),
    Column("between_lskew_sd", "", "posterior mean of the standard deviation of true L-skew between sites"),
    Column(
        "anderson_darling",
        "",
        "k-sample Anderson-Darling statistic; blank: L-skew is 0.23 or less, no second opinion asked",
    ),
    Column(
        "anderson_darling_probability",
        "fraction",
        "share of resampled homogeneous pools below it; above 0.95 speaks against one law",
    ),
    Column("after_selection", "true/false", "whether H had a say in who is a member, so that it is no test"),
)
SUGGESTION_COLUMNS = (
    Column("pool", "text", "pool"),
    Column("gauge_id", "text", "gauge that asks for a look; nothing was done"),
    Column("kinds", "text", "discordant, second_look, drives_h, short, suspicious_flood"),
    Column("h1", "", "H1 of the pool"),
    Column("h1_without", "", "H1 of the pool without the gauge"),
    Column("suggestion", "text", "what was seen"),
)
VALIDATION_COLUMNS = (
    Column("method", "text", "way of pooling; `one`: all gauges together"),
    Column("aep", "fraction", "annual exceedance probability"),
    Column("n_gauges", "count", "gauges predicted without themselves"),
    Column("bias", "ln", "mean of ln predicted over own growth factor, weighted by record length"),
    Column("rmse", "ln", "root mean square of the same"),
    Column("own_sampling", "ln", "root mean square sampling error of the gauges' own factors, part of rmse"),
    Column("net_error", "ln", "pooled uncertainty measure net of the gauges' own sampling error"),
    Column("net_error_se", "ln", "standard error of net_error, gauges left out one at a time"),
    Column(
        "covered",
        "fraction",
        "share of own factors within the interval, their own sampling error allowed for",
    ),
    Column("used", "true/false", "whether the study pools this way"),
)
TRIAL_COLUMNS = (
    Column("n_clusters", "count", "number of clusters tried"),
    Column("smallest_gauges", "count", "gauges of the smallest cluster"),
    Column("smallest_years", "count", "station-years of the cluster with the fewest"),
    Column("mean_h1", "", "H1 averaged over gauges; it has a say, so the chosen clusters' H is no test"),
    Column("fit_to_size", "true/false", "whether the clusters have the size wanted"),
    Column("chosen", "true/false", "whether this number was taken"),
)
DISTRIBUTION_COLUMNS = (
    Column("pool", "text", "pool"),
    Column("distribution", "text", "distribution"),
    Column("z", "", "goodness-of-fit measure Z; blank for laws with more than three parameters"),
    Column("accepted", "true/false", "whether abs(z) is 1.64 or less; blank where there is no z"),
    Column("chosen", "true/false", "whether the pool's growth curve is of this law"),
    Column("z_se", "", "simulation error of z"),
    Column("z_correlated", "", "Z against simulated regions with the correlation between gauges"),
    Column("by_evidence", "true/false", "whether the tests would choose it now"),
    Column("reason", "text", "why it was chosen"),
    Column("parameter_names", "text", "names of p1 to p5"),
    *(Column(f"p{i}", "", f"parameter {i} of the law with mean one") for i in range(1, 6)),
)
GROWTH_COLUMNS = (
    Column("pool", "text", "pool"),
    Column("distribution", "text", "distribution of the growth curve"),
    Column("aep", "fraction", "annual exceedance probability"),
    Column("growth_factor", "", "flood over index flood"),
    Column("lower", "", "lower bound for the true growth factor of an ungauged site of the region"),
    Column("upper", "", "upper bound for the same"),
    Column("ln_sd_new_site", "ln", "root mean square error of the natural logarithm at an ungauged site"),
    Column("ln_sd_region", "ln", "the same against the region's average curve"),
    Column("lowest_accepted", "", "smallest growth factor among the accepted laws"),
    Column("highest_accepted", "", "largest growth factor among the accepted laws"),
    Column(
        "bootstrap_lower",
        "",
        "lower bound of the pool's average curve by resampled water years; blank: not asked for",
    ),
    Column("bootstrap_upper", "", "upper bound of the same"),
)


def build_tables(
    config: StudyConfig,
    records: PeakRecords,
    pools: dict[str, PoolAnalysis],
    plan: PoolPlan,
    scores: tuple[PoolingScore, ...] = (),
    bootstraps: dict[str, FloatArray] | None = None,
) -> tuple[Table, ...]:
    """Build the tables; records are those of all used gauges, in order of identifier."""
    bootstraps = bootstraps or {}
    rows = {
        "pools": (POOL_COLUMNS, [r for name in pools for r in member_rows(name, pools[name], plan.moves)]),
        "pool_tests": (TEST_COLUMNS, [test_row(name, pool) for name, pool in pools.items()]),
        "pool_distributions": (
            DISTRIBUTION_COLUMNS,
            [r for name, pool in pools.items() for r in distribution_rows(name, pool)],
        ),
        "growth_curves": (
            GROWTH_COLUMNS,
            [r for name, pool in pools.items() for r in growth_rows(name, pool, bootstraps.get(name))],
        ),
        "pool_suggestions": (SUGGESTION_COLUMNS, [r for name, pool in pools.items() for r in suggestion_rows(name, pool)]),
        "pool_validation": (
            VALIDATION_COLUMNS,
            [
                (s.method, s.aep, s.n_gauges, s.bias, s.rmse, s.own_sampling, s.net, s.net_se, s.covered, s.method == plan.method)
                for s in scores
            ],
        ),
    }  # fmt: skip
    if plan.clusters is not None and plan.clusters.trials:
        chosen = len(plan.clusters.centre)
        trials = [
            (*(getattr(t, c.name) for c in TRIAL_COLUMNS[:-1]), t.n_clusters == chosen)
            for t in plan.clusters.trials
        ]
        rows["pool_cluster_trials"] = (TRIAL_COLUMNS, trials)
    return (
        Table("gauge_lmoments", lmoment_rows(config, records, plan.home, pools), LMOMENT_COLUMNS),
        *(_table(name, columns, found) for name, (columns, found) in rows.items()),
    )


def lmoment_rows(
    config: StudyConfig, records: PeakRecords, home: dict[str, str], pools: dict[str, PoolAnalysis]
) -> pd.DataFrame:
    """A row per used gauge; blank ratios where the record is too short for them."""
    exact = records.keep_rows(records.systematic_exact)
    lm = sample_lmoments(exact.flow_low, exact.offsets)
    pooled = {
        gauge: (pool.lmoments.t[i], pool.lmoments.t3[i], pool.lmoments.t4[i])
        for pool in pools.values()
        for i, gauge in enumerate(pool.gauge_ids)
    }
    as_pooled = np.array([pooled.get(gauge, (np.nan,) * 3) for gauge in records.gauge_ids]).reshape(-1, 3)
    return pd.DataFrame(
        {
            "gauge_id": list(records.gauge_ids),
            "n": lm.n,
            "mean": lm.l1 / config.flow_in_m3s,
            "lcv": lm.t,
            "lskew": lm.t3,
            "lkurtosis": lm.t4,
            "l5_ratio": lm.t5,
            "pool": [home[gauge] for gauge in records.gauge_ids],
            "pooled_lcv": as_pooled[:, 0],
            "pooled_lskew": as_pooled[:, 1],
            "pooled_lkurtosis": as_pooled[:, 2],
        }
    )


def member_rows(name: str, pool: PoolAnalysis, moves: dict[str, str]) -> list[tuple]:
    """A row per gauge of the pool, those left out of the averages included."""
    found = pool.discordancy
    rows = {
        gauge: (
            name, gauge, pool.weight[i], found.measure[i], found.critical, bool(found.discordant[i]),
            found.robust_distance[i], bool(found.robust_discordant[i]),
            "; ".join(filter(None, (pool.completed.get(gauge, ""), moves.get(gauge, "")))),
            pool.weight_lskew[i], pool.h1_without[i],
        )
        for i, gauge in enumerate(pool.gauge_ids)
    }  # fmt: skip
    for gauge, reason in pool.left_out.items():
        remark = "; ".join(filter(None, (f"left out of the averages: {reason}", moves.get(gauge, ""))))
        rows[gauge] = (name, gauge, 0.0, np.nan, found.critical, False, np.nan, False, remark, 0.0, np.nan)
    return [rows[gauge] for gauge in sorted(rows)]


def test_row(name: str, pool: PoolAnalysis) -> tuple:
    """The pool's row of the table of tests."""
    h, correlated = pool.heterogeneity, pool.correlated
    return (
        name, len(pool.gauge_ids), pool.station_years, *h.h, correlated.h[0] if correlated else np.nan,
        h.n_simulations, pool.verdict, *h.h_se, correlated.h_se[0] if correlated else np.nan,
        pool.parent.name, *pool.ratios[:3], pool.between.mean_lcv_sd, pool.between.mean_lskew_sd,
        *((pool.second_opinion.statistic, pool.second_opinion.probability) if pool.second_opinion else (np.nan, np.nan)),
        pool.after_selection,
    )  # fmt: skip


def distribution_rows(name: str, pool: PoolAnalysis) -> list[tuple]:
    """A row per law, the three-parameter candidates first."""
    lcv, lskew, lkurtosis, l5 = pool.ratios
    rows = []
    for law_name, law in distributions.BY_NAME.items():
        tested = law_name in pool.fit.names
        at = pool.fit.names.index(law_name) if tested else 0
        parameters = np.full(5, np.nan)
        fitted = fit_law(law_name, lcv, lskew, lkurtosis, l5)
        parameters[: len(fitted)] = fitted
        chosen = law_name == pool.curve.distribution
        rows.append(
            (
                name, law_name, pool.fit.z[at] if tested else np.nan,
                bool(pool.fit.accepted[at]) if tested else None, chosen,
                pool.fit.z_se[at] if tested else np.nan,
                pool.fit_correlated.z[at] if tested and pool.fit_correlated else np.nan,
                law_name == pool.choice.by_evidence, pool.choice.reason if chosen else "",
                ", ".join(law.PARAMETERS), *parameters,
            )
        )  # fmt: skip
    return rows


def suggestion_rows(name: str, pool: PoolAnalysis) -> list[tuple]:
    """A row per gauge that asks for a look."""
    return [(name, s.gauge_id, " ".join(s.kinds), s.h1, s.h1_without, s.words) for s in suggest(pool)]


def growth_rows(name: str, pool: PoolAnalysis, bootstrap: FloatArray | None = None) -> list[tuple]:
    """A row per probability, from often to rare."""
    accepted = np.array([pool.curves[law] for law in pool.accepted if law in pool.curves])
    none = np.full(len(pool.aep), np.nan)
    lowest, highest = (accepted.min(axis=0), accepted.max(axis=0)) if len(accepted) else (none, none)
    growth = pool.growth
    columns = (
        growth.factor,
        growth.lower,
        growth.upper,
        growth.ln_sd_new_site,
        growth.ln_sd_region,
        lowest,
        highest,
        *((none, none) if bootstrap is None else bootstrap),
    )
    return [
        (name, pool.curve.distribution, aep, *values) for aep, *values in zip(pool.aep, *columns, strict=True)
    ]


def _table(name: str, columns: tuple[Column, ...], rows: list[tuple]) -> Table:
    return Table(name, pd.DataFrame(rows, columns=[column.name for column in columns]), columns)
