"""Screen: which gauges the regional analysis uses, and why the others are left out."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pandas as pd

from wrackline.hydrology.records import BoolArray, FloatArray, PeakRecords
from wrackline.hydrology.redundancy import PairDecision, RedundantPairs, find_nested_pairs, resolve_redundancy
from wrackline.hydrology.screening import ScreeningResult, ScreeningSettings, add_flag, screen_records
from wrackline.report.figures_screen import draw_record_timeline, draw_trends
from wrackline.stages.running import StudyFiles, main
from wrackline.stages.screen_page import accounting_table, gauge_table, pair_table, screening_section
from wrackline.study.basin_overlap import overlap_shares
from wrackline.study.config import Screening
from wrackline.study.contribution import Contribution, write_contribution
from wrackline.study.faults import Fault, StudyFaults
from wrackline.study.handover import read_records, read_sites, write_records
from wrackline.study.tables import read_table, write_table

FEWEST_PEAKS = 5
"""Below this not even the ledger can keep a gauge: four L-moments and their errors cannot be computed."""
DISTURBED_FLAGS = ("flag regulated", "flag diverted", "flag regulated_or_diverted", "flag basin_changed")
DISTURBED_PERIODS = ("period 'regulated'", "period 'urbanised'")
DECISION_TEXT = (
    "date",
    "by",
    "subject",
    "action",
    "why",
    "water_year",
    "pool",
    "value",
    "evidence",
    "effect",
)


@dataclass(frozen=True)
class Verdict:
    """Which gauges are used; sequences have one entry per gauge.

    ``reasons`` says in words why a gauge is not used, or what to know of one that is; ``decided_by`` is
    ``screening``, ``redundancy.csv`` or ``ledger``.
    """

    used: BoolArray
    reasons: list[str]
    decided_by: list[str]


def run(study: StudyFiles) -> str:
    """Screen the records of intake; write ``work/screen``."""
    intake, folder = study.work("intake"), study.work("screen")
    gauges = read_sites(intake / "gauges.csv")
    records = read_records(intake / "records.csv", gauges["gauge_id"].tolist())
    accounting = read_table(intake / "accounting.csv", text=("file", "fate", "reason", "decided_by"))
    settings = study.config.screening
    periods = read_table(intake / "periods.csv", text=("state", "why"))
    result = screen_records(
        records, _regulated(gauges, periods), _as_settings(settings), _disturbed_share(records, accounting)
    )
    ledger = read_table(intake / "ledger.csv", text=DECISION_TEXT)
    keeps, outs = _ledger_decisions(ledger, records.gauge_ids)
    warnings = _refuse_hopeless_keeps(result, keeps)
    pairs = _redundant_pairs(study, gauges, result, settings, set(keeps), set(outs))
    result = add_flag(result, "redundant", pairs.drop_reasons)
    verdict = judge(result, settings.exclude, keeps, outs, pairs)
    if not verdict.used.any():
        raise StudyFaults(
            [Fault("no_gauge_left", "problem", study.config.inputs.gauges, "Screening leaves no gauge to use.",
                   "See work/screen/gauges.csv, lower screening.minimum_peaks, or keep gauges in the ledger.")]
        )  # fmt: skip
    warnings += _pairs_without_polygons(pairs, records.gauge_ids)
    tables = (
        gauge_table(result, verdict.used, verdict.reasons),
        accounting_table(_final_accounting(accounting, records.gauge_ids, verdict)),
        pair_table(pairs, records.gauge_ids),
    )
    write_table(folder / "gauges.csv", tables[0].frame)
    write_table(folder / "accounting.csv", tables[1].frame)
    write_table(folder / "redundant_pairs.csv", tables[2].frame)
    write_records(folder / "records.csv", records.keep_gauges(np.flatnonzero(verdict.used)))
    draw_record_timeline(records, verdict.used, folder / "figures" / "record_timeline.png")
    draw_trends(result, folder / "figures" / "trends.png")
    section = screening_section(result, verdict.used, verdict.reasons, pairs, settings)
    write_contribution(folder, Contribution("screen", tables, (section,), tuple(warnings)))
    return f"{verdict.used.sum()} of {len(verdict.used)} gauges used"


def judge(
    result: ScreeningResult,
    exclude: tuple[str, ...],
    keeps: dict[int, str],
    outs: dict[int, str],
    pairs: RedundantPairs,
) -> Verdict:
    """Decide on every gauge from its flags and the ledger's ``keep`` and ``exclude`` (number to reason)."""
    g = len(result.gauge_ids)
    against: list[list[str]] = [[] for _ in range(g)]
    beside: list[list[str]] = [[] for _ in range(g)]
    for flag in result.flags:
        (against if flag.flag in exclude else beside)[flag.gauge].append(flag.why)
    analyst = {
        int(i)
        for i, by in zip(pairs.dropped, pairs.decided_by, strict=True)
        if by == "redundancy.csv" and i >= 0
    }
    used = np.ones(g, dtype=bool)
    reasons, decided_by = [""] * g, ["screening"] * g
    for i in range(g):
        flagged = "flagged: " + "; ".join(beside[i]) if beside[i] else ""
        if i in outs:
            used[i], decided_by[i] = False, "ledger"
            words = [f"ledger: {outs[i]}"]
        elif i in keeps:
            decided_by[i] = "ledger"
            spite = f" (in spite of: {'; '.join(against[i])})" if against[i] else ""
            words = [f"kept by the ledger{spite}: {keeps[i]}", flagged]
        elif against[i]:
            used[i] = False
            decided_by[i] = "redundancy.csv" if i in analyst and len(against[i]) == 1 else "screening"
            words = [*against[i], flagged]
        else:
            words = [flagged]
        reasons[i] = "; ".join(word for word in words if word)
    return Verdict(used, reasons, decided_by)


