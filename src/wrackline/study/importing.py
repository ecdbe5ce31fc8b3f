"""From retrievals and wide tables to the tables of a study, with an account of every row that was read."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from pathlib import Path

import pandas as pd

from wrackline.study.config import StudyConfig
from wrackline.study.faults import Fault, FaultLog, StudyFaults
from wrackline.study.gauge_stub import build_gauges
from wrackline.study.import_findings import Findings, FoundPeak
from wrackline.study.loading import UnreadableStudy, load_config
from wrackline.study.peaks_of_years import Resolved, resolve_peaks
from wrackline.study.retrieval_codes import CODES
from wrackline.study.retrieval_files import UNREADABLE, name_files, read_file, without_doubles
from wrackline.study.tables import write_table, write_text
from wrackline.study.vocabulary import PEAKS, THRESHOLDS

ACCOUNT = "import_account.csv"
ACCOUNT_COLUMNS = ("file", "row", "gauge_id", "water_year", "fate", "reason")
USUAL_START = 10
AREA_UNIT_BESIDE = {"ft3/s": "mi2", "m3/s": "km2"}

STUDY_STUB = """\
# A regional flood-frequency study, begun by an import. Fill in what import_account.csv and the warnings
# named, then:   wrackline check study.yaml      (`wrackline new FOLDER` writes a study file with every key)

inputs:
  gauges: gauges.csv
  peaks: peaks.csv
  thresholds: thresholds.csv

units: {{flow: {flow}, area: {area}}}

water_year_starts: {starts}      # first month; the water year is named by the calendar year in which it ends

pooling:
  regions: one               # all gauges together; `column` once gauges.csv has regions
