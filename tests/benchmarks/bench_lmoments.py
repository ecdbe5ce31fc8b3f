"""Sample L-moments of 10,000 ragged records against sorting them, and against a loop of lmoments3.

Run: python tests/benchmarks/bench_lmoments.py
"""

import sys
from itertools import pairwise
from pathlib import Path

sys.path.insert(0, str(Path(__file__).parent))

from timing import compare  # isort: skip  (before numpy: it asks for one BLAS thread)

import numpy as np

from wrackline.stats.lmoments import sample_lmoments, sample_lmoments_of_rows

GAUGES = 10_000
PEER_GAUGES = 1_000


def _ragged_records(gauges: int) -> tuple[np.ndarray, np.ndarray]:
    rng = np.random.default_rng(20_240)
    lengths = rng.integers(20, 121, size=gauges)
    offsets = np.concatenate([[0], np.cumsum(lengths)])
    return rng.gumbel(100.0, 30.0, size=offsets[-1]), offsets


def measure() -> list[dict]:
    """Return one row a kernel: its ratios to the floor and to what a user would otherwise write."""
    values, offsets = _ragged_records(GAUGES)
    lengths = np.diff(offsets)
    # The strictest floor: records already lie in blocks of equal length, each block sorted at once.
    blocks = [
        np.stack([values[offsets[i] : offsets[i + 1]] for i in np.flatnonzero(lengths == n)])
        for n in np.unique(lengths)
    ]

    def sort_blocks() -> None:
        for block in blocks:
            np.sort(block, axis=1)

    ratios = compare(sort_blocks, lambda: sample_lmoments(values, offsets), rounds=7)
    rows = [
        {
            "kernel": "1 sample L-moments of ragged records",
            "size": f"{GAUGES} gauges, 20-120 years",
            "floor": "np.sort of the same values",
            "ratio": ratios.median,
            "ratio_min": ratios.lowest,
            "ratio_max": ratios.highest,
            "peer": "lmoments3.lmom_ratios in a loop",
            "peer_ratio": _speed_against_loop(),
            "target": "at most 5 x the floor, at least 150 x faster than the peer",
        }
    ]
    simulated = np.random.default_rng(1).gumbel(size=(500, 20, 60))
    ratios = compare(lambda: np.sort(simulated, axis=-1), lambda: sample_lmoments_of_rows(simulated))
    rows.append(
        {
            "kernel": "1b sample L-moments of simulated records",
            "size": "10,000 records of 60 years",
            "floor": "np.sort of the same values",
            "ratio": ratios.median,
            "ratio_min": ratios.lowest,
            "ratio_max": ratios.highest,
            "peer": "",
            "peer_ratio": float("nan"),
            "target": "at most 5 x the floor",
        }
    )
    return rows


def _speed_against_loop() -> float:
    """Return how many times faster a gauge is done than by the loop (timed on fewer gauges)."""
    import lmoments3

    values, offsets = _ragged_records(PEER_GAUGES)
    records = [values[a:b] for a, b in pairwise(offsets)]
    all_values, all_offsets = _ragged_records(GAUGES)

    def loop() -> None:
        for record in records:
            lmoments3.lmom_ratios(record, nmom=5)

    ratios = compare(lambda: sample_lmoments(all_values, all_offsets), loop)
    return ratios.median * GAUGES / PEER_GAUGES


if __name__ == "__main__":
    for row in measure():
        print(f"{row['kernel']} ({row['size']})")
        print(f"  {row['ratio']:.2f} x {row['floor']} [{row['ratio_min']:.2f}, {row['ratio_max']:.2f}]")
        if row["peer"]:
            print(f"  {row['peer_ratio']:.0f} x faster than {row['peer']}")
        print(f"  target: {row['target']}")