def _as_settings(settings: Screening) -> ScreeningSettings:
    return ScreeningSettings(
        minimum_peaks=settings.minimum_peaks,
        significance=settings.significance,
        false_discovery_control=settings.false_discovery_control,
        extreme_ratio=settings.extreme_ratio,
        gap_share=settings.gap_share,
        exclude=settings.exclude,
    )


def _regulated(gauges: pd.DataFrame, periods: pd.DataFrame) -> BoolArray:
    """Gauges said to be regulated, unless periods.csv says which years are: then the rest is natural."""
    dated = set(periods.loc[periods["state"] == "regulated", "gauge_id"])
    return np.asarray(gauges["regulated"].astype(bool) & ~gauges["gauge_id"].isin(dated), dtype=bool)


def _disturbed_share(records: PeakRecords, accounting: pd.DataFrame) -> FloatArray:
    """Share of every gauge's rows that a flag or a period calls regulated, diverted or urbanised."""
    number = {gauge_id: i for i, gauge_id in enumerate(records.gauge_ids)}
    gauge = accounting["gauge_id"].map(number).to_numpy(dtype=np.int64)
    disturbed = accounting["decided_by"].isin(DISTURBED_FLAGS)
    disturbed |= accounting["reason"].astype(str).str.startswith(DISTURBED_PERIODS)
    rows = np.bincount(gauge, minlength=records.n_gauges)
    share = np.bincount(gauge, disturbed.to_numpy(dtype=float), records.n_gauges) / np.maximum(rows, 1)
    return np.asarray(share, dtype=float)


def _ledger_decisions(
    ledger: pd.DataFrame, gauge_ids: tuple[str, ...]
) -> tuple[dict[int, str], dict[int, str]]:
    """Gauges that the ledger keeps and excludes, with its reasons; the latest line on a gauge counts."""
    number = {gauge_id: i for i, gauge_id in enumerate(gauge_ids)}
    about = (ledger["subject"] == "gauge") & ledger["action"].isin(["keep", "exclude"])
    lines = ledger[about & ledger["gauge_id"].isin(gauge_ids)]
    lines = lines[~lines["effect"].astype(str).str.startswith("superseded")].sort_values(
        "date", kind="stable"
    )
    words = (lines[name].astype(str) for name in ("gauge_id", "action", "why"))
    latest = {number[gauge_id]: (action, why) for gauge_id, action, why in zip(*words, strict=True)}
    keeps = {i: why for i, (action, why) in latest.items() if action == "keep"}
    return keeps, {i: why for i, (action, why) in latest.items() if action == "exclude"}


