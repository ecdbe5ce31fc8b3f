"""The command line: ``wrackline check``, ``new``, ``import``, ``fit``, ``estimate``, ``freeze``, ``compare``."""

from __future__ import annotations

import sys
from collections.abc import Iterable
from itertools import groupby
from pathlib import Path
from typing import Annotated

import typer
from rich.console import Console
from rich.text import Text

from wrackline.compare_command import compare
from wrackline.estimate_command import estimate
from wrackline.fit_command import fit
from wrackline.freeze_command import freeze_study, verify_edition
from wrackline.import_command import import_files
from wrackline.study.faults import Fault, StudyFaults
from wrackline.study.loading import UnreadableStudy

app = typer.Typer(
    help="Regional flood-frequency studies: from annual peaks to flood quantiles at gauged and ungauged sites.",
    no_args_is_help=True,
    add_completion=False,
    pretty_exceptions_enable=False,
    rich_markup_mode=None,
)


@app.callback()
def _several_commands() -> None:
    """Regional flood-frequency studies: from annual peaks to flood quantiles at gauged and ungauged sites."""


@app.command()
def check(
    study: Annotated[
        Path, typer.Argument(metavar="FOLDER/study.yaml", help="The study file, or the folder of an edition.")
    ],
) -> None:
    """Read all inputs of a study and print every problem, or verify a frozen edition; writes nothing.

    Every problem is told with its file, row (as a spreadsheet numbers it), column, value and mend.
    Flows and areas are in the units that the study declares.

    An edition is compared with the digests that were taken when it was frozen.

    Exit status: 0 clean (warnings allowed), 1 problems, 2 the study file cannot be read.

    Example: wrackline check my_region/study.yaml
    """
    if (study / "edition.json").is_file():
        raise typer.Exit(verify_edition(study))
    from wrackline.study.checking import check as check_study

    found = check_study(study)
    print_faults(found.problems, found.warnings)
    console = _console()
    if not found.problems:
        _print_line(console, (f"{study}: {found.summary}", ""))
    verdict = f"{_counted(len(found.problems), 'problem')}, {_counted(len(found.warnings), 'warning')}."
    _print_line(console, (verdict, "bold red" if found.problems else "bold green"))
    raise typer.Exit(found.exit_status)


@app.command()
def new(folder: Annotated[Path, typer.Argument(metavar="FOLDER", help="The folder to make.")]) -> None:
    """Write a commented study to fill in: study.yaml, empty tables, and what their columns mean.

    Units of flows and areas are declared in study.yaml (m3/s or ft3/s, km2 or mi2).

    Exit status: 0, or 1 when the folder exists and is not empty.

    Example: wrackline new my_region
    """
    from wrackline.study.starting import start_study

    for path in start_study(folder):
        print(path)
    print(f"Fill in the tables (columns.md explains them), then: wrackline check {folder / 'study.yaml'}")


app.command()(fit)
app.command()(estimate)
app.command("import")(import_files)
app.command("freeze")(freeze_study)
app.command()(compare)


def print_faults(
    problems: Iterable[Fault], warnings: Iterable[Fault] = (), *, to_stderr: bool = False
) -> None:
    """Print faults grouped by file: in colour on a terminal, plain elsewhere, never wrapped."""
    console = _console(to_stderr=to_stderr)
    for faults, word, style in ((problems, "", "red"), (warnings, "warning: ", "yellow")):
        for file, group in groupby(faults, key=lambda fault: fault.file):
            _print_line(console, (file, "bold"))
            for fault in group:
                mend = f" {fault.mend}" if fault.mend else ""
                place = ("  " + word + _place(fault), style)
                _print_line(console, place, (fault.problem, ""), (mend, "italic"))


def _print_line(console: Console, *parts: tuple[str, str]) -> None:
    """Print styled parts; away from a terminal as bare text, which is quick for a million faults."""
    if console.is_terminal:
        console.print(Text.assemble(*parts), soft_wrap=True)
    else:
        print("".join(text for text, _ in parts), file=console.file)


def main() -> None:
    """Run the command line; a user's mistake ends with its explanation and a status, not a traceback."""
    try:
        app()
    except StudyFaults as faults:
        print_faults(faults.problems, faults.warnings, to_stderr=True)
        raise SystemExit(2 if isinstance(faults, UnreadableStudy) else 1) from None
    except OSError as error:
        print(f"{error.filename or 'wrackline'}: {error.strerror or error}", file=sys.stderr)
        raise SystemExit(2) from None


def _console(*, to_stderr: bool = False) -> Console:
    return Console(stderr=to_stderr, highlight=False, markup=False, emoji=False)


def _place(fault: Fault) -> str:
    parts = []
    if fault.row is not None:
        parts.append(f"row {fault.row}")
    if fault.column is not None:
        parts.append(f"column {fault.column}")
    if fault.value is not None:
        parts.append(f"value '{fault.value}'")
    return ", ".join(parts) + ": " if parts else ""


def _counted(number: int, noun: str) -> str:
    return f"{number} {noun}" if number == 1 else f"{number} {noun}s"


if __name__ == "__main__":
    main()
