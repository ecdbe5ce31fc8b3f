"""All-pairs concurrent correlation against one matrix product and a data frame; memory of the streamed form.

Run: python tests/benchmarks/bench_correlation.py
"""

import subprocess
import sys
from pathlib import Path

sys.path.insert(0, str(Path(__file__).parent))

from timing import compare  # isort: skip  (before numpy: it asks for one BLAS thread)

import numpy as np

from wrackline.hydrology.distances import great_circle_km
from wrackline.stats.correlation import bin_pairs, concurrent_correlation

GAUGES, YEARS = 5_000, 120
NATIONAL_GAUGES = 25_000
MINIMUM_COMMON_YEARS = 25


def _values_with_gaps(gauges: int, scattered: bool = False) -> np.ndarray:
    """Log peaks of records that start in any year with a tenth of the years missing, or with gaps anywhere."""
    rng = np.random.default_rng(20_241)
    values = rng.normal(2.0, 0.3, size=(gauges, YEARS))
    if not scattered:
        values[np.arange(YEARS) < rng.integers(0, 90, size=(gauges, 1))] = np.nan
    values[rng.uniform(size=values.shape) < (0.4 if scattered else 0.1)] = np.nan
    return values


def measure() -> list[dict]:
    """Return one row a kernel: its ratios to the floor and to what a user would otherwise write."""
    megabytes, seconds = _streamed_in_a_process_of_its_own()
    return [
        _matrix_row("2 all-pairs concurrent correlation and common years, gaps anywhere", scattered=True),
        _matrix_row("2a the same, records that start in different years", scattered=False),
        {
            "kernel": "2b the same, streamed into bins of distance",
            "size": f"{NATIONAL_GAUGES} gauges x {YEARS} years",
            "floor": "",
            "ratio": float("nan"),
            "ratio_min": float("nan"),
            "ratio_max": float("nan"),
            "peer": "",
            "peer_ratio": float("nan"),
            "target": "at most 300 MB",
            "peak_megabytes": megabytes,
            "seconds": seconds,
        },
    ]


def _matrix_row(kernel: str, scattered: bool) -> dict:
    import pandas as pd

    values = _values_with_gaps(GAUGES, scattered)
    filled = np.nan_to_num(values)
    frame = pd.DataFrame(values.T)
    ratios = compare(lambda: filled @ filled.T, lambda: concurrent_correlation(values), rounds=7)
    against_frame = compare(
        lambda: concurrent_correlation(values, minimum=MINIMUM_COMMON_YEARS),
        lambda: frame.corr(min_periods=MINIMUM_COMMON_YEARS),
        rounds=5,
    )
    return {
        "kernel": kernel,
        "size": f"{GAUGES} gauges x {YEARS} years",
        "floor": "one float64 matrix product of that size",
        "ratio": ratios.median,
        "ratio_min": ratios.lowest,
        "ratio_max": ratios.highest,
        "peer": "DataFrame.corr(min_periods=)",
        "peer_ratio": against_frame.median,
        "target": "at most 8 x the floor, at least 4 x faster than the peer",
    }


def _streamed_in_a_process_of_its_own() -> tuple[float, float]:
    """Return peak memory (MB) and processor time (s) of a fresh process that streams all pairs."""
    done = subprocess.run(
        [sys.executable, __file__, "--stream"], check=True, capture_output=True, text=True
    ).stdout.split()
    return float(done[0]), float(done[1])


def _stream() -> None:
    import time

    values = _values_with_gaps(NATIONAL_GAUGES)
    rng = np.random.default_rng(3)
    lat, lon = rng.uniform(30, 48, NATIONAL_GAUGES), rng.uniform(-120, -70, NATIONAL_GAUGES)

    def distance(first: np.ndarray, second: np.ndarray) -> np.ndarray:
        return great_circle_km(lat[first][:, None], lon[first][:, None], lat[second], lon[second])

    started = time.process_time()
    bins = bin_pairs(values, distance, np.linspace(0, 5000, 4001), MINIMUM_COMMON_YEARS)
    seconds = time.process_time() - started
    if bins.all_pairs.sum() != NATIONAL_GAUGES * (NATIONAL_GAUGES - 1) // 2:
        raise SystemExit("pairs were lost")
    print(_peak_megabytes(), seconds)


def _peak_megabytes() -> float:
    """Peak memory of this process; not what `getrusage` says, which counts the process that started it too."""
    status = Path("/proc/self/status").read_text(encoding="ascii").splitlines()
    return next(float(line.split()[1]) for line in status if line.startswith("VmHWM")) / 1024


if __name__ == "__main__":
    if "--stream" in sys.argv:
        _stream()
        raise SystemExit
    for row in measure():
        print(f"{row['kernel']} ({row['size']})")
        if row["floor"]:
            print(f"  {row['ratio']:.2f} x {row['floor']} [{row['ratio_min']:.2f}, {row['ratio_max']:.2f}]")
            print(f"  {row['peer_ratio']:.1f} x faster than {row['peer']}")
        else:
            print(f"  {row['peak_megabytes']:.0f} MB peak, {row['seconds']:.0f} s of processor time")
        print(f"  target: {row['target']}")
