"""Expected moments: no-censoring identity, invariances, independent solution, refusals."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.integrate import quad
from scipy.optimize import root

from wrackline.stats.censored_sample import compress_sample
from wrackline.stats.expected_moments import fit_expected_moments
from wrackline.stats.pearson3 import frequency_factor, pdf, support
from wrackline.stats.streams import random_stream


def product_moments(x):
    n = len(x)
    d = x - x.mean()
    s = np.sqrt((d**2).sum() / (n - 1))
    return x.mean(), s, n * (d**3).sum() / ((n - 1) * (n - 2) * s**3)


def one_gauge(low, high):
    return compress_sample(np.zeros(len(low), dtype=int), low, high, 1)


def draw(n=40, skew=0.3, unit=""):
    stream = random_stream(7, "test_expected_moments", unit)
    return 2 + 0.3 * frequency_factor(stream.random(n), skew)


def censor(x, base):
    return np.where(x < base, -np.inf, x), np.where(x < base, base, x)


@given(st.lists(st.floats(0.5, 4.5), min_size=6, max_size=60, unique=True))
@settings(max_examples=50)
def test_without_censoring_the_result_is_the_product_moments(values):
    x = np.array(values)
    if x.std() < 1e-3:
        return
    mean, sd, skew = product_moments(x)
    fit = fit_expected_moments(one_gauge(x, x))
    if abs(skew) > 3:
        assert "beyond 3" in fit.refusal[0]
        return
    np.testing.assert_allclose([mean, sd, skew], [fit.mean[0], fit.sd[0], fit.skew[0]], rtol=1e-9, atol=1e-9)


def test_threshold_equal_to_the_smallest_peak_censors_nothing():
    x = draw()
    low, high = censor(x, x.min())
    fit = fit_expected_moments(one_gauge(low, high))
    np.testing.assert_allclose(product_moments(x), [fit.mean[0], fit.sd[0], fit.skew[0]], rtol=1e-12)


def test_years_about_which_nothing_is_known_change_nothing():
    low, high = censor(draw(), 1.9)
    fit = fit_expected_moments(one_gauge(low, high))
    more = fit_expected_moments(one_gauge(np.append(low, [-np.inf] * 5), np.append(high, [np.inf] * 5)))
    assert (fit.mean[0], fit.sd[0], fit.skew[0]) == (more.mean[0], more.sd[0], more.skew[0])


@given(st.floats(-3, 3), st.floats(0.1, 10), st.sampled_from([-1, 1]), st.integers(0, 2**32 - 1))
@settings(max_examples=30)
def test_fit_follows_shift_scale_reflection_and_order(shift, scale, sign, seed):
    low, high = censor(draw(skew=-0.4), 1.85)
    low, high = np.append(low, [2.1, 2.3]), np.append(high, [2.2, np.inf])
    fit = fit_expected_moments(one_gauge(low, high))
    order = np.random.default_rng(seed).permutation(len(low))
    moved_low, moved_high = shift + sign * scale * low, shift + sign * scale * high
    if sign < 0:
        moved_low, moved_high = moved_high, moved_low
    moved = fit_expected_moments(one_gauge(moved_low[order], moved_high[order]))
    assert shift + sign * scale * fit.mean[0] == pytest.approx(moved.mean[0], abs=1e-8 * scale)
    assert scale * fit.sd[0] == pytest.approx(moved.sd[0], rel=1e-8)
    assert sign * fit.skew[0] == pytest.approx(moved.skew[0], abs=1e-8)


def test_batch_of_gauges_equals_each_gauge_alone():
    gauges, lows, highs = [], [], []
    for i, (n, skew, base) in enumerate([(30, 0.5, 1.8), (55, -0.6, 1.9), (25, 0.0, -1.0), (80, 0.9, 2.0)]):
        low, high = censor(draw(n, skew, str(i)), base)
        gauges.append(np.full(n, i)), lows.append(low), highs.append(high)
    batch = fit_expected_moments(compress_sample(*map(np.concatenate, (gauges, lows, highs)), 4))
    for i in range(4):
        alone = fit_expected_moments(one_gauge(lows[i], highs[i]))
        np.testing.assert_allclose(
            [alone.mean[0], alone.sd[0], alone.skew[0]],
            [batch.mean[i], batch.sd[i], batch.skew[i]],
            atol=1e-9,
        )


def test_fixed_point_equals_quadrature_and_a_root_finder():
    x = draw(35, 0.6)
    low, high = censor(x, 1.9)
    censored = int(np.isinf(low).sum())
    exact = x[np.isfinite(low)]
    n, n_exact = len(x), len(exact)

    def expectation(power, centre, mu, s, g):
        bottom = max(float(support(g)[0]), -12)
        top = (1.9 - mu) / s
        above = quad(
            lambda w: (mu + s * w - centre) ** power * pdf(w, g), bottom, top, epsabs=1e-12, limit=200
        )[0]
        return above / quad(lambda w: pdf(w, g), bottom, top, epsabs=1e-12, limit=200)[0]

    def residual(theta):
        mu, s, g = theta
        new_mu = (exact.sum() + censored * expectation(1, 0.0, mu, s, g)) / n
        c2, c3 = n_exact / (n_exact - 1), n_exact**2 / ((n_exact - 1) * (n_exact - 2))
        var = (c2 * ((exact - new_mu) ** 2).sum() + censored * expectation(2, new_mu, mu, s, g)) / n
        third = (c3 * ((exact - new_mu) ** 3).sum() + censored * expectation(3, new_mu, mu, s, g)) / n
        return [new_mu - mu, np.sqrt(var) - s, third / var**1.5 - g]

    expected = root(residual, [x.mean(), x.std(), 0.2], tol=1e-11).x
    fit = fit_expected_moments(one_gauge(low, high))
    # Quadrature through the differentiable but steep lower bound limits the reference to about 1e-8.
    np.testing.assert_allclose(expected, [fit.mean[0], fit.sd[0], fit.skew[0]], atol=1e-7)


def test_answer_is_a_fixed_point_even_where_convergence_is_slow():
    # 37 % below a base and a long historic period: the plain iteration needs hundreds of steps.
    x = draw(60, -0.8, "slow")
    low, high = censor(x, np.quantile(x, 0.37))
    low, high = np.append(low, [-np.inf] * 300), np.append(high, [x.max() - 1e-9] * 300)
    fit = fit_expected_moments(one_gauge(low, high))
    loose = fit_expected_moments(one_gauge(low, high), tolerance=1e-13)
    assert fit.converged[0]
    np.testing.assert_allclose([loose.mean[0], loose.skew[0]], [fit.mean[0], fit.skew[0]], atol=1e-9)


def test_records_on_which_an_accelerated_step_overshoots_still_settle():
    # A huge historic flood with 98 years below a high level; found by simulation.
    exact = np.log10(
        [3218, 1074, 307, 267, 218, 161, 159, 150, 147, 125, 118, 108, 100, 94, 92, 91, 85, 78, 77.0]
    )
    low = np.concatenate([exact, np.full(106, -np.inf)])
    high = np.concatenate([exact, np.full(8, np.log10(66.0)), np.full(98, np.log10(448.0))])
    fit = fit_expected_moments(one_gauge(low, high), lambda skew, rows: 0.5 * skew)
    assert fit.converged[0]
    assert fit.iterations[0] < 500


def test_longer_floodless_history_lowers_the_upper_quantile():
    x = draw(30, 0.3, "history")
    quantiles = []
    for years in (0, 30, 100, 300, 1000, 10_000):
        low, high = np.append(x, [-np.inf] * years), np.append(x, [x.max()] * years)
        fit = fit_expected_moments(one_gauge(low, high))
        quantiles.append(float(fit.mean[0] + fit.sd[0] * frequency_factor(0.01, fit.skew[0])))
    assert (np.diff(quantiles) < 0).all()


def test_period_below_a_level_above_all_peaks_still_converges():
    x = draw(25, 0.2, "quiet")
    low, high = np.append(x, [-np.inf] * 80), np.append(x, [x.max() + 0.5] * 80)
    assert fit_expected_moments(one_gauge(low, high)).converged[0]


def test_skews_around_zero_are_fitted_without_a_step():
    x = np.sort(draw(41, 0.0, "zero"))
    x = 0.5 * (x - x[::-1])
    skews = []
    for nudge in (0.0, 1e-8, 1e-5, 1e-3):
        y = x + nudge * x**2
        low, high = censor(y, y[12])
        skews.append(fit_expected_moments(one_gauge(low, high)).skew[0])
    assert abs(skews[1] - skews[0]) < 1e-6
    assert abs(skews[2] - skews[0]) < 1e-3


@pytest.mark.parametrize(
    ("values", "reason"),
    [([2.0, 2.1], "at least 3"), ([2.0] * 12, "no spread"), ([0.0] * 60 + [0.001, 3.0], "beyond 3")],
)
def test_records_that_cannot_be_fitted_are_refused_with_the_reason(values, reason):
    fit = fit_expected_moments(one_gauge(np.array(values), np.array(values)))
    assert reason in fit.refusal[0]
    assert np.isnan(fit.mean[0])


def test_bound_on_the_skew_is_applied_and_reported():
    x = np.append(np.linspace(1.9, 2.1, 25), [3.0, 3.2])
    fit = fit_expected_moments(one_gauge(x, x), skew_bound=1.41)
    assert fit.skew[0] == 1.41
    assert fit.clamped[0]


def test_peak_beyond_the_fitted_bound_is_reported():
    # A tail of lows sets the upper bound of the fit at 2.35, below the one high value.
    x = np.append(np.full(20, 2.0), [1.0, 1.2, 1.5, 0.6, 2.7])
    assert fit_expected_moments(one_gauge(x, x)).beyond_support[0]
