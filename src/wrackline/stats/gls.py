"""Linear regression with a known sampling covariance and an unknown model-error variance."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Literal

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import lapack, solve_triangular

FloatArray = NDArray[np.float64]
Method = Literal["moments", "reml", "ml", "bayes"]

_TOLERANCE = 1e-11
_MOST_TRIALS = 60


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
    coefficients = np.asarray(np.linalg.solve(information, right[:, :, None])[:, :, 0], dtype=float)
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
    weights : (k, n)
        ``coefficients = weights @ y``.
    model_variance : float
        Variance of the model error, in squared units of ``y``.
    method : {"moments", "reml", "ml", "bayes"}
    sampling_variance : (n,)
        Diagonal of ``S``.
    fitted, residuals : (n,)
    leverage : (n,)
        Diagonal of ``X (X' L^-1 X)^-1 X' L^-1``; adds up to ``k``.
    prediction_variance : (n,)
        Variance of prediction for a new site with the attributes of each site in the fit.
    """

    coefficients: FloatArray
    coefficient_covariance: FloatArray
    weights: FloatArray
    model_variance: float
    method: Method
    sampling_variance: FloatArray
    fitted: FloatArray
    residuals: FloatArray
    leverage: FloatArray
    prediction_variance: FloatArray

    @property
    def degrees_of_freedom(self) -> int:
        return len(self.fitted) - len(self.coefficients)

    @property
    def influence(self) -> FloatArray:
        """Influence of every site (n,), the analogue of Cook's distance by Tasker and Stedinger (1989)."""
        own = self.prediction_variance - self.model_variance
        total = self.model_variance + self.sampling_variance
        return self.residuals**2 * own / (len(self.coefficients) * (total - own) ** 2)

    def predict(self, design: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Return estimates and their variances of prediction at new sites, ``design`` (m, k)."""
        return design @ self.coefficients, self.model_variance + spread(design, self.coefficient_covariance)


def fit_gls(
    y: FloatArray,
    design: FloatArray,
    sampling: FloatArray,
    method: Method = "reml",
    model_variance: float | None = None,
    prior_rate: float = 24.0,
) -> GlsFit:
    """Fit by generalized least squares; with a diagonal sampling covariance, weighted least squares.

    Parameters
    ----------
    y : (n,)
        Response, usually a log10 flood.
    design : (n, k)
        Columns of the regression, the constant included.
    sampling : (n,) or (n, n)
        Sampling variances, or the whole sampling covariance.
    method : {"reml", "moments", "ml", "bayes"}
        How the model-error variance is estimated: restricted maximum likelihood, by setting the weighted
        sum of squares to its expectation, maximum likelihood (biased low, for comparison), or as the mean of
        its posterior. The first three are zero when sampling explains the scatter.
    model_variance : float, optional
        Given: taken as it is, nothing is estimated.
    prior_rate : float
        Rate of the exponential prior of the model-error variance, for ``bayes`` only.

    Raises
    ------
    ValueError
        When there are not more sites than coefficients, or columns of the design depend on each other.

    Notes
    -----
    Stedinger and Tasker (1985, Water Resour. Res. 21(9)). Written as a ratio that is one at the estimate, the
    estimating equation is nearly a straight line in the variance: a secant needs four or five factorings.
    """
    n, k = design.shape
    if n <= k:
        raise ValueError(f"{n} sites cannot carry {k} coefficients")
    if np.linalg.matrix_rank(design) < k:
        raise ValueError("some columns of the regression are combinations of others")
    if model_variance is None:
        if method == "bayes":
            from wrackline.stats.model_error_posterior import posterior_of_model_variance

            system = turn_system(y, design, sampling)
            model_variance = posterior_of_model_variance(system, prior_rate).mean
            factor, model_variance = _factor_above(sampling, model_variance, _scale(y, design))
        else:
            factor, model_variance = _estimate(y, design, sampling, method)
    else:
        factor = factor_cover(sampling, model_variance)
    scores = factor.unwhiten(factor.whiten(design))
    covariance = np.linalg.inv(design.T @ scores)
    covariance = 0.5 * (covariance + covariance.T)
    weights = covariance @ scores.T
    coefficients = weights @ y
    fitted = design @ coefficients
    return GlsFit(
        coefficients=coefficients,
        coefficient_covariance=covariance,
        weights=weights,
        model_variance=model_variance,
        method=method,
        sampling_variance=sampling if sampling.ndim == 1 else np.diag(sampling).copy(),
        fitted=fitted,
        residuals=y - fitted,
        leverage=np.einsum("ij,ji->i", design, weights),
        prediction_variance=model_variance + spread(design, covariance),
    )


def spread(design: FloatArray, covariance: FloatArray) -> FloatArray:
    """Return ``x C x'`` for every row ``x`` of ``design``, shape (m,)."""
    return np.einsum("ij,jk,ik->i", design, covariance, design)


@dataclass(frozen=True)
class CoverFactor:
    """A root ``R`` of the cover ``L = R R'``: lower triangular (n, n), or (n,) where ``L`` is diagonal."""

    root: FloatArray

    def whiten(self, columns: FloatArray) -> FloatArray:
        """Return ``R^-1 columns``; columns (n,) or (n, m)."""
        if self.root.ndim == 1:
            return columns / (self.root if columns.ndim == 1 else self.root[:, None])
        return solve_triangular(self.root, columns, lower=True, check_finite=False)

    def unwhiten(self, columns: FloatArray) -> FloatArray:
        """Return ``R'^-1 columns``: together with `whiten`, ``L^-1 columns``."""
        if self.root.ndim == 1:
            return self.whiten(columns)
        return solve_triangular(self.root, columns, lower=True, trans=1, check_finite=False)

    def precision_diagonal(self) -> FloatArray:
        """Diagonal of ``L^-1``, shape (n,)."""
        if self.root.ndim == 1:
            return 1.0 / self.root**2
        inverse, _ = lapack.dtrtri(self.root, lower=1)
        return np.einsum("ji,ji->i", inverse, inverse)


def factor_cover(sampling: FloatArray, model_variance: float) -> CoverFactor:
    """Factor ``L = model_variance * I + S``; raises LinAlgError where it is not positive definite."""
    if sampling.ndim == 1:
        cover = sampling + model_variance
        if cover.min() <= 0:
            raise np.linalg.LinAlgError("a variance is not positive")
        return CoverFactor(np.sqrt(cover))
    cover = np.array(sampling.T, order="F")
    cover[np.diag_indices_from(cover)] += model_variance
    root, fault = lapack.dpotrf(cover, lower=1, overwrite_a=1)
    if fault:
        raise np.linalg.LinAlgError("the covariance is not positive definite")
    return CoverFactor(root)


def _scale(y: FloatArray, design: FloatArray) -> float:
    """Residual variance of ordinary least squares: an upper guess of the model-error variance."""
    residual = y - design @ np.linalg.lstsq(design, y, rcond=None)[0]
    return float(residual @ residual) / (len(y) - design.shape[1]) + 1e-300


def _factor_above(sampling: FloatArray, variance: float, scale: float) -> tuple[CoverFactor, float]:
    """Factor at ``variance``, or at the smallest one above it that a singular sampling covariance allows."""
    floor = 1e-13 * scale
    while True:
        try:
            return factor_cover(sampling, variance), variance
        except np.linalg.LinAlgError:
            floor *= 10
            if floor > scale:
                raise
            variance = max(variance, floor)


def estimate_model_variance(
    y: FloatArray, design: FloatArray, sampling: FloatArray, method: Method = "reml"
) -> float:
    """Estimate the model-error variance by moments, restricted or plain maximum likelihood; never negative."""
    return _estimate(y, design, sampling, method)[1]


def _estimate(
    y: FloatArray, design: FloatArray, sampling: FloatArray, method: Method
) -> tuple[CoverFactor, float]:
    """The estimate, with the factor of the cover there."""
    n, k = design.shape
    scale = _scale(y, design)
    factors: dict[float, CoverFactor] = {}

    def ratio(variance: float) -> tuple[float, float]:
        """Below one under the estimate, above one over it; and the variance really taken."""
        factor, variance = _factor_above(sampling, variance, scale)
        factors.clear()
        factors[variance] = factor
        x, response = factor.whiten(design), factor.whiten(y)
        information = x.T @ x
        residual = response - x @ np.linalg.solve(information, x.T @ response)
        if method == "moments":
            return (n - k) / max(float(residual @ residual), 1e-300), variance
        scores = factor.unwhiten(residual)
        trace = float(factor.precision_diagonal().sum())
        if method == "reml":
            spread_scores = factor.unwhiten(x)
            trace -= float(np.trace(np.linalg.solve(information, spread_scores.T @ spread_scores)))
        return trace / max(float(scores @ scores), 1e-300), variance

    mean_sampling = float(np.mean(sampling if sampling.ndim == 1 else np.diagonal(sampling)))
    guess = scale - mean_sampling if scale > mean_sampling else 0.25 * scale
    variance = find_unit_ratio(ratio, guess, scale)
    return factors.get(variance) or factor_cover(sampling, variance), variance


def find_unit_ratio(ratio: Callable[[float], tuple[float, float]], guess: float, scale: float) -> float:
    """Find where a ratio that rises nearly straight in a variance is one; zero where it is one or more at zero.

    A secant from zero and a guess, held inside a bracket.
    """
    r0, low = ratio(0.0)
    if r0 >= 1.0:
        return low
    high = np.inf
    x0, (r1, x1) = low, ratio(guess)
    for _ in range(_MOST_TRIALS):
        low, high = (max(low, x1), high) if r1 < 1 else (low, min(high, x1))
        if abs(r1 - 1.0) < _TOLERANCE or r1 == r0:
            break
        x = x1 + (1.0 - r1) * (x1 - x0) / (r1 - r0)
        if not low < x < high:
            x = 0.5 * (low + high) if np.isfinite(high) else 2.0 * max(low, scale)
        if abs(x - x1) <= 1e-14 * scale:
            break
        x0, r0 = x1, r1
        r1, x1 = ratio(x)
    return float(x1)
