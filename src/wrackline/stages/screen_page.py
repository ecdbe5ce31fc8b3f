"""Tables and page section of the stage `screen`."""

from __future__ import annotations

import numpy as np
import pandas as pd

from wrackline.hydrology.records import BoolArray, IntArray
from wrackline.hydrology.redundancy import RedundantPairs
from wrackline.hydrology.screening import ScreeningResult
from wrackline.report.rounding import format_significant
from wrackline.study.config import SCREENING_FLAGS, Screening
from wrackline.study.contribution import Figure, PageTable, Section
from wrackline.study.tables import Column, Table

PAGE_ROWS = 60
FLAG_WORDS = {
    "short_record": "a short record",
    "regulated": "regulation",
    "trend": "a trend",
    "change_point": "a change of level",
    "serial_correlation": "serial correlation",
    "extreme_flood": "an extreme flood",
    "long_gaps": "long gaps",
    "redundant": "redundancy with a nested gauge",
}
GAUGE_COLUMNS = (
    Column("gauge_id", "text", "gauge"),
    Column("n_peaks", "count", "exactly known systematic peaks"),
    Column("first_year", "water year", "first year of systematic gauging"),
    Column("last_year", "water year", "last year of systematic gauging"),
    Column("span_years", "years", "years from first to last"),
    Column("gap_years", "years", "years between of which nothing is known"),
    Column("largest_over_median", "log10 cycles", "largest exact systematic peak over their median"),
    Column("trend_p", "probability", "Mann-Kendall test, two-sided p-value (normal approximation)"),
    Column("trend_tau", "1", "Kendall's tau-a of the peaks with time"),
    Column(
        "trend_p_serial",
        "probability",
        "trend_p with the variance inflated for significant serial correlation",
    ),
    Column("trend_p_adjusted", "probability", "trend_p_serial adjusted for testing all gauges"),
    Column("sen_slope", "% per decade", "median slope of the log10 peaks over all pairs of years"),
    Column("change_point_p", "probability", "Pettitt test, approximate two-sided p-value"),
    Column("change_point_p_adjusted", "probability", "change_point_p adjusted for testing all gauges"),
    Column("change_point_year", "water year", "last year before the change"),
    Column("lag1_correlation", "1", "correlation of the log10 peaks of consecutive years"),
    Column("lag1_lower", "1", "lower 95 % bound of an independent record"),
    Column("lag1_upper", "1", "upper 95 % bound of an independent record"),
    Column("lag1_p", "probability", "two-sided p-value against independence"),
    Column("lag1_p_adjusted", "probability", "lag1_p adjusted for testing all gauges"),
    Column("disturbed_share", "fraction", "share of the rows that were regulated, diverted or urbanised"),
    Column("flags", "text", "flags raised, separated by spaces"),
    Column("used", "true/false", "the regional analysis uses the gauge"),
    Column("reasons", "text", "why it is not used, or what to know of it"),
)
ACCOUNTING_COLUMNS = (
    Column("file", "text", "input file"),
    Column("row", "count", "line of the file, the header being 1"),
    Column("gauge_id", "text", "gauge"),
    Column("water_year", "water year", "water year"),
    Column("fate", "text", "used, interval or excluded"),
    Column("reason", "text", "why"),
    Column(
        "decided_by", "text", "what decided: default, a flag, periods.csv, redundancy.csv, screening, ledger"
    ),
)
PAIR_COLUMNS = (
    Column("gauge_id", "text", "one gauge"),
    Column("other_id", "text", "the other"),
    Column("distance_km", "km", "between basin centroids"),
    Column("standardized_distance", "1", "distance over the root of the mean area"),
    Column("area_ratio", "1", "larger area over smaller"),
    Column("overlap_share", "fraction", "shared area over the smaller basin; blank without polygons"),
    Column("dropped", "text", "the gauge that goes for this pair; blank where both stay"),
    Column("decided_by", "text", "screening, redundancy.csv or ledger"),
    Column("why", "text", "the reason"),
)