def _refuse_hopeless_keeps(result: ScreeningResult, keeps: dict[int, str]) -> list[Fault]:
    warnings = []
    for i in sorted(keeps):
        if result.n_peaks[i] < FEWEST_PEAKS:
            del keeps[i]
            warnings.append(
                Fault(
                    "kept_gauge_too_short",
                    "warning",
                    "ledger",
                    f"Gauge {result.gauge_ids[i]} has {result.n_peaks[i]} exact systematic peaks; the ledger cannot "
                    f"keep a gauge with fewer than {FEWEST_PEAKS}.",
                    "Take the line out of the ledger, or give the gauge more record.",
                    value=result.gauge_ids[i],
                )
            )
    return warnings


def _redundant_pairs(
    study: StudyFiles,
    gauges: pd.DataFrame,
    result: ScreeningResult,
    settings: Screening,
    keeps: set[int],
    outs: set[int],
) -> RedundantPairs:
    g = len(gauges)
    intake = study.work("intake")
    place = (gauges["centroid_latitude"].to_numpy(float), gauges["centroid_longitude"].to_numpy(float))
    area = gauges["area_km2"].to_numpy(float)
    nested = find_nested_pairs(*place, area, settings.redundancy_distance, settings.redundancy_area_ratio)
    ids = gauges["gauge_id"].to_numpy(dtype=object)
    basins = read_table(intake / "basins.csv", text=("wkt",))
    decided = (
        read_table(intake / "redundancy.csv", text=("keep", "why"))
        if (intake / "redundancy.csv").exists()
        else None
    )
    kept = np.isin(np.arange(g), list(keeps))
    eligible = (
        ~result.excluded([flag for flag in settings.exclude if flag != "redundant"]) | kept
    ) & ~np.isin(np.arange(g), list(outs))
    return resolve_redundancy(
        list(ids),
        *place,
        area,
        result.n_peaks,
        nested,
        overlap_shares(basins, list(ids[nested.first]), list(ids[nested.second])),
        settings.redundancy_overlap,
        _pair_decisions(decided, list(ids)),
        eligible,
        kept,
    )


def _pair_decisions(decided: pd.DataFrame | None, gauge_ids: list[str]) -> list[PairDecision]:
    if decided is None:
        return []
    number = {gauge_id: i for i, gauge_id in enumerate(gauge_ids)}
    words = (decided[name].astype(str) for name in ("gauge_id", "other_id", "keep", "why"))
    return [
        PairDecision(number[one], number[other], number.get(keep), why)
        for one, other, keep, why in zip(*words, strict=True)
        if one in number and other in number
    ]


def _pairs_without_polygons(pairs: RedundantPairs, gauge_ids: tuple[str, ...]) -> list[Fault]:
    blind = np.isnan(pairs.overlap_share) & (pairs.dropped >= 0) & (np.array(pairs.decided_by) == "screening")
    gone = sorted({gauge_ids[i] for i in pairs.dropped[blind]})
    if not gone:
        return []
    return [
        Fault(
            "nested_without_polygons",
            "warning",
            "screen",
            f"Taken as nested for their distance and areas alone, without polygons: {', '.join(gone)} left out.",
            "Give the basins' polygons, or decide on the pairs in redundancy.csv.",
        )
    ]


def _final_accounting(accounting: pd.DataFrame, gauge_ids: tuple[str, ...], verdict: Verdict) -> pd.DataFrame:
    """Return the accounting with the rows of gauges that are not used excluded."""
    number = {gauge_id: i for i, gauge_id in enumerate(gauge_ids)}
    gauge = accounting["gauge_id"].map(number).to_numpy(dtype=np.int64)
    lost = ~verdict.used[gauge] & (accounting["fate"] != "excluded").to_numpy()
    final = accounting.copy()
    final.loc[lost, "fate"] = "excluded"
    final.loc[lost, "reason"] = [f"gauge not used: {verdict.reasons[i]}" for i in gauge[lost]]
    final.loc[lost, "decided_by"] = [verdict.decided_by[i] for i in gauge[lost]]
    return final


if __name__ == "__main__":
    main("screen", run)
