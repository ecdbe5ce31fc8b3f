"""At-site fits against the worked examples of Bulletins 17B and 17C and a textbook, and separately computed cases.

The examples were written down from memory ("reconstructed"); their file says so for each, and what was computed instead.
"""

import json
from pathlib import Path

import numpy as np
import pytest

from wrackline.hydrology.at_site import fit_records
from wrackline.hydrology.low_floods import screen_low_floods, set_apart_low_floods
from wrackline.hydrology.plotting_positions import plot_positions
from wrackline.hydrology.quantile_limits import bulletin17b_limits, student_limits
from wrackline.hydrology.records import PeakRecords, exact_records
from wrackline.stats.censored_sample import compress_sample
from wrackline.stats.expected_moments import fit_expected_moments
from wrackline.stats.pearson3 import frequency_factor
from wrackline.stats.skew_variance import griffis_stedinger_variance, skew_weight

HERE = Path(__file__).parent
EXAMPLES = {
    e["id"]: e for e in json.loads((HERE / "at_site_published_examples.json").read_text())["examples"]
}
CASES = json.loads((HERE / "at_site_computed_cases.json").read_text())["cases"]
POSITIONS = {
    e["id"]: e for e in json.loads((HERE / "at_site_plotting_positions.json").read_text())["examples"]
}


def records_of(name: str) -> PeakRecords:
    example = EXAMPLES[name]
    peaks = np.array(example["peak"], dtype=float)
    return exact_records([name], np.array([0, len(peaks)]), np.array(example["water_year"]), peaks)


def floyd_with_history() -> PeakRecords:
    """Floyd River 1935-1973, and nothing above 71,500 ft3/s in 1892-1934."""
    systematic = records_of("b17b_ex2_floyd")
    years, level = np.arange(1892, 1935), 71500.0
    history, n = len(years), len(years) + len(systematic.water_year)
    return PeakRecords(
        gauge_ids=systematic.gauge_ids,
        offsets=np.array([0, n]),
        water_year=np.append(years, systematic.water_year),
        flow_low=np.append(np.zeros(history), systematic.flow_low),
        flow_high=np.append(np.full(history, level), systematic.flow_high),
        perception_low=np.append(np.full(history, level), systematic.perception_low),
        perception_high=np.full(n, np.inf),
        historic=np.arange(n) < history,
        observed=np.arange(n) >= history,
        cause=np.full(n, "unknown"),
    )


@pytest.mark.parametrize("name", ["b17b_ex1_fishkill", "b17b_ex2_floyd"])
def test_systematic_moments_of_bulletin_17b_to_the_printed_digits(name):
    published, moments = EXAMPLES[name]["published"], fit_records(records_of(name)).station.moments
    assert published["mean_log10"] == pytest.approx(moments.mean[0], abs=5.1e-5)
    assert published["sd_log10"] == pytest.approx(moments.sd[0], abs=5.1e-5)
    decimals = len(str(published["skew_log10"]).split(".")[1])
    assert published["skew_log10"] == pytest.approx(moments.skew[0], abs=0.51 * 10**-decimals)


def test_back_creek_moments_before_low_floods_are_set_apart():
    published = EXAMPLES["b17b_ex3_back"]["published"]
    moments = fit_records(records_of("b17b_ex3_back"), low_flood_thresholds=[0.0]).station.moments
    assert published["mean_log10"] == pytest.approx(moments.mean[0], abs=5.1e-4)
    assert published["sd_log10"] == pytest.approx(moments.sd[0], abs=5.1e-5)
    assert published["skew_log10"] == pytest.approx(moments.skew[0], abs=5.1e-5)


def test_orestimba_moments_of_the_years_with_flow():
    published = EXAMPLES["b17b_ex4_orestimba"]["published"]
    peaks = np.array(EXAMPLES["b17b_ex4_orestimba"]["peak"], dtype=float)
    x = np.log10(peaks[peaks > 0])
    moments = fit_expected_moments(compress_sample(np.zeros(len(x)), x, x, 1))
    assert published["n_nonzero"] == len(x)
    assert published["mean_log10"] == pytest.approx(moments.mean[0], abs=5.1e-5)
    assert published["sd_log10"] == pytest.approx(moments.sd[0], abs=5.1e-5)
    assert published["skew_log10"] == pytest.approx(moments.skew[0], abs=5.1e-4)


