"""Floods of every probability as functions of catchment attributes, with coefficients that go together."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike

from wrackline.hydrology.quantile_covariance import QuantileErrorModel, quantile_sampling_covariance
from wrackline.hydrology.records import FloatArray
from wrackline.stats.gls import GlsFit, Method, fit_gls, spread
from wrackline.stats.gls_leave_one_out import LeftOut, leave_one_out
from wrackline.stats.pearson3 import frequency_factor, frequency_factor_slope
from wrackline.stats.skew_variance import griffis_stedinger_variance

SKEW_CORRELATION_EXPONENT = 3.0
LN_10 = float(np.log(10.0))
LEAST_SD = 0.02
"""Regional standard deviations of log10 floods are held above this."""


@dataclass(frozen=True)
class RegionalSd:
    """Standard deviation of log10 peaks as a regional relation: ``constant + slope * log10(area)``.

    The slope is zero where it is less than twice its standard error: then standard deviations are pooled.
    """

    constant: float
    slope: float

    def at(self, log10_area: FloatArray) -> FloatArray:
        """Regional standard deviations (n,)."""
        return np.maximum(self.constant + self.slope * log10_area, LEAST_SD)


def fit_regional_sd(sd: FloatArray, log10_area: FloatArray, years: FloatArray) -> RegionalSd:
    """Regress standard deviations on log10 area by ordinary least squares, or pool them by record length.

    A gauge's own standard deviation in its weight would bias the equations low (Tasker and Stedinger, 1989).
    """
    design = np.column_stack([np.ones(len(sd)), log10_area])
    if np.ptp(log10_area) > 0 and len(sd) > 3:
        b, *_ = np.linalg.lstsq(design, sd, rcond=None)
        residual = sd - design @ b
        error = residual @ residual / (len(sd) - 2) * np.linalg.inv(design.T @ design)[1, 1]
        if abs(b[1]) >= 2 * np.sqrt(error):
            return RegionalSd(float(b[0]), float(b[1]))
    return RegionalSd(float(np.sqrt(np.average(sd**2, weights=years))), 0.0)


def build_error_model(
    sd: FloatArray,
    generalized_skew: FloatArray,
    generalized_covariance: FloatArray,
    years: FloatArray,
    common_years: FloatArray,
    correlation: FloatArray,
) -> QuantileErrorModel:
    """Gather what the sampling errors of weighted-skew quantiles depend on, all of it regional.

    Parameters
    ----------
    sd, generalized_skew, years : (n,)
        Regional standard deviation, generalized skew, years of record.
    generalized_covariance : (n, n)
        Covariance of the errors of the generalized skew.
    common_years, correlation : (n, n)
    """
    skew_variance = griffis_stedinger_variance(np.maximum(years, 10.0), np.clip(generalized_skew, -1.4, 1.4))
    error = np.diagonal(generalized_covariance)
    share = np.minimum(common_years / np.sqrt(np.outer(years, years)), 1.0)
    shared = np.sign(correlation) * share * np.abs(correlation) ** SKEW_CORRELATION_EXPONENT
    skew_covariance = shared * np.sqrt(np.outer(skew_variance, skew_variance))
    np.fill_diagonal(skew_covariance, skew_variance)
    return QuantileErrorModel(
        sd=sd,
        skew=generalized_skew,
        years=years,
        common_years=np.minimum(common_years, np.minimum(years[:, None], years)),
        correlation=correlation,
        station_weight=error / (error + skew_variance),
        skew_covariance=skew_covariance,
        generalized_covariance=generalized_covariance,
    )


@dataclass(frozen=True)
class QuantileRegression:
    """Regressions of log10 floods of p probabilities on the same k columns.

    Attributes
    ----------
    aeps : (p,), from often to rare
    fits : p fits, one a probability, each by itself
    smoothing : (p, p)
        ``coefficients = smoothing @ own coefficients``.
    coefficients : (p, k)
    coefficient_covariance : (p, k, k)
        Of the smoothed coefficients, with the sampling errors that the probabilities share and model errors
        taken as wholly common to them.
    model_variance : (p,)
    sampling_variance : (n, p)
    left_out, left_out_variance : (n, p)
        Every gauge predicted by the equations without it (model-error variances held), and the variances of
        prediction.
    """

    aeps: FloatArray
    fits: tuple[GlsFit, ...]
    smoothing: FloatArray
    coefficients: FloatArray
    coefficient_covariance: FloatArray
    model_variance: FloatArray
    sampling_variance: FloatArray
    left_out: FloatArray
    left_out_variance: FloatArray

    @property
    def degrees_of_freedom(self) -> int:
        return self.fits[0].degrees_of_freedom

    def predict(self, design: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Return log10 floods and their variances of prediction at new sites, each (m, p); ``design`` (m, k)."""
        grown = [spread(design, covariance) for covariance in self.coefficient_covariance]
        return design @ self.coefficients.T, self.model_variance + np.column_stack(grown)


