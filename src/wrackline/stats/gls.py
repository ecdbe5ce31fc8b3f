"""Linear regression with a known sampling covariance and an unknown model-error variance."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

import numpy as np
from numpy.typing import NDArray
from scipy.optimize import brentq

FloatArray = NDArray[np.float64]
Method = Literal["moments", "reml"]


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
    method : {"moments", "reml"}
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
    method : {"reml", "moments"}
        How the model-error variance is estimated: restricted maximum likelihood, or by setting the
        weighted sum of squares to its expectation. Both are zero when sampling explains the scatter.

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
    if sampling.ndim == 1:
        eigenvalues, axes = sampling, None
        y_turned, design_turned = y, design
    else:
        eigenvalues, axes = np.linalg.eigh(sampling)
        y_turned, design_turned = axes.T @ y, axes.T @ design
    model_variance = _estimate_model_variance(y_turned, design_turned, eigenvalues, method)

    weight = 1.0 / (eigenvalues + model_variance)
    covariance = np.linalg.inv(design_turned.T @ (weight[:, None] * design_turned))
    coefficients = covariance @ (design_turned.T @ (weight * y_turned))
    scores = weight[:, None] * design_turned
    if axes is not None:
        scores = axes @ scores
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


def _estimate_model_variance(y: FloatArray, design: FloatArray, d: FloatArray, method: Method) -> float:
    n, k = design.shape

    def residual_and_weight(variance: float) -> tuple[FloatArray, FloatArray, FloatArray]:
        weight = 1.0 / (d + variance)
        information = design.T @ (weight[:, None] * design)
        b = np.linalg.solve(information, design.T @ (weight * y))
        return y - design @ b, weight, information

    def excess_of_squares(variance: float) -> float:
        residual, weight, _ = residual_and_weight(variance)
        return float(np.sum(weight * residual**2) - (n - k))

    def reml_slope(variance: float) -> float:
        residual, weight, information = residual_and_weight(variance)
        trace = weight.sum() - np.trace(
            np.linalg.solve(information, design.T @ ((weight**2)[:, None] * design))
        )
        return float(np.sum((weight * residual) ** 2) - trace)

    function = excess_of_squares if method == "moments" else reml_slope
    ols = y - design @ np.linalg.lstsq(design, y, rcond=None)[0]
    largest = 10.0 * float(ols @ ols) / (n - k) + 1e-300
    # A singular sampling covariance has no finite weight at zero; this floor is far below any variance of use.
    smallest = 1e-12 * largest if d.min() <= 0 else 0.0
    if function(smallest) <= 0:
        return smallest
    return float(brentq(function, smallest, largest, xtol=1e-14 * largest, rtol=1e-13))
