"""What all stages share: where a study's files lie, and how a stage is called and tells what it did."""

from __future__ import annotations

import argparse
import sys
import time
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

from wrackline.study.config import StudyConfig
from wrackline.study.faults import StudyFaults
from wrackline.study.loading import load_config


@dataclass(frozen=True)
class StudyFiles:
    """A study's configuration and the folders below it."""

    config: StudyConfig
    study_file: Path

    @property
    def folder(self) -> Path:
        return self.study_file.parent

    @property
    def results(self) -> Path:
        """Where `publish` alone writes."""
        return self.folder / self.config.output

    def work(self, stage: str) -> Path:
        """The folder of one stage's intermediates."""
        return self.folder / "work" / stage


def main(stage: str, run: Callable[[StudyFiles], str]) -> None:
    """Run one stage for the study named on the command line; ``run`` returns what it did in a few words.

    Ends the process with status 1 and the list of faults when the study's inputs are at fault.
    """
    parser = argparse.ArgumentParser(prog=f"python -m wrackline.stages.{stage}")
    parser.add_argument("study", type=Path, help="the study file (study.yaml)")
    study_file = parser.parse_args().study.resolve()
    started = time.perf_counter()
    try:
        done = run(StudyFiles(load_config(study_file), study_file))
    except StudyFaults as faults:
        for fault in faults.problems:
            print(fault, file=sys.stderr)
        print(f"{stage}: {faults}", file=sys.stderr)
        raise SystemExit(1) from None
    print(f"{stage}: {done} ({time.perf_counter() - started:.1f} s)", flush=True)
