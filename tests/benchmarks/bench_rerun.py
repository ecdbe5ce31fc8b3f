"""Rerun in proportion to change: one gauge's new year, and rows in another order, against the full run's processor time.

``WRACKLINE_BENCH_GAUGES`` sets the number of gauges (default 5,000); processor time is that of all processes of a run.
"""

from __future__ import annotations

import os
import re
import resource
import subprocess
import sys
import tempfile
from pathlib import Path
from typing import Any

sys.path.insert(0, str(Path(__file__).parent))
from synthetic_study import add_year, write_study

REPOSITORY = Path(__file__).resolve().parents[2]
GAUGES = int(os.environ.get("WRACKLINE_BENCH_GAUGES", "5000"))


def measure() -> list[dict[str, Any]]:
    """Processor times of one study: from nothing, with rows re-ordered, with one gauge's new year."""
    with tempfile.TemporaryDirectory() as name:
        study = write_study(Path(name) / "study", GAUGES, targets=20)
        full, _ = processor_seconds(study)
        peaks = study.parent / "peaks.csv"
        head, *rows = peaks.read_text(encoding="utf-8").splitlines()
        peaks.write_text("\n".join([head, *reversed(rows)]) + "\n", encoding="utf-8")
        reordered, few = processor_seconds(study)
        add_year(peaks, "000007", 2025, 123.0)
        year, many = processor_seconds(study)
    return [
        row("rerun, rows re-ordered", reordered / full, "", few),
        row("rerun, one gauge's new year", year / full, "at most 0.35", many),
    ]


def row(kernel: str, ratio: float, target: str, stages: list[str]) -> dict[str, Any]:
    return {
        "kernel": kernel,
        "size": f"{GAUGES} gauges",
        "floor": "the full run",
        "ratio": ratio,
        "ratio_min": ratio,
        "ratio_max": ratio,
        "target": target,
        "stages run": " ".join(stages),
    }


def processor_seconds(study: Path) -> tuple[float, list[str]]:
    """Run the study; return the processor time of all its processes, and the stages that ran."""
    before = resource.getrusage(resource.RUSAGE_CHILDREN)
    done = subprocess.run(
        [sys.executable, "-m", "snakemake", "--configfile", str(study)],
        cwd=REPOSITORY,
        stdout=subprocess.PIPE,
        stderr=subprocess.STDOUT,
        text=True,
        check=False,
    )
    if done.returncode:
        raise SystemExit(done.stdout)
    after = resource.getrusage(resource.RUSAGE_CHILDREN)
    spent = after.ru_utime + after.ru_stime - before.ru_utime - before.ru_stime
    return spent, re.findall(r"^\[\d+ of \d+\] (\w+)", done.stdout, re.MULTILINE)


if __name__ == "__main__":
    for line in measure():
        print(line)
