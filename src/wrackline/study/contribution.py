"""How a stage adds to the study: tables with units, figures, and a section of the page."""

from __future__ import annotations

import hashlib
import json
from dataclasses import asdict, dataclass, field
from pathlib import Path
from typing import Any

import pandas as pd

from wrackline.study.faults import Fault
from wrackline.study.tables import Column, Table, read_table, write_table, write_text


@dataclass(frozen=True)
class Figure:
    """A static figure: the file's name in the stage's ``figures`` folder, its caption and alternative text."""

    file: str
    caption: str
    alt: str


@dataclass(frozen=True)
class PageTable:
    """A table as the page shows it: text cells already rounded for reading, and where the full one lies."""

    caption: str
    head: tuple[str, ...]
    rows: tuple[tuple[str, ...], ...]
    source: str


@dataclass(frozen=True)
class Section:
    """One section of the study page.

    ``paragraphs`` are plain sentences (no markup); ``method`` names the variant used and its source.
    """

    key: str
    title: str
    paragraphs: tuple[str, ...] = ()
    figures: tuple[Figure, ...] = ()
    tables: tuple[PageTable, ...] = ()
    method: tuple[str, ...] = ()


@dataclass(frozen=True)
class Contribution:
    """All that one stage hands to the end of the study."""

    stage: str
    tables: tuple[Table, ...] = ()
    sections: tuple[Section, ...] = ()
    warnings: tuple[Fault, ...] = ()
    models: dict[str, dict[str, Any]] = field(default_factory=dict)
    """JSON documents for ``tables/`` (``skew_model``, ``equations``): name to content."""


def write_contribution(folder: Path, contribution: Contribution) -> None:
    """Write a contribution below ``folder`` (``work/<stage>``); figures are already in ``folder/figures``.

    The document holds a digest of every file that will be published, so that it changes whenever one of them does.
    """
    for table in contribution.tables:
        write_table(folder / "tables" / f"{table.name}.csv", table.frame)
    for name, content in contribution.models.items():
        write_text(folder / "tables" / f"{name}.json", to_json(content))
    document = {
        "stage": contribution.stage,
        "tables": {table.name: [asdict(column) for column in table.columns] for table in contribution.tables},
        "models": sorted(contribution.models),
        "sections": [asdict(section) for section in contribution.sections],
        "warnings": [fault.to_dict() for fault in contribution.warnings],
        "sha256": _digests(folder, contribution),
    }
    write_text(folder / "contribution.json", to_json(document))


def _digests(folder: Path, contribution: Contribution) -> dict[str, str]:
    names = [
        *(f"tables/{table.name}.csv" for table in contribution.tables),
        *(f"tables/{name}.json" for name in contribution.models),
        *(f"figures/{figure.file}" for section in contribution.sections for figure in section.figures),
    ]
    paths = {name: folder / name for name in names}
    return {
        name: hashlib.sha256(path.read_bytes()).hexdigest() for name, path in paths.items() if path.is_file()
    }


def read_contribution(folder: Path) -> Contribution:
    """Read back what `write_contribution` wrote."""
    document = json.loads((folder / "contribution.json").read_text(encoding="utf-8"))
    tables = tuple(
        Table(
            name,
            _read_published(folder / "tables" / f"{name}.csv", columns),
            tuple(Column(**c) for c in columns),
        )
        for name, columns in document["tables"].items()
    )
    models = {
        name: json.loads((folder / "tables" / f"{name}.json").read_text(encoding="utf-8"))
        for name in document["models"]
    }
    return Contribution(
        stage=document["stage"],
        tables=tables,
        sections=tuple(_read_section(section) for section in document["sections"]),
        warnings=tuple(Fault(**fault) for fault in document["warnings"]),
        models=models,
    )


def to_json(content: Any) -> str:
    """Render JSON with a fixed layout, so that equal content is equal bytes; refuses NaN and infinity."""
    return json.dumps(content, indent=1, sort_keys=True, ensure_ascii=False, allow_nan=False) + "\n"


def _read_section(section: dict[str, Any]) -> Section:
    return Section(
        key=section["key"],
        title=section["title"],
        paragraphs=tuple(section["paragraphs"]),
        figures=tuple(Figure(**figure) for figure in section["figures"]),
        tables=tuple(
            PageTable(t["caption"], tuple(t["head"]), tuple(tuple(row) for row in t["rows"]), t["source"])
            for t in section["tables"]
        ),
        method=tuple(section["method"]),
    )


def _read_published(path: Path, columns: list[dict[str, str]]) -> pd.DataFrame:
    return read_table(path, text=tuple(column["name"] for column in columns if column["unit"] == "text"))
