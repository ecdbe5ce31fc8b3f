"""The page's words on pools: homogeneity and growth curves."""

from __future__ import annotations

import numpy as np

from wrackline.hydrology.pools import PoolAnalysis
from wrackline.report.figures_pool import number_gauges
from wrackline.report.rounding import format_aep, format_percent, format_significant
from wrackline.study.config import StudyConfig
from wrackline.study.contribution import Figure, PageTable, Section

SHOWN_AEPS = (0.5, 0.2, 0.1, 0.04, 0.02, 0.01, 0.005, 0.002)


def homogeneity_section(pools: dict[str, PoolAnalysis], moves: dict[str, str]) -> Section:
    """Say how the pools stand up to the tests."""
    left_out = [f"{g} ({why})" for pool in pools.values() for g, why in sorted(pool.left_out.items())]
    paragraphs = [*(describe_pool(name, pool) for name, pool in pools.items()), describe_discordancy(pools)]
    paragraphs += [f"Gauge {gauge} was {move}." for gauge, move in sorted(moves.items())]
    if left_out:
        paragraphs.append("Left out of the averages of L-moment ratios: " + ", ".join(left_out) + ".")
    return Section(
        key="homogeneity",
        title="Pools and their homogeneity",
        paragraphs=tuple(paragraphs),
        figures=(
            Figure(
                "lmoment_ratios.png",
                "L-moment ratios of the gauges (numbers as in the table below), pool averages (large, edged), and the "
                "lines of the candidate distributions. A pool's law is judged by its average, not by single gauges.",
                "Scatter of L-kurtosis against L-skew with five candidate curves.",
            ),
            Figure(
                "discordancy.png",
                "Discordancy of every gauge within its pool; a bar marks the critical value and gauges beyond it are named. "
                "Rings mark gauges that only the robust second look points to. Look at their data first.",
                "Strip chart of discordancy by pool with critical values.",
            ),
        ),
        tables=(_tests_table(pools), _gauges_table(pools)),
        method=(
            "L-moment ratios of exactly known systematic peaks, averaged with record lengths as weights (Hosking and Wallis, 1997). "
            "Discordancy D with critical values from the F distribution, capped at 3; a second look with a robust centre (minimum "
            "covariance determinant). H1 to H3 by simulation from a kappa law; H1 decides. Beside it stands H1 against simulated regions "
            "whose gauges are correlated in the years they share, by the fitted distance model (Gaussian copula).",
        ),
    )


def describe_pool(name: str, pool: PoolAnalysis) -> str:
    """One pool's verdict with the numbers behind it."""
    h, g = pool.heterogeneity, len(pool.gauge_ids)
    text = f"Pool {name}: {g} gauge{'s' * (g != 1)} with {pool.station_years} station-years. "
    if not np.isfinite(h.h[0]):
        return text + "One gauge alone cannot be tested for homogeneity."
    text += f"H1 = {_signed(h.h[0])} (simulation error {h.h_se[0]:.2f}, {h.n_simulations} simulated regions): {pool.verdict}."
    if pool.correlated is not None:
        text += f" With correlated gauges H1 = {_signed(pool.correlated.h[0])}."
    return text


def describe_discordancy(pools: dict[str, PoolAnalysis]) -> str:
    """Name the discordant gauges, and those that only the robust second look finds."""
    odd = [
        g
        for p in pools.values()
        for g, is_odd in zip(p.gauge_ids, p.discordancy.discordant, strict=True)
        if is_odd
    ]
    masked = [
        g
        for p in pools.values()
        for g, hidden in zip(p.gauge_ids, p.discordancy.masked, strict=True)
        if hidden
    ]
    text = f"Discordant: {', '.join(odd)}." if odd else "No gauge is discordant."
    if masked:
        text += f" The robust second look also points to {', '.join(masked)}."
    if odd or masked:
        text += " A discordant gauge asks for a check of its data; it stays in the pool until the analyst decides."
    return text


def growth_section(pools: dict[str, PoolAnalysis], config: StudyConfig) -> Section:
    """Say which curve each pool has, why, and how far an ungauged site may differ from it."""
    return Section(
        key="growth",
        title="Growth curves",
        paragraphs=tuple(
            describe_growth_curve(name, pool, config.confidence) for name, pool in pools.items()
        ),
        figures=(
            Figure(
                "growth_curves.png",
                f"Growth curve of each pool with its {format_percent(config.confidence)} interval for an ungauged site of the region "
                "(band), and the other accepted laws (dashed). Gumbel scale.",
                "Growth curves against annual exceedance probability, one panel a pool.",
            ),
        ),
        tables=(_growth_table(pools), _fit_table(pools)),
        method=(
            f"Index-flood method (Dalrymple, 1960) with the {config.index_flood.statistic} as index; the law is fitted to the pool's "
            "L-moment ratios and divided by its own index. The three-parameter law with the smallest |Z| among those of 1.64 or less; "
            "kappa where none is accepted or H1 is 2 or more. Intervals by simulation of the whole regional analysis with correlated "
            "records and with sites that differ by as much as the data suggest (posterior under a weak prior): they are for the true "
            "growth factor of an ungauged site, not for the region's average curve.",
        ),
    )


