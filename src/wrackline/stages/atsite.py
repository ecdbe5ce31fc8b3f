"""Floods at gauges: log-Pearson III from every gauge's own record, with what to check about it."""

from __future__ import annotations

import re
from pathlib import Path

import numpy as np
import pandas as pd

from wrackline.hydrology.alternatives import FamilyFits, fit_families
from wrackline.hydrology.at_site import fit_records
from wrackline.hydrology.goodness_of_fit import Agreement, judge_families
from wrackline.hydrology.record_fits import RecordFits
from wrackline.hydrology.records import BoolArray, FloatArray, PeakRecords
from wrackline.report.figures_atsite import (
    CURVE_AEPS,
    FlowScale,
    draw_densities,
    draw_frequency_curve,
    draw_station_skews,
)
from wrackline.stages.atsite_page import station_section
from wrackline.stages.atsite_tables import GaugeResults, all_tables, exact_moments, station_tables
from wrackline.stages.running import StudyFiles, main
from wrackline.study.config import StudyConfig
from wrackline.study.contribution import Contribution, write_contribution
from wrackline.study.faults import Fault
from wrackline.study.handover import read_records, read_sites
from wrackline.study.tables import read_table, write_table

PAGE_CURVES = 3
"""Frequency curves on the page when the configuration names none."""
NOT_NATURAL = "the record is regulated or otherwise disturbed: there is no natural record to fit"
LEDGER_TEXT = ("date", "by", "subject", "action", "why", "water_year", "pool", "value", "evidence", "effect")
COMMON = {
    "limits_untested": "The confidence limits of some gauges lie outside the record lengths and skews that they were tested for",
}
"""Warnings that many gauges may have, by code, in words for all of them."""
MENDS = {
    "not_fitted": "Look at its record; a low-flood threshold in the ledger can help where many peaks are zero.",
    "few_peaks": "Lean on the regional estimate.",
    "mostly_low_floods": "Look at the record; the ledger can set the threshold.",
    "low_flood_count_depends": "Look at the smallest peaks; the ledger can set the threshold (action low_flood_threshold).",
    "large_skew": "Look for mixed causes of floods or an odd peak; the skew wants regional support.",
    "peak_beyond_bound": "Do not use the curve beyond the record; look at the low floods and the largest peaks.",
}


def run(study: StudyFiles) -> str:
    """Fit all gauges with a natural record; write ``work/atsite``."""
    config, folder = study.config, study.work("atsite")
    results = _fit_gauges(study)
    fits, records = results.fits, results.records
    systematic = fit_records(
        _natural(records.keep_rows(records.observed & ~records.historic), results.natural),
        aeps=fits.aeps,
        low_flood_thresholds=np.zeros(records.n_gauges),
    )
    write_table(folder / "moments.csv", exact_moments(results, systematic))
    # The stage `weight` publishes these two, completed by the fits with weighted skew.
    for station_table in station_tables(results, config.flow_in_m3s):
        write_table(folder / f"{station_table.name}.csv", station_table.frame)
    scale = FlowScale(config.units.flow, config.flow_in_m3s)
    shown, faults = _choose_gauges(results, config)
    figures = folder / "figures"
    draw_station_skews(figures / "station_skews.png", fits, results.used)
    curves = _draw_curves(figures, results, shown, config, scale)
    if results.families and shown:
        draw_densities(
            figures / "densities.png",
            shown,
            [_title(results, i) for i in shown],
            records,
            results.families,
            results.agreements,
            scale,
        )
    tables = all_tables(results, config.flow_in_m3s, config.at_site.plotting_position)
    section = station_section(results, config, shown, curves)
    warnings = (*faults, *_gauge_faults(results))
    write_contribution(folder, Contribution("atsite", tables, (section,), warnings))
    return f"{int(results.fitted.sum())} of {len(results.fitted)} gauges fitted"


def _fit_gauges(study: StudyFiles) -> GaugeResults:
    config, intake = study.config, study.work("intake")
    gauges = read_sites(intake / "gauges.csv")
    screened = read_table(study.work("screen") / "gauges.csv", text=("flags", "reasons")).set_index(
        "gauge_id"
    )
    records = read_records(intake / "records.csv", gauges["gauge_id"].tolist())
    screened = screened.loc[list(records.gauge_ids)]
    used = screened["used"].to_numpy(dtype=bool)
    natural = used | ["regulated" not in str(flags).split() for flags in screened["flags"]]
    ledger = read_table(intake / "ledger.csv", text=LEDGER_TEXT)
    thresholds, why = _analyst_thresholds(ledger, records.gauge_ids, config.flow_in_m3s)
    fits = _fit(records, natural, config, thresholds, config.aeps.gauges)
    reasons = [
        ("" if own else NOT_NATURAL) or refusal for own, refusal in zip(natural, fits.refusal, strict=True)
    ]
    families: tuple[FamilyFits, ...] = ()
    agreements: tuple[Agreement, ...] = ()
    if config.at_site.alternatives:
        families = fit_families(fits)
        agreements = judge_families(
            families, fits.fitted_records, config.at_site.plotting_position, config.seed
        )
    return GaugeResults(
        records=records,
        fits=fits,
        used=used,
        natural=natural,
        reasons=reasons,
        thresholds_why=why,
        names=gauges["name"].tolist(),
        regions=gauges["region"].tolist(),
        families=families,
        agreements=agreements,
    )


def _fit(
    records: PeakRecords,
    natural: BoolArray,
    config: StudyConfig,
    thresholds: FloatArray,
    aeps: tuple[float, ...],
) -> RecordFits:
    return fit_records(
        _natural(records, natural),
        aeps=aeps,
        confidence=config.confidence,
        low_flood_thresholds=thresholds,
        skew_bound=np.inf if config.at_site.skew_bound is None else config.at_site.skew_bound,
    )


