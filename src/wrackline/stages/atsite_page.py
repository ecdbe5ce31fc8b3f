"""Page section of the stage `atsite`: what the records alone say of floods at the gauges."""

from __future__ import annotations

import numpy as np

from wrackline.report.rounding import format_flow, format_interval, format_percent, format_unit
from wrackline.stages.atsite_tables import PROBABILITY_OF_COMPARISON, GaugeResults, families_by_region
from wrackline.stats.skew_variance import POLYNOMIAL_LIMIT
from wrackline.study.config import StudyConfig
from wrackline.study.contribution import Figure, PageTable, Section

PAGE_ROWS = 60


def station_section(
    results: GaugeResults, config: StudyConfig, shown: list[int], curves: dict[int, str]
) -> Section:
    """Return the page's section: sentences from the numbers, figures and tables."""
    tables = (
        *_gauge_table(results, config),
        *_refused_table(results),
        *_low_flood_table(results, config),
        *_family_table(results),
    )
    return Section(
        key="station",
        title="Floods at gauges",
        paragraphs=tuple(
            [*_fitted(results), *_low_floods(results, config), *_skews(results), *_families(results)]
        ),
        figures=tuple(_figures(results, shown, curves)),
        tables=tables,
        method=tuple(_method(results, config)),
    )


def _fitted(results: GaugeResults) -> list[str]:
    fits, fitted, used = results.fits, results.fitted, results.used
    g = len(fitted)
    years = np.sort(fits.record_years[fitted])
    text = f"Log-Pearson III was fitted to the records of {int(fitted.sum())} of {g} gauges"
    beside = int((fitted & ~used).sum())
    text += (
        f", {int((fitted & used).sum())} of them in the regional analysis; {beside} others are for information."
        if beside
        else "."
    )
    if len(years):
        text += (
            f" The fits rest on {years[0]} to {years[-1]} years each, {np.median(years):.0f} in the middle."
        )
    sentences = [text]
    historic = fitted & (fits.n_historic > 0)
    if historic.any():
        sentences.append(
            f"Historic floods add to the record of {_counted(int(historic.sum()), 'gauge')}, and with them the years in "
            "which none was worth recording."
        )
    refused = [reason for reason in results.reasons if reason]
    if refused:
        kinds = sorted({(-refused.count(reason), reason) for reason in refused})
        told = "; ".join(f"{-count}: {reason}" for count, reason in kinds[:4])
        more = f"; {len(kinds) - 4} other reasons" if len(kinds) > 4 else ""
        sentences.append(f"{_counted(len(refused), 'gauge')} could not be fitted ({told}{more}).")
    return sentences


def _low_floods(results: GaugeResults, config: StudyConfig) -> list[str]:
    low, fitted = results.fits.low_floods, results.fitted
    some = fitted & (low.count > 0)
    if not some.any():
        return ["No gauge has potentially influential low floods."]
    text = (
        f"At {int(some.sum())} gauges small floods would bend the curve: {int(low.count[some].sum())} peaks are fitted as "
        "'below the threshold', so that the large floods decide on large floods."
    )
    most = int(np.flatnonzero(some)[np.argmax(low.count[some])])
    text += (
        f" The most are {low.count[most]} of {results.fits.n_peaks[most]} at {results.gauge_ids[most]}, below "
        f"{format_flow(low.threshold[most] / config.flow_in_m3s)} {format_unit(config.units.flow)}."
    )
    sentences = [text]
    differ = fitted & (low.count != low.accurate_count)
    if differ.any():
        names = [results.gauge_ids[i] for i in np.flatnonzero(differ)]
        listed = ", ".join(names[:12]) + (f" and {len(names) - 12} more" if len(names) > 12 else "")
        sentences.append(
            f"The test's customary p-values are approximate; accurate ones would count other low floods at "
            f"{_counted(len(names), 'gauge')}: {listed}. The customary count is used; the table has both."
        )
    if low.overridden.any():
        sentences.append(f"The analyst set the threshold at {_counted(int(low.overridden.sum()), 'gauge')}.")
    return sentences


