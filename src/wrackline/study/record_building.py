"""From checked tables to records: who decides on every peak, what is known of every year, and the accounting."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pandas as pd

from wrackline.hydrology.records import PeakRecords
from wrackline.study.cells import BoolArray, FloatArray, each_word
from wrackline.study.config import FLAG_NAMES, Flags, StudyConfig
from wrackline.study.csv_files import IntArray, TextArray
from wrackline.study.faults import FaultLog
from wrackline.study.ledger import Ledger
from wrackline.study.peaks import Peaks
from wrackline.study.spans import YEAR_STEP, Periods, Thresholds, find_keys, year_key

HISTORIC_ALONE = (
    "historic peak without a threshold for its year: give its span and threshold in thresholds.csv"
)
ACCOUNTING_COLUMNS = ("file", "row", "gauge_id", "water_year", "fate", "reason", "decided_by")


@dataclass(frozen=True)
class BuiltRecords:
    """Records of a study, one accounting line for every row of the peaks table, and the ledger's effects."""

    records: PeakRecords
    accounting: pd.DataFrame
    ledger: pd.DataFrame


@dataclass
class _Verdicts:
    """What is decided on every row of the peaks table so far; shape (n,), flows in m3/s."""

    low: FloatArray
    high: FloatArray
    excluded: BoolArray
    reason: TextArray
    decided_by: TextArray

    def say(self, rows: BoolArray, decided_by: object, reason: object, *, excluded: bool) -> None:
        self.excluded[rows] = excluded
        self.decided_by[rows] = decided_by
        self.reason[rows] = reason


@dataclass(frozen=True)
class _ThresholdYears:
    """Perception threshold of every gauge and year that has one, sorted by key."""

    key: IntArray
    low: FloatArray
    high: FloatArray
    row: IntArray


def build_records(
    gauge_ids: list[str],
    peaks: Peaks,
    thresholds: Thresholds,
    periods: Periods,
    ledger: Ledger,
    config: StudyConfig,
    log: FaultLog,
) -> BuiltRecords:
    """Decide on every peak and build the records.

    The ledger wins over periods, these over flags, those over defaults. A year of a threshold's span
    without a row in the peaks table is known to have stayed below ``low`` (Cohn, Lane and Baier,
    1997); where the threshold is bounded above as well, or starts at zero, nothing follows from a
    missing row and the year gets none.
    """
    effects = [""] * len(ledger.row)
    _check_spans_have_passed(thresholds, peaks, len(gauge_ids), config, log)
    years = _threshold_years(thresholds, ledger, config, effects)
    at_threshold = find_keys(years.key, peaks.key)
    verdicts = _by_defaults(peaks, at_threshold >= 0)
    _by_flags(verdicts, peaks, config.flags)
    period_years, period_of = periods.every_year()
    at_period = find_keys(period_years, peaks.key)
    _by_periods(verdicts, peaks, periods, period_of, at_period, at_threshold >= 0)
    _by_ledger(verdicts, peaks, ledger, config, effects)
    _leave_out_what_says_nothing(verdicts)
    perception_low, perception_high = _perception(verdicts, years, at_threshold)
    _check_against_thresholds(
        verdicts, peaks, perception_low, perception_high, years, at_threshold, config, log
    )
    unused_years = period_years[~periods.use[period_of]]
    records = _assemble(gauge_ids, peaks, verdicts, (perception_low, perception_high), years, unused_years)
    _tell_other_effects(ledger, effects, config)
    return BuiltRecords(
        records,
        _accounting(gauge_ids, peaks, verdicts),
        ledger.frame.assign(effect=effects),
    )


