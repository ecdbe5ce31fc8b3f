"""Generalized skew as a spatially correlated surface: neighbours inform beyond the regression."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from wrackline.hydrology.generalized_skew import StationSkews, score_left_out
from wrackline.hydrology.records import FloatArray
from wrackline.stats.model_error_posterior import quadrature

RANGE_SHARES = (0.03, 0.06, 0.12, 0.25, 0.5)
"""Candidate correlation ranges (e-folding), as shares of the largest distance between two stations."""


@dataclass(frozen=True)
class SkewSurface:
    """A skew model whose model errors are correlated in space: ``L = s2 exp(-d / range) + S``.

    Attributes
    ----------
    coefficients : (k,)
    coefficient_covariance : (k, k)
    model_variance : float
    range_km : float
        Distance over which the correlation of model errors falls by the factor e; 0: uncorrelated.
    log_evidence : float
        Of the chosen range; compares ranges of the same stations and columns.
    precision : (n, n)
        ``L^-1`` at the stations.
    residuals : (n,)
    leave_one_out, leave_one_out_variance : (n,)
        Skew at every station from the surface without it, and its variance of prediction.
    leave_one_out_log_density : (n,)
        Of every station skew given the others; see `score_left_out`.
    """

    stations: StationSkews
    design: FloatArray
    coefficients: FloatArray
    coefficient_covariance: FloatArray
    model_variance: float
    range_km: float
    log_evidence: float
    precision: FloatArray
    residuals: FloatArray
    leave_one_out: FloatArray
    leave_one_out_variance: FloatArray
    leave_one_out_log_density: FloatArray

    @property
    def fitted(self) -> FloatArray:
        """The surface at the stations themselves: the best prediction of their true skews, (n,)."""
        return self.stations.skew - self.stations.covariance @ (self.precision @ self.residuals)

    def predict(self, design: FloatArray, distance_km: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Return skews and their variances of prediction at new sites.

        Parameters
        ----------
        design : (m, k)
        distance_km : (m, n)
            To the stations.
        """
        near = self.model_variance * spatial_correlation(distance_km, self.range_km)
        pull = near @ self.precision
        rest = design - pull @ self.design
        variance = (
            self.model_variance
            - np.einsum("ij,ij->i", pull, near)
            + np.einsum("ij,jk,ik->i", rest, self.coefficient_covariance, rest)
        )
        return design @ self.coefficients + pull @ self.residuals, variance

    def error_covariance(
        self, design: FloatArray, distance_km: FloatArray, between_km: FloatArray
    ) -> FloatArray:
        """Return the covariance (m, m) of the errors of predicted skews at m sites.

        ``distance_km`` (m, n) to the stations, ``between_km`` (m, m) between the sites.
        """
        near = self.model_variance * spatial_correlation(distance_km, self.range_km)
        pull = near @ self.precision
        rest = design - pull @ self.design
        own = self.model_variance * spatial_correlation(between_km, self.range_km)
        return own - pull @ near.T + rest @ self.coefficient_covariance @ rest.T


def spatial_correlation(distance_km: FloatArray, range_km: float) -> FloatArray:
    """Return ``exp(-d / range)``; with range 0, one at distance 0 and zero elsewhere."""
    if range_km == 0:
        return (distance_km == 0).astype(float)
    return np.exp(-distance_km / range_km)


def fit_skew_surface(
    stations: StationSkews,
    design: FloatArray,
    distance_km: FloatArray,
    prior_rate: float = 10.0,
    ranges_km: FloatArray | None = None,
) -> SkewSurface:
    """Fit a spatially correlated skew surface; the range is the one with the largest evidence.

    Parameters
    ----------
    stations : StationSkews of n sites
    design : (n, k)
    distance_km : (n, n)
        Between basin centroids.
    prior_rate : float
        Of the exponential prior of the model-error variance.
    ranges_km : (r,), optional
        Candidate ranges; by default shares of the largest distance.

    Notes
    -----
    Best linear unbiased prediction with known sampling covariance. Unlike kriging of raw station skews it
    knows that records differ in length and share floods.
    """
    if ranges_km is None:
        ranges_km = np.array(RANGE_SHARES) * distance_km.max()
    root = np.asarray(np.linalg.cholesky(stations.covariance), dtype=float)
    y = np.asarray(np.linalg.solve(root, stations.skew), dtype=float)
    x = np.asarray(np.linalg.solve(root, design), dtype=float)
    best: tuple[float, float, float] | None = None
    for range_km in ranges_km:
        evidence, variance = _evidence(root, y, x, spatial_correlation(distance_km, range_km), prior_rate)
        if best is None or evidence > best[0]:
            best = (evidence, float(range_km), variance)
    assert best is not None
    evidence, range_km, variance = best
    return _surface_at(stations, design, distance_km, variance, range_km, evidence)


