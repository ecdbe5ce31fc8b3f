"""Simulate the mean square error of the bias-corrected sample skew of Pearson III samples.

Prints the table that `wrackline.stats.skew_variance` carries for skews beyond the range of the
Griffis-Stedinger polynomial. Run: ``python tests/benchmarks/simulate_skew_mse.py`` (a minute).
"""

import numpy as np

from wrackline.stats.streams import random_stream

RECORD_YEARS = (10, 15, 20, 30, 40, 60, 80, 120, 200)
SKEWS = (1.4, 1.6, 1.8, 2.0, 2.25, 2.5, 2.75, 3.0)
SAMPLES = 40_000


def simulate_mse(n: int, skew: float) -> tuple[float, float]:
    """Mean square error of the sample skew about the true skew, and its standard error."""
    stream = random_stream(20, "skew_mse", f"{n} {skew}")
    errors = []
    for _ in range(10):
        x = stream.standard_gamma(4 / skew**2, size=(SAMPLES // 10, n))
        x -= x.mean(axis=1, keepdims=True)
        x *= np.abs(x).max(axis=1, keepdims=True) ** -1.0
        m2 = (x**2).sum(axis=1) / (n - 1)
        g = n * (x**3).sum(axis=1) / ((n - 1) * (n - 2) * m2**1.5)
        errors.append((g - skew) ** 2)
    squares = np.concatenate(errors)
    return float(squares.mean()), float(squares.std() / np.sqrt(len(squares)))


if __name__ == "__main__":
    for n in RECORD_YEARS:
        row = [simulate_mse(n, skew) for skew in SKEWS]
        print(f"    ({', '.join(f'{mse:.4f}' for mse, _ in row)}),  # n = {n}", flush=True)
