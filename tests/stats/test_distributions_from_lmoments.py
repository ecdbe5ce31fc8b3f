"""What every distribution must do: return its L-moments, invert its quantiles, stay smooth, refuse nonsense."""

import lmoments3.distr
import numpy as np
import pytest
import scipy.special
import scipy.stats
from numpy.testing import assert_allclose, assert_array_equal

from wrackline.stats.distributions import BY_NAME, CANDIDATES, gev, glo, gno, gpa, kappa, pe3, wakeby

TAILS = np.array([1e-6, 1e-3, 0.02, 0.2, 0.5, 0.8, 0.98, 0.999, 1 - 1e-6])
LSKEWS = [-0.6, -0.3, -1e-5, 0.0, 1e-9, 0.02, 0.1, 0.16992500144231237, 0.2, 0.3, 1 / 3, 0.34, 0.45]
GENERAL_LMOMENTS = [(0.25, 0.2, 0.15, 0.06), (0.35, 0.26, 0.21, 0.11), (0.11, 0.028, 0.137, 0.012)]


def lmoments_by_quadrature(quantile):
    """Return l1, l2, t3, t4, t5 by the tanh-sinh rule, good to 1e-9 for tails up to k = -0.45."""
    s = np.linspace(-3.9, 3.9, 1501)
    u = np.pi / 2 * np.sinh(s)
    p = 1 / (1 + np.exp(-2 * u))
    weight = (s[1] - s[0]) * np.pi / 4 * np.cosh(s) / np.cosh(u) ** 2
    inside = (p > 0) & (p < 1)
    p, weight = p[inside], weight[inside]
    x = quantile(p)
    moments = [np.sum(weight * x * scipy.special.eval_sh_legendre(order, p)) for order in range(5)]
    return np.array([moments[0], moments[1], *(np.array(moments[2:]) / moments[1])])


def example_parameters():
    for name, law in CANDIDATES.items():
        for t3 in (-0.25, 0.0, 0.12, 0.4):
            yield pytest.param(law, law.fit(1.0, 0.3, t3), id=f"{name}-{t3}")
    for t, t3, t4, t5 in GENERAL_LMOMENTS:
        for law in (kappa, wakeby):
            yield pytest.param(law, law.fit(1.0, t, t3, t4, t5), id=f"{law.NAME}-{t3}")


@pytest.mark.parametrize("t3", LSKEWS)
@pytest.mark.parametrize("law", CANDIDATES.values(), ids=CANDIDATES)
def test_fitted_law_has_the_lmoments_it_was_fitted_to(law, t3):
    parameters = law.fit(1.0, 0.3, t3)
    found = lmoments_by_quadrature(lambda p: law.quantile(parameters, p))
    # 5e-9 is the rule's own error at the heaviest tail here; elsewhere it is 1e-12.
    assert_allclose([1.0, 0.3, t3], found[:3], rtol=0, atol=5e-9)
    assert_allclose(found[3], law.fourth_ratio(t3), rtol=0, atol=5e-9)


@pytest.mark.parametrize("lmoments", GENERAL_LMOMENTS)
def test_general_laws_have_the_lmoments_they_were_fitted_to(lmoments):
    t, t3, t4, t5 = lmoments
    four = lmoments_by_quadrature(lambda p: kappa.quantile(kappa.fit(1.0, t, t3, t4), p))
    assert_allclose([1.0, t, t3, t4], four[:4], rtol=0, atol=1e-9)
    parameters, step = wakeby.fit_with_step(1.0, t, t3, t4, t5)
    assert step == "all five parameters"
    five = lmoments_by_quadrature(lambda p: wakeby.quantile(parameters, p))
    assert_allclose([1.0, t, t3, t4, t5], five, rtol=0, atol=1e-9)


@pytest.mark.parametrize(("law", "parameters"), list(example_parameters()))
def test_cdf_inverts_the_quantile(law, parameters):
    # Near a bound of the support x itself holds fewer digits of p than p does: hence the absolute 1e-13.
    assert_allclose(TAILS, law.cdf(parameters, law.quantile(parameters, TAILS)), rtol=1e-9, atol=1e-13)


