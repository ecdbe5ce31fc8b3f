"""What a finished run hands out: every stage's tables, figures and warnings, found below ``work/``."""

from __future__ import annotations

from collections.abc import Callable, Iterable
from dataclasses import dataclass, replace
from pathlib import Path

import pandas as pd

from wrackline.study.config import StudyConfig
from wrackline.study.contribution import Contribution, Section, read_contribution
from wrackline.study.faults import Fault, FaultLog, sort_faults
from wrackline.study.tables import Column, Table

STAGE_ORDER = (
    "intake",
    "screen",
    "dependence",
    "atsite",
    "skew",
    "weight",
    "pool",
    "regress",
    "validate",
    "estimate",
    "compare",
)
COLUMNS_COLUMNS = (
    Column("table", "text", "name of the table: the file's name without its ending"),
    Column("column", "text", "name of the column"),
    Column("unit", "text", "unit of the column's values; text, true/false or blank (no unit)"),
    Column("meaning", "text", "what the column holds"),
)
WARNINGS_COLUMNS = (
    Column("file", "text", "file of the study, or the stage for a warning about results"),
    Column("row", "count", "line of the file as a spreadsheet numbers it (the header is row 1)"),
    Column("column", "text", "column in which the value stands"),
    Column("value", "text", "the value"),
    Column("code", "text", "short fixed name of the kind of warning"),
    Column("problem", "text", "what is odd"),
    Column("mend", "text", "what to do about it"),
)


@dataclass(frozen=True)
class StageOutput:
    """One stage's contribution and the folder it lies in."""

    folder: Path
    contribution: Contribution

    @property
    def stage(self) -> str:
        return self.contribution.stage

    def published_figures(self) -> dict[str, Path]:
        """Files of the figures that the stage's sections show, by the name they are published under."""
        names = [figure.file for section in self.contribution.sections for figure in section.figures]
        unsafe = [name for name in names if Path(name).name != name]
        if unsafe:
            raise ValueError(f"stage {self.stage}: figures must be plain file names, not {unsafe}")
        return {f"{self.stage}_{name}": self.folder / "figures" / name for name in names}

    def published_sections(self) -> list[Section]:
        """The stage's sections, their figures under the published names."""
        return [
            replace(
                section,
                figures=tuple(replace(f, file=f"{self.stage}_{f.file}") for f in section.figures),
            )
            for section in self.contribution.sections
        ]


def stages_to_publish(config: StudyConfig) -> tuple[str, ...]:
    """Stages whose contributions are published: a comparison only where the study still names a previous edition."""
    return STAGE_ORDER if config.editions.previous else STAGE_ORDER[:-1]


def read_stages(
    work: Callable[[str], Path], study_name: str, stages: tuple[str, ...] = STAGE_ORDER
) -> list[StageOutput]:
    """Read the contribution of every stage that has run, in the order of the study.

    Raises
    ------
    StudyFaults
        When no stage has run.
    ValueError
        When two stages publish a table of the same name.
    """
    found = [
        StageOutput(work(stage), read_contribution(work(stage)))
        for stage in stages
        if (work(stage) / "contribution.json").is_file()
    ]
    if not found:
        log = FaultLog()
        log.problem(
            "nothing_to_publish", study_name, "no stage of this study has run.", "Run the study first."
        )
        log.stop_on_problems()
    owner: dict[str, str] = {}
    for output in found:
        for name in [table.name for table in output.contribution.tables] + sorted(output.contribution.models):
            if name in owner:
                raise ValueError(f"stages {owner[name]} and {output.stage} both publish a table {name}")
            owner[name] = output.stage
    return found


def column_table(tables: Iterable[Table], config: StudyConfig) -> Table:
    """List every column of every table, sorted, with this list's own; ``flow`` and ``area`` become declared units."""
    listed = [(table.name, column) for table in tables for column in table.columns]
    listed += [("columns", column) for column in COLUMNS_COLUMNS]
    rows = sorted((name, c.name, declared_unit(c.unit, config), c.meaning) for name, c in listed)
    frame = pd.DataFrame(rows, columns=[column.name for column in COLUMNS_COLUMNS], dtype=object)
    return Table("columns", frame, COLUMNS_COLUMNS)


def declared_unit(unit: str, config: StudyConfig) -> str:
    """Unit of a column in the study's tables: ``flow`` and ``area``, or logarithms of them, stand for the declared ones."""
    declared: dict[str, str] = {"flow": config.units.flow, "area": config.units.area}
    for word, own in tuple(declared.items()):
        declared[f"log10 of {word}"] = f"log10 of {own}"
    return declared.get(unit, unit)


def warning_table(warnings: Iterable[Fault]) -> Table:
    """List all warnings, sorted by file, row and column."""
    rows = [(w.file, w.row, w.column, w.value, w.code, w.problem, w.mend) for w in sort_faults(warnings)]
    frame = pd.DataFrame(rows, columns=[column.name for column in WARNINGS_COLUMNS], dtype=object)
    return Table("warnings", frame, WARNINGS_COLUMNS)
