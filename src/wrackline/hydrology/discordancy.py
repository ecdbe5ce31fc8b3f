"""Gauges whose L-moment ratios stand apart from the rest of their pool."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.special import chdtri, fdtri

from wrackline.hydrology.records import BoolArray, FloatArray
from wrackline.stats.robust import fit_robust_scatter

LARGEST_CRITICAL = 3.0
FEWEST_FOR_ROBUST = 12
SMALL_POOL_INFLATION = 300.0
ROBUST_CUT = float(np.sqrt(chdtri(3, 0.025)))
"""Root of the 97.5 % point of chi-square with 3 degrees of freedom, 3.06."""


@dataclass(frozen=True)
class Discordancy:
    """Discordancy of g gauges of one pool.

    Attributes
    ----------
    measure : (g,)
        Hosking and Wallis's D; NaN when there are three gauges or fewer.
    critical : float
        Value that D must exceed to be called discordant; NaN with fewer than five gauges.
    discordant : bool (g,)
    robust_distance : (g,)
        Distance from the minimum-covariance-determinant centre; NaN with fewer than 12 gauges.
    robust_discordant : bool (g,)
    note : str
        Why something was not computed, or blank.
    """

    measure: FloatArray
    critical: float
    discordant: BoolArray
    robust_distance: FloatArray
    robust_discordant: BoolArray
    note: str

    @property
    def masked(self) -> BoolArray:
        """Gauges that only the robust second look finds, (g,)."""
        return self.robust_discordant & ~self.discordant


def critical_discordancy(n_gauges: int) -> float:
    """Return the critical value of D for a pool's number of gauges; NaN below five.

    Notes
    -----
    ``(N - 1) Z / (N - 4 + 3 Z)`` with ``Z`` the upper ``10 / N`` % point of F(3, N - 4), which gives the
    table of Hosking and Wallis (1997, Table 3.1) to its three decimals; capped at 3 as there.

    Examples
    --------
    >>> round(critical_discordancy(7), 3), critical_discordancy(19)
    (1.917, 3.0)
    """
    if n_gauges < 5:
        return float("nan")
    z = float(fdtri(3, n_gauges - 4, 1 - 0.10 / n_gauges))
    return min(LARGEST_CRITICAL, (n_gauges - 1) * z / (n_gauges - 4 + 3 * z))


def measure_discordancy(lcv: FloatArray, lskew: FloatArray, lkurtosis: FloatArray) -> Discordancy:
    """Measure how far each gauge's L-moment ratios lie from the centre of its pool.

    Parameters
    ----------
    lcv, lskew, lkurtosis : (g,)

    Notes
    -----
    D is that of Hosking and Wallis (1993, Water Resour. Res. 29(2)), about the unweighted mean. Several odd
    gauges inflate the scatter and hide one another, so a second look takes distances from a robust centre and
    scatter (minimum covariance determinant of three quarters of the gauges; after Neykov and others, 2007,
    Water Resour. Res. 43, W06417), cut at 3.06. Squared robust distances of few gauges come out too large, so
    they are divided by ``1 + 300 / N^2``: in simulated pools of normal ratios the second look then marks
    one gauge in ten by chance with 12 to 20 gauges, one in twenty with 30, one in forty with 50 or more.
    It asks for a look at the data, no more.
    """
    u = np.column_stack([lcv, lskew, lkurtosis])
    g = len(u)
    nothing, none = np.full(g, np.nan), np.zeros(g, dtype=bool)
    critical = critical_discordancy(g)
    if g <= 3:
        return Discordancy(nothing, critical, none, nothing, none, "not computed: three gauges or fewer")
    away = u - u.mean(axis=0)
    scatter = away.T @ away
    if np.linalg.matrix_rank(away) < 3:
        return Discordancy(
            nothing, critical, none, nothing, none, "not computed: the ratios lie in one plane"
        )
    measure = g / 3 * np.einsum("ij,ij->i", away, np.linalg.solve(scatter, away.T).T)
    note = "uninformative: with four gauges every D is 1" if g == 4 else ""
    discordant = measure > critical if g >= 5 else none
    if g < FEWEST_FOR_ROBUST:
        note = note or f"no robust distances: fewer than {FEWEST_FOR_ROBUST} gauges"
        return Discordancy(measure, critical, discordant, nothing, none, note)
    try:
        robust = fit_robust_scatter(u).distance / np.sqrt(1 + SMALL_POOL_INFLATION / g**2)
    except ValueError as reason:
        return Discordancy(measure, critical, discordant, nothing, none, f"no robust distances: {reason}")
    return Discordancy(measure, critical, discordant, robust, robust > ROBUST_CUT, note)