@pytest.mark.parametrize(("law", "parameters"), list(example_parameters()))
def test_density_is_the_inverse_slope_of_the_quantile(law, parameters):
    p, width = np.array([0.05, 0.3, 0.5, 0.9, 0.99]), 1e-6
    slope = (law.quantile(parameters, p + width) - law.quantile(parameters, p - width)) / (2 * width)
    # Central differences: (width / (1 - p))^2 of the slope, and rounding of 1e-16 / width.
    assert_allclose(1 / slope, law.density(parameters, law.quantile(parameters, p)), rtol=1e-6)


@pytest.mark.parametrize(("law", "parameters"), list(example_parameters()))
def test_beyond_the_bounds_nothing_is_left(law, parameters):
    lower, upper = law.quantile(parameters, 0.0), law.quantile(parameters, 1.0)
    assert lower < law.quantile(parameters, 0.5) < upper
    if np.isfinite(lower):
        assert law.cdf(parameters, lower - 0.1) == 0
        assert law.density(parameters, lower - 0.1) == 0
    if np.isfinite(upper):
        assert law.cdf(parameters, upper + 0.1) == pytest.approx(1.0, abs=1e-15)
        assert law.density(parameters, upper + 0.1) == 0


@pytest.mark.parametrize("law", BY_NAME.values(), ids=BY_NAME)
def test_quantiles_scale_and_shift_with_the_moments(law):
    base = law.quantile(law.fit(1.0, 0.3, 0.2, 0.17, 0.07), TAILS)
    moved = law.quantile(law.fit(7.0 * 1.0 + 40.0, 7.0 * 0.3, 0.2, 0.17, 0.07), TAILS)
    assert_allclose(7.0 * base + 40.0, moved, rtol=1e-9)


@pytest.mark.parametrize("law", BY_NAME.values(), ids=BY_NAME)
def test_batch_equals_one_at_a_time_and_broadcasts(law):
    t3 = np.array([[0.05, 0.15, 0.25], [0.1, 0.2, 0.3]])
    t4 = 0.12 + 0.4 * t3**2
    batch = law.fit(np.full((2, 1), 2.0), 0.5, t3, t4, 0.03)
    assert batch.shape == (2, 3, len(law.PARAMETERS))
    for i in np.ndindex(2, 3):
        assert_allclose(law.fit(2.0, 0.5, t3[i], t4[i], 0.03), batch[i], rtol=1e-8, atol=1e-10)
    quantiles = law.quantile(batch[:, :, None, :], TAILS)
    assert quantiles.shape == (2, 3, TAILS.size)
    assert np.all(np.diff(quantiles, axis=-1) > 0)
    assert_allclose(law.quantile(batch[1, 2], TAILS), quantiles[1, 2], rtol=1e-14)


@pytest.mark.parametrize("law", BY_NAME.values(), ids=BY_NAME)
@pytest.mark.parametrize(
    "lmoments",
    [
        (1.0, 0.3, 1.0),
        (1.0, 0.3, -1.2),
        (1.0, 0.0, 0.1),
        (1.0, -0.2, 0.1),
        (1.0, 0.3, np.nan),
        (np.nan, 0.3, 0.1),
    ],
)
def test_infeasible_lmoments_give_nan(law, lmoments):
    parameters = law.fit(*lmoments, 0.15, 0.05)
    assert np.isnan(parameters).any()
    assert np.isnan(law.quantile(parameters, [0.1, 0.9])).all()
    assert np.isnan(law.cdf(parameters, [0.5, 2.0])).all()
    assert np.isnan(law.density(parameters, [0.5, 2.0])).all()


@pytest.mark.parametrize("law", CANDIDATES.values(), ids=CANDIDATES)
def test_extreme_lskews_are_fitted_or_nan_but_never_wrong(law):
    t3 = np.array([-0.99, -0.95, -0.9, 0.9, 0.95, 0.99])
    parameters = law.fit(1.0, 0.3, t3)
    assert np.isfinite(parameters).all()
    refit = law.fourth_ratio(t3)
    bound = (5 * t3**2 - 1) / 4
    assert np.all(refit > bound)
    assert np.all(refit < 1)


