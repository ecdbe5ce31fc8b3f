"""What the qualification codes of public peak-flow retrievals become in a study's peaks table."""

from __future__ import annotations

import re
from dataclasses import dataclass
from functools import lru_cache
from typing import Literal

Bound = Literal["", "below", "above"]


@dataclass(frozen=True)
class Code:
    """One qualification code of a discharge.

    Attributes
    ----------
    meaning : str
        What the agency says by it.
    becomes : str
        What the import makes of it, in words; the account of the import prints them.
    flag : str
        Flag of the peaks table, or blank.
    bound : {"", "below", "above"}
        The flood was less, or more, than the number given.
    historic : bool
        The peak lies outside the systematic record.
    cause : str
        Cause of the flood where the code says one, or says that it is not told.
    """

    meaning: str
    becomes: str
    flag: str = ""
    bound: Bound = ""
    historic: bool = False
    cause: str = ""


def _flagged(meaning: str, flag: str, *, cause: str = "") -> Code:
    return Code(meaning, f"flag {flag}" + (f", cause {cause}" if cause else ""), flag, cause=cause)


def _noted(meaning: str) -> Code:
    return Code(meaning, "noted only")


CODES: dict[str, Code] = {
    "1": _flagged("maximum daily mean", "daily_mean"),
    "2": _flagged("estimate", "estimated"),
    "3": _flagged("affected by dam failure", "dam_break"),
    "4": Code("less than the value, the smallest recordable", "high, that year's threshold", bound="below"),
    "5": _flagged("regulated or diverted to an unknown degree", "regulation_unknown"),
    "6": _flagged("regulated or diverted", "regulated_or_diverted"),
    "7": Code("historic peak", "kind historic", historic=True),
    "8": Code("greater than the value", "low", bound="above"),
    "9": _flagged("snowmelt, hurricane, ice jam or debris-dam breakup", "cause_unspecified", cause="unknown"),
    "A": _flagged("year unknown or not exact", "date_uncertain"),
    "B": _flagged("month or day unknown or not exact", "date_uncertain"),
    "BD": _flagged("day unknown or not exact", "date_uncertain"),
    "BM": _flagged("month unknown or not exact", "date_uncertain"),
    "C": _flagged("urbanisation, mining, agriculture, channel works or other change", "basin_changed"),
    "D": _noted("base discharge changed during the year"),
    "E": _noted("only the annual maximum is available"),
    "F": _noted("supplied by another agency"),
    "O": _flagged("opportunistic, not from systematic collection", "unsystematic"),
    "R": _flagged("revised", "revised"),
}
"""Codes in capitals; retrievals write `Bd` and `Bm`."""


@dataclass(frozen=True)
class Qualified:
    """What all codes of one peak say together.

    Attributes
    ----------
    codes, unknown : tuple of str
        The codes known and not known here, in the file's order, each once.
    flags : tuple of str
        Flags of the peaks table, sorted.
    bounds : frozenset of str
        Empty, ``below`` or ``above``; both at once contradict each other.
    historic, year_inexact : bool
    cause, words : str
        `words` says what became of each code.
    """

    codes: tuple[str, ...]
    unknown: tuple[str, ...]
    flags: tuple[str, ...]
    bounds: frozenset[Bound]
    historic: bool
    year_inexact: bool
    cause: str
    words: str


@lru_cache(maxsize=4096)
def read_codes(cell: str) -> Qualified:
    """Read a cell of qualification codes, such as ``2,5,8``.

    Examples
    --------
    >>> both = read_codes("7,Bd")
    >>> both.historic, both.flags, both.bounds
    (True, ('date_uncertain',), frozenset())
    >>> read_codes("2,X").unknown
    ('X',)
    """
    words = tuple(dict.fromkeys(word.upper() for word in re.split(r"[,;\s]+", cell) if word))
    known = tuple(word for word in words if word in CODES)
    meant = [CODES[word] for word in known]
    unknown = tuple(word for word in words if word not in CODES)
    told = [f"code {_shown(word)} ({CODES[word].meaning}): {CODES[word].becomes}" for word in known]
    told += [f"code {word}: not known here, noted only" for word in unknown]
    return Qualified(
        codes=known,
        unknown=unknown,
        flags=tuple(sorted({code.flag for code in meant} - {""})),
        bounds=frozenset(code.bound for code in meant if code.bound),
        historic=any(code.historic for code in meant),
        year_inexact="A" in known,
        cause=next((code.cause for code in meant if code.cause), ""),
        words="; ".join(told),
    )


def _shown(code: str) -> str:
    return code[0] + code[1:].lower()