def _check_spans_have_passed(
    thresholds: Thresholds, peaks: Peaks, n_gauges: int, config: StudyConfig, log: FaultLog
) -> None:
    """Report spans that reach beyond every peak: their silent years would count as years without a flood.

    A gauge by itself may well end in silent years; where no gauge of a study has a peak, the year has not come yet.
    """
    if not len(peaks.every_key):
        return
    latest = int((peaks.every_key % YEAR_STEP).max())
    early = (thresholds.last_year > latest) & (thresholds.low > 0) & np.isinf(thresholds.high)
    tell = log.problem if n_gauges > 1 else log.warning
    for at in np.flatnonzero(early):
        tell(
            "threshold_beyond_peaks",
            config.inputs.thresholds,
            f"The span ends after {latest}, the last water year of any peak; the years after it would be taken as "
            "years without a flood above the threshold.",
            f"End the span in {latest}, or in the last year of which that is known.",
            row=thresholds.row[at],
            column="last_year",
            value=str(thresholds.last_year[at]),
        )


def _threshold_years(
    thresholds: Thresholds, ledger: Ledger, config: StudyConfig, effects: list[str]
) -> _ThresholdYears:
    key, span = thresholds.every_year()
    low, high, row = thresholds.low[span], thresholds.high[span], thresholds.row[span]
    for line in sorted(ledger.lines("threshold"), key=lambda line: ledger.water_year[line] > 0):
        flow = _flow_text(ledger.low[line], config)
        gauge, year = ledger.gauge[line], ledger.water_year[line]
        name = ledger.frame["gauge_id"].iloc[line]
        if year:
            wanted = year_key(gauge, year)
            if not (key == wanted).any():
                at = int(np.searchsorted(key, wanted))
                key, row = np.insert(key, at, wanted), np.insert(row, at, 0)
                low, high = np.insert(low, at, 0.0), np.insert(high, at, np.inf)
            chosen = key == wanted
            effects[line] = f"threshold of gauge {name} in {year} set to {flow}"
        else:
            chosen = key // YEAR_STEP == gauge
            effects[line] = f"threshold of gauge {name} set to {flow} in {int(chosen.sum())} years"
        low = np.where(chosen, ledger.low[line], low)
    return _ThresholdYears(key, low, high, row)


def _by_defaults(peaks: Peaks, has_threshold: BoolArray) -> _Verdicts:
    n = len(peaks.row)
    verdicts = _Verdicts(
        peaks.low.copy(),
        peaks.high.copy(),
        np.zeros(n, dtype=bool),
        np.full(n, "systematic peak", dtype=object),
        np.full(n, "default", dtype=object),
    )
    verdicts.reason[peaks.low < peaks.high] = "known only to lie in the interval that the row gives"
    historic = peaks.historic & has_threshold
    verdicts.reason[historic] = "historic peak within the span of a threshold"
    verdicts.say(
        peaks.historic & ~has_threshold,
        "default",
        HISTORIC_ALONE,
        excluded=True,
    )
    return verdicts


def _by_flags(verdicts: _Verdicts, peaks: Peaks, uses: Flags) -> None:
    def first(cell: str, use: str) -> str:
        found = [flag for flag in FLAG_NAMES if flag in cell.split() and getattr(uses, flag) == use]
        return found[0] if found else ""

    for use, words in (("above", "at or above the flow given"), ("below", "at or below the flow given")):
        flag = each_word(peaks.flags, lambda cell, use=use: first(cell, use))  # type: ignore[misc]
        chosen = (flag != "") & ~verdicts.excluded
        bound = verdicts.high if use == "above" else verdicts.low
        bound[flag != ""] = np.inf if use == "above" else 0.0
        verdicts.say(
            chosen,
            "flag " + flag[chosen],
            "flag " + flag[chosen] + f": the flood was {words}",
            excluded=False,
        )
    flag = each_word(peaks.flags, lambda cell: first(cell, "exclude"))
    chosen = flag != ""
    verdicts.say(
        chosen,
        "flag " + flag[chosen],
        "flag " + flag[chosen] + ": the configuration leaves such peaks out",
        excluded=True,
    )


