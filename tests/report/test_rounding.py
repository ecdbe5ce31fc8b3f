"""Numbers as a reader sees them."""

import doctest

import pytest

from wrackline.report import rounding
from wrackline.report.rounding import (
    THIN_SPACE,
    format_aep,
    format_flow,
    format_interval,
    format_percent,
    format_significant,
)
from wrackline.study.study_layers import name_aep_column


@pytest.mark.parametrize(
    ("expected", "flow"),
    [
        ("123", 123.4),
        ("99.9", 99.94),
        ("100", 99.95001),
        ("1000", 999.6),
        ("0.00123", 0.0012345),
        ("12.0", 12),
        (f"12{THIN_SPACE}300", 12345.0),
        (f"1{THIN_SPACE}230{THIN_SPACE}000", 1234567.0),
        ("0", 0.0),
        ("\u22121.50", -1.5),
        ("0.000000100", 1e-7),
    ],
)
def test_flow_keeps_three_significant_digits_without_exponent(expected, flow):
    assert expected == format_flow(flow)


def test_rounding_error_is_below_half_of_the_third_digit_at_every_scale():
    for exponent in range(-6, 9):
        for lead in (1.0049, 3.14159, 9.9949, 9.9951):
            value = lead * 10.0**exponent
            read_back = float(format_significant(value).replace(THIN_SPACE, ""))
            assert abs(read_back - value) <= 0.005 * 10.0**exponent * (1 + 1e-9)


def test_values_that_do_not_exist_are_blank():
    assert [
        format_flow(float("nan")),
        format_flow(float("inf")),
        format_percent(float("nan")),
        format_interval(float("nan"), float("nan")),
    ] == [""] * 4


def test_open_interval_says_which_end_is_known():
    assert format_interval(float("nan"), 12.0) == "12.0 or less"


@pytest.mark.parametrize(
    ("label", "column", "aep"),
    [
        ("50 %", "aep_0_5", 0.5),
        ("4 %", "aep_0_04", 0.04),
        ("0.2 %", "aep_0_002", 0.002),
        ("0.01 %", "aep_0_0001", 1e-4),
    ],
)
def test_probabilities_are_worded_as_percent_and_as_column(label, column, aep):
    assert label == format_aep(aep).replace(THIN_SPACE, " ")
    assert column == name_aep_column(aep)


def test_examples_in_the_documentation_hold():
    assert doctest.testmod(rounding).failed == 0