def gauge_table(result: ScreeningResult, used: BoolArray, reasons: list[str]) -> Table:
    """Return the table of gauges; years that do not apply are blank."""
    flags = [" ".join(f for f in SCREENING_FLAGS if f in raised) for raised in _flags_by_gauge(result)]
    frame = pd.DataFrame(
        {
            "gauge_id": list(result.gauge_ids),
            "n_peaks": result.n_peaks,
            "first_year": _blank_zero(result.first_year),
            "last_year": _blank_zero(result.last_year),
            "span_years": result.span,
            "change_point_year": _blank_zero(result.change_point_year),
            "flags": flags,
            "used": used,
            "reasons": reasons,
        }
    )
    for column in GAUGE_COLUMNS:
        if column.name not in frame:
            frame[column.name] = getattr(result, column.name)
    return Table("gauge_screening", frame[[column.name for column in GAUGE_COLUMNS]], GAUGE_COLUMNS)


def accounting_table(frame: pd.DataFrame) -> Table:
    """Return the final accounting of the rows of the peaks table."""
    return Table(
        "record_accounting", frame[[column.name for column in ACCOUNTING_COLUMNS]], ACCOUNTING_COLUMNS
    )


def pair_table(pairs: RedundantPairs, gauge_ids: tuple[str, ...]) -> Table:
    """Return the table of nested pairs, sorted by the pair."""
    frame = pd.DataFrame(
        {
            "gauge_id": [gauge_ids[i] for i in pairs.pairs.first],
            "other_id": [gauge_ids[i] for i in pairs.pairs.second],
            "distance_km": pairs.pairs.distance_km,
            "standardized_distance": pairs.pairs.standardized_distance,
            "area_ratio": pairs.pairs.area_ratio,
            "overlap_share": pairs.overlap_share,
            "dropped": [gauge_ids[i] if i >= 0 else "" for i in pairs.dropped],
            "decided_by": list(pairs.decided_by),
            "why": list(pairs.why),
        }
    )
    return Table("redundant_pairs", frame, PAIR_COLUMNS)


def screening_section(
    result: ScreeningResult, used: BoolArray, reasons: list[str], pairs: RedundantPairs, settings: Screening
) -> Section:
    """Return the page's section: sentences from the numbers, two figures, tables of gauges and pairs."""
    figures = (
        Figure(
            "record_timeline.png",
            "Years on record of every gauge; gauges that are not used are thin, with a cross at the end.",
            f"A line for each of {len(used)} gauges over water years, broken at gaps; {int((~used).sum())} are marked as not used.",
        ),
        Figure(
            "trends.png",
            "Trend of every gauge's peaks; filled triangles where it is significant, larger for longer records; short records are left out.",
            f"Slope in percent per decade against the middle of the record; {int(result.flagged('trend').sum())} gauges have a significant trend.",
        ),
    )
    return Section(
        key="screening",
        title="Screening of records",
        paragraphs=tuple(_sentences(result, used, pairs, settings)),
        figures=figures,
        tables=tuple(_page_tables(result, used, reasons, pairs)),
        method=(
            "Mann-Kendall test with correction for ties and, where the peaks less their trend are serially "
            "correlated, for that (Yue and Wang, 2004); slope of Theil and Sen on log10 peaks; Pettitt's test; lag-one correlation "
            "of consecutive years with Anderson's bounds. A peak known only to lie below a level is tied at it. "
            + (
                "Each test is judged over all gauges together (Benjamini and Hochberg, 1995)."
                if settings.false_discovery_control
                else "Each gauge is judged by itself."
            ),
            f"Nested pairs: standardized distance at most {settings.redundancy_distance:g}, area ratio at most "
            f"{settings.redundancy_area_ratio:g} (Veilleux, 2009), and with polygons at least "
            f"{100 * settings.redundancy_overlap:g} % of the smaller basin shared. The longer record stays, the analyst's "
            "decision first. Tests flag; they alter no record.",
        ),
    )


