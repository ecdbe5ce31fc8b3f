"""Generalized skew: station skews regressed in the hybrid of weighted and generalized least squares."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

import numpy as np

from wrackline.hydrology.dependence import repair_correlation
from wrackline.hydrology.records import FloatArray
from wrackline.stats.gls import spread, turn_system
from wrackline.stats.model_error_posterior import VariancePosterior, posterior_of_model_variance
from wrackline.stats.skew_variance import griffis_stedinger_variance

SKEW_CORRELATION_EXPONENT = 3.0
"""Correlation of two sample skews is that of the logs to this power: exact for normal logs (decisions of the project)."""
SMALLEST_EIGENVALUE = 1e-8
"""Of the correlation of sampling errors; below it (copies of a record) the matrix is repaired."""


@dataclass(frozen=True)
class StationSkews:
    """Station skews made ready for a regional model; all (n,) or (n, n).

    Attributes
    ----------
    skew : bias-corrected, ``(1 + 6 / P) G``
    record_length : pseudo record length P, years
    variance : sampling variances of ``skew`` at a regional skew, never the station's own
    covariance : sampling covariance of ``skew``
    repaired : True where the correlation of sampling errors could not be factored and the nearest one that can
        stands in its place
    """

    skew: FloatArray
    record_length: FloatArray
    variance: FloatArray
    covariance: FloatArray
    repaired: bool = False


@dataclass(frozen=True)
class SkewModel:
    """A regional skew model fitted to station skews.

    Attributes
    ----------
    coefficients : (k,)
    coefficient_covariance : (k, k)
        ``W L W'``: the precision that the weighted coefficients really have when sampling errors are correlated.
    weights : (k, n)
        ``coefficients = weights @ skew``.
    model_variance : float
        Posterior mean given the coefficients, with the full sampling covariance.
    model_variance_weighted : float
        Posterior mean with a diagonal sampling covariance, which set the weights.
    posterior : VariancePosterior
    marginal_model_variance : float
        Posterior mean with the coefficients integrated out; printed beside.
    fitted, residuals : (n,)
    leave_one_out, leave_one_out_variance : (n,)
        Generalized skew at every site from the model without it, and its variance of prediction.
    leave_one_out_log_density : (n,)
        Of every station skew given the others, model and sampling errors known; see `score_left_out`.
    """

    stations: StationSkews
    design: FloatArray
    coefficients: FloatArray
    coefficient_covariance: FloatArray
    weights: FloatArray
    model_variance: float
    model_variance_weighted: float
    posterior: VariancePosterior
    marginal_model_variance: float
    fitted: FloatArray
    residuals: FloatArray
    leave_one_out: FloatArray
    leave_one_out_variance: FloatArray
    leave_one_out_log_density: FloatArray

    def predict(self, design: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Return generalized skews and their variances of prediction at new sites, ``design`` (m, k)."""
        return design @ self.coefficients, self.model_variance + spread(design, self.coefficient_covariance)


def prepare_station_skews(
    station_skew: FloatArray,
    record_length: FloatArray,
    design: FloatArray,
    correlation: FloatArray,
    common_years: FloatArray,
) -> StationSkews:
    """Correct station skews for bias and give them a sampling covariance.

    Parameters
    ----------
    station_skew, record_length : (n,)
        Sample skews of log10 peaks and their pseudo record lengths.
    design : (n, k)
        Columns of the model: variances are taken at its ordinary least-squares skew, so that a station's
        own skew does not set its weight (Tasker and Stedinger, 1986).
    correlation, common_years : (n, n)
        Smoothed correlation of concurrent log peaks, and the years in common.

    Notes
    -----
    Variance by Griffis and Stedinger (2009), times ``(1 + 6 / P)^2``; correlation of skews by Martins and
    Stedinger (2002).
    """
    inflation = 1.0 + 6.0 / record_length
    skew = inflation * station_skew
    regional = design @ np.linalg.lstsq(design, skew, rcond=None)[0]
    variance = inflation**2 * griffis_stedinger_variance(record_length, regional)
    overlap = np.minimum(common_years / np.sqrt(np.outer(record_length, record_length)), 1.0)
    shared = np.sign(correlation) * overlap * np.abs(correlation) ** SKEW_CORRELATION_EXPONENT
    np.fill_diagonal(shared, 1.0)
    repaired = not _factorable(shared)
    if repaired:
        shared, _ = repair_correlation(shared, SMALLEST_EIGENVALUE)
    covariance = shared * np.sqrt(np.outer(variance, variance))
    np.fill_diagonal(covariance, variance)
    return StationSkews(skew, record_length, variance, covariance, repaired)