def _skews(results: GaugeResults) -> list[str]:
    skew, mse = results.fits.station.moments.skew, results.fits.station.station_skew_mse
    chosen = results.fitted & results.used & np.isfinite(skew)
    if not chosen.any():
        return []
    low, middle, high = np.percentile(skew[chosen], [10, 50, 90])
    sentences = [
        f"The station skews of the used gauges are {middle:.2f} in the middle ({low:.2f} to {high:.2f} for eight gauges in "
        f"ten), each uncertain by about {np.sqrt(np.median(mse[chosen])):.2f} (one standard error): most of the "
        "differences between gauges are chance."
        if np.sqrt(np.median(mse[chosen])) > 0.8 * np.std(skew[chosen])
        else f"The station skews of the used gauges are {middle:.2f} in the middle ({low:.2f} to {high:.2f} for eight "
        f"gauges in ten), each uncertain by about {np.sqrt(np.median(mse[chosen])):.2f} (one standard error)."
    ]
    large = chosen & (np.abs(skew) > POLYNOMIAL_LIMIT)
    if large.any():
        names = ", ".join(f"{results.gauge_ids[i]} ({skew[i]:.2f})" for i in np.flatnonzero(large)[:8])
        sentences.append(
            f"{_counted(int(large.sum()), 'gauge')} {'has' if large.sum() == 1 else 'have'} a station skew beyond 1.41 in "
            f"absolute value, where the usual formula for its error fails and simulated errors are used: {names}."
        )
    beyond = chosen & results.fits.best.moments.beyond_support
    if beyond.any():
        names = ", ".join(results.gauge_ids[i] for i in np.flatnonzero(beyond)[:12])
        sentences.append(
            f"A peak lies beyond the fitted distribution's own bound at {names}: look at these records."
        )
    return sentences


def _families(results: GaugeResults) -> list[str]:
    if not results.families:
        return []
    judged = results.used & results.agreements[0].judged
    if not judged.any():
        return []
    counts = [(int((a.serves & judged).sum()), a.family.title) for a in results.agreements]
    others = sorted(counts[1:], key=lambda pair: (-pair[0], pair[1]))
    told = ", ".join(f"{title} {count}" for count, title in others)
    flows = np.stack([fits.flow([PROBABILITY_OF_COMPARISON])[:, 0] for fits in results.families])
    serves = np.stack([agreement.serves for agreement in results.agreements])
    several = judged & (serves.sum(axis=0) >= 2)
    sentences = [
        f"Beside log-Pearson III, {len(counts) - 1} other families of distributions were fitted and tested against the "
        f"peaks. Log-Pearson III serves at {counts[0][0]} of {int(judged.sum())} used gauges; of the others: {told}. "
        "Records of usual length cannot tell many of them apart: this informs, and log-Pearson III stays the "
        "distribution in use."
    ]
    if several.any():
        kept = np.where(serves, flows, np.nan)[:, several]
        ratio = np.nanmax(kept, axis=0) / np.nanmin(kept, axis=0)
        sentences.append(
            f"Among the families that serve at a gauge, the largest {format_percent(PROBABILITY_OF_COMPARISON)} flood is "
            f"{np.median(ratio):.2f} times the smallest in the middle, and more than "
            f"{np.percentile(ratio, 90):.2f} times at one gauge in ten: what the choice of a distribution is worth."
        )
    return sentences


def _figures(results: GaugeResults, shown: list[int], curves: dict[int, str]) -> list[Figure]:
    figures = [
        Figure(
            "station_skews.png",
            "Station skew of every gauge with one standard error either way; squares: low floods were set apart.",
            f"Station skew against years in the fit for {int(results.fitted.sum())} gauges; dashed lines at plus and minus 1.41.",
        )
    ]
    fits = results.fits
    for gauge in shown:
        what = f"{results.gauge_ids[gauge]} {results.names[gauge]}".strip()
        words = results.warning_texts[gauge]
        look = f" To look at: {'; '.join(words)}." if words else ""
        figures.append(
            Figure(
                curves[gauge],
                f"{what}: the record, and the frequency curve with its {format_percent(fits.confidence)} limits.{look}",
                f"Left, annual peaks over the water years; right, {int(fits.n_peaks[gauge])} systematic and "
                f"{int(fits.n_historic[gauge])} historic peaks at their plotting positions around the log-Pearson III curve; "
                f"{int(fits.low_floods.count[gauge])} low floods as crosses.",
            )
        )
    if results.families and shown:
        figures.append(
            Figure(
                "densities.png",
                "Peaks of the same gauges as histograms, with the densities of the fitted families; thin and pale where a "
                "family does not serve.",
                f"{len(shown)} histograms of annual peaks on a logarithmic axis with seven density curves each.",
            )
        )
    return figures


def _gauge_table(results: GaugeResults, config: StudyConfig) -> list[PageTable]:
    fits = results.fits
    station, unit = fits.station, config.flow_in_m3s
    chosen = np.flatnonzero(results.used & results.fitted)
    wanted = [int(np.argmin(np.abs(fits.aeps - aep))) for aep in (0.5, 0.1, 0.01)]
    wanted = list(dict.fromkeys(wanted))
    rows = []
    for i in chosen[:PAGE_ROWS]:
        skew = f"{station.moments.skew[i]:.2f} ± {np.sqrt(station.station_skew_mse[i]):.2f}"
        flows = [
            f"{format_flow(station.flow[i, a] / unit)} ({format_interval(station.lower[i, a] / unit, station.upper[i, a] / unit)})"
            for a in wanted
        ]
        low = str(fits.low_floods.count[i])
        rows.append((results.gauge_ids[i], str(fits.record_years[i]), low, skew, *flows))
    if not rows:
        return []
    more = len(chosen) - len(rows)
    caption = f"Floods at the used gauges from their own records, {format_unit(config.units.flow)}, with {format_percent(fits.confidence)} limits."
    caption += f" The first {PAGE_ROWS}; {more} more in the table." if more else ""
    head = (
        "gauge",
        "years",
        "low floods",
        "station skew",
        *(f"{format_percent(fits.aeps[a])} flood" for a in wanted),
    )
    return [PageTable(caption, head, tuple(rows), "tables/gauge_estimates.csv")]