def describe_growth_curve(name: str, pool: PoolAnalysis, confidence: float) -> str:
    """One pool's law, the reason, and what it means at the rarest usual probability."""
    choice, curve = pool.choice, pool.curve
    text = f"Pool {name}: {curve.distribution}, {choice.reason}."
    if curve.distribution != choice.distribution:
        text += f" {choice.distribution} does not exist for its L-kurtosis, so its limit {curve.distribution} stands in."
    if choice.pinned:
        agrees = choice.distribution == choice.by_evidence
        text += (
            " The tests would choose the same."
            if agrees
            else f" The tests would choose {choice.by_evidence} now."
        )
    at = int(np.argmin(np.abs(pool.aep - 0.01)))
    growth, aep = pool.growth, format_aep(float(pool.aep[at]))
    text += (
        f" The flood of AEP {aep} is {format_significant(growth.factor[at])} times the {pool.statistic} flood; at an ungauged site the "
        f"true factor lies between {format_significant(growth.lower[at])} and {format_significant(growth.upper[at])} with "
        f"{format_percent(confidence)} probability."
    )
    if len(pool.accepted) > 1:
        spread = [pool.curves[law][at] for law in pool.accepted if law in pool.curves]
        text += (
            f" The {len(spread)} accepted laws ({', '.join(pool.accepted)}) give {format_significant(min(spread))} to "
            f"{format_significant(max(spread))}."
        )
    return text


def _tests_table(pools: dict[str, PoolAnalysis]) -> PageTable:
    rows = tuple(
        (
            name, str(len(p.gauge_ids)), str(p.station_years), *(_signed(h) for h in p.heterogeneity.h),
            _signed(p.correlated.h[0]) if p.correlated else "", p.verdict,
        )
        for name, p in pools.items()
    )  # fmt: skip
    head = ("pool", "gauges", "station-years", "H1", "H2", "H3", "H1, correlated gauges", "verdict")
    return PageTable("Heterogeneity of the pools.", head, rows, "tables/pool_tests.csv")


def _gauges_table(pools: dict[str, PoolAnalysis]) -> PageTable:
    rows = []
    numbers = number_gauges(pools)
    for name, p in pools.items():
        for i, gauge in enumerate(p.gauge_ids):
            lm, found = p.lmoments, p.discordancy
            d = f"{found.measure[i]:.2f}" if np.isfinite(found.measure[i]) else ""
            mark = (
                "discordant" if found.discordant[i] else "second look" if found.robust_discordant[i] else ""
            )
            rows.append(
                (
                    str(numbers[gauge]),
                    gauge,
                    name,
                    str(int(lm.n[i])),
                    f"{lm.t[i]:.3f}",
                    f"{lm.t3[i]:.3f}",
                    f"{lm.t4[i]:.3f}",
                    d,
                    mark,
                )
            )
    rows.sort(key=lambda row: int(row[0]))
    head = ("number", "gauge", "pool", "peaks", "L-CV", "L-skew", "L-kurtosis", "D", "remark")
    return PageTable("Gauges of the pools.", head, tuple(rows), "tables/pools.csv")


def _growth_table(pools: dict[str, PoolAnalysis]) -> PageTable:
    shown = [aep for aep in SHOWN_AEPS if any(aep in p.aep for p in pools.values())]
    rows = []
    for name, p in pools.items():
        cells = []
        for aep in shown:
            at = int(np.argmin(np.abs(p.aep - aep)))
            growth = p.growth
            cells.append(
                f"{format_significant(growth.factor[at])} ({format_significant(growth.lower[at])} to {format_significant(growth.upper[at])})"
            )
        rows.append((name, p.curve.distribution, *cells))
    head = ("pool", "law", *(f"AEP {format_aep(aep)}" for aep in shown))
    return PageTable(
        "Growth factors with intervals for an ungauged site.", head, tuple(rows), "tables/growth_curves.csv"
    )


def _fit_table(pools: dict[str, PoolAnalysis]) -> PageTable:
    first = next(iter(pools.values()))
    rows = tuple(
        (
            name,
            *(
                f"{_signed(z)}{' accepted' if yes else ''}"
                for z, yes in zip(p.fit.z, p.fit.accepted, strict=True)
            ),
            p.curve.distribution,
        )
        for name, p in pools.items()
    )
    return PageTable(
        "Goodness of fit Z of the candidates.",
        ("pool", *first.fit.names, "law used"),
        rows,
        "tables/pool_distributions.csv",
    )


def _signed(value: float) -> str:
    return f"{value:.2f}".replace("-", "\N{MINUS SIGN}") if np.isfinite(value) else ""