def surface_evidence(
    stations: StationSkews, design: FloatArray, distance_km: FloatArray, prior_rate: float = 10.0
) -> float:
    """Return the log evidence of a surface over that of uncorrelated model errors, averaged over the ranges."""
    root = np.asarray(np.linalg.cholesky(stations.covariance), dtype=float)
    y = np.asarray(np.linalg.solve(root, stations.skew), dtype=float)
    x = np.asarray(np.linalg.solve(root, design), dtype=float)
    found = [
        _evidence(root, y, x, spatial_correlation(distance_km, range_km), prior_rate)[0]
        for range_km in (0.0, *(np.array(RANGE_SHARES) * distance_km.max()))
    ]
    return float(np.logaddexp.reduce(found[1:]) - np.log(len(RANGE_SHARES)) - found[0])


def _evidence(
    root: FloatArray, y: FloatArray, x: FloatArray, correlation: FloatArray, prior_rate: float
) -> tuple[float, float]:
    """Log evidence of one range, and the posterior mean of the model-error variance; whitened ``y`` and ``x``."""
    whitened = np.linalg.solve(root, np.linalg.solve(root, correlation).T)
    eigenvalues, axes = np.linalg.eigh(0.5 * (whitened + whitened.T))
    y, x = axes.T @ y, axes.T @ x
    nodes, node_weights = quadrature(prior_rate)
    cover = 1.0 + nodes[:, None] * np.maximum(eigenvalues, 0.0)
    weight = 1.0 / cover
    information = np.einsum("mn,nk,nl->mkl", weight, x, x)
    b = np.linalg.solve(information, np.einsum("mn,nk,n->mk", weight, x, y)[:, :, None])[:, :, 0]
    residual = y - b @ x.T
    log_density = -prior_rate * nodes - 0.5 * (
        np.log(cover).sum(axis=1)
        + np.linalg.slogdet(information)[1]
        + np.einsum("mn,mn,mn->m", weight, residual, residual)
    )
    top = log_density.max()
    mass = node_weights * np.exp(log_density - top)
    return float(top + np.log(mass.sum())), float(mass @ nodes / mass.sum())


def _surface_at(
    stations: StationSkews,
    design: FloatArray,
    distance_km: FloatArray,
    variance: float,
    range_km: float,
    evidence: float,
) -> SkewSurface:
    shared = variance * spatial_correlation(distance_km, range_km)
    precision = np.asarray(np.linalg.inv(shared + stations.covariance), dtype=float)
    covariance = np.asarray(np.linalg.inv(design.T @ precision @ design), dtype=float)
    coefficients = covariance @ (design.T @ (precision @ stations.skew))
    mean, spread = _leave_one_out(stations.skew, design, shared, precision, variance)
    return SkewSurface(
        stations=stations,
        design=design,
        coefficients=coefficients,
        coefficient_covariance=covariance,
        model_variance=variance,
        range_km=range_km,
        log_evidence=evidence,
        precision=precision,
        residuals=stations.skew - design @ coefficients,
        leave_one_out=mean,
        leave_one_out_variance=spread,
        leave_one_out_log_density=score_left_out(stations.skew, design, precision),
    )


def _leave_one_out(
    y: FloatArray, design: FloatArray, shared: FloatArray, precision: FloatArray, variance: float
) -> tuple[FloatArray, FloatArray]:
    """Predict the true skew at every station from the others, at fixed variance and range.

    Without station i the precision is ``K - k k' / K_ii`` on the others (block inversion), so all stations
    follow from products of whole matrices.
    """
    own = np.diag(precision)
    near = shared - np.diag(np.diag(shared))
    pull = near @ precision
    self_pull = np.diag(pull)
    weighted_x, weighted_y = precision @ design, precision @ y

    pull_y = pull @ y - self_pull * weighted_y / own
    pull_x = pull @ design - (self_pull / own)[:, None] * weighted_x
    pull_near = np.einsum("ij,ij->i", pull, near) - self_pull**2 / own
    information = design.T @ weighted_x - weighted_x[:, :, None] * weighted_x[:, None, :] / own[:, None, None]
    right = design.T @ weighted_y - weighted_x * (weighted_y / own)[:, None]
    b = np.linalg.solve(information, right[:, :, None])[:, :, 0]
    rest = design - pull_x
    mean = np.einsum("ik,ik->i", rest, b) + pull_y
    grown = np.einsum("ik,ik->i", rest, np.linalg.solve(information, rest[:, :, None])[:, :, 0])
    return mean, variance - pull_near + grown