def test_textbook_guadalupe_river():
    # Chow, Maidment and Mays (1988), example 12.3.3. The remembered skew differs by 0.0024 from that of the remembered
    # peaks (hand rounding or memory), so it is held to 0.003 only.
    published = EXAMPLES["cmm_guadalupe"]["published"]
    moments = fit_records(records_of("cmm_guadalupe"), low_flood_thresholds=[0.0]).station.moments
    assert published["mean_log10"] == pytest.approx(moments.mean[0], abs=5.1e-5)
    assert published["sd_log10"] == pytest.approx(moments.sd[0], abs=5.1e-5)
    assert published["skew_log10"] == pytest.approx(moments.skew[0], abs=0.003)
    # K of 50 years at the printed skew, three decimals in print.
    assert published["K50"] == pytest.approx(
        float(frequency_factor(0.02, published["skew_log10"])), abs=5.1e-4
    )


def test_fishkill_quantiles_and_limits_at_the_rounded_weighted_skew():
    published, computed = (EXAMPLES["b17b_ex1_fishkill"][key] for key in ("published", "computed"))
    mean, sd, skew = published["mean_log10"], published["sd_log10"], published["weighted_skew"]
    for aep, flow in published["quantiles"].items():
        # Printed to three digits from hand-rounded moments: 0.3 %.
        assert flow == pytest.approx(10 ** (mean + sd * float(frequency_factor(float(aep), skew))), rel=3e-3)
    lower, upper = (10**x for x in bulletin17b_limits(mean, sd, skew, 24, np.array([0.99]), 0.90))
    # Printed: 568 and 1,100, three digits.
    assert published["limits"]["0.99"][0] == pytest.approx(float(lower[0]), abs=1.0)
    assert published["limits"]["0.99"][1] == pytest.approx(float(upper[0]), abs=5.0)
    for aep, limits in computed["limits_90_G0p7_b17b"].items():
        ours = bulletin17b_limits(3.36835, 0.245614, 0.7, 24, float(aep), 0.90)
        assert limits == pytest.approx([float(10**x) for x in ours], rel=1e-3)


def test_low_flood_decisions_of_the_examples():
    # Bulletin 17C example: 30 and 782, published. The others computed by separate code; for Back Creek the same two
    # peaks as Bulletin 17C reports for the longer record.
    for name, count, threshold in (
        ("b17b_ex1_fishkill", 0, 0.0),
        ("b17b_ex2_floyd", 0, 0.0),
        ("b17b_ex3_back", 2, 3010.0),
        ("b17b_ex4_orestimba", 18, 782.0),
        ("b17c_ex2_orestimba82", 30, 782.0),
    ):
        low = screen_low_floods(records_of(name))
        assert (count, threshold) == (low.count[0], low.threshold[0]), name


def test_back_creek_p_values():
    computed = EXAMPLES["b17b_ex3_back"]["computed"]["mgbt"]["p_values_first5"]
    low = screen_low_floods(records_of("b17b_ex3_back"))
    assert computed[0] == pytest.approx(low.p_outward[0], abs=5.1e-5)


def test_bulletin_17c_orestimba_moments_and_quantiles():
    published, computed = (EXAMPLES["b17c_ex2_orestimba82"][key] for key in ("published", "computed"))
    fits = fit_records(records_of("b17c_ex2_orestimba82"), aeps=[float(a) for a in computed["quantiles"]])
    moments = fits.station.moments
    assert published["mean_log10"] == pytest.approx(moments.mean[0], abs=5.1e-5)
    assert published["sd_log10"] == pytest.approx(moments.sd[0], abs=5.1e-5)
    assert published["skew_log10"] == pytest.approx(moments.skew[0], abs=5.1e-4)
    assert list(computed["quantiles"].values()) == pytest.approx(fits.station.flow[0].tolist(), rel=1e-4)
    assert computed["station_skew_variance"]["adjusted"] == pytest.approx(
        fits.station.station_skew_mse[0], abs=1e-5
    )


def test_bulletin_17c_orestimba_limits_by_separate_code():
    computed = EXAMPLES["b17c_ex2_orestimba82"]["computed"]["intervals"]
    fits = fit_records(records_of("b17c_ex2_orestimba82"), aeps=[float(a) for a in computed])
    for j, interval in enumerate(computed.values()):
        assert interval["var_log10"] == pytest.approx(fits.station.log10_se[0, j] ** 2, abs=1e-6)
        limits = [fits.station.lower[0, j], fits.station.upper[0, j]]
        assert interval["interval90_nu_orthogonal"] == pytest.approx(limits, rel=2e-3)


