"""Draws with a Gaussian copula for records that share some of their years."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]


def factor_correlation(matrix: FloatArray) -> FloatArray:
    """Return the Cholesky factor (g, g) of a correlation matrix.

    Raises
    ------
    ValueError
        When it is not a square symmetric matrix with unit diagonal, or not positive definite.
    """
    matrix = np.asarray(matrix, dtype=float)
    if matrix.ndim != 2 or matrix.shape[0] != matrix.shape[1] or not np.isfinite(matrix).all():
        raise ValueError("a correlation matrix is square and has no missing values")
    if np.abs(matrix - matrix.T).max() > 1e-9 or np.abs(np.diag(matrix) - 1).max() > 1e-9:
        raise ValueError("a correlation matrix is symmetric with ones on its diagonal")
    try:
        return np.asarray(np.linalg.cholesky(matrix))
    except np.linalg.LinAlgError:
        raise ValueError("the correlation matrix is not positive definite; repair it first") from None


def draw_sorted_records(
    rng: np.random.Generator,
    lower: FloatArray,
    years: Sequence[IntArray],
    n_years: int,
    n_simulations: int,
) -> list[FloatArray]:
    """Draw standard normals that are correlated between gauges within a year, and sort every record.

    Parameters
    ----------
    rng : numpy.random.Generator
    lower : (g, g)
        Cholesky factor of the correlation between gauges.
    years : sequence of g int arrays
        The years each gauge has, as numbers from 0 to ``n_years - 1``; gauges are correlated where they share.
    n_years, n_simulations : int

    Returns
    -------
    list of g float arrays (n_simulations, length of the gauge's record)
        Ascending along the last axis.

    Notes
    -----
    A monotone transformation of sorted normals is a sorted sample of any law, so sorting is done once here.
    """
    independent = rng.standard_normal((len(years), n_simulations * n_years))
    correlated = (lower @ independent).reshape(len(years), n_simulations, n_years)
    records = []
    for z, held in zip(correlated, years, strict=True):
        record = z if len(held) == n_years else _years_of(z, held)
        record.sort(axis=-1)
        records.append(record)
    return records


def _years_of(z: FloatArray, held: IntArray) -> FloatArray:
    """Copy a gauge's years; an unbroken record as one slice, which costs a fraction of picking its years."""
    if len(held) and held[-1] - held[0] + 1 == len(held) and (np.diff(held) == 1).all():
        return z[:, held[0] : held[-1] + 1].copy()
    return np.asarray(z[:, held])
