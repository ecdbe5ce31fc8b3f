"""Compare two editions of a study from Python: what moved, and why."""

from __future__ import annotations

import tempfile
from pathlib import Path

from wrackline.stages.comparison import Comparison, compare_editions
from wrackline.study.editions import read_edition


def compare(old: str | Path, new: str | Path) -> Comparison:
    """Compare two editions; their inputs are run again in a temporary folder, nothing else is written.

    Parameters
    ----------
    old, new : path
        Folders of editions (`wrackline freeze`), or results of studies whose inputs lie beside them unchanged.

    Raises
    ------
    StudyFaults
        When one of them cannot be read or was altered.
    """
    before, after = (read_edition(Path(path)) for path in (old, new))
    with tempfile.TemporaryDirectory(prefix="wrackline_") as scratch:
        return compare_editions(before, after, Path(scratch))
