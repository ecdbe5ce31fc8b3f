"""Ratios of processor time between two ways of doing a thing, measured inside one run.

Milliseconds on a shared machine prove nothing; interleaved ratios do. Run benchmarks with one BLAS
thread (OPENBLAS_NUM_THREADS=1, set here too as long as this module is imported before numpy).
"""

import os
import time
from collections.abc import Callable
from dataclasses import dataclass
from statistics import median

for _variable in ("OPENBLAS_NUM_THREADS", "OMP_NUM_THREADS", "MKL_NUM_THREADS"):
    os.environ.setdefault(_variable, "1")


@dataclass(frozen=True)
class Ratios:
    """Processor time of a candidate over that of a floor: median, smallest and largest of the rounds."""

    median: float
    lowest: float
    highest: float
    floor_seconds: float
    candidate_seconds: float


def compare(
    floor: Callable[[], object],
    candidate: Callable[[], object],
    rounds: int = 5,
    least_seconds: float = 0.05,
) -> Ratios:
    """Time `candidate` against `floor`, interleaved, after one call of each to warm caches.

    A callable that is faster than `least_seconds` is repeated inside a round until a round takes that long.
    """
    floor_calls = _calls_needed(floor, least_seconds)
    candidate_calls = _calls_needed(candidate, least_seconds)
    ratios, floors, candidates = [], [], []
    for _ in range(rounds):
        floors.append(_seconds_per_call(floor, floor_calls))
        candidates.append(_seconds_per_call(candidate, candidate_calls))
        ratios.append(candidates[-1] / floors[-1])
    return Ratios(median(ratios), min(ratios), max(ratios), median(floors), median(candidates))


def _calls_needed(function: Callable[[], object], least_seconds: float) -> int:
    function()
    return max(1, round(least_seconds / max(_seconds_per_call(function, 1), 1e-7)))


def _seconds_per_call(function: Callable[[], object], calls: int) -> float:
    start = time.process_time()
    for _ in range(calls):
        function()
    return (time.process_time() - start) / calls
