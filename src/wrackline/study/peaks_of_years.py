"""One peak per gauge and water year: equal rows are merged, the larger of two floods is kept, the rest is told."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass, replace

from wrackline.study.faults import FaultLog
from wrackline.study.import_findings import FoundPeak

Fate = tuple[str, str]


@dataclass(frozen=True)
class Resolved:
    """The peaks kept, sorted by gauge and year, and fate and reason of every finding in its order."""

    kept: list[FoundPeak]
    fates: list[Fate]


def resolve_peaks(peaks: Sequence[FoundPeak], log: FaultLog) -> Resolved:
    """Choose the peak of every gauge and water year and say what became of each finding."""
    fates: list[Fate] = [("left out", peak.left_out) for peak in peaks]
    of_year: dict[tuple[str, int], list[int]] = {}
    for number, peak in enumerate(peaks):
        if not peak.left_out:
            of_year.setdefault((peak.gauge_id, peak.water_year), []).append(number)
    kept = []
    for key in sorted(of_year):
        rivals = _merge(peaks, of_year[key], fates)
        best = _drop_superseded(rivals, fates)
        number, peak = max(best, key=lambda rival: (rival[1].low, rival[1].high, -rival[0]))
        for loser, other in best:
            if loser != number:
                reason = _why_not(other, peak)
                fates[loser] = ("left out", reason)
                _warn_of_rivals(other, peak, reason, log)
        fates[number] = ("peak", peak.words or "taken as it stands")
        kept.append(peak)
    _warn_of_years(kept, log)
    _warn_of_stages(peaks, log)
    _warn_of_historic(kept, log)
    _warn_of_undated(peaks, log)
    return Resolved(kept, fates)


def _merge(peaks: Sequence[FoundPeak], numbers: list[int], fates: list[Fate]) -> list[tuple[int, FoundPeak]]:
    """Join rows that give the same flow on the same date; the first stays, with what the codes of all say."""
    first: dict[tuple[str, float, float], int] = {}
    joined: dict[int, FoundPeak] = {}
    for number in numbers:
        peak = peaks[number]
        into = first.setdefault((peak.date, peak.low, peak.high), number)
        if into == number:
            joined[number] = peak
            continue
        stays = joined[into]
        flags = tuple(sorted({*stays.flags, *peak.flags}))
        historic = stays.historic or peak.historic
        words = stays.words
        if (flags, historic) != (stays.flags, stays.historic):
            words = "; ".join(filter(None, [words, f"joined with {_place(peak)}: {peak.words}"]))
        joined[into] = replace(
            stays,
            flags=flags,
            historic=historic,
            words=words,
            cause=stays.cause or peak.cause,
            codes=tuple(dict.fromkeys((*stays.codes, *peak.codes))),
        )
        fates[number] = ("merged", f"the same peak stands in {_place(stays)}")
    return list(joined.items())


def _drop_superseded(rivals: list[tuple[int, FoundPeak]], fates: list[Fate]) -> list[tuple[int, FoundPeak]]:
    """Leave out values of a day of which exactly one is marked as revised."""
    revised: dict[str, list[FoundPeak]] = {}
    for _, peak in rivals:
        if "revised" in peak.flags and len(peak.date) == 10:
            revised.setdefault(peak.date, []).append(peak)
    left = []
    for number, peak in rivals:
        newer = revised.get(peak.date, [])
        if len(newer) == 1 and newer[0] is not peak:
            fates[number] = (
                "left out",
                f"superseded by the revised value {newer[0].value} of the same day, {_place(newer[0])}",
            )
        else:
            left.append((number, peak))
    return left


def _why_not(other: FoundPeak, kept: FoundPeak) -> str:
    equal = (other.low, other.high) == (kept.low, kept.high)
    reason = (
        f"{'an equal' if equal else 'a larger'} peak of water year {kept.water_year} ({_value(kept)}"
        f"{', ' + kept.date if kept.date else ''}) stands in {_place(kept)}"
    )
    if other.historic != kept.historic:
        kinds = ("historic", "systematic") if kept.historic else ("systematic", "historic")
        reason += f"; the one kept is {kinds[0]}, this one {kinds[1]}"
    if other.date == kept.date and len(other.date) == 10:
        reason += "; both have the same date, so one of the two flows is wrong"
    unsure = [peak.date for peak in (other, kept) if len(peak.date) == 4]
    if unsure:
        reason += f"; a peak dated {unsure[0]} without a month may belong to another water year"
    return reason


def _warn_of_rivals(other: FoundPeak, kept: FoundPeak, reason: str, log: FaultLog) -> None:
    mend = "Decide in the ledger if the other one should stand."
    if kept.historic and not other.historic:
        mend = "The year is used only with a span in thresholds.csv; set `kind` to systematic if the gauge recorded it."
    log.warning(
        "two_peaks_in_a_year",
        other.file,
        f"Gauge {other.gauge_id}: left out, {reason}.",
        mend,
        row=other.row,
        value=other.value,
    )


def _place(peak: FoundPeak) -> str:
    return f"{peak.file} row {peak.row}"


def _value(peak: FoundPeak) -> str:
    return {"": "", "below": "less than ", "above": "more than "}[peak.bound] + peak.value


def _warn_of_years(kept: Sequence[FoundPeak], log: FaultLog) -> None:
    for peak in kept:
        if "date_uncertain" in peak.flags and (len(peak.date) == 4 or "A" in peak.codes):
            inexact = "A" in peak.codes
            log.warning(
                "water_year_uncertain",
                peak.file,
                f"Gauge {peak.gauge_id}: the {'year' if inexact else 'month'} of the peak is not known"
                f"{' exactly' if inexact else ''}; {peak.water_year} is kept as its water year.",
                "Correct water_year in peaks.csv where more is known.",
                row=peak.row,
                value=peak.date,
            )
        if peak.highest_since:
            log.warning(
                "highest_since",
                peak.file,
                f"Gauge {peak.gauge_id}: the file calls the flood of {peak.water_year} ({_value(peak)}) the highest "
                f"since {peak.highest_since}. No threshold is made of it.",
                f"Where years without peaks follow {peak.highest_since}, a span in thresholds.csv can say so.",
                row=peak.row,
            )


def _warn_of_stages(peaks: Sequence[FoundPeak], log: FaultLog) -> None:
    """Tell floods known by their gauge height alone: they happened, though their flow is not on record."""
    for (file, gauge_id), found in _by_gauge(p for p in peaks if not p.value and p.stage).items():
        log.warning(
            "gauge_height_only",
            file,
            f"Gauge {gauge_id}: {_counted(found, 'row')} with a gauge height and no discharge left out "
            f"({_listed(map(_stage_in_words, found))}).",
            "These floods happened. Give a flow from a rating, or bounds in `low` and `high`, if one can be defended.",
        )


def _warn_of_historic(kept: Sequence[FoundPeak], log: FaultLog) -> None:
    for (file, gauge_id), found in _by_gauge(p for p in kept if p.historic).items():
        log.warning(
            "historic_without_threshold",
            file,
            f"Gauge {gauge_id}: {_counted(found, 'historic peak')} ({_listed(str(p.water_year) for p in found)}); "
            "the file does not say above which flow floods of those years would be known.",
            "Add a span with that flow to thresholds.csv; without it historic peaks are not used.",
        )


def _warn_of_undated(peaks: Sequence[FoundPeak], log: FaultLog) -> None:
    for peak in peaks:
        if peak.value and peak.left_out and not peak.water_year:
            log.warning(
                "no_date",
                peak.file,
                f"Gauge {peak.gauge_id}: the peak has no date and is left out.",
                "Add it to peaks.csv with its water year where that is known.",
                row=peak.row,
                value=peak.value,
            )
        elif peak.value and peak.left_out:
            log.warning(
                "left_out",
                peak.file,
                f"Gauge {peak.gauge_id}: left out, {peak.left_out}.",
                "Add it to peaks.csv as it should be.",
                row=peak.row,
                value=peak.value,
            )


def _stage_in_words(peak: FoundPeak) -> str:
    return f"{peak.date or 'no date'}: {peak.stage} ft" + (", historic" if peak.historic else "")


def _by_gauge(peaks: Iterable[FoundPeak]) -> dict[tuple[str, str], list[FoundPeak]]:
    groups: dict[tuple[str, str], list[FoundPeak]] = {}
    for peak in peaks:
        groups.setdefault((peak.file, peak.gauge_id), []).append(peak)
    return groups


def _counted(found: Sequence[FoundPeak], noun: str) -> str:
    return f"{len(found)} {noun}{'' if len(found) == 1 else 's'}"


def _listed(words: Iterable[str]) -> str:
    every = list(words)
    return ", ".join(every[:8]) + (" ..." if every[8:] else "")