def _factorable(correlation: FloatArray) -> bool:
    """Whether all eigenvalues exceed the smallest accepted, told by a Cholesky factoring."""
    try:
        np.linalg.cholesky(correlation - SMALLEST_EIGENVALUE * np.eye(len(correlation)))
    except np.linalg.LinAlgError:
        return False
    return True


def fit_skew_model(
    stations: StationSkews,
    design: FloatArray,
    prior_rate: float = 10.0,
    variant: Literal["conditional", "marginal"] = "conditional",
) -> SkewModel:
    """Fit a regional skew model: coefficients by weighted, their precision by generalized least squares.

    Parameters
    ----------
    stations : StationSkews of n sites
    design : (n, k)
    prior_rate : float
        Rate of the exponential prior of the model-error variance (mean ``1 / prior_rate``).
    variant : {"conditional", "marginal"}
        Whether the model-error variance is that given the weighted coefficients (default) or with the
        coefficients integrated out.

    Notes
    -----
    Veilleux (2011), Veilleux, Stedinger and Eash (2012): with many correlated gauges, full generalized
    weights lean too much on the fitted correlation.
    """
    weighted = posterior_of_model_variance(turn_system(stations.skew, design, stations.variance), prior_rate)
    w = 1.0 / (weighted.mean + stations.variance)
    weights = np.asarray(
        np.linalg.solve(design.T @ (w[:, None] * design), (w[:, None] * design).T), dtype=float
    )
    coefficients = weights @ stations.skew

    system = turn_system(stations.skew, design, stations.covariance)
    conditional = posterior_of_model_variance(system, prior_rate, coefficients)
    marginal = posterior_of_model_variance(system, prior_rate)
    posterior = conditional if variant == "conditional" else marginal
    cover = stations.covariance + posterior.mean * np.eye(len(w))
    fitted = design @ coefficients

    hat = design @ weights
    own = np.diag(hat)
    # A site that alone carries a coefficient (leverage 1) cannot be left out: its leave-one-out values are NaN.
    with np.errstate(divide="ignore", invalid="ignore"):
        without_own = np.where(
            (own < 1.0 - 1e-10)[:, None], (hat - np.diag(own)) / (1.0 - own)[:, None], np.nan
        )
    loo = without_own @ stations.skew
    loo_variance = posterior.mean + np.einsum("ij,ij->i", without_own @ cover, without_own)
    return SkewModel(
        stations=stations,
        design=design,
        coefficients=coefficients,
        coefficient_covariance=weights @ cover @ weights.T,
        weights=weights,
        model_variance=posterior.mean,
        model_variance_weighted=weighted.mean,
        posterior=posterior,
        marginal_model_variance=marginal.mean,
        fitted=fitted,
        residuals=stations.skew - fitted,
        leave_one_out=loo,
        leave_one_out_variance=loo_variance,
        leave_one_out_log_density=score_left_out(
            stations.skew, design, np.asarray(np.linalg.inv(cover), dtype=float)
        ),
    )


def score_left_out(skew: FloatArray, design: FloatArray, precision: FloatArray) -> FloatArray:
    """Return the log density (n,) of every station skew given all the other station skews.

    Parameters
    ----------
    skew : (n,)
    design : (n, k)
    precision : (n, n)
        Inverse covariance of the station skews about the model: model errors and sampling errors.

    Notes
    -----
    With ``K = P - P X (X'P X)^-1 X'P`` the prediction of skew i errs by ``(K y)_i / K_ii`` with variance
    ``1 / K_ii``, the coefficients under a flat prior. Neighbours also tell of the sampling error that a station shares with
    them. To predict a station skew only through the model would credit a model that follows neighbours with
    that shared error, as if it were skew of the region: a constant for each part of a homogeneous region then seems to win.
    """
    weighted = precision @ design
    core = precision - weighted @ np.linalg.solve(design.T @ weighted, weighted.T)
    own = np.diag(core)
    # A station that alone carries a coefficient is not predicted by the others: no density.
    own = np.where(own > 1e-10 * np.diag(precision), own, np.nan)
    return 0.5 * (np.log(own / (2 * np.pi)) - (core @ skew) ** 2 / own)


def generalized_skew_error_covariance(model: SkewModel, design: FloatArray) -> FloatArray:
    """Return the covariance (m, m) of the errors of generalized skews at m sites, ``design`` (m, k).

    The error of the coefficients is common to all sites; the model error is each site's own.
    """
    return combine_skew_errors(model.coefficient_covariance, model.model_variance, design)


def combine_skew_errors(
    coefficient_covariance: FloatArray, model_variance: float, design: FloatArray
) -> FloatArray:
    """Return ``X C X' + s2 I`` (m, m): what `generalized_skew_error_covariance` does, from a saved model."""
    return design @ coefficient_covariance @ design.T + model_variance * np.eye(len(design))