"""


@dataclass(frozen=True)
class ImportedPeaks:
    """What an import wrote and what became of every row.

    Attributes
    ----------
    written : tuple of Path
    account : DataFrame
        One line per data row that was read (per cell of a wide table): `file`, `row`, `gauge_id`, `water_year`
        (blank where not known), `fate` (`peak`, `merged`, `left out`, `gauge`), `reason`.
    codes : dict of str to int
        How many rows carry each qualification code.
    peaks, thresholds, gauges : DataFrame
        As written; flows and areas in the files' units.
    warnings : tuple of Fault
    """

    written: tuple[Path, ...]
    account: pd.DataFrame
    codes: dict[str, int]
    peaks: pd.DataFrame
    thresholds: pd.DataFrame
    gauges: pd.DataFrame
    warnings: tuple[Fault, ...]


def import_peaks(
    files: str | Path | Iterable[str | Path],
    into: str | Path,
    *,
    water_year_starts: int | None = None,
    flow_unit: str | None = None,
) -> ImportedPeaks:
    """Read public retrievals and wide tables of annual peaks into a study's folder.

    Parameters
    ----------
    files : path or paths
        Tab-delimited retrievals of annual peaks or of sites (flows ft3/s, areas mi2), and wide tables
        with a column per gauge.
    into : str or Path
        The study's folder; made where it does not exist. Its `peaks.csv` must hold no rows yet.
    water_year_starts : int, optional
        First month of the water year; else that of the folder's study file, else 10.
    flow_unit : {"m3/s", "ft3/s"}, optional
        Unit of wide tables; else that of the folder's study file.

    Raises
    ------
    UnreadableStudy
        When a file cannot be read at all; told with all other problems.
    StudyFaults
        With every problem of all files. Nothing is written then.
    """
    paths = [Path(files)] if isinstance(files, (str, Path)) else [Path(file) for file in files]
    if not paths:
        raise ValueError("no file to import is named")
    if flow_unit not in (None, "m3/s", "ft3/s"):
        raise ValueError("flow_unit is m3/s or ft3/s")
    if water_year_starts is not None and not 1 <= water_year_starts <= 12:
        raise ValueError("water_year_starts is a month, 1 to 12")
    folder, log, findings = Path(into), FaultLog(), Findings()
    config = _study_in(folder, log)
    starts = water_year_starts or (config.water_year_starts if config else USUAL_START)
    unit = flow_unit or (config.units.flow if config else None)
    paths = without_doubles(paths, log)
    for path, file in zip(paths, name_files(paths), strict=True):
        read_file(path, file, starts, unit, findings, log)
    units = _units(findings, config, starts, log)
    resolved = resolve_peaks(findings.peaks, log)
    gauges, fates_of_sites = build_gauges(findings, units[1], log)
    tables = {
        "peaks.csv": _peaks_table(resolved.kept),
        "thresholds.csv": _thresholds_table(resolved.kept),
        "gauges.csv": gauges,
    }
    to_write = _without_full_tables(folder, tables, config, log)
    if any(fault.code in UNREADABLE for fault in log.problems):
        raise UnreadableStudy(log.problems, log.warnings)
    log.stop_on_problems()
    account = _account(findings, resolved, fates_of_sites)
    written = [folder / name for name in (*to_write, ACCOUNT)]
    for name, table in to_write.items():
        write_table(folder / name, table)
    write_table(folder / ACCOUNT, account)
    if config is None:
        text = STUDY_STUB.format(flow=units[0], area=units[1], starts=starts)
        write_text(folder / "study.yaml", text)
        written.append(folder / "study.yaml")
    return ImportedPeaks(
        written=tuple(written),
        account=account,
        codes=_count_codes(findings.peaks),
        peaks=_peaks_table(resolved.kept),
        thresholds=_thresholds_table(resolved.kept),
        gauges=gauges,
        warnings=tuple(log.warnings),
    )


def _study_in(folder: Path, log: FaultLog) -> StudyConfig | None:
    if folder.exists() and not folder.is_dir():
        log.problem("exists", str(folder), "This is a file; a folder is expected.", "Name another folder.")
        return None
    if not (folder / "study.yaml").exists():
        return None
    try:
        return load_config(folder / "study.yaml")
    except StudyFaults as faults:
        log.faults.extend([*faults.problems, *faults.warnings])
        return None


def _units(findings: Findings, config: StudyConfig | None, starts: int, log: FaultLog) -> tuple[str, str]:
    """Return the units of flow and area that all files share, and report those that differ or defy the study."""
    flow = config.units.flow if config else next(iter(findings.units.values()), "ft3/s")
    area = config.units.area if config else next(iter(findings.area_units.values()), AREA_UNIT_BESIDE[flow])
    told = "The study says" if config else "Another file is in"
    mend = "Write `units: {{flow: {}, area: {}}}` in study.yaml, or import into another folder."
    for what, wanted, of_file in (("Flows", flow, findings.units), ("Areas", area, findings.area_units)):
        for file, unit in of_file.items():
            if unit != wanted:
                fitting = (unit, area) if what == "Flows" else (flow, unit)
                log.problem(
                    "other_unit",
                    file,
                    f"{what} of this file are in {unit}. {told} {wanted}; nothing is converted here.",
                    mend.format(*fitting) if config else "Import files of one unit, or convert them first.",
                )
    if config and config.water_year_starts != starts:
        log.problem(
            "other_water_year",
            "study.yaml",
            f"The study's water year starts in month {config.water_year_starts}, the import was told {starts}.",
            "Make both the same, or leave --water-year-starts away.",
            column="water_year_starts",
        )
    return flow, area


def _without_full_tables(
    folder: Path, tables: dict[str, pd.DataFrame], config: StudyConfig | None, log: FaultLog
) -> dict[str, pd.DataFrame]:
    """Return the tables to write: peaks and thresholds are never overwritten, filled gauges stay as they are."""
    for name, table in tables.items():
        role = name.removesuffix(".csv")
        named = getattr(config.inputs, role) if config else name
        if named != name and len(table):
            log.warning(
                "other_name",
                "study.yaml",
                f"The study reads {named or 'no file'}; the import writes {name}.",
                f"Write `{role}: {name}` under `inputs`, or join the two tables.",
                column=f"inputs.{role}",
            )
    out = {}
    for name, table in tables.items():
        if not _has_rows(folder / name):
            out[name] = table
        elif name == "gauges.csv" and len(tables["peaks.csv"]):
            log.warning(
                "kept_as_it_is",
                name,
                "The table has rows already and is left as it is.",
                "`wrackline check` names gauges that are missing in it.",
            )
        elif len(table):
            log.problem(
                "exists",
                name,
                "The table has rows already; nothing is overwritten.",
                "Import into another folder and join the tables, or take its rows out first.",
            )
    return out


def _has_rows(path: Path) -> bool:
    if not path.exists():
        return False
    return path.is_dir() or sum(bool(line.strip()) for line in path.read_bytes().splitlines()) > 1


def _peaks_table(kept: Sequence[FoundPeak]) -> pd.DataFrame:
    rows = [
        (
            peak.gauge_id,
            peak.water_year,
            "" if peak.bound else peak.value,
            peak.date,
            peak.value if peak.bound == "above" else "",
            peak.value if peak.bound == "below" else "",
            "historic" if peak.historic else "systematic",
            peak.cause,
            " ".join(peak.flags),
        )
        for peak in kept
    ]
    return pd.DataFrame(rows, columns=list(PEAKS.names))


def _thresholds_table(kept: Sequence[FoundPeak]) -> pd.DataFrame:
    """Return the years of which the files say what was the smallest recordable flow; equal neighbours joined."""
    spans: list[list[object]] = []
    for peak in kept:
        if peak.bound != "below" or "4" not in peak.codes or float(peak.value) == 0:
            continue
        last = spans[-1] if spans else None
        if last and last[0] == peak.gauge_id and last[2] == peak.water_year - 1 and last[3] == peak.value:
            last[2] = peak.water_year
        else:
            why = f"smallest recordable discharge, by code 4 of {peak.file}"
            spans.append([peak.gauge_id, peak.water_year, peak.water_year, peak.value, "", why])
    return pd.DataFrame(spans, columns=list(THRESHOLDS.names))


def _account(
    findings: Findings, resolved: Resolved, sites: dict[tuple[str, int], tuple[str, str]]
) -> pd.DataFrame:
    files = {
        file: number for number, file in enumerate(dict.fromkeys(found.file for found in findings.everything))
    }
    lines: list[tuple[str, int, str, object, str, str]] = []
    for number, peak in enumerate(findings.peaks):
        lines.append((peak.file, peak.row, peak.gauge_id, peak.water_year or None, *resolved.fates[number]))
    for site in findings.sites:
        lines.append((site.file, site.row, site.gauge_id, None, *sites[site.file, site.row]))
    lines.sort(key=lambda line: (files[line[0]], line[1]))
    account = pd.DataFrame(lines, columns=list(ACCOUNT_COLUMNS))
    account["water_year"] = account["water_year"].astype("Int64")
    return account


def _count_codes(peaks: Sequence[FoundPeak]) -> dict[str, int]:
    every = [code for peak in peaks for code in peak.codes]
    return {code: every.count(code) for code in (*CODES, *sorted(set(every) - set(CODES))) if code in every}