def fit_quantile_regression(
    log10_flow: FloatArray,
    design: FloatArray,
    errors: QuantileErrorModel,
    aeps: FloatArray,
    method: Method = "reml",
) -> QuantileRegression:
    """Fit one generalized least squares equation a probability, then hold the coefficients on one curve.

    Parameters
    ----------
    log10_flow : (n, p)
        log10 floods at gauges, weighted skew.
    design : (n, k)
    errors : QuantileErrorModel of n gauges
    aeps : (p,), from often to rare

    Notes
    -----
    Tasker and Stedinger (1989, J. Hydrol. 111), Griffis and Stedinger (2007, J. Hydrol. 344). A log-Pearson III
    flood is ``m + s K(p, g)``, to first order ``m + s K(p, R) + s (g - R) K'(p, R)`` about the regional skew R: three
    curves over probability that all gauges share. The coefficients of all probabilities are fitted by these three,
    weighted by the variances of prediction, so that equations do not cross for want of common weights; each
    keeps its own model-error variance.
    """
    fits, left_out, sampling = [], [], []
    for p, aep in enumerate(aeps):
        covariance = quantile_sampling_covariance(errors, float(aep))
        fit = fit_gls(log10_flow[:, p], design, covariance, method)
        fits.append(fit)
        left_out.append(leave_one_out(log10_flow[:, p], design, covariance, fit))
        sampling.append(np.diagonal(covariance))
    model_variance = np.array([fit.model_variance for fit in fits])
    average = np.array([fit.prediction_variance.mean() for fit in fits])
    smoothing = smooth_over_aeps(aeps, float(errors.skew.mean()), average)
    covariance = _smoothed_covariance(fits, smoothing, errors, aeps)
    predicted, variance = _smoothed_left_out(design, fits, left_out, smoothing, covariance)
    return QuantileRegression(
        aeps=np.asarray(aeps, dtype=float),
        fits=tuple(fits),
        smoothing=smoothing,
        coefficients=smoothing @ np.array([fit.coefficients for fit in fits]),
        coefficient_covariance=covariance,
        model_variance=model_variance,
        sampling_variance=np.column_stack(sampling),
        left_out=predicted,
        left_out_variance=variance,
    )


def smooth_over_aeps(aeps: FloatArray, skew: float, variance: FloatArray) -> FloatArray:
    """Return the matrix (p, p) that projects values of p probabilities on ``1, K(p, skew), K'(p, skew)``.

    Weights are inverse ``variance`` (p,). Up to three probabilities are left as they are.
    """
    if len(aeps) <= 3:
        return np.eye(len(aeps))
    basis = np.column_stack(
        [np.ones(len(aeps)), frequency_factor(aeps, skew), frequency_factor_slope(aeps, skew)]
    )
    weighted = basis / variance[:, None]
    return basis @ np.linalg.solve(basis.T @ weighted, weighted.T)


def _smoothed_left_out(
    design: FloatArray,
    fits: list[GlsFit],
    left_out: list[LeftOut],
    smoothing: FloatArray,
    covariance: FloatArray,
) -> tuple[FloatArray, FloatArray]:
    """Predictions (n, p) with the coefficients of every gauge's own left-out equations, smoothed."""
    coefficients = np.array([one.coefficients for one in left_out])
    predicted = np.einsum("pq,qnk,nk->np", smoothing, coefficients, design)
    # What leaving a gauge out adds to the spread, on top of the smoothed equations' own.
    variance = [
        one.variance - fit.prediction_variance + fit.model_variance + spread(design, smoothed)
        for one, fit, smoothed in zip(left_out, fits, covariance, strict=True)
    ]
    return predicted, np.column_stack(variance)


