"""One way to say what is wrong with an input, or odd about a result, and how to mend it."""

from __future__ import annotations

import unicodedata
from collections.abc import Iterable
from dataclasses import asdict, dataclass, field
from typing import Any, Literal

Severity = Literal["problem", "warning"]
LONGEST_VALUE, LONGEST_TEXT = 200, 600
"""Characters of a value, and of the sentences about it, that a fault shows."""


@dataclass(frozen=True)
class Fault:
    """One problem or warning, as told to the user.

    Attributes
    ----------
    code : str
        A short fixed name such as ``duplicate_gauge_year``; tests and ledgers refer to it.
    severity : {"problem", "warning"}
        A problem stops the run; a warning goes to the log, the tables and the page.
    file : str
        The file as the study names it, or the stage for warnings about results.
    row : int or None
        Line of the file as a spreadsheet numbers it (the header is row 1).
    column, value : str or None
        Where it stands and what stands there.
    problem : str
        What is wrong and what is expected.
    mend : str
        What to do about it.
    """

    code: str
    severity: Severity
    file: str
    problem: str
    mend: str = ""
    row: int | None = None
    column: str | None = None
    value: str | None = None

    def __str__(self) -> str:
        place = self.file
        if self.row is not None:
            place += f", row {self.row}"
        if self.column is not None:
            place += f", column '{self.column}'"
        if self.value is not None:
            place += f", value '{self.value}'"
        text = f"{place}: {self.problem}"
        return f"{text} {self.mend}" if self.mend else text

    def to_dict(self) -> dict[str, Any]:
        return asdict(self)


@dataclass
class FaultLog:
    """Collects faults while a study is read, so that all are told at once."""

    faults: list[Fault] = field(default_factory=list)

    def problem(self, code: str, file: str, problem: str, mend: str = "", **place: Any) -> None:
        self._add("problem", code, file, problem, mend, place)

    def warning(self, code: str, file: str, problem: str, mend: str = "", **place: Any) -> None:
        self._add("warning", code, file, problem, mend, place)

    def _add(
        self, severity: Severity, code: str, file: str, problem: str, mend: str, place: dict[str, Any]
    ) -> None:
        """Keep a fault; its texts may hold what a stranger wrote into a file."""
        file, problem, mend = (_on_one_line(text, LONGEST_TEXT) for text in (file, problem, mend))
        self.faults.append(Fault(code, severity, file, problem, mend, **_as_text(place)))

    @property
    def problems(self) -> list[Fault]:
        return sort_faults(f for f in self.faults if f.severity == "problem")

    @property
    def warnings(self) -> list[Fault]:
        return sort_faults(f for f in self.faults if f.severity == "warning")

    def stop_on_problems(self) -> None:
        """Raise `StudyFaults` when there is at least one problem."""
        if self.problems:
            raise StudyFaults(self.problems, self.warnings)


class StudyFaults(Exception):
    """A study that cannot be used as it is; carries every problem found, and the warnings."""

    def __init__(self, problems: list[Fault], warnings: list[Fault] | None = None) -> None:
        self.problems = problems
        self.warnings = warnings or []
        super().__init__(f"{len(problems)} problem(s) in the study's inputs")


def sort_faults(faults: Iterable[Fault]) -> list[Fault]:
    """Order faults by file, row and column, so that output never depends on the order of checks."""
    return sorted(faults, key=lambda f: (f.file, f.row or 0, f.column or "", f.code, f.problem))


def _as_text(place: dict[str, Any]) -> dict[str, Any]:
    if place.get("row") is not None:
        place["row"] = int(place["row"])
    for key in ("column", "value"):
        if place.get(key) is not None:
            place[key] = _on_one_line(str(place[key]), LONGEST_VALUE)
    return place


def _on_one_line(text: str, longest: int) -> str:
    """Shorten a text, and write out what is not seen or would act on a terminal (``\\n``, ``\\x1b``)."""
    if len(text) > longest:
        text = f"{text[: longest - 30]} ... ({len(text):,} characters)"
    if text.isprintable():
        return text
    return "".join(c if c.isprintable() or unicodedata.category(c) == "Zs" else ascii(c)[1:-1] for c in text)
