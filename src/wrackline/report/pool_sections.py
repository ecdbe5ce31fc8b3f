"""The page's words on pools: homogeneity and growth curves."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
import pandas as pd

from wrackline.hydrology.pool_suggestions import suggest
from wrackline.hydrology.pool_validation import PoolingScore
from wrackline.hydrology.pools import PoolAnalysis
from wrackline.report.figures_pool import number_gauges
from wrackline.report.rounding import format_aep, format_percent, format_significant
from wrackline.study.config import StudyConfig
from wrackline.study.contribution import Figure, PageTable, Section
from wrackline.study.pool_plans import PoolPlan

SHOWN_AEPS = (0.5, 0.2, 0.1, 0.04, 0.02, 0.01, 0.005, 0.002)


WAYS = {
    "one": "all gauges together",
    "regions": "given regions",
    "clusters": "clusters of attributes",
    "influence": "regions of influence",
}


def homogeneity_section(
    pools: dict[str, PoolAnalysis],
    shown: dict[str, PoolAnalysis],
    plan: PoolPlan,
    effects: Sequence[str],
    sheets: Sequence[Figure],
    gauges: pd.DataFrame,
) -> Section:
    """Say how the pools came about and how they stand up to the tests; pools shown one by one are ``shown``."""
    left_out = {g: why for pool in pools.values() for g, why in pool.left_out.items()}
    paragraphs = [
        *plan.notes,
        *_describe_many(pools, shown),
        *(describe_pool(n, p) for n, p in shown.items()),
    ]
    paragraphs += [describe_discordancy(shown), *describe_suggestions(pools)]
    paragraphs += [f"Gauge {gauge} was {move}." for gauge, move in sorted(plan.moves.items())]
    paragraphs += effects
    if any(pool.after_selection for pool in pools.values()):
        paragraphs.append(
            "H had a say in how many clusters there are, so the H of these clusters, marked 'after selection', is no test of them."
        )
    if left_out:
        paragraphs.append(
            "Left out of the averages of L-moment ratios: "
            + ", ".join(f"{g} ({why})" for g, why in sorted(left_out.items()))
            + "."
        )
    return Section(
        key="homogeneity",
        title="Pools and their homogeneity",
        paragraphs=tuple(paragraphs),
        figures=(
            Figure(
                "pool_map.png",
                "Pools at a glance: gauges by the centroids of their basins, and the targets (rings).",
                "Map of gauges by pool, and of targets.",
            ),
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
            *sheets,
        ),
        tables=(_tests_table(shown), *_suggestions_table(pools), _gauges_table(shown, gauges)),
        method=(
            "L-moment ratios of exactly known systematic peaks (Hosking and Wallis, 1997), averaged with record lengths as weights; in regions of "
            "influence with weights of least error from computed sampling variances, from the correlation of records, and from how much "
            "sites differ with their distance in attributes. H and D weigh by record length and not at all. "
            "Discordancy D with critical values from the F distribution, capped at 3; a second look with a robust centre (minimum "
            "covariance determinant). H1 to H3 by simulation from a kappa law; H1 decides. Beside it stands H1 against simulated regions "
            "whose gauges are correlated in the years they share, by the fitted distance model (Gaussian copula). Where L-skew exceeds 0.23 the bootstrap of the k-sample Anderson-Darling statistic "
            "gives a second opinion (Viglione, Laio and Claps, 2007). All pools share their simulated draws, so their H can be compared. "
            "Records with more than a few years without flow, or with years known only to be low, enter by the generalized extreme-value law "
            "fitted to their partial probability-weighted moments (Wang, 1990).",
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


def _describe_many(pools: dict[str, PoolAnalysis], shown: dict[str, PoolAnalysis]) -> list[str]:
    if len(pools) == len(shown):
        return []
    h1 = np.array([p.heterogeneity.h[0] for p in pools.values()])
    h1 = h1[np.isfinite(h1)]
    gauges, years = (
        np.median([f(p) for p in pools.values()])
        for f in (lambda p: len(p.gauge_ids), lambda p: p.station_years)
    )
    return [
        f"There are {len(pools)} pools, of {gauges:g} gauges and {years:g} station-years at the median. H1 is below 1 in "
        f"{int((h1 < 1).sum())}, from 1 to 2 in {int(((h1 >= 1) & (h1 < 2)).sum())}, 2 or more in {int((h1 >= 2).sum())}. The page shows "
        f"{len(shown)} of them; the tables hold all."
    ]


def describe_suggestions(pools: dict[str, PoolAnalysis]) -> list[str]:
    """Say how many gauges ask for a look; nothing is ever done by itself."""
    found = [s for pool in pools.values() for s in suggest(pool)]
    if not found:
        return []
    gauges = len({s.gauge_id for s in found})
    driving = sorted({s.gauge_id for s in found if "drives_h" in s.kinds})
    text = f"{gauges} gauge{'s' * (gauges != 1)} ask{'s' * (gauges == 1)} for a look (table below); none was changed."
    if driving:
        listed = ", ".join(driving[:8]) + (" ..." if len(driving) > 8 else "")
        text += f" Heterogeneity hangs most on {listed}."
    return [
        text
        + " A change that the analyst accepts is a line in pooling.moves or in the ledger, with its reason."
    ]


def describe_discordancy(pools: dict[str, PoolAnalysis]) -> str:
    """Name the discordant gauges, and those that only the robust second look finds."""
    odd = {
        g: None
        for p in pools.values()
        for g, is_odd in zip(p.gauge_ids, p.discordancy.discordant, strict=True)
        if is_odd
    }
    masked = {
        g: None
        for p in pools.values()
        for g, hidden in zip(p.gauge_ids, p.discordancy.masked, strict=True)
        if hidden
    }
    text = f"Discordant: {', '.join(odd)}." if odd else "No gauge is discordant."
    if masked:
        text += f" The robust second look also points to {', '.join(masked)}."
    if odd or masked:
        text += " A discordant gauge asks for a check of its data; it stays in the pool until the analyst decides."
    return text


def growth_section(
    shown: dict[str, PoolAnalysis],
    config: StudyConfig,
    scores: Sequence[PoolingScore],
    method: str,
    bootstraps: dict[str, np.ndarray],
) -> Section:
    """Say which curve each pool has, why, how far an ungauged site may differ from it, and which way of pooling does best."""
    paragraphs = [describe_growth_curve(name, pool, config.confidence) for name, pool in shown.items()]
    paragraphs += describe_comparison(scores, method) + _describe_bootstrap(shown, bootstraps)
    return Section(
        key="growth",
        title="Growth curves",
        paragraphs=tuple(paragraphs),
        figures=(
            Figure(
                "growth_curves.png",
                f"Growth curve of each pool with its {format_percent(config.confidence)} interval for an ungauged site of the region "
                "(band), and the other accepted laws (dashed). Gumbel scale.",
                "Growth curves against annual exceedance probability, one panel a pool.",
            ),
        ),
        tables=(_growth_table(shown), _fit_table(shown), *_comparison_table(scores, method)),
        method=(
            f"Index-flood method (Dalrymple, 1960) with the {config.index_flood.statistic} as index; the law is fitted to the pool's "
            "L-moment ratios and divided by its own index. The three-parameter law with the smallest |Z| among those of 1.64 or less; "
            "kappa where none is accepted or H1 is 2 or more. Intervals by simulation of the whole regional analysis with correlated "
            "records and with sites that differ by as much as the data suggest (posterior under a weak prior): they are for the true "
            "growth factor of an ungauged site, not for the region's average curve; those of a gauge's own pool are for that gauge.",
            "Ways of pooling are compared by predicting each gauge's growth factors without it (Robson and Reed, 1999), net of the sampling error "
            "of the gauge's own factors. No L-moment has a say in who is in a pool, but for the number of clusters.",
        ),
    )


def describe_comparison(scores: Sequence[PoolingScore], method: str) -> list[str]:
    """Name the way of pooling with the smallest leave-one-out error at AEP 0.01, and by how much it leads."""
    at = sorted((s for s in scores if s.aep == 0.01), key=lambda s: s.net)
    if len(at) < 2:
        return []
    best, second = at[0], at[1]
    clear = second.net - best.net > best.net_se
    text = (
        f"Predicting the growth factor of AEP 1 % at {best.n_gauges} gauges without themselves, {WAYS[best.method]} do best: a net error of "
        f"{best.net:.3f} in ln, against {', '.join(f'{s.net:.3f} for {WAYS[s.method]}' for s in at[1:])}"
        f" (standard error {best.net_se:.3f}: {'a clear' if clear else 'no clear'} lead)."
    )
    used = next((s for s in at if s.method == method), None)
    if used is not None and np.isfinite(used.covered):
        text += f" The intervals of the way used, {WAYS[method]}, hold {format_percent(used.covered)} of the gauges' own factors."
    return [text]


def _describe_bootstrap(shown: dict[str, PoolAnalysis], bootstraps: dict[str, np.ndarray]) -> list[str]:
    told = []
    for name in (name for name in shown if name in bootstraps):
        at = int(np.argmin(np.abs(shown[name].aep - 0.01)))
        low, high = (format_significant(bound[at]) for bound in bootstraps[name])
        told.append(
            f"Resampling whole water years puts the average curve of pool {name} at AEP {format_aep(float(shown[name].aep[at]))} between {low} and {high}: "
            "no law of correlation assumed, and narrower than the interval for a site, which may differ from the average."
        )
    return told


def _comparison_table(scores: Sequence[PoolingScore], method: str) -> tuple[PageTable, ...]:
    if not scores:
        return ()
    rows = tuple(
        (
            WAYS[s.method] + (" (used)" if s.method == method else ""), format_aep(s.aep), str(s.n_gauges), _signed3(s.bias),
            f"{s.rmse:.3f}", f"{s.own_sampling:.3f}", f"{s.net:.3f} ± {s.net_se:.3f}",
            format_percent(s.covered) if np.isfinite(s.covered) else "",
        )
        for s in scores
    )  # fmt: skip
    head = (
        "pooling",
        "AEP",
        "gauges",
        "bias",
        "error",
        "own sampling error",
        "net error",
        "within the interval",
    )
    return (
        PageTable(
            "Ways of pooling: errors of ln growth factors, gauges left out one at a time.",
            head,
            rows,
            "tables/pool_validation.csv",
        ),
    )


def _suggestions_table(pools: dict[str, PoolAnalysis]) -> tuple[PageTable, ...]:
    rows: dict[str, tuple[str, ...]] = {}
    for name, pool in pools.items():
        for s in suggest(pool):
            drop = s.h1 - s.h1_without
            if s.gauge_id not in rows or drop > float(rows[s.gauge_id][-1] or "-inf"):
                shown = (_signed(s.h1), _signed(s.h1_without))
                rows[s.gauge_id] = (
                    s.gauge_id,
                    name,
                    *shown,
                    s.words,
                    repr(drop) if np.isfinite(drop) else "",
                )
    if not rows:
        return ()
    head = ("gauge", "pool", "H1", "H1 without", "what was seen")
    listed = tuple(row[:-1] for _, row in sorted(rows.items()))
    return (
        PageTable(
            "Gauges that ask for a look; nothing was changed.", head, listed, "tables/pool_suggestions.csv"
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


def _gauges_table(pools: dict[str, PoolAnalysis], gauges: pd.DataFrame) -> PageTable:
    rows = []
    numbers = number_gauges(pools)
    area = dict(zip(gauges["gauge_id"], gauges["area_km2"], strict=True)) if "area_km2" in gauges else {}
    for name, p in pools.items():
        for i, gauge in enumerate(p.gauge_ids):
            lm, found = p.lmoments, p.discordancy
            mark = (
                "discordant" if found.discordant[i] else "second look" if found.robust_discordant[i] else ""
            )
            rows.append(
                (
                    str(numbers[gauge]), gauge, name, format_significant(area[gauge]) if gauge in area else "", f"{p.weight[i]:.3f}",
                    str(int(lm.n[i])), f"{lm.t[i]:.3f}", f"{lm.t3[i]:.3f}", f"{lm.t4[i]:.3f}",
                    f"{found.measure[i]:.2f}" if np.isfinite(found.measure[i]) else "", _signed(p.h1_without[i]), mark,
                )
            )  # fmt: skip
    rows.sort(key=lambda row: (int(row[0]), row[2]))
    head = (
        "number", "gauge", "pool", "area, km²", "weight", "peaks", "L-CV", "L-skew", "L-kurtosis", "D", "H1 without", "remark",
    )  # fmt: skip
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


def _signed3(value: float) -> str:
    return f"{value:.3f}".replace("-", "\N{MINUS SIGN}")