def test_floyd_river_with_its_historic_period():
    computed = EXAMPLES["b17b_ex2_floyd"]["computed"]["ema_station_skew"]
    fits = fit_records(floyd_with_history(), aeps=[float(a) for a in computed["quantiles"]])
    moments = fits.station.moments
    for key in ("mean", "sd", "skew"):
        assert computed[key] == pytest.approx(float(getattr(moments, key)[0]), abs=1e-5)
    assert list(computed["quantiles"].values()) == pytest.approx(
        fits.station.flow[0].tolist(), rel=1e-5, abs=0.06
    )
    assert (39, 82) == (fits.n_peaks[0], fits.record_years[0])


@pytest.mark.parametrize("case", CASES, ids=lambda case: case["id"])
@pytest.mark.parametrize("option", ["station", "weighted"])
def test_separately_computed_cases_to_five_decimals(case, option):
    low, high = [np.log10(x) for x in case["exact"]], [np.log10(x) for x in case["exact"]]
    for group in case["censored"]:
        low += [np.log10(group["lower"]) if group["lower"] else -np.inf] * group["years"]
        high += [np.log10(group["upper"]) if group["upper"] else np.inf] * group["years"]
    expected, rule = case[option], None
    if option == "weighted":

        def rule(station, rows):
            # As the case states: the variance of a complete record of all years.
            weight = skew_weight(griffis_stedinger_variance(case["n"], station), expected["regional_mse"])
            return weight * station + (1 - weight) * expected["regional_skew"]

    fit = fit_expected_moments(compress_sample(np.zeros(len(low)), low, high, 1), rule)
    skews = [fit.skew[0], fit.station_skew[0]]
    if option == "weighted":
        assert [expected["weighted_skew"], expected["station_skew"]] == pytest.approx(skews, abs=1e-5)
    else:
        assert expected["skew"] == pytest.approx(skews[0], abs=1e-5)
    assert [expected["mean"], expected["sd"]] == pytest.approx([fit.mean[0], fit.sd[0]], abs=1e-5)
    for aep, flow in expected["quantiles"].items():
        quantile = 10 ** (fit.mean[0] + fit.sd[0] * float(frequency_factor(float(aep), fit.skew[0])))
        assert flow == pytest.approx(quantile, rel=1e-5, abs=0.06)


def test_bias_factors_on_all_years_would_miss_the_published_moments():
    # Why the factors are on the exact peaks: counted on all 82 years the skew would be -0.984, not -0.929.
    published = EXAMPLES["b17c_ex2_orestimba82"]["published"]
    fits = fit_records(records_of("b17c_ex2_orestimba82"))
    assert (
        abs(fits.station.moments.skew[0] - published["skew_log10"])
        < 0.001
        < abs(-0.984 - published["skew_log10"])
    )


def test_plotting_positions_of_floyd_river_with_history():
    records = floyd_with_history()
    aep = plot_positions(records)
    by_peak = dict(zip(records.flow_low.tolist(), aep.tolist(), strict=True))
    for row in POSITIONS["pp_floyd"]["positions"]:
        assert row["p"] == pytest.approx(by_peak[row["peak"]], abs=5.1e-7)


def test_plotting_positions_of_orestimba_after_low_floods():
    records = records_of("b17c_ex2_orestimba82")
    records = set_apart_low_floods(records, screen_low_floods(records).threshold)
    aep = np.sort(plot_positions(records))
    expected = POSITIONS["pp_orestimba82"]
    assert [row["p"] for row in expected["first5"]] == pytest.approx(aep[:5].tolist(), abs=5.1e-7)
    assert expected["last"]["p"] == pytest.approx(float(np.nanmax(aep)), abs=5.1e-7)


def test_simple_degrees_of_freedom_give_the_computed_wider_limits():
    interval = EXAMPLES["b17c_ex2_orestimba82"]["computed"]["intervals"]["0.01"]
    variance = np.array([[interval["var_log10"]]])
    own = 0.5 * variance / interval["nu_simple"]
    limits = student_limits(
        np.array([[np.log10(13823.8)]]), variance, own, interval["beta1"] * variance, 0.90, orthogonal=False
    )
    # beta1 and nu are printed to four digits.
    assert interval["interval90_nu_simple"] == pytest.approx([float(10 ** x[0, 0]) for x in limits], rel=1e-3)
