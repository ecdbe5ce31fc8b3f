"""The published tables of the pools."""

from __future__ import annotations

import numpy as np
import pandas as pd

from wrackline.hydrology.pools import PoolAnalysis
from wrackline.hydrology.records import PeakRecords
from wrackline.stats import distributions
from wrackline.stats.lmoments import sample_lmoments
from wrackline.study.config import StudyConfig
from wrackline.study.tables import Column, Table

LMOMENT_COLUMNS = (
    Column("gauge_id", "text", "gauge"),
    Column("n", "count", "exactly known systematic peaks"),
    Column("mean", "flow", "mean of the peaks, the first L-moment"),
    Column("lcv", "", "L-CV, second L-moment over the first"),
    Column("lskew", "", "L-skew, third L-moment over the second"),
    Column("lkurtosis", "", "L-kurtosis, fourth L-moment over the second"),
    Column("l5_ratio", "", "fifth L-moment over the second"),
    Column("pool", "text", "pool of the gauge; blank: in no pool"),
)
POOL_COLUMNS = (
    Column("pool", "text", "pool"),
    Column("gauge_id", "text", "gauge"),
    Column("weight", "", "weight in the pool's averages; they sum to one"),
    Column("discordancy", "", "discordancy D (Hosking and Wallis, 1993)"),
    Column("critical", "", "critical value of D for the pool's number of gauges"),
    Column("discordant", "true/false", "whether D exceeds it"),
    Column("robust_distance", "", "distance from the robust centre; above 3.06 asks for a second look"),
    Column("second_look", "true/false", "whether the robust distance asks for a second look"),
    Column("remark", "text", "why a gauge has no weight, or was moved"),
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
)


def build_tables(
    config: StudyConfig,
    records: PeakRecords,
    pools: dict[str, PoolAnalysis],
    pool_of_gauge: dict[str, str],
    moves: dict[str, str],
) -> tuple[Table, ...]:
    """Build the five tables; records are those of all used gauges, in order of identifier."""
    return (
        Table("gauge_lmoments", lmoment_rows(config, records, pool_of_gauge), LMOMENT_COLUMNS),
        _table(
            "pools", POOL_COLUMNS, [row for name in pools for row in member_rows(name, pools[name], moves)]
        ),
        _table("pool_tests", TEST_COLUMNS, [test_row(name, pool) for name, pool in pools.items()]),
        _table(
            "pool_distributions",
            DISTRIBUTION_COLUMNS,
            [row for name, pool in pools.items() for row in distribution_rows(name, pool)],
        ),
        _table(
            "growth_curves",
            GROWTH_COLUMNS,
            [row for name, pool in pools.items() for row in growth_rows(name, pool)],
        ),
    )


def lmoment_rows(config: StudyConfig, records: PeakRecords, pool_of_gauge: dict[str, str]) -> pd.DataFrame:
    """A row per used gauge; blank ratios where the record is too short for them."""
    exact = records.keep_rows(records.systematic_exact)
    lm = sample_lmoments(exact.flow_low, exact.offsets)
    return pd.DataFrame(
        {
            "gauge_id": list(records.gauge_ids),
            "n": lm.n,
            "mean": lm.l1 / config.flow_in_m3s,
            "lcv": lm.t,
            "lskew": lm.t3,
            "lkurtosis": lm.t4,
            "l5_ratio": lm.t5,
            "pool": [pool_of_gauge[gauge] for gauge in records.gauge_ids],
        }
    )


def member_rows(name: str, pool: PoolAnalysis, moves: dict[str, str]) -> list[tuple]:
    """A row per gauge of the pool, those left out of the averages included."""
    found = pool.discordancy
    rows = {
        gauge: (
            name, gauge, pool.weight[i], found.measure[i], found.critical, bool(found.discordant[i]),
            found.robust_distance[i], bool(found.robust_discordant[i]), moves.get(gauge, ""),
        )
        for i, gauge in enumerate(pool.gauge_ids)
    }  # fmt: skip
    for gauge, reason in pool.left_out.items():
        remark = "; ".join(filter(None, (f"left out of the averages: {reason}", moves.get(gauge, ""))))
        rows[gauge] = (name, gauge, 0.0, np.nan, found.critical, False, np.nan, False, remark)
    return [rows[gauge] for gauge in sorted(rows)]


def test_row(name: str, pool: PoolAnalysis) -> tuple:
    """The pool's row of the table of tests."""
    h, correlated = pool.heterogeneity, pool.correlated
    return (
        name, len(pool.gauge_ids), pool.station_years, *h.h, correlated.h[0] if correlated else np.nan,
        h.n_simulations, pool.verdict, *h.h_se, correlated.h_se[0] if correlated else np.nan,
        pool.parent.name, *pool.ratios[:3], pool.between.mean_lcv_sd, pool.between.mean_lskew_sd,
    )  # fmt: skip


def distribution_rows(name: str, pool: PoolAnalysis) -> list[tuple]:
    """A row per law, the three-parameter candidates first."""
    lcv, lskew, lkurtosis, l5 = pool.ratios
    rows = []
    for law_name, law in distributions.BY_NAME.items():
        tested = law_name in pool.fit.names
        at = pool.fit.names.index(law_name) if tested else 0
        parameters = np.full(5, np.nan)
        fitted = np.asarray(law.fit(1.0, lcv, lskew, lkurtosis, l5), dtype=float)
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


def growth_rows(name: str, pool: PoolAnalysis) -> list[tuple]:
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
    )
    return [
        (name, pool.curve.distribution, aep, *values) for aep, *values in zip(pool.aep, *columns, strict=True)
    ]


def _table(name: str, columns: tuple[Column, ...], rows: list[tuple]) -> Table:
    return Table(name, pd.DataFrame(rows, columns=[column.name for column in columns]), columns)
