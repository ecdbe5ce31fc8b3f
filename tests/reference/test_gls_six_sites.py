"""The six-site regression example, computed with 40-digit arithmetic and dense inverses for this project's checks."""

import numpy as np
import pytest

from wrackline.stats.gls import fit_gls

# Computed, not published: tolerance 1e-9 relative for closed forms, 1e-6 for the root of the moment equation.
YEARS = np.array([20, 30, 45, 60, 25, 80.0])
AREA = np.array([12, 55, 140, 420, 900, 2500.0])
SD = np.array([0.32, 0.30, 0.28, 0.27, 0.26, 0.24])
POSITION_KM = np.array([0, 35, 80, 140, 210, 300.0])
SKEW = -0.1
K_99, DK_99 = 2.25257714366, 0.739919995836
DESIGN = np.column_stack([np.ones(6), np.log10(AREA)])


def sampling_covariance() -> np.ndarray:
    """Known-skew covariance of log10 Q of AEP 0.01 (Tasker and Stedinger, 1989, J. Hydrol. 111)."""
    correlation = np.tanh(np.exp(-0.008 * np.abs(POSITION_KM[:, None] - POSITION_KM)))
    np.fill_diagonal(correlation, 1.0)
    common = np.minimum(YEARS[:, None], YEARS)
    bracket = 1 + SKEW * K_99 + K_99**2 / 2 * (correlation + 0.75 * SKEW**2)
    return correlation * np.outer(SD, SD) * common / np.outer(YEARS, YEARS) * bracket


def test_sampling_covariance_is_that_of_the_example():
    covariance = sampling_covariance()
    assert covariance[0, 0] == pytest.approx(0.017053808992768, rel=1e-9)
    assert covariance[0, 1] == pytest.approx(0.0049327467117792, rel=1e-9)


def test_scatter_that_sampling_explains_leaves_no_model_error():
    fit = fit_gls(np.array([3.05, 3.42, 3.71, 3.95, 4.18, 4.49]), DESIGN, sampling_covariance(), "moments")
    assert fit.model_variance == 0.0
    np.testing.assert_allclose(fit.coefficients, [2.3355833126809, 0.63036194977486], rtol=1e-9)


def test_weighted_least_squares_is_the_diagonal_case():
    y = np.array([3.05, 3.42, 3.71, 3.95, 4.18, 4.49])
    fit = fit_gls(y, DESIGN, np.diag(sampling_covariance()).copy(), "moments")
    np.testing.assert_allclose(fit.coefficients, [2.3347977670112, 0.62998525428096], rtol=1e-9)


def test_model_error_and_prediction_of_the_scattered_example():
    y = np.array([2.85, 3.60, 3.50, 4.15, 4.05, 4.70])
    fit = fit_gls(y, DESIGN, sampling_covariance(), "moments")
    assert fit.model_variance == pytest.approx(0.033849743401442, rel=1e-6)
    np.testing.assert_allclose(fit.coefficients, [2.1086040885985, 0.73321707743663], rtol=1e-6)
    assert fit.prediction_variance.mean() == pytest.approx(0.049399761939607, rel=1e-6)
    expected_leverage = [
        0.568190413573,
        0.261278151637,
        0.190266589991,
        0.198528108227,
        0.246839911201,
        0.53489682537,
    ]
    np.testing.assert_allclose(fit.leverage, expected_leverage, rtol=1e-6)
    estimate, variance = fit.predict(np.array([[1.0, np.log10(300.0)]]))
    assert estimate[0] == pytest.approx(3.9248716954402, rel=1e-6)
    assert variance[0] == pytest.approx(0.041671412371026, rel=1e-6)


def test_weighted_least_squares_of_the_scattered_example():
    y = np.array([2.85, 3.60, 3.50, 4.15, 4.05, 4.70])
    fit = fit_gls(y, DESIGN, np.diag(sampling_covariance()).copy(), "moments")
    assert fit.model_variance == pytest.approx(0.031411206047368, rel=1e-6)
    np.testing.assert_allclose(fit.coefficients, [2.1145881739143, 0.73072274566663], rtol=1e-6)
    assert fit.prediction_variance.mean() == pytest.approx(0.04480670988207, rel=1e-6)