@pytest.mark.parametrize(
    ("law", "critical"),
    [(glo, 0.0), (gev, 0.16992500144231237), (gno, 0.0), (pe3, 0.0), (gpa, 1 / 3), (pe3, 1 / 3)],
)
def test_curves_are_smooth_where_the_formula_changes(law, critical):
    # Neighbours 1e-7 apart may differ by 1e-7 times the slope (below 1000 in these tails), never by a jump.
    sides = critical + np.array([-1e-7, -1e-12, 0.0, 1e-12, 1e-7])
    quantiles = law.quantile(law.fit(1.0, 0.3, sides)[:, None, :], TAILS)
    assert np.all(np.abs(np.diff(quantiles, axis=0)) < 1e-4)
    steps = np.diff(quantiles[[0, 2, 4]], axis=0)
    assert_allclose(steps[0], steps[1], rtol=1e-2, atol=1e-11)


def test_pearson_iii_is_smooth_where_it_becomes_nearly_normal():
    skews = 5e-3 * np.array([1 - 1e-12, 1 + 1e-12])
    parameters = np.stack([np.ones(2), np.full(2, 0.5), skews], axis=-1)[:, None, :]
    x = pe3.quantile(parameters, TAILS)
    assert_allclose(x[0], x[1], rtol=1e-11)
    assert_allclose(pe3.cdf(parameters, x[0])[0], pe3.cdf(parameters, x[0])[1], rtol=1e-8)
    assert_allclose(pe3.density(parameters, x[0])[0], pe3.density(parameters, x[0])[1], rtol=1e-8)


@pytest.mark.parametrize("h", [1e-15, 1e-9, 1e-5, -1e-9, -1e-5])
def test_kappa_near_h_zero_is_the_extreme_value_law(h):
    for k in (-0.3, 0.0, 1e-9, 0.2):
        expected = gev.quantile([0.0, 1.0, k], TAILS)
        # The laws differ by h (ln F)^.. to first order: 1e3 times h covers F = 1e-6.
        assert_allclose(expected, kappa.quantile([0.0, 1.0, k, h], TAILS), rtol=0, atol=1e3 * abs(h) + 1e-13)
        t3_expected = 2 * (1 - 3.0**-k) / (1 - 2.0**-k) - 3 if abs(k) > 1e-6 else np.log(9 / 8) / np.log(2)
        assert_allclose(t3_expected, kappa.ratios(k, h)[0], rtol=0, atol=2 * abs(h) + 1e-9)


@pytest.mark.parametrize(("h", "law"), [(-1 + 1e-9, glo), (1.0, gpa)])
def test_kappa_contains_the_three_parameter_laws(h, law):
    for k in (-0.25, 0.0, 0.3):
        expected = law.quantile([2.0, 0.5, k], TAILS)
        assert_allclose(expected, kappa.quantile([2.0, 0.5, k, h], TAILS), rtol=1e-7)


def test_kappa_recovers_its_shapes_over_the_whole_feasible_region():
    rng = np.random.default_rng(11)
    t3 = rng.uniform(-0.5, 0.8, 400)
    lower, upper = (5 * t3**2 - 1) / 4, (1 + 5 * t3**2) / 6
    t4 = lower + rng.uniform(0.12, 0.999, 400) * (upper - lower)
    parameters = kappa.fit(1.0, 0.3, t3, t4)
    assert np.isfinite(parameters).all()
    found = kappa.ratios(parameters[:, 2], parameters[:, 3])
    assert_allclose(t3, found[0], rtol=0, atol=1e-10)
    assert_allclose(t4, found[1], rtol=0, atol=1e-10)
    k, h = parameters[:, 2], parameters[:, 3]
    assert np.all((k > -1) & (h > -1) & (k + 0.725 * h > -1) & ((h >= 0) | (h * k > -1)))


def test_kappa_is_nan_on_and_above_the_generalized_logistic_line():
    t3 = np.array([0.1, 0.1, 0.3])
    t4 = (1 + 5 * t3**2) / 6 + np.array([0.0, 0.02, 0.1])
    assert np.isnan(kappa.fit(1.0, 0.3, t3, t4)).all()
    assert np.isnan(kappa.fit(1.0, 0.3, 0.2, (5 * 0.04 - 1) / 4 - 1e-6)).all()


