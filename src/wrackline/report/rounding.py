"""How numbers are worded for a reader: flows to three significant digits, percentages, probabilities."""

from __future__ import annotations

import math
from decimal import ROUND_HALF_EVEN, Decimal

THIN_SPACE = "\u202f"
"""Narrow no-break space: parts thousands and stands before a percent sign (ISO 80000-1)."""

_UNITS = {"m3/s": "m³/s", "ft3/s": "ft³/s", "km2": "km²", "mi2": "mi²", "m3": "m³", "ft3": "ft³"}


def format_significant(value: float, digits: int = 3) -> str:
    """Round to significant digits, half to even, without an exponent; blank for NaN or infinity.

    Trailing zeros that are significant stay: the reader sees how far the number is meant.

    >>> format_significant(0.0123456), format_significant(7), format_significant(1.995)
    ('0.0123', '7.00', '2.00')
    >>> format_significant(123456.0).replace(THIN_SPACE, " ")
    '123 000'
    """
    if not math.isfinite(value):
        return ""
    if value == 0:
        return "0"
    exact = Decimal(repr(float(value)))
    unit = Decimal(1).scaleb(exact.adjusted() - digits + 1)
    rounded = exact.quantize(unit, rounding=ROUND_HALF_EVEN)
    if rounded.adjusted() > exact.adjusted():
        rounded = rounded.quantize(unit.scaleb(1))
    return _parted(format(rounded, "f"))


def format_flow(value: float) -> str:
    """Word a flow for the page: three significant digits, in whatever unit it came.

    >>> format_flow(86.449), format_flow(1234.5)
    ('86.4', '1230')
    """
    return format_significant(value, 3)


def format_interval(lower: float, upper: float) -> str:
    """Word the two ends of an interval of flows; an end that is not finite is left open.

    >>> format_interval(71.04, 105.5), format_interval(71.04, float("inf"))
    ('71.0 to 106', '71.0 or more')
    """
    if math.isfinite(lower) and math.isfinite(upper):
        return f"{format_flow(lower)} to {format_flow(upper)}"
    if math.isfinite(lower):
        return f"{format_flow(lower)} or more"
    return f"{format_flow(upper)} or less" if math.isfinite(upper) else ""


def format_percent(fraction: float, digits: int = 3) -> str:
    """Word a fraction as a percentage, without needless zeros; blank when not finite.

    >>> format_percent(0.1234).replace(THIN_SPACE, " "), format_percent(0.9).replace(THIN_SPACE, " ")
    ('12.3 %', '90 %')
    """
    text = format_significant(100.0 * round(fraction, 12), digits) if math.isfinite(fraction) else ""
    if "." in text:
        text = text.rstrip("0").rstrip(".")
    return f"{text}{THIN_SPACE}%" if text else ""


def format_aep(aep: float) -> str:
    """Word an annual exceedance probability (a fraction) as a percentage.

    >>> format_aep(0.01).replace(THIN_SPACE, " "), format_aep(0.002).replace(THIN_SPACE, " ")
    ('1 %', '0.2 %')
    """
    return format_percent(aep, 6)


def format_count(count: int) -> str:
    """Word a count, thousands parted.

    >>> format_count(60123).replace(THIN_SPACE, " "), format_count(1234)
    ('60 123', '1234')
    """
    return _parted(str(int(count)))


def format_unit(unit: str) -> str:
    """Set a declared unit with its exponents raised.

    >>> format_unit("ft3/s"), format_unit("mm")
    ('ft³/s', 'mm')
    """
    return _UNITS.get(unit, unit)


def _parted(number: str) -> str:
    sign = "\u2212" if number.startswith("-") else ""
    whole, point, rest = number.lstrip("-").partition(".")
    if len(whole) > 4:
        head = len(whole) % 3 or 3
        whole = THIN_SPACE.join([whole[:head], *(whole[i : i + 3] for i in range(head, len(whole), 3))])
    return sign + whole + point + rest
