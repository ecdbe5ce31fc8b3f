"""Intake: the study's files become checked records, sites and polygons, with an account of every row."""

from __future__ import annotations

import calendar
from typing import TYPE_CHECKING

import numpy as np
import pandas as pd

from wrackline.report.figures_intake import draw_record_years
from wrackline.report.rounding import format_unit
from wrackline.stages.running import StudyFiles, main
from wrackline.study.contribution import Contribution, Figure, PageTable, Section, write_contribution
from wrackline.study.handover import write_records
from wrackline.study.inputs import Study, read_study
from wrackline.study.tables import Column, Table, write_table

if TYPE_CHECKING:
    from geopandas import GeoDataFrame

LEDGER_MEANINGS = {
    "date": "day of the decision",
    "by": "who decided",
    "subject": "what it is about",
    "action": "what was done",
    "why": "the written reason",
    "gauge_id": "gauge it is about",
    "water_year": "water year it is about",
    "pool": "pool it is about",
    "value": "value set",
    "evidence": "where the evidence is",
    "effect": "what the line did in this run",
}


def run(study_files: StudyFiles) -> str:
    """Read and check the study; write ``work/intake``."""
    study = read_study(study_files.study_file)
    folder = study_files.work("intake")
    write_records(folder / "records.csv", study.records)
    for name in ("gauges", "targets", "periods", "redundancy", "ledger", "accounting"):
        write_table(folder / f"{name}.csv", getattr(study, name))
    write_table(folder / "basins.csv", _well_known_text(study.basins, "site_id"))
    write_table(folder / "regions.csv", _well_known_text(study.regions, "region"))
    draw_record_years(study.records, folder / "figures" / "record_years.png")
    write_contribution(folder, _contribution(study))
    return f"{study.records.n_gauges} gauges, {len(study.accounting)} peaks, {len(study.targets)} targets"


def _well_known_text(polygons: GeoDataFrame | None, name: str) -> pd.DataFrame:
    """Return polygons as text, EPSG:4326, degrees to seven decimals (about a centimetre)."""
    if polygons is None or len(polygons) == 0:
        return pd.DataFrame({name: pd.Series(dtype=object), "wkt": pd.Series(dtype=object)})
    import shapely

    text = shapely.to_wkt(polygons.geometry.to_numpy(), rounding_precision=7, trim=True)
    return pd.DataFrame({name: polygons[name].to_numpy(), "wkt": text}).sort_values(name, kind="stable")


def _contribution(study: Study) -> Contribution:
    causes = _floods_by_cause(study)
    figure = Figure(
        "record_years.png",
        "Gauges with a peak in each water year: exactly known, and known as an interval.",
        "Bars over water years; their height is the number of gauges with a peak on record in that year.",
    )
    section = Section(
        key="data",
        title="Data",
        paragraphs=(*_what_was_read(study), *_what_was_left_out(study), *_what_the_analyst_decided(study)),
        figures=(figure,) if len(study.records.water_year) else (),
        tables=(_fates(study.accounting), *_causes_page(causes)),
        method=(
            "Where they disagree, the ledger wins over periods.csv, that over a row's flags, those over defaults.",
            "A year in the span of a perception threshold without a recorded peak is known to have stayed below "
            "the threshold (Cohn, Lane and Baier, 1997).",
        ),
    )
    ledger = Table(
        "ledger",
        study.ledger,
        tuple(Column(name, "text", LEDGER_MEANINGS[name]) for name in study.ledger.columns),
    )
    by_cause = Table(
        "floods_by_cause",
        causes,
        (
            Column("cause", "text", "cause of the flood as the peaks table says it"),
            Column("n_peaks", "count", "peaks in use, exact or as intervals"),
            Column("share", "fraction", "share of all peaks in use"),
        ),
    )
    return Contribution("intake", (ledger, by_cause), (section,), study.warnings)


def _what_was_read(study: Study) -> list[str]:
    records, config = study.records, study.config
    years = records.water_year[records.observed]
    text = f"{_counted(records.n_gauges, 'gauge')} with {_counted(len(study.accounting), 'row')} of annual peaks were read"
    text += f", water years {years.min()} to {years.max()}." if len(years) else "."
    sentences = [
        text
        + f" Flows are in {format_unit(config.units.flow)}, areas in {format_unit(config.units.area)}; the water year "
        f"starts in {calendar.month_name[config.water_year_starts]} and is named by the calendar year in which it ends."
    ]
    historic = int((records.historic & records.observed).sum())
    censored = int((~records.observed).sum())
    if historic or censored:
        sentences.append(
            f"{_counted(historic, 'historic peak')} and {_counted(censored, 'year')} known only to have stayed below "
            "a perception threshold add to the systematic record."
        )
    if len(study.targets):
        sentences.append(f"Floods are wanted at {_counted(len(study.targets), 'ungauged site')}.")
    return sentences


def _what_was_left_out(study: Study) -> list[str]:
    fates = study.accounting["fate"].value_counts()
    used, interval, excluded = (int(fates.get(fate, 0)) for fate in ("used", "interval", "excluded"))
    sentences = [
        f"Of the {_counted(len(study.accounting), 'row')}, {used} are used with their flow, {interval} as an interval, and "
        f"{excluded} are left out; the table of reasons accounts for each."
    ]
    unknown = int((study.accounting["reason"].str.contains("regulation_unknown")).sum())
    if unknown:
        sentences.append(f"{_counted(unknown, 'row')} were decided by the flag regulation_unknown.")
    return sentences


def _what_the_analyst_decided(study: Study) -> list[str]:
    if study.ledger.empty:
        return ["The analyst's ledger holds no decision."]
    return [
        f"The analyst's ledger holds {_counted(len(study.ledger), 'decision')}; the table shows what each did."
    ]


def _fates(accounting: pd.DataFrame) -> PageTable:
    """Count rows by fate, who decided and reason; ledger reasons are told in the ledger's own table."""
    reason = np.where(accounting["decided_by"] == "ledger", "a decision of the ledger", accounting["reason"])
    kinds = pd.DataFrame(
        {"fate": accounting["fate"], "decided_by": accounting["decided_by"], "reason": reason}
    )
    counts = kinds.value_counts(sort=False).sort_index().reset_index()
    rows = tuple(tuple(str(cell) for cell in row) for row in counts.to_numpy())
    return PageTable(
        "What became of the rows of the peaks table.",
        ("fate", "decided by", "reason", "rows"),
        rows,
        "tables/record_accounting.csv",
    )


def _floods_by_cause(study: Study) -> pd.DataFrame:
    cause, count = np.unique(study.records.cause[study.records.observed], return_counts=True)
    return pd.DataFrame(
        {"cause": cause.astype(object), "n_peaks": count, "share": count / max(int(count.sum()), 1)}
    )


def _causes_page(causes: pd.DataFrame) -> list[PageTable]:
    if set(causes["cause"]) <= {"unknown"}:
        return []
    rows = tuple((c, str(n), f"{100 * s:.1f} %") for c, n, s in causes.itertuples(index=False))
    return [
        PageTable("Peaks in use by cause.", ("cause", "peaks", "share"), rows, "tables/floods_by_cause.csv")
    ]


def _counted(number: int, noun: str) -> str:
    return f"{number} {noun}" if number == 1 else f"{number} {noun}s"


if __name__ == "__main__":
    main("intake", run)
