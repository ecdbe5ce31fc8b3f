"""Kill a study at random moments, take it up again, and compare: ``python tests/benchmarks/drill_kill.py [KILLS] [SEED]``.

Every time a small invented study is started anew, its whole process group is killed (SIGKILL) at a moment drawn
evenly over the length of an undisturbed run, and it is run again. The results must be those of the undisturbed run, byte for byte
(a GeoPackage by the digest of its content). If a manifest lies there after the kill, every file it names must be whole.
"""

from __future__ import annotations

import json
import os
import random
import shutil
import signal
import subprocess
import sys
import tempfile
import time
from pathlib import Path

sys.path.insert(0, str(Path(__file__).parent))
from synthetic_study import FEW_SIMULATIONS, write_study

from wrackline.study.provenance import MANIFEST, describe_file

REPOSITORY = Path(__file__).resolve().parents[2]
GAUGES = 16


def main() -> int:
    kills = int(sys.argv[1]) if len(sys.argv) > 1 else 50
    moments = random.Random(int(sys.argv[2]) if len(sys.argv) > 2 else 1)
    failures = 0
    with tempfile.TemporaryDirectory() as name:
        place = Path(name)
        undisturbed = small_study(place / "undisturbed")
        started = time.perf_counter()
        finish(undisturbed)
        length = time.perf_counter() - started
        expected = digests(undisturbed)
        print(f"undisturbed run: {length:.1f} s, {len(expected)} files", flush=True)
        for number in range(1, kills + 1):
            study = small_study(place / "killed")
            moment = moments.uniform(0.0, length)
            done = kill_after(study, moment)
            wrong = half_written(study)
            finish(study)
            wrong += [name for name, digest in digests(study).items() if expected.get(name) != digest]
            wrong += sorted(set(expected) - set(digests(study)))
            failures += bool(wrong)
            verdict = f"DIFFERENT: {', '.join(wrong)}" if wrong else "same results"
            print(f"{number:3d}  killed at {moment:5.1f} s, {done} stages done  {verdict}", flush=True)
            shutil.rmtree(study.parent)
    print(f"{kills} kills, {failures} with other results")
    return int(failures > 0)


def small_study(folder: Path) -> Path:
    """The invented study, small enough to run in seconds."""
    return write_study(
        folder, GAUGES, pooling=FEW_SIMULATIONS, at_site={"alternatives": False}, skew={"surface": False}
    )


def command(study: Path) -> list[str]:
    return [sys.executable, "-m", "snakemake", "--configfile", str(study)]


def finish(study: Path) -> None:
    """Run the study to its end."""
    done = subprocess.run(command(study), cwd=REPOSITORY, capture_output=True, text=True, check=False)
    if done.returncode:
        raise SystemExit(f"the run that should finish did not:\n{done.stdout}{done.stderr}")


def kill_after(study: Path, seconds: float) -> int:
    """Start the study, kill its process group after some seconds; return how many stages were done."""
    process = subprocess.Popen(
        command(study),
        cwd=REPOSITORY,
        stdout=subprocess.DEVNULL,
        stderr=subprocess.DEVNULL,
        start_new_session=True,
    )
    try:
        process.wait(timeout=seconds)
    except subprocess.TimeoutExpired:
        os.killpg(process.pid, signal.SIGKILL)
        process.wait()
    return len(list((study.parent / "work").glob("*/contribution.json")))


def half_written(study: Path) -> list[str]:
    """Files that a manifest names and that are not as it says."""
    results = study.parent / "results"
    if not (results / MANIFEST).is_file():
        return []
    outputs = json.loads((results / MANIFEST).read_text(encoding="utf-8"))["outputs"]
    return [name for name, digest in outputs.items() if describe_file(results / name) != digest]


def digests(study: Path) -> dict[str, dict[str, str]]:
    """Digests of all results by name."""
    results = study.parent / "results"
    files = sorted(path for path in results.rglob("*") if path.is_file())
    return {path.relative_to(results).as_posix(): describe_file(path) for path in files}


if __name__ == "__main__":
    raise SystemExit(main())
