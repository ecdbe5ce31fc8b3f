"""Precision and diagnostics of a regional skew model."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.optimize import brentq

from wrackline.hydrology.generalized_skew import SkewModel
from wrackline.hydrology.records import FloatArray
from wrackline.stats.gls import spread
from wrackline.stats.skew_variance import griffis_stedinger_variance


@dataclass(frozen=True)
class SkewDiagnostics:
    """How precise a regional skew model is, and which gauges steer it.

    Attributes
    ----------
    average_sampling_variance : float
        Mean over the sites of ``x Cov(b) x'``.
    average_prediction_variance_new, average_prediction_variance_old : float
        For sites like those of the fit that were not in it, and for those that were.
    effective_record_length : float
        Years of record whose sample skew (raw, not bias-corrected) would be as uncertain as the
        model at a new site; NaN where the skew is out of the formula's range.
    pseudo_r2 : float
        Share of the constant model's error variance that the columns explain; may be negative.
    error_variance_ratio : float
        Sampling over model-error variance; above 0.2, ordinary least squares is inadequate.
    beta_variance_misrepresentation : float
        Variance of the weighted constant with correlated sampling errors over that without.
    leverage, influence : (n,)
        Influence is Cook's measure by actual deletion at fixed model-error variance.
    """

    average_sampling_variance: float
    average_prediction_variance_new: float
    average_prediction_variance_old: float
    effective_record_length: float
    pseudo_r2: float
    error_variance_ratio: float
    beta_variance_misrepresentation: float
    leverage: FloatArray
    influence: FloatArray

    @property
    def high_leverage(self) -> np.ndarray:
        """Sites whose leverage exceeds twice the average."""
        return self.leverage > 2 * self.leverage.mean()

    @property
    def high_influence(self) -> np.ndarray:
        """Sites whose influence exceeds ``4 / n``."""
        return self.influence > 4 / len(self.influence)


def diagnose_skew_model(model: SkewModel, constant: SkewModel) -> SkewDiagnostics:
    """Compute the diagnostics of a model; ``constant`` is the constant-only model of the same stations.

    Notes
    -----
    Griffis and Stedinger (2007) for the pseudo-R2, Veilleux (2011) for the rest; the variance of
    prediction at an old site is ``s2 + x Cov(b) x' - 2 s2 (x W)_i``, exact for ``b = W y``.
    """
    s2, variance = model.model_variance, model.stations.variance
    hat = model.design @ model.weights
    leverage = np.diag(hat).copy()
    sampling = spread(model.design, model.coefficient_covariance)
    average_new = s2 + sampling.mean()
    return SkewDiagnostics(
        average_sampling_variance=float(sampling.mean()),
        average_prediction_variance_new=float(average_new),
        average_prediction_variance_old=float(np.mean(s2 + sampling - 2 * s2 * leverage)),
        effective_record_length=effective_record_length(float(average_new), float(model.fitted.mean())),
        pseudo_r2=1.0 - s2 / constant.model_variance,
        error_variance_ratio=float(variance.sum() / (len(variance) * s2)),
        beta_variance_misrepresentation=_misrepresentation(model),
        leverage=leverage,
        influence=_deletion_influence(model, hat),
    )


def pseudo_anova(model: SkewModel, constant: SkewModel) -> list[tuple[str, int, float]]:
    """Return rows (source, degrees of freedom, sum) of the pseudo-analysis of variance (Griffis and Stedinger, 2007)."""
    n, k = model.design.shape
    sampling = float(model.stations.variance.sum())
    return [
        ("model", k - 1, n * (constant.model_variance - model.model_variance)),
        ("model error", n - k, n * model.model_variance),
        ("sampling error", n, sampling),
        ("total", 2 * n - 1, n * constant.model_variance + sampling),
    ]


def effective_record_length(prediction_variance: float, skew: float) -> float:
    """Years N for which the variance of a raw sample skew equals ``prediction_variance``; NaN if none in 10 to 1000.

    Examples
    --------
    >>> round(effective_record_length(0.302, 0.0), 4)
    16.9812
    """
    if abs(skew) > 1.5:
        return float("nan")

    def excess(years: float) -> float:
        return float(griffis_stedinger_variance(years, skew)) - prediction_variance

    if excess(12.0) < 0 or excess(1000.0) > 0:
        return float("nan")
    return float(brentq(excess, 12.0, 1000.0, xtol=1e-10))


def _misrepresentation(model: SkewModel) -> float:
    stations = model.stations
    w = 1.0 / (model.model_variance_weighted + stations.variance)
    cover = stations.covariance + model.model_variance * np.eye(len(w))
    return float(w @ cover @ w / w.sum())


def _deletion_influence(model: SkewModel, hat: FloatArray) -> FloatArray:
    # Deleting site i moves the coefficients by A x_i w_i e_i / (1 - h_i); measured in their own covariance.
    leverage = np.diag(hat)
    shift = model.weights * (model.residuals / (1.0 - leverage))
    k = len(model.coefficients)
    return np.einsum("ki,kl,li->i", shift, np.linalg.inv(model.coefficient_covariance), shift) / k