def _sentences(
    result: ScreeningResult, used: BoolArray, pairs: RedundantPairs, settings: Screening
) -> list[str]:
    g, n_used = len(used), int(used.sum())
    n = np.sort(result.n_peaks[used])
    sentences = [
        f"{n_used} of {g} gauges are used. Their systematic records hold {n[0]} to {n[-1]} peaks, {np.median(n):.0f} in "
        f"the middle, {int(n.sum())} in all."
    ]
    counts = {
        flag: int((result.flagged(flag) & ~used).sum())
        for flag in SCREENING_FLAGS
        if flag in settings.exclude
    }
    out = [f"{count} for {FLAG_WORDS[flag]}" for flag, count in counts.items() if count]
    by_ledger = int((~used & ~result.excluded(settings.exclude)).sum())
    if by_ledger:
        out.append(f"{by_ledger} by the ledger")
    if out:
        several = " (some for more than one reason)" if sum(counts.values()) + by_ledger > g - n_used else ""
        sentences.append(f"Not used: {_listed(out)}{several}.")
    beside = [
        f"{count} with {FLAG_WORDS[flag]}"
        for flag in SCREENING_FLAGS
        if flag not in settings.exclude and (count := int((result.flagged(flag) & used).sum()))
    ]
    if beside:
        sentences.append(
            f"Used and flagged: {_listed(beside)}. A flag asks for a look at the gauge; it alters no record."
        )
    slopes = result.sen_slope[used & np.isfinite(result.sen_slope)]
    if len(slopes):
        low, middle, high = np.percentile(slopes, [10, 50, 90])
        rising = int((result.flagged("trend") & used & (result.trend_tau > 0)).sum())
        falling = int((result.flagged("trend") & used & (result.trend_tau < 0)).sum())
        sentences.append(
            f"The peaks of the used gauges change by {_signed(middle)} % per decade in the middle ({_signed(low)} to "
            f"{_signed(high)} % for eight gauges in ten); {rising} rise and {falling} fall significantly. A trend in "
            "a short record is no evidence of a cause."
        )
    if len(pairs.pairs):
        sentences.append(
            f"{len(pairs.pairs)} pair{'s' * (len(pairs.pairs) != 1)} of gauges "
            f"{'are' if len(pairs.pairs) != 1 else 'is'} near enough and alike enough in area to be nested; "
            f"{len(pairs.drop_reasons)} gauge{'s' * (len(pairs.drop_reasons) != 1)} went for it."
        )
    return sentences


def _page_tables(
    result: ScreeningResult, used: BoolArray, reasons: list[str], pairs: RedundantPairs
) -> list[PageTable]:
    tables: list[PageTable] = []
    for chosen, caption in (
        (~used, "Gauges that are not used."),
        (used & np.array([bool(r) for r in reasons]), "Gauges that are used and deserve a look."),
    ):
        rows = tuple(
            (result.gauge_ids[i], str(result.n_peaks[i]), reasons[i])
            for i in np.flatnonzero(chosen)[:PAGE_ROWS]
        )
        if rows:
            more = int(chosen.sum()) - len(rows)
            caption += f" The first {PAGE_ROWS}; {more} more in the table." if more else ""
            tables.append(
                PageTable(caption, ("gauge", "peaks", "reason"), rows, "tables/gauge_screening.csv")
            )
    if len(pairs.pairs):
        pair_rows = tuple(
            (
                f"{result.gauge_ids[pairs.pairs.first[k]]} / {result.gauge_ids[pairs.pairs.second[k]]}",
                format_significant(pairs.pairs.standardized_distance[k]),
                format_significant(pairs.pairs.area_ratio[k]),
                "" if np.isnan(pairs.overlap_share[k]) else f"{100 * pairs.overlap_share[k]:.0f} %",
                result.gauge_ids[pairs.dropped[k]] if pairs.dropped[k] >= 0 else "both stay",
                pairs.why[k],
            )
            for k in range(min(len(pairs.pairs), PAGE_ROWS))
        )
        head = ("pair", "standardized distance", "area ratio", "shared", "goes", "why")
        tables.append(PageTable("Nested pairs of gauges.", head, pair_rows, "tables/redundant_pairs.csv"))
    return tables


def _flags_by_gauge(result: ScreeningResult) -> list[set[str]]:
    flags: list[set[str]] = [set() for _ in result.gauge_ids]
    for flag in result.flags:
        flags[flag.gauge].add(flag.flag)
    return flags


def _blank_zero(years: IntArray) -> pd.Series:
    return pd.Series(pd.array(years, dtype="Int64")).where(years > 0)


def _listed(parts: list[str]) -> str:
    return parts[0] if len(parts) == 1 else ", ".join(parts[:-1]) + " and " + parts[-1]


def _signed(value: float) -> str:
    return f"{value:+.1f}"