def _natural(records: PeakRecords, natural: BoolArray) -> PeakRecords:
    """Return the records without the years of gauges that have no natural record."""
    return records.keep_rows(natural[records.gauge_index])


def _analyst_thresholds(
    ledger: pd.DataFrame, gauge_ids: tuple[str, ...], flow_in_m3s: float
) -> tuple[FloatArray, list[str]]:
    """Low-flood thresholds of the ledger in m3/s (NaN: none) and their reasons."""
    number = {gauge_id: i for i, gauge_id in enumerate(gauge_ids)}
    thresholds, why = np.full(len(gauge_ids), np.nan), [""] * len(gauge_ids)
    lines = ledger[
        ledger["action"].eq("low_flood_threshold")
        & ~ledger["effect"].astype(str).str.startswith("superseded")
    ]
    for gauge_id, value, reason in lines[["gauge_id", "value", "why"]].itertuples(index=False):
        thresholds[number[gauge_id]] = float(value) * flow_in_m3s
        why[number[gauge_id]] = reason
    return thresholds, why


def _choose_gauges(results: GaugeResults, config: StudyConfig) -> tuple[list[int], list[Fault]]:
    """Gauges whose curves stand on the page: those named, else the used ones with most to look at."""
    number = {gauge_id: i for i, gauge_id in enumerate(results.gauge_ids)}
    named = config.at_site.page_figures
    faults = []
    for gauge_id in named:
        lack = (
            "There is no such gauge."
            if gauge_id not in number
            else results.reasons[number[gauge_id]] and "The gauge has no fit."
        )
        if lack:
            faults.append(
                Fault(
                    "no_curve_to_show", "warning", "atsite", f"at_site.page_figures: {lack}", "Name another gauge.",
                    value=gauge_id,
                )
            )  # fmt: skip
    if named:
        return [number[g] for g in named if g in number and results.fitted[number[g]]], faults
    fits = results.fits
    marks = np.array([sum(w.code not in COMMON for w in warnings) for warnings in fits.warnings])
    marks = marks + (fits.n_historic > 0) + (fits.low_floods.count > 0)
    able = np.flatnonzero(results.used & results.fitted)
    order = able[np.lexsort((able, -fits.record_years[able], -marks[able]))]
    return [int(i) for i in order[:PAGE_CURVES]], faults


def _draw_curves(
    figures: Path, results: GaugeResults, shown: list[int], config: StudyConfig, scale: FlowScale
) -> dict[int, str]:
    """Draw the curves of the page, and of every gauge when wanted; return the page's files by gauge."""
    ending = config.at_site.all_figures
    wanted = [int(i) for i in np.flatnonzero(results.fitted)] if ending != "none" else shown
    if not wanted and not shown:
        return {}
    gauges = sorted({*wanted, *shown})
    rare = [aep for aep in config.aeps.gauges if aep < min(CURVE_AEPS)]
    thresholds = np.where(results.fits.low_floods.overridden, results.fits.low_floods.threshold, np.nan)
    part = results.records.keep_gauges(gauges)
    fits = _fit(part, np.ones(len(gauges), dtype=bool), config, thresholds[gauges], (*CURVE_AEPS, *rare))
    files = {}
    for place, gauge in enumerate(gauges):
        names = [f"curve_{safe_name(results.gauge_ids[gauge])}.png"] if gauge in shown else []
        if ending != "none" and f"curve_{safe_name(results.gauge_ids[gauge])}.{ending}" not in names:
            names.append(f"curve_{safe_name(results.gauge_ids[gauge])}.{ending}")
        for name in names:
            draw_frequency_curve(
                figures / name,
                fits,
                place,
                part,
                _title(results, gauge),
                scale,
                config.at_site.plotting_position,
            )
        if gauge in shown:
            files[gauge] = names[0]
    return files


def _title(results: GaugeResults, gauge: int) -> str:
    name = results.names[gauge]
    return f"{results.gauge_ids[gauge]} {name}" if name else results.gauge_ids[gauge]


def safe_name(gauge_id: str) -> str:
    """Return a file name's part for an identifier; letters of other scripts by their number.

    Examples
    --------
    >>> safe_name("0410.A-7"), safe_name("Fluß")
    ('0410.A-7', 'Flu_xdf')
    """
    return re.sub(r"[^A-Za-z0-9.-]", lambda letter: f"_x{ord(letter[0]):x}", gauge_id)


def _gauge_faults(results: GaugeResults) -> list[Fault]:
    """Warnings about the used gauges, for the log, the table and the page; common ones are told together."""
    faults = []
    for code, words in COMMON.items():
        several = [
            results.gauge_ids[i]
            for i in np.flatnonzero(results.used & results.fitted)
            if code in [w.code for w in results.fits.warnings[i]]
        ]
        if several:
            shown = ", ".join(several[:5]) + (f" and {len(several) - 5} more" if len(several) > 5 else "")
            faults.append(
                Fault(code, "warning", "atsite", f"{words} ({shown}).", "See tables/gauge_warnings.csv.")
            )
    for i in np.flatnonzero(results.used):
        gauge_id = results.gauge_ids[i]
        found = [(w.code, w.text) for w in results.fits.warnings[i] if w.code not in COMMON]
        for code, text in [("not_fitted", results.reasons[i])] if results.reasons[i] else found:
            words = f"Gauge {gauge_id}: {text}."
            faults.append(Fault(code, "warning", "atsite", words, MENDS.get(code, ""), value=gauge_id))
    return faults


if __name__ == "__main__":
    main("atsite", run)