def test_kappa_quantile_from_logs_equals_the_plain_one():
    p = np.random.default_rng(0).random((50, 40))
    for parameters in (
        kappa.fit(1.0, 0.25, 0.2, 0.15),
        np.array([1.0, 0.3, 0.0, 0.2]),
        np.array([1.0, 0.3, 0.1, 0.0]),
    ):
        by_log = kappa.quantile_from_log_p(parameters, np.log(p))
        assert_allclose(kappa.quantile(parameters[None, None, :], p), by_log, rtol=1e-12)
    untouched = np.log(p)
    kappa.quantile_from_log_p(kappa.fit(1.0, 0.25, 0.2, 0.15), untouched)
    assert_array_equal(np.log(p), untouched)


def test_wakeby_says_which_step_it_took():
    # Feasible with five; only with a lower bound of zero; only as generalized Pareto; not at all.
    _, step = wakeby.fit_with_step(
        1.0, [0.25, 0.25, 0.25, -1.0], 0.2, [0.15, 0.15, 0.02, 0.1], [0.06, 0.9, -0.04, 0.1]
    )
    assert step[0] == "all five parameters"
    assert step[2] == "generalized Pareto"
    assert step[3] == "none"
    parameters, steps = wakeby.fit_with_step(1.0, 0.5, 0.35, 0.18, np.linspace(-0.9, 0.9, 19))
    assert "lower bound zero" in steps
    at_zero = parameters[steps == "lower bound zero"][0]
    found = lmoments_by_quadrature(lambda p: wakeby.quantile(at_zero, p))
    assert at_zero[0] == 0.0
    assert_allclose([1.0, 0.5, 0.35, 0.18], found[:4], rtol=0, atol=1e-8)


@pytest.mark.parametrize(
    ("law", "peer"),
    [(glo, "glo"), (gev, "gev"), (gno, "gno"), (pe3, "pe3"), (gpa, "gpa")],
    ids=["GLO", "GEV", "GNO", "PE3", "GPA"],
)
@pytest.mark.parametrize("t3", [-0.2, 0.08, 0.25, 0.45])
def test_quantiles_agree_with_lmoments3(law, peer, t3):
    other = getattr(lmoments3.distr, peer)
    shifted = other(**other.lmom_fit(lmom_ratios=[1.0, 0.3, t3, 0.15]))
    # lmoments3 takes rational approximations for GEV, GNO and PE3 (relative error of a few 1e-6 to 5e-5).
    tolerance = 1e-12 if law in (glo, gpa) else 5e-5
    p = np.array([0.05, 0.5, 0.9, 0.99, 0.999])
    assert_allclose(shifted.ppf(p), law.quantile(law.fit(1.0, 0.3, t3), p), rtol=tolerance)


def test_kappa_quantiles_agree_with_lmoments3_for_its_parameters():
    xi, alpha, k, h = parameters = kappa.fit(1.0, 0.3, 0.2, 0.16)
    p = np.array([0.05, 0.5, 0.9, 0.99, 0.999])
    other = lmoments3.distr.kap(loc=xi, scale=alpha, k=k, h=h)
    assert_allclose(other.ppf(p), kappa.quantile(parameters, p), rtol=1e-12)


@pytest.mark.parametrize("k", [-0.3, -0.05, 0.2])
def test_quantiles_agree_with_scipy(k):
    # Expected: scipy's laws, whose shapes have other signs; gennorm laws through the normal quantile.
    expected = {
        "GEV": scipy.stats.genextreme(k, loc=2.0, scale=0.5).ppf(TAILS),
        "GPA": scipy.stats.genpareto(-k, loc=2.0, scale=0.5).ppf(TAILS),
        "GLO": 2.0 + 0.5 * (1 - ((1 - TAILS) / TAILS) ** k) / k,
        "GNO": 2.0 + 0.5 * (1 - np.exp(-k * scipy.stats.norm.ppf(TAILS))) / k,
    }
    for name, quantiles in expected.items():
        assert_allclose(quantiles, CANDIDATES[name].quantile([2.0, 0.5, k], TAILS), rtol=1e-10)
    pearson = scipy.stats.pearson3(-5 * k, loc=2.0, scale=0.5).ppf(TAILS)
    assert_allclose(pearson, pe3.quantile([2.0, 0.5, -5 * k], TAILS), rtol=1e-9)


@pytest.mark.parametrize("law", BY_NAME.values(), ids=BY_NAME)
def test_every_law_says_what_it_is(law):
    assert BY_NAME[law.NAME] is law
    assert law.TITLE
    assert law.fit(1.0, 0.3, 0.1, 0.13, 0.02).shape == (len(law.PARAMETERS),)