def _by_periods(
    verdicts: _Verdicts,
    peaks: Peaks,
    periods: Periods,
    period_of: IntArray,
    at_period: IntArray,
    has_threshold: BoolArray,
) -> None:
    inside = at_period >= 0
    if not inside.any():
        return
    span = period_of[at_period[inside]]
    use = np.zeros(len(inside), dtype=bool)
    use[inside] = periods.use[span]
    words = np.full(len(inside), "", dtype=object)
    words[inside] = "period '" + periods.state[span] + "' (" + periods.why[span] + ")"
    flagged_out = np.array([str(by).startswith("flag") for by in verdicts.decided_by]) & verdicts.excluded
    kept = inside & use & flagged_out
    verdicts.say(kept, "periods.csv", words[kept] + " is used, whatever the flags", excluded=False)
    # A period speaks of the basin, not of what would have been on record.
    alone = kept & peaks.historic & ~has_threshold
    verdicts.say(alone, "default", HISTORIC_ALONE, excluded=True)
    out = inside & ~use
    verdicts.say(out, "periods.csv", words[out] + " is left out", excluded=True)


def _by_ledger(
    verdicts: _Verdicts, peaks: Peaks, ledger: Ledger, config: StudyConfig, effects: list[str]
) -> None:
    row_of = {key: at for at, key in enumerate(peaks.key.tolist())} if ledger.lines("peak") else {}
    for line in ledger.lines("peak"):
        at = row_of.get(int(year_key(ledger.gauge[line], ledger.water_year[line])))
        if at is None:
            continue
        action, why = ledger.frame["action"].iloc[line], ledger.frame["why"].iloc[line]
        what = f"peak {_interval_text(peaks.low[at], peaks.high[at], config)} of {peaks.water_year[at]}"
        what += f" at gauge {ledger.frame['gauge_id'].iloc[line]}"
        was_out = bool(verdicts.excluded[at])
        if action in ("set_flow", "set_interval"):
            verdicts.low[at], verdicts.high[at] = ledger.low[line], ledger.high[line]
            effects[line] = f"{what} set to {_interval_text(ledger.low[line], ledger.high[line], config)}"
        elif action == "exclude":
            effects[line] = f"{what} {'stays excluded' if was_out else 'excluded'}"
        else:
            effects[line] = f"{what} {'kept' if was_out else 'kept; nothing else had excluded it'}"
        verdicts.excluded[at] = action == "exclude"
        verdicts.decided_by[at] = "ledger"
        verdicts.reason[at] = f"ledger: {why}"


def _leave_out_what_says_nothing(verdicts: _Verdicts) -> None:
    nothing = ~verdicts.excluded & (verdicts.low == 0) & np.isinf(verdicts.high)
    verdicts.excluded[nothing] = True
    verdicts.reason[nothing] = (
        "says only that the flood lay between zero and any size (" + verdicts.reason[nothing] + ")"
    )


def _perception(
    verdicts: _Verdicts, years: _ThresholdYears, at_threshold: IntArray
) -> tuple[FloatArray, FloatArray]:
    """Return the perception threshold of every row of the peaks table.

    A flood known only to have stayed below a flow, without a threshold of its own, would have been
    on record with its size only above that flow.
    """
    below = (verdicts.low == 0) & (verdicts.high > 0) & np.isfinite(verdicts.high)
    low, high = np.where(below, verdicts.high, 0.0), np.full(len(below), np.inf)
    inside = at_threshold >= 0
    low[inside], high[inside] = years.low[at_threshold[inside]], years.high[at_threshold[inside]]
    return low, high


def _check_against_thresholds(
    verdicts: _Verdicts,
    peaks: Peaks,
    perception_low: FloatArray,
    perception_high: FloatArray,
    years: _ThresholdYears,
    at_threshold: IntArray,
    config: StudyConfig,
    log: FaultLog,
) -> None:
    exact = ~verdicts.excluded & (verdicts.low == verdicts.high)
    outside = exact & ((verdicts.low < perception_low) | (verdicts.high > perception_high))
    for at in np.flatnonzero(outside):
        source = years.row[at_threshold[at]]
        log.problem(
            "peak_outside_threshold",
            peaks.file,
            f"The peak lies outside its own year's threshold "
            f"({_interval_text(perception_low[at], perception_high[at], config)}, "
            + (f"thresholds row {source})." if source else "set by the ledger)."),
            "Correct the threshold's years or size, or give the peak as bounds in `low` and `high`.",
            row=peaks.row[at],
            column="flow",
            value=f"{verdicts.low[at] / config.flow_in_m3s:g}",
        )