def _smoothed_covariance(
    fits: list[GlsFit], smoothing: FloatArray, errors: QuantileErrorModel, aeps: FloatArray
) -> FloatArray:
    """Covariance (p, k, k) of the smoothed coefficients, from the errors of all probabilities together.

    Smoothed coefficients weigh the mean, standard deviation and skew of every gauge; their error is that of the
    moments (same terms as `quantile_sampling_covariance`) and of the model, times these weights.
    """
    if np.allclose(smoothing, np.eye(len(smoothing))):
        return np.array([fit.coefficient_covariance for fit in fits])
    g, w, s = errors.skew, errors.station_weight, errors.sd
    weights = np.array([fit.weights for fit in fits])
    k = np.array([frequency_factor(float(aep), g) for aep in aeps])[:, None, :]
    slope = np.array([frequency_factor_slope(float(aep), g) for aep in aeps])[:, None, :]

    def smoothed(factor: FloatArray | float) -> FloatArray:
        return np.einsum("pq,qkn->pkn", smoothing, weights * factor)

    share = errors.common_years / np.outer(errors.years, errors.years)
    np.fill_diagonal(share, 1.0 / errors.years)
    rho = errors.correlation.copy()
    np.fill_diagonal(rho, 1.0)
    scale = np.outer(s, s)
    mean = scale * rho * share
    sd = mean * 0.5 * (rho + 0.75 * np.outer(g, g))
    sd_skew = scale * share * rho**3
    station, generalized = scale * errors.skew_covariance, scale * errors.generalized_covariance

    of_mean, of_mean_sd, of_sd = smoothed(1.0), smoothed(0.5 * g * k), smoothed(k)
    of_sd_skew = smoothed(w * slope * (1.5 * g + 0.375 * g**3))
    of_station, of_generalized = smoothed(w * slope), smoothed((1.0 - w) * slope)
    sd_of_model = np.sqrt([fit.model_variance for fit in fits])[:, None, None]
    of_model = np.einsum("pq,qkn->pkn", smoothing, weights * sd_of_model)

    def product(left: FloatArray, middle: FloatArray, right: FloatArray) -> FloatArray:
        return (left @ middle) @ np.swapaxes(right, 1, 2)

    crossed = product(of_mean_sd, mean, of_mean) + product(of_sd, sd_skew, of_sd_skew)
    return np.asarray(
        product(of_mean, mean, of_mean)
        + crossed
        + np.swapaxes(crossed, 1, 2)
        + product(of_sd, sd, of_sd)
        + product(of_station, station, of_station)
        + product(of_generalized, generalized, of_generalized)
        + of_model @ np.swapaxes(of_model, 1, 2)
    )


def order_floods(log10_flow: FloatArray) -> tuple[FloatArray, np.ndarray]:
    """Make floods (m, p) rise from often to rare by pooling adjacent violators; says which rows had to change.

    The last resort where even smoothed equations cross, far outside the gauges' range.

    Examples
    --------
    >>> order_floods(np.array([[1.0, 3.0, 2.0]]))
    (array([[1. , 2.5, 2.5]]), array([ True]))
    """
    crossed = np.asarray((np.diff(log10_flow, axis=1) < 0).any(axis=1))
    ordered = log10_flow.copy()
    for i in np.flatnonzero(crossed):
        blocks: list[tuple[float, int]] = []
        for value in log10_flow[i]:
            blocks.append((float(value), 1))
            while len(blocks) > 1 and blocks[-2][0] > blocks[-1][0]:
                (b, m), (a, n) = blocks.pop(), blocks.pop()
                blocks.append(((a * n + b * m) / (n + m), n + m))
        ordered[i] = np.repeat([v for v, _ in blocks], [n for _, n in blocks])
    return ordered, crossed


def standard_error_percent(log10_variance: ArrayLike) -> FloatArray:
    """Return the standard error in percent of a lognormal error with this log10 variance.

    Examples
    --------
    >>> round(float(standard_error_percent(0.2**2)), 4)
    48.6047
    """
    return 100.0 * np.sqrt(np.expm1(LN_10**2 * np.asarray(log10_variance, dtype=float)))
