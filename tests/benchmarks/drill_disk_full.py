"""Let a study run into a full disk, make room, and compare: ``python tests/benchmarks/drill_disk_full.py [SIZES]``.

Needs Linux and the right to mount (run it as root, or inside ``unshare -rm``). The study lies on a small memory file system of its own. For
every size the run must end with a status of failure and without a manifest; then the file system is made larger, the run is taken
up, and its results must be those of a run with room from the start.
"""

from __future__ import annotations

import subprocess
import sys
import tempfile
from pathlib import Path

sys.path.insert(0, str(Path(__file__).parent))
from drill_kill import REPOSITORY, command, digests, finish, half_written, small_study

ROOM = "64m"
SIZES = 6


def main() -> int:
    sizes = int(sys.argv[1]) if len(sys.argv) > 1 else SIZES
    failures = 0
    with tempfile.TemporaryDirectory() as name:
        undisturbed = small_study(Path(name) / "undisturbed")
        finish(undisturbed)
        expected = digests(undisturbed)
        needed = bytes_used(undisturbed.parent)
        inputs = sum(path.stat().st_size for path in undisturbed.parent.iterdir() if path.is_file())
        print(f"the study needs {needed // 1024} kB, its inputs {inputs // 1024} kB", flush=True)
        for number in range(sizes):
            size = inputs + 200_000 + (needed - inputs - 200_000) * number // sizes
            failures += bool(wrong := fill_and_finish(Path(name) / f"full_{number}", size, expected))
            print(
                f"disk of {size // 1024} kB: {', '.join(wrong) or 'stopped, then same results'}", flush=True
            )
    print(f"{sizes} full disks, {failures} with other results")
    return int(failures > 0)


def fill_and_finish(place: Path, size: int, expected: dict[str, dict[str, str]]) -> list[str]:
    """Run a study on a disk of this many bytes, make room, finish; return what went wrong."""
    place.mkdir()
    mount("-t", "tmpfs", "-o", f"size={size}", "tmpfs", str(place))
    try:
        study = small_study(place / "study")
        stopped = subprocess.run(command(study), cwd=REPOSITORY, capture_output=True, text=True, check=False)
        wrong = [] if stopped.returncode else ["the run did not fail"]
        wrong += [f"half-written {name}" for name in half_written(study)]
        if stopped.returncode and (study.parent / "results" / "manifest.json").is_file():
            wrong.append("a failed run left a manifest")
        mount("-o", f"remount,size={ROOM}", str(place))
        finish(study)
        found = digests(study)
        wrong += [
            f"different {name}"
            for name in sorted({*expected, *found})
            if expected.get(name) != found.get(name)
        ]
        return wrong
    finally:
        subprocess.run(["umount", str(place)], check=True)


def mount(*arguments: str) -> None:
    done = subprocess.run(["mount", *arguments], capture_output=True, text=True, check=False)
    if done.returncode:
        raise SystemExit(f"mounting is not allowed here: {done.stderr.strip()}")


def bytes_used(folder: Path) -> int:
    """Bytes on disk below a folder, in whole pages as a memory file system counts them."""
    return sum(-(-path.lstat().st_size // 4096) * 4096 for path in folder.rglob("*"))


if __name__ == "__main__":
    raise SystemExit(main())
