"""What the workflow tells: little while it runs, at the end where to look."""

from __future__ import annotations

import logging
import sys
from pathlib import Path

from wiring import FAILED

CHATTER = (
    "Assuming unrestricted shared filesystem",
    "Building DAG of jobs",
    "Updating checkpoint dependencies",
    "DAG of jobs will be updated after completion",
    "Using shell:",
    "Select jobs to execute",
    "Execute ",
    "Conda environments: ignored",
    "Complete log",
    "Elapsed time",
    "Shutting down",
    "Exiting because a job execution failed",
    "At least one job did not complete",
    "WorkflowError:\nAt least one job did not complete",
)


def hush(dry_run: bool, results: Path) -> None:
    """Leave out the engine's own running commentary, and its traceback of a stage that has told its error itself.

    When there is nothing to do, say so together with where the results lie.
    """

    def worth_telling(record: logging.LogRecord) -> bool:
        message = record.getMessage()
        if message.startswith("Nothing to be done"):
            tell_results(results, "Nothing to do, the study is up to date.")
            return False
        if record.levelno > logging.WARNING and "CalledProcessError" in message and ".stages." in message:
            return False
        return not message.startswith(CHATTER)

    if not dry_run:
        logging.getLogger("snakemake.logging").addFilter(worth_telling)


def tell_results(results: Path, beginning: str = "The study is done.") -> None:
    """Say where the page, the tables and the maps lie."""
    print(
        f"\n{beginning}\n  page    {results / 'report.html'}\n  tables  {results / 'tables'}"
        f"\n  maps    {results / 'maps'}\n  record  {results / 'manifest.json'}",
        file=sys.stderr,
    )


def tell_failure(folder: Path) -> None:
    """Say what the failed stage said, and where its log lies; results of an earlier run were not touched before `publish`."""
    failed = folder / FAILED
    if not failed.is_file():
        return
    stage = failed.read_text(encoding="utf-8").split()[0]
    log = folder / "work" / "logs" / f"{stage}.log"
    print(f"\nThe study stopped in stage `{stage}`. Its log: {log}", file=sys.stderr)
