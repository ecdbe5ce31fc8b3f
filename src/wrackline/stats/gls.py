"""Linear regression with a known sampling covariance and an unknown model-error variance."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

import numpy as np
from numpy.typing import NDArray
from scipy.optimize import brentq

FloatArray = NDArray[np.float64]
Method = Literal["moments", "reml", "ml"]


@dataclass(frozen=True)
class SpectralSystem:
    """A regression turned to the axes of its sampling covariance, where every trial variance is cheap.

    Attributes
    ----------
    y, design : (n,), (n, k)
        Response and columns along the axes.
    eigenvalues : (n,)
        Sampling variances along the axes.
    axes : (n, n) or None
        Columns are the axes; None where the sampling covariance was diagonal.
    """

    y: FloatArray
    design: FloatArray
    eigenvalues: FloatArray
    axes: FloatArray | None


@dataclass(frozen=True)
class TrialFits:
    """What generalized least squares gives at each of m trial values of the model-error variance.

    Attributes
    ----------
    coefficients : (m, k)
    information : (m, k, k)
        ``X' L^-1 X``.
    squares : (m,)
        ``(y - X b)' L^-1 (y - X b)``.
    log_det_cover, log_det_information : (m,)
        Logarithms of the determinants of ``L`` and of the information.
    """

    coefficients: FloatArray
    information: FloatArray
    squares: FloatArray
    log_det_cover: FloatArray
    log_det_information: FloatArray


def turn_system(y: FloatArray, design: FloatArray, sampling: FloatArray) -> SpectralSystem:
    """Diagonalise the sampling covariance once, (n,) variances or (n, n), and turn the regression to its axes."""
    if sampling.ndim == 1:
        return SpectralSystem(y, design, sampling, None)
    eigenvalues, axes = np.linalg.eigh(sampling)
    return SpectralSystem(axes.T @ y, axes.T @ design, eigenvalues, axes)


def fit_trials(system: SpectralSystem, variances: FloatArray) -> TrialFits:
    """Fit the coefficients at each trial model-error variance, all at once; ``variances`` (m,)."""
    n, k = system.design.shape
    cover = system.eigenvalues + np.asarray(variances)[:, None]
    weight = 1.0 / cover
    products = (system.design[:, :, None] * system.design[:, None, :]).reshape(n, k * k)
    information = (weight @ products).reshape(-1, k, k)
    right = weight @ (system.design * system.y[:, None])
    coefficients = np.linalg.solve(information, right[:, :, None])[:, :, 0]
    residuals = system.y - coefficients @ system.design.T
    return TrialFits(
        coefficients=coefficients,
        information=information,
        squares=np.einsum("mn,mn,mn->m", weight, residuals, residuals),
        log_det_cover=np.log(cover).sum(axis=1),
        log_det_information=np.linalg.slogdet(information)[1],
    )


@dataclass(frozen=True)
class GlsFit:
    """A fitted regression ``y = X b + model error + sampling error``.

    Attributes
    ----------
    coefficients : (k,)
    coefficient_covariance : (k, k)
        ``(X' L^-1 X)^-1`` with ``L = model_variance * I + S``; not rescaled, since ``L`` is known.
    model_variance : float
        Variance of the model error, in squared units of ``y``.
    method : {"moments", "reml", "ml"}
    fitted, residuals : (n,)
    leverage : (n,)
        Diagonal of ``X (X' L^-1 X)^-1 X' L^-1``; adds up to ``k``.
    prediction_variance : (n,)
        Variance of prediction for a new site with the attributes of each site in the fit.
    """

    coefficients: FloatArray
    coefficient_covariance: FloatArray
    model_variance: float
    method: Method
    fitted: FloatArray
    residuals: FloatArray
    leverage: FloatArray
    prediction_variance: FloatArray

    @property
    def degrees_of_freedom(self) -> int:
        return len(self.fitted) - len(self.coefficients)

    def predict(self, design: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Return estimates and their variances of prediction at new sites, ``design`` (m, k)."""
        return design @ self.coefficients, self.model_variance + spread(design, self.coefficient_covariance)


def fit_gls(y: FloatArray, design: FloatArray, sampling: FloatArray, method: Method = "reml") -> GlsFit:
    """Fit by generalized least squares; with a diagonal sampling covariance, weighted least squares.

    Parameters
    ----------
    y : (n,)
        Response, usually a log10 flood.
    design : (n, k)
        Columns of the regression, the constant included.
    sampling : (n,) or (n, n)
        Sampling variances, or the whole sampling covariance.
    method : {"reml", "moments", "ml"}
        How the model-error variance is estimated: restricted maximum likelihood, by setting the weighted
        sum of squares to its expectation, or maximum likelihood (biased low, for comparison). All are
        zero when sampling explains the scatter.

    Raises
    ------
    ValueError
        When there are not more sites than coefficients, or columns of the design depend on each other.

    Notes
    -----
    Stedinger and Tasker (1985, Water Resour. Res. 21(9)). ``L`` is diagonalised once; every trial value
    of the model-error variance then costs only weighted sums.
    """
    n, k = design.shape
    if n <= k:
        raise ValueError(f"{n} sites cannot carry {k} coefficients")
    if np.linalg.matrix_rank(design) < k:
        raise ValueError("some columns of the regression are combinations of others")
    system = turn_system(y, design, sampling)
    return _fit_at(system, y, design, estimate_model_variance(system, method), method)


def _fit_at(
    system: SpectralSystem, y: FloatArray, design: FloatArray, model_variance: float, method: Method
) -> GlsFit:
    weight = 1.0 / (system.eigenvalues + model_variance)
    covariance = np.linalg.inv(system.design.T @ (weight[:, None] * system.design))
    coefficients = covariance @ (system.design.T @ (weight * system.y))
    scores = weight[:, None] * system.design
    if system.axes is not None:
        scores = system.axes @ scores
    fitted = design @ coefficients
    return GlsFit(
        coefficients=coefficients,
        coefficient_covariance=covariance,
        model_variance=model_variance,
        method=method,
        fitted=fitted,
        residuals=y - fitted,
        leverage=np.einsum("ij,jk,ik->i", design, covariance, scores),
        prediction_variance=model_variance + spread(design, covariance),
    )


def spread(design: FloatArray, covariance: FloatArray) -> FloatArray:
    """Return ``x C x'`` for every row ``x`` of ``design``, shape (m,)."""
    return np.einsum("ij,jk,ik->i", design, covariance, design)


def estimate_model_variance(system: SpectralSystem, method: Method) -> float:
    """Estimate the model-error variance by moments, restricted or plain maximum likelihood; never negative."""
    y, design, d = system.y, system.design, system.eigenvalues
    n, k = design.shape

    def excess(variance: float) -> float:
        """Positive below the estimate, negative above it."""
        weight = 1.0 / (d + variance)
        weighted = weight[:, None] * design
        information = design.T @ weighted
        residual = y - design @ np.linalg.solve(information, weighted.T @ y)
        if method == "moments":
            return float(weight @ residual**2 - (n - k))
        trace = weight.sum()
        if method == "reml":
            trace -= np.trace(np.linalg.solve(information, weighted.T @ weighted))
        return float(np.sum((weight * residual) ** 2) - trace)

    ols = y - design @ np.linalg.lstsq(design, y, rcond=None)[0]
    largest = 10.0 * float(ols @ ols) / (n - k) + 1e-300
    # A singular sampling covariance has no finite weight at zero; this floor is far below any variance of use.
    smallest = 1e-12 * largest if d.min() <= 0 else 0.0
    if excess(smallest) <= 0:
        return smallest
    return float(brentq(excess, smallest, largest, xtol=1e-14 * largest, rtol=1e-13))
