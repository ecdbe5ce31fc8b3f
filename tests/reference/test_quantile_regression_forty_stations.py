"""Regression of quantiles at forty invented stations; answers computed by two independent routes, not published."""

import json
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
import statsmodels.api as sm
from scipy.special import stdtrit

from wrackline.hydrology.quantile_covariance import QuantileErrorModel, quantile_sampling_covariance
from wrackline.hydrology.quantile_regression import fit_regional_sd, standard_error_percent
from wrackline.stats.gls import fit_gls
from wrackline.stats.pearson3 import frequency_factor
from wrackline.stats.skew_variance import griffis_stedinger_variance

HERE = Path(__file__).parent
EXPECTED = json.loads((HERE / "quantile_regression_expected.json").read_text())
STATIONS = pd.read_csv(HERE / "quantile_regression_stations.csv")
SKEW, SKEW_MSE = -0.1, 0.12
# Printed to 12 digits: 1e-9 for closed forms; 1e-6 for roots of the moment equation; the likelihood optima were printed
# to 7 significant digits from a search that stops at 1e-5.
CLOSED, ROOT, OPTIMUM = 1e-9, 1e-6, 1e-5


def error_model() -> QuantileErrorModel:
    s = STATIONS
    n = s["n_years"].to_numpy(dtype=float)
    x, y = s["x_km"].to_numpy(), s["y_km"].to_numpy()
    correlation = np.tanh(1.1 * np.exp(-np.hypot(x[:, None] - x, y[:, None] - y) / 120))
    first, last = s["first_year"].to_numpy(), s["last_year"].to_numpy()
    common = np.maximum(np.minimum(last[:, None], last) - np.maximum(first[:, None], first) + 1.0, 0.0)
    sd = fit_regional_sd(s["sd_log10"].to_numpy(), np.log10(s["area_km2"].to_numpy()), n)
    none = np.zeros((len(s), len(s)))
    return QuantileErrorModel(
        sd=sd.at(np.log10(s["area_km2"].to_numpy())),
        skew=np.full(len(s), SKEW),
        years=n,
        common_years=common,
        correlation=correlation,
        station_weight=np.zeros(len(s)),
        skew_covariance=none,
        generalized_covariance=none,
    )


def weighted_skew() -> np.ndarray:
    variance = griffis_stedinger_variance(STATIONS["n_years"], STATIONS["station_skew"])
    w = SKEW_MSE / (SKEW_MSE + variance)
    return np.asarray(w * STATIONS["station_skew"] + (1 - w) * SKEW)


def design() -> np.ndarray:
    return np.column_stack(
        [
            np.ones(len(STATIONS)),
            np.log10(STATIONS["area_km2"]),
            np.log10(STATIONS["precip_mm"] / 1000),
        ]
    )


def response(probability: float) -> np.ndarray:
    k = frequency_factor(1 - probability, weighted_skew())
    return np.asarray(STATIONS["mean_log10"] + k * STATIONS["sd_log10"])


def test_standard_deviation_is_regressed_on_log_area():
    relation = fit_regional_sd(
        STATIONS["sd_log10"].to_numpy(),
        np.log10(STATIONS["area_km2"].to_numpy()),
        STATIONS["n_years"].to_numpy(),
    )
    np.testing.assert_allclose([relation.constant, relation.slope], EXPECTED["sd_regression"], rtol=CLOSED)


def test_weighted_skews():
    np.testing.assert_allclose(weighted_skew()[:3], EXPECTED["weighted_skew_first3"], rtol=CLOSED)


@pytest.mark.parametrize("probability", [0.5, 0.9, 0.99])
def test_coefficients_errors_and_prediction(probability):
    expected = EXPECTED["quantiles"][str(probability)]
    y, x = response(probability), design()
    covariance = quantile_sampling_covariance(error_model(), 1 - probability)
    fit = fit_gls(y, x, covariance, "moments")
    weighted = fit_gls(y, x, np.diag(covariance).copy(), "moments")
    assert fit.model_variance == pytest.approx(expected["sigma2_MM_GLS"], rel=ROOT)
    assert weighted.model_variance == pytest.approx(expected["sigma2_MM_WLS"], rel=ROOT)
    assert fit_gls(y, x, covariance, "reml").model_variance == pytest.approx(
        expected["sigma2_REML_GLS"], rel=OPTIMUM
    )
    assert fit_gls(y, x, covariance, "ml").model_variance == pytest.approx(
        expected["sigma2_ML_GLS"], rel=OPTIMUM
    )
    np.testing.assert_allclose(fit.coefficients, expected["beta_GLS"], rtol=ROOT)
    np.testing.assert_allclose(weighted.coefficients, expected["beta_WLS"], rtol=ROOT)
    np.testing.assert_allclose(np.sqrt(np.diag(fit.coefficient_covariance)), expected["se_GLS"], rtol=ROOT)
    assert fit.prediction_variance.mean() == pytest.approx(expected["AVP"], rel=ROOT)
    assert standard_error_percent(fit.prediction_variance.mean()) == pytest.approx(
        expected["SEP_pct"], rel=ROOT
    )
    assert standard_error_percent(fit.model_variance) == pytest.approx(expected["SME_pct"], rel=ROOT)
    constant = fit_gls(y, x[:, :1], covariance, "moments")
    assert 1 - fit.model_variance / constant.model_variance == pytest.approx(
        expected["pseudo_R2_vs_constant"], rel=ROOT
    )
    assert fit.leverage.max() == pytest.approx(expected["leverage_max"], rel=ROOT)
    assert STATIONS["site"][fit.leverage.argmax()] == expected["lev_site"]
    assert fit.influence.max() == pytest.approx(expected["cookD_max"], rel=1e-5)
    assert STATIONS["site"][fit.influence.argmax()] == expected["cook_site"]


@pytest.mark.parametrize("probability", [0.5, 0.9, 0.99])
def test_prediction_at_a_new_site(probability):
    expected = EXPECTED["quantiles"][str(probability)]["at_A250_P1100"]
    covariance = quantile_sampling_covariance(error_model(), 1 - probability)
    fit = fit_gls(response(probability), design(), covariance, "moments")
    estimate, variance = fit.predict(np.array([[1.0, np.log10(250.0), np.log10(1.1)]]))
    reach = stdtrit(fit.degrees_of_freedom, 0.95) * np.sqrt(variance[0])
    assert estimate[0] == pytest.approx(expected["log10Q"], rel=ROOT)
    assert variance[0] == pytest.approx(expected["VP"], rel=ROOT)
    np.testing.assert_allclose(10 ** (estimate[0] + reach * np.array([-1, 1])), expected["PI90"], rtol=ROOT)


def test_influence_is_cooks_distance_where_all_variances_are_equal():
    y, x = response(0.9), design()
    ols = sm.OLS(y, x).fit()
    fit = fit_gls(y, x, np.zeros(len(y)), "moments")
    np.testing.assert_allclose(fit.influence, ols.get_influence().cooks_distance[0], rtol=1e-9)


def test_percent_of_a_standard_error():
    # Computed: 100 sqrt(exp((s ln 10)^2) - 1).
    for s, percent in ((0.10, 23.334450829), (0.20, 48.6047057857), (0.30, 78.1990226591)):
        assert standard_error_percent(s**2) == pytest.approx(percent, rel=CLOSED)
