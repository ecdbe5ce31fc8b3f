"""The pool's growth curve by resampling whole years over all gauges: no law and no model of correlation assumed."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from wrackline.hydrology.growth_curves import Ratios, Statistic, growth_factors
from wrackline.hydrology.homogeneity import number_years
from wrackline.hydrology.records import FloatArray, IntArray

_FEWEST_VALUES = 8


def bootstrap_years(
    rng: np.random.Generator,
    flow: FloatArray,
    offsets: IntArray,
    years: Sequence[IntArray],
    weights: tuple[FloatArray, FloatArray],
    distribution: str,
    aep: FloatArray,
    statistic: Statistic,
    replicates: int,
) -> FloatArray:
    """Resample water years, the same for all gauges, and return the pool's growth factors (replicates, a).

    Parameters
    ----------
    rng : numpy.random.Generator
    flow, offsets : (total,), (g + 1,)
        Records.
    years : sequence of g int arrays
        Their water years.
    weights : two of (g,)
        Of the averages of L-CV, and of the higher ratios.
    distribution : str
    aep : (a,)
    statistic : {"median", "mean"}
    replicates : int

    Notes
    -----
    Keeps the observed correlation between gauges and the gaps in their records (Burn, 2003, Hydrol. Sci. J. 48).
    It says how far the pool's average curve may be off by chance of the years on record, not how far a site may be
    from that average. Rows in which the law cannot be fitted are NaN.
    """
    numbers, n_years = number_years(years)
    chosen = rng.integers(0, n_years, (replicates, n_years))
    count = np.stack([np.bincount(row, minlength=n_years) for row in chosen])
    ratios = np.empty((4, replicates, len(numbers)))
    for i, held in enumerate(numbers):
        record = flow[offsets[i] : offsets[i + 1]]
        order = np.argsort(record, kind="stable")
        ratios[:, :, i] = _ratios_with_repeats(record[order], count[:, held[order]])
    usable = np.isfinite(ratios).all(axis=0)
    first, second = (np.where(usable, w, 0.0) for w in weights)
    known = np.where(usable, ratios, 0.0)
    average = [(known[0] * first).sum(axis=1) / first.sum(axis=1)]
    average += [(r * second).sum(axis=1) / second.sum(axis=1) for r in known[1:]]
    return growth_factors(distribution, Ratios(*average), aep, statistic)


def _ratios_with_repeats(record: FloatArray, count: IntArray) -> FloatArray:
    """L-CV, L-skew, L-kurtosis, fifth ratio (4, s) of an ascending record whose values are repeated (s, n) times.

    A run of equal values from rank a + 1 to b adds ``x (C(b, r + 1) - C(a, r + 1)) / C(n, r + 1) / (r + 1)`` to b_r.
    """
    last = np.cumsum(count, axis=1).astype(float)
    first = last - count
    n = last[:, -1]
    low, high, whole = np.ones_like(first), np.ones_like(last), np.ones_like(n)
    b = []
    for r in range(5):
        low, high, whole = low * (first - r), high * (last - r), whole * (n - r)
        with np.errstate(invalid="ignore", divide="ignore"):
            b.append(((high - low) @ record) / whole / (r + 1))
    l1, l2 = b[0], 2 * b[1] - b[0]
    l3, l4 = 6 * b[2] - 6 * b[1] + b[0], 20 * b[3] - 30 * b[2] + 12 * b[1] - b[0]
    l5 = 70 * b[4] - 140 * b[3] + 90 * b[2] - 20 * b[1] + b[0]
    good = (n >= _FEWEST_VALUES) & (l2 > 1e-12 * np.abs(l1)) & (l1 > 0)
    with np.errstate(invalid="ignore", divide="ignore"):
        return np.where(good, np.stack([l2 / l1, l3 / l2, l4 / l2, l5 / l2]), np.nan)