def _assemble(
    gauge_ids: list[str],
    peaks: Peaks,
    verdicts: _Verdicts,
    perception: tuple[FloatArray, FloatArray],
    years: _ThresholdYears,
    unused_years: IntArray,
) -> PeakRecords:
    used = ~verdicts.excluded
    silent = (years.low > 0) & np.isinf(years.high)
    silent &= find_keys(peaks.every_key, years.key) < 0
    silent &= find_keys(unused_years, years.key) < 0
    n_silent = int(silent.sum())
    key = np.concatenate([peaks.key[used], years.key[silent]])
    order = np.argsort(key, kind="stable")

    def joined(of_peaks: np.ndarray, of_silent_years: object) -> np.ndarray:
        return np.concatenate([of_peaks[used], np.broadcast_to(np.asarray(of_silent_years), n_silent)])[order]

    counts = np.bincount(key // YEAR_STEP, minlength=len(gauge_ids))
    return PeakRecords(
        gauge_ids=tuple(gauge_ids),
        offsets=np.concatenate([[0], np.cumsum(counts)]).astype(np.int64),
        water_year=key[order] % YEAR_STEP,
        flow_low=joined(verdicts.low, 0.0),
        flow_high=joined(verdicts.high, years.low[silent]),
        perception_low=joined(perception[0], years.low[silent]),
        perception_high=joined(perception[1], np.inf),
        historic=joined(peaks.historic, False),
        observed=joined(np.ones(len(used), dtype=bool), False),
        cause=joined(peaks.cause, "unknown").astype(np.str_),
    )


def _accounting(gauge_ids: list[str], peaks: Peaks, verdicts: _Verdicts) -> pd.DataFrame:
    interval = verdicts.low < verdicts.high
    fate = np.where(verdicts.excluded, "excluded", np.where(interval, "interval", "used"))
    return pd.DataFrame(
        {
            "file": np.full(len(peaks.row), peaks.file, dtype=object),
            "row": peaks.row,
            "gauge_id": np.array(gauge_ids, dtype=object)[peaks.gauge],
            "water_year": peaks.water_year,
            "fate": fate.astype(object),
            "reason": verdicts.reason,
            "decided_by": verdicts.decided_by,
        },
        columns=list(ACCOUNTING_COLUMNS),
    )


def _tell_other_effects(ledger: Ledger, effects: list[str], config: StudyConfig) -> None:
    for line, later in enumerate(ledger.superseded_by):
        action, subject, gauge, value = (
            ledger.frame[c].iloc[line] for c in ("action", "subject", "gauge_id", "value")
        )
        if later:
            effects[line] = f"superseded by row {later}"
        elif action == "low_flood_threshold":
            effects[line] = (
                f"low-flood threshold of gauge {gauge} set to {_flow_text(ledger.low[line], config)} for its own fit"
            )
        elif subject == "gauge":
            effects[line] = (
                f"gauge {gauge} {'excluded' if action == 'exclude' else 'kept, whatever the screening says'}"
            )
        elif subject in ("pool", "region"):
            effects[line] = f"gauge {gauge} moved to {'region ' + value if value else 'no region'}"
        elif subject in ("model", "estimate"):
            effects[line] = "recorded"


def _flow_text(flow: float, config: StudyConfig) -> str:
    return f"{flow / config.flow_in_m3s:.6g} {config.units.flow}"


def _interval_text(low: float, high: float, config: StudyConfig) -> str:
    if low == high:
        return _flow_text(low, config)
    if np.isinf(high):
        return f"from {_flow_text(low, config)} upwards"
    return f"between {low / config.flow_in_m3s:.6g} and {_flow_text(high, config)}"