def _refused_table(results: GaugeResults) -> list[PageTable]:
    out = np.flatnonzero(~results.fitted)
    rows = tuple(
        (results.gauge_ids[i], "yes" if results.used[i] else "no", results.reasons[i])
        for i in out[:PAGE_ROWS]
    )
    if not rows:
        return []
    return [PageTable("Gauges without a fit.", ("gauge", "used", "reason"), rows, "tables/gauge_moments.csv")]


def _low_flood_table(results: GaugeResults, config: StudyConfig) -> list[PageTable]:
    low = results.fits.low_floods
    some = np.flatnonzero(
        results.fitted & ((low.count > 0) | (low.count != low.accurate_count) | low.overridden)
    )
    rows = tuple(
        (
            results.gauge_ids[i], str(results.fits.n_peaks[i]), str(low.zeros[i]), str(low.count[i]),
            str(low.accurate_count[i]), format_flow(low.threshold[i] / config.flow_in_m3s),
            results.thresholds_why[i] if low.overridden[i] else "test",
        )
        for i in some[:PAGE_ROWS]
    )  # fmt: skip
    if not rows:
        return []
    head = ("gauge", "peaks", "zeros", "low floods", "with accurate p-values",
            f"threshold, {format_unit(config.units.flow)}", "set by")  # fmt: skip
    caption = "Low floods, fitted as below the threshold."
    caption += f" The first {PAGE_ROWS} of {len(some)}." if len(some) > PAGE_ROWS else ""
    return [PageTable(caption, head, rows, "tables/low_flood_tests.csv")]


def _family_table(results: GaugeResults) -> list[PageTable]:
    if not results.families:
        return []
    frame = families_by_region(results).frame
    if frame.empty:
        return []
    titles = {fits.family.name: fits.family.title for fits in results.families}
    rows = []
    for region, part in frame.groupby("region", sort=True):
        told = {
            name: f"{serves} ({format_percent(error, 2)})"
            for name, serves, error in zip(
                part["family"], part["serves"], part["median_largest_floods_error"], strict=True
            )
        }
        rows.append((str(region), str(part["gauges"].max()), *(told.get(name, "") for name in titles)))
    return [
        PageTable(
            "Gauges at which a family serves, by region; in brackets the median relative error at the three largest floods.",
            ("region", "gauges", *titles.values()),
            tuple(rows),
            "tables/families_by_region.csv",
        )
    ]


def _method(results: GaugeResults, config: StudyConfig) -> list[str]:
    at_site = config.at_site
    bound = "not bounded" if at_site.skew_bound is None else f"held within ±{at_site.skew_bound:g}"
    notes = [
        "Log-Pearson III by the expected moments algorithm (Cohn, Lane and Baier, 1997; Bulletin 17C, England and others, 2019) "
        "with perception thresholds; bias factors on the number of exactly known peaks. The station skew is "
        f"{bound}. Its mean square error is the polynomial of Griffis and Stedinger (2009), beyond 1.41 a simulated "
        "value, times the ratio of the asymptotic variances with and without censoring.",
        "Low floods by the multiple Grubbs-Beck test (Cohn and others, 2013): outward from the median at 0.5 %, inward from "
        "the smallest value at 10 %, systematic peaks and zeros. The ledger can set the threshold (subject gauge, "
        "action low_flood_threshold).",
        "Limits: Student's t allowing for the covariance of a quantile and its standard error (Cohn, Lane and Stedinger, "
        f"2001). Plotting positions: Hirsch and Stedinger (1987) with the constant of {at_site.plotting_position.capitalize()}; "
        "nothing is fitted to them. No expected-probability adjustment.",
    ]
    if results.families:
        notes.append(
            "Other families by L-moments, floods known as intervals standing for their conditional quantiles until nothing moves. "
            "A family serves where neither the probability-plot correlation nor the Anderson-Darling statistic of the "
            "systematic peaks (their probabilities taken given that they lie within their thresholds) passes its simulated "
            "5 % point, with parameters fitted anew to every simulated record, and no peak lies beyond the fit's bound."
        )
    return notes


def _counted(number: int, noun: str) -> str:
    return f"{number} {noun}" if number == 1 else f"{number} {noun}s"
