"""Run every benchmark beside this file and print one table: ``python tests/benchmarks/run_all.py [NAME ...]``.

A benchmark is a file ``bench_*.py`` with a function ``measure()`` that returns rows (dictionaries), one per kernel:
``kernel``, ``size``, ``floor`` (what it is compared with), ``ratio``, ``ratio_min``, ``ratio_max``, ``target``. Ratios are of
process times inside one run; machines drift, so times alone prove nothing.
"""

from __future__ import annotations

import importlib.util
import os
import sys
import time
from collections.abc import Iterable, Mapping
from pathlib import Path
from typing import Any

HERE = Path(__file__).parent


def find_benchmarks(names: Iterable[str]) -> list[Path]:
    """Files of the named benchmarks (parts of names suffice), or of all."""
    wanted = tuple(names)
    return [
        path
        for path in sorted(HERE.glob("bench_*.py"))
        if not wanted or any(name in path.stem for name in wanted)
    ]


def run_benchmark(path: Path) -> list[Mapping[str, Any]]:
    """Import one benchmark and measure."""
    spec = importlib.util.spec_from_file_location(path.stem, path)
    assert spec is not None
    assert spec.loader is not None
    module = importlib.util.module_from_spec(spec)
    sys.modules[path.stem] = module
    sys.path.insert(0, str(HERE))
    spec.loader.exec_module(module)
    measured = module.measure()
    return [measured] if isinstance(measured, Mapping) else list(measured)


def print_table(rows: list[Mapping[str, Any]]) -> None:
    """Print rows with the columns that any of them has, in the order of first appearance."""
    head = list(dict.fromkeys(name for row in rows for name in row))
    cells = [[_cell(row.get(name, "")) for name in head] for row in rows]
    widths = [max(len(line[i]) for line in [head, *cells]) for i in range(len(head))]
    for line in [head, ["-" * width for width in widths], *cells]:
        print("  ".join(cell.ljust(width) for cell, width in zip(line, widths, strict=True)).rstrip())


def _cell(value: Any) -> str:
    return f"{value:.3g}" if isinstance(value, float) else str(value)


def main() -> int:
    for threads in ("OPENBLAS_NUM_THREADS", "OMP_NUM_THREADS", "MKL_NUM_THREADS"):
        os.environ[threads] = "1"
    paths = find_benchmarks(sys.argv[1:])
    if not paths:
        print("No such benchmark here.", file=sys.stderr)
        return 1
    rows: list[Mapping[str, Any]] = []
    for number, path in enumerate(paths, 1):
        started = time.perf_counter()
        rows += run_benchmark(path)
        print(
            f"{number} of {len(paths)}  {path.stem}  {time.perf_counter() - started:.0f} s", file=sys.stderr
        )
    print_table(rows)
    return 0


if __name__ == "__main__":
    raise SystemExit(main())
