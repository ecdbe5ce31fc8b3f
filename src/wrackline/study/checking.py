"""Checking a study without writing anything."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path

from wrackline.study.faults import Fault, StudyFaults
from wrackline.study.inputs import Study, read_study
from wrackline.study.loading import UnreadableStudy


@dataclass(frozen=True)
class Checked:
    """What a check found.

    Attributes
    ----------
    problems, warnings : tuple of Fault
        Sorted by file, row and column.
    readable : bool
        False when the study file itself could not be read.
    summary : str
        What was read, in words; blank when there are problems.
    """

    problems: tuple[Fault, ...]
    warnings: tuple[Fault, ...]
    readable: bool
    summary: str

    @property
    def exit_status(self) -> int:
        """0: clean (warnings allowed); 1: problems; 2: the study cannot be read."""
        return 0 if not self.problems else 1 if self.readable else 2


def check(study_file: str | Path) -> Checked:
    """Read all inputs of a study and return every problem and warning; writes nothing.

    Parameters
    ----------
    study_file : str or Path
        The study file, ``FOLDER/study.yaml``.
    """
    try:
        study = read_study(study_file)
    except StudyFaults as faults:
        readable = not isinstance(faults, UnreadableStudy)
        return Checked(tuple(faults.problems), tuple(faults.warnings), readable, "")
    return Checked((), study.warnings, True, _in_words(study))


def _in_words(study: Study) -> str:
    fates = study.accounting["fate"].value_counts()
    counts = [f"{int(fates.get(fate, 0))} {words}" for fate, words in _FATES.items()]
    return (
        f"{len(study.gauges)} gauges, {len(study.accounting)} rows of peaks ({', '.join(counts)}), "
        f"{len(study.targets)} targets, {len(study.ledger)} decisions in the ledger."
    )


_FATES = {"used": "used", "interval": "as intervals", "excluded": "left out"}
