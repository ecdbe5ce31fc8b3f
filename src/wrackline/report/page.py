"""The study page: one HTML file with everything inside, made for reading, review and print."""

from __future__ import annotations

import base64
import io
import re
from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from functools import cache
from importlib.resources import files
from typing import Any

from wrackline.report.interactive import frame_items, library_script
from wrackline.report.page_data import embed_json
from wrackline.report.rounding import THIN_SPACE, format_count, format_percent, format_unit
from wrackline.study.config import StudyConfig
from wrackline.study.contribution import PageTable, Section
from wrackline.study.faults import Fault
from wrackline.study.provenance import Run

READING_ORDER = (
    "data",
    "screening",
    "station",
    "dependence",
    "homogeneity",
    "growth",
    "skew",
    "weighted",
    "index_flood",
    "regression",
    "validation",
    "estimates",
    "change",
    "appendices",
)
"""Section keys in the order a reviewer reads; other keys stand before the estimates."""
MONTHS = (
    "January", "February", "March", "April", "May", "June",
    "July", "August", "September", "October", "November", "December",
)  # fmt: skip
LONG_TABLE = 25
"""Rows above which a table is folded up on the screen (print shows it)."""
SHOWN_ROWS = 1200
SHOWN_WARNINGS = 150
SHOWN_PEAKS = 20_000
_INTERVAL = re.compile(r"\([\d.,\u202f\u2212-]+ (?:–|to) [\d.,\u202f\u2212-]+\)")
_NUMBER = re.compile(r"[<>≤≥±~]?\s*[-\u2212+]?[\d\s,.\u202f]*\d(?:e[-+]?\d+)?\s*%?")

CAUTIONS = (
    (
        "Every estimate is uncertain.",
        "The interval beside a flood belongs to it. It covers the errors that the methods can see: short records, "
        "differences between gauges, the spread around the equations. It cannot cover errors in the ratings and "
        "observations themselves, or a future unlike the record. Rounding to three digits is for reading; it does "
        "not mean that three digits are known.",
    ),
    (
        "Keep within the range of the gauges.",
        "Equations and growth curves hold for sites whose attributes lie within the range of the gauges they were "
        "made from. A warning marks a site outside it; an estimate there is an extrapolation and needs other "
        "evidence.",
    ),
    (
        "The study is of natural floods.",
        "It does not speak for basins where reservoirs, diversions, drainage, mining or urban surfaces govern "
        "the peaks, for floods from ice jams or failing dams, nor for sites where tide or backwater sets the level.",
    ),
    (
        "Past and future may differ.",
        "The methods take each record as coming from one unchanging population. Tests for trend and change have "
        "little power in short records, so a gauge without a flag may still be changing. Where land use or climate "
        "shifts, judge how far the estimates still apply.",
    ),
    (
        "Not for the safety of dams.",
        "Floods rarer than the records and pools can support, above all those for dams and other works whose "
        "failure endangers life, need a specialist study with rainfall, historical and geological evidence.",
    ),
    (
        "Look at the flagged sites.",
        "Discordant gauges, influential gauges and sites with warnings deserve a look at the record, the basin and "
        "the decision in the ledger before a number is used.",
    ),
    (
        "Local rules come first.",
        "Codes, regulations and the agency's own guidance govern design. Use of these results is a matter for "
        "licensed professional practice; the page records what was computed and does not replace that judgement.",
    ),
)


@dataclass(frozen=True)
class PageFigure:
    """A figure as the page holds it: PNG bytes, caption, alternative text."""

    png: bytes
    caption: str
    alt: str

    @property
    def address(self) -> str:
        return "data:image/png;base64," + base64.b64encode(in_few_colours(self.png)).decode("ascii")

    @property
    def size(self) -> tuple[int, int]:
        """Width and height in pixels, from the header of the PNG."""
        return int.from_bytes(self.png[16:20], "big"), int.from_bytes(self.png[20:24], "big")


def in_few_colours(png: bytes) -> bytes:
    """Return a figure with a palette of 256 colours: a third of the bytes, and to the eye the same drawing.

    Where that saves nothing the figure stays as it is. The file beside the page always keeps all its colours.
    """
    from PIL import Image

    few = io.BytesIO()
    with Image.open(io.BytesIO(png)) as image:
        whole = Image.alpha_composite(Image.new("RGBA", image.size, "white"), image.convert("RGBA")).convert(
            "RGB"
        )
        whole.quantize(256, method=Image.Quantize.MEDIANCUT, dither=Image.Dither.NONE).save(
            few, "PNG", optimize=True
        )
    return few.getvalue() if len(few.getvalue()) < len(png) else png


@dataclass(frozen=True)
class Count:
    """A number at a glance: ``used`` of ``read``, where both exist."""

    label: str
    used: int
    read: int | None = None
    remark: str = ""

    @property
    def figure(self) -> str:
        return format_count(self.used)

    @property
    def of(self) -> str:
        return "" if self.read is None else f"of {format_count(self.read)}"


@dataclass(frozen=True)
class GaugePeaks:
    """One gauge's peaks as the appendix lists them: text such as ``1936: 1230`` in the declared unit."""

    gauge_id: str
    name: str
    peaks: tuple[tuple[str, str], ...]


@dataclass(frozen=True)
class StudyPage:
    """All that the page shows, ready for reading."""

    config: StudyConfig
    run: Run
    counts: tuple[Count, ...]
    summary: tuple[PageTable, ...]
    study_map: PageFigure | None
    sections: tuple[Section, ...]
    figures: Mapping[str, PageFigure]
    """By the file that a section's `Figure` names."""
    warnings: tuple[Fault, ...]
    ledger: PageTable | None
    peaks: tuple[GaugePeaks, ...]
    asked: tuple[str, ...] = ()
    """What was asked of the study, in sentences."""
    data: Mapping[str, Any] | None = None
    """What the map, the site panel and the calculator show; None: the page has none of them."""


def order_sections(sections: Iterable[Section]) -> tuple[Section, ...]:
    """Sort sections into the reading order; those with other keys keep theirs and stand before the estimates.

    Sections of one key, from several stages, become one under the first one's title.
    """
    joined: dict[str, Section] = {}
    for section in sections:
        first = joined.get(section.key)
        joined[section.key] = section if first is None else _join(first, section)
    rank = {key: float(number) for number, key in enumerate(READING_ORDER)}
    before_estimates = rank["estimates"] - 0.5
    return tuple(sorted(joined.values(), key=lambda section: rank.get(section.key, before_estimates)))


def _join(first: Section, second: Section) -> Section:
    return Section(
        key=first.key,
        title=first.title,
        paragraphs=first.paragraphs + second.paragraphs,
        figures=first.figures + second.figures,
        tables=first.tables + second.tables,
        method=first.method + second.method,
    )


def render_page(page: StudyPage) -> str:
    """Render the page as HTML text; everything from users and stages is escaped."""
    config = page.config
    listed = sum(len(gauge.peaks) for gauge in page.peaks)
    return (
        _template()
        .render(
            page=page,
            config=config,
            about=config.study,
            body=_body(page),
            appendices=_appendices(page),
            calculator_after=_calculator_place(page),
            contents=_contents(page),
            cautions=CAUTIONS,
            methods=[(section.title, section.method) for section in page.sections if section.method],
            warning_counts=_count_warnings(page.warnings),
            shown_warnings=page.warnings[:SHOWN_WARNINGS],
            peaks_listed=listed,
            peaks=page.peaks if listed <= SHOWN_PEAKS else (),
            month=MONTHS[config.water_year_starts - 1],
            css=_css(),
            **_embedded(page.data),
        )
        .rstrip()
        + "\n"
    )


def _embedded(data: Mapping[str, Any] | None) -> dict[str, Any]:
    """The page's data and scripts, marked as ready for script elements."""
    from markupsafe import Markup

    names = ["page_base.js", "tables.js"]
    if data is None:
        return {
            "data": Markup("null"),
            "frames": None,
            "library": "",
            "scripts": _scripts(names),
            "calculator": False,
        }
    if data["calculator"]:
        names += ["estimate.js", "calculator.js"]
    names += ["frames.js", "map.js", "site.js", "search.js"]
    return {
        "data": Markup(embed_json(data)),
        "frames": Markup(embed_json(frame_items(data))),
        "library": Markup(library_script()),
        "scripts": _scripts(names),
        "calculator": bool(data["calculator"]),
    }


def is_number(text: str) -> bool:
    """Whether a cell reads as a number and is set flush right; ``0101`` is an identifier.

    >>> [is_number(text) for text in ("1.20", "-3", "12 %", "G-01", "1 to 2", "0101", "")]
    [True, True, True, False, False, False, False]
    """
    bare = text.strip()
    return bool(_NUMBER.fullmatch(bare)) and not re.match(r"0\d", bare)


def bind_interval(text: str) -> Any:
    """Keep an interval in brackets on one line, as escaped HTML: a break may come before the bracket only.

    >>> bind_interval("90.3 (65.5 – 125)")
    Markup('90.3 <span class="keep">(65.5 – 125)</span>')
    """
    from markupsafe import Markup, escape

    found = _INTERVAL.search(text)
    if found is None:
        return escape(text)
    return (
        escape(text[: found.start()])
        + Markup('<span class="keep">{}</span>').format(found[0])
        + escape(text[found.end() :])
    )


def number_columns(table: PageTable) -> list[bool]:
    """Which columns of a table hold numbers alone (blanks aside)."""
    flags = []
    for column in range(len(table.head)):
        cells = [row[column] for row in table.rows if column < len(row) and row[column].strip(" –—")]
        flags.append(bool(cells) and all(is_number(cell) for cell in cells))
    return flags


def cite(config: StudyConfig, run: Run) -> str:
    """Word how this run is cited."""
    about = config.study
    agency = f"{about.agency.rstrip('.')}. " if about.agency else ""
    edition = f"Edition {about.edition}. " if about.edition else ""
    made = f"Computed with wrackline {run.software.get('wrackline', '')}".rstrip()
    return f"{agency}{about.title.rstrip('.')}. {edition}{made}; run digest {run.digest[:16]}."


def _body(page: StudyPage) -> tuple[Section, ...]:
    return tuple(section for section in page.sections if section.key != "appendices")


def _appendices(page: StudyPage) -> tuple[Section, ...]:
    return tuple(section for section in page.sections if section.key == "appendices")


def _calculator_place(page: StudyPage) -> str:
    """Key of the section that the calculator follows: the estimates, else the last; blank without a calculator."""
    if page.data is None or not page.data["calculator"]:
        return ""
    keys = [section.key for section in _body(page)]
    return "estimates" if "estimates" in keys else (keys or [""])[-1]


def _contents(page: StudyPage) -> list[tuple[str, str]]:
    entries = [("asked", "What was asked")] if page.asked else []
    entries += [("glance", "At a glance")]
    entries += [("map-section", "Map and sites")] if page.data else []
    place = _calculator_place(page)
    for section in _body(page):
        entries.append((f"section-{section.key}", section.title))
        if section.key == place:
            entries.append(("calculator", "Calculator for ungauged sites"))
    entries += [("warnings", "Warnings"), ("cautions", "Cautions"), ("methods", "Methods")]
    entries += [("provenance", "Provenance and citation")]
    entries += [(f"section-{section.key}", section.title) for section in _appendices(page)]
    entries += [("peaks", "Peaks used")]
    return entries + ([("ledger", "Ledger of decisions")] if page.ledger else [])


def _count_warnings(warnings: tuple[Fault, ...]) -> list[tuple[str, int]]:
    counts: dict[str, int] = {}
    for warning in warnings:
        counts[warning.code] = counts.get(warning.code, 0) + 1
    return sorted(
        ((plain(code), count) for code, count in counts.items()), key=lambda item: (-item[1], item[0])
    )


def plain(name: str) -> str:
    """Word a short fixed name for reading.

    >>> plain("possibly_heterogeneous")
    'possibly heterogeneous'
    """
    return name.replace("_", " ").strip()


@cache
def _template() -> Any:
    from jinja2 import Environment, StrictUndefined

    environment = Environment(
        autoescape=True, trim_blocks=True, lstrip_blocks=True, undefined=StrictUndefined
    )
    environment.filters |= {
        "number_columns": number_columns,
        "count": format_count,
        "unit": format_unit,
        "bind": bind_interval,
    }
    environment.filters["percent"] = format_percent
    environment.globals |= {
        "cite": cite,
        "thin": THIN_SPACE,
        "long_table": LONG_TABLE,
        "shown_rows": SHOWN_ROWS,
    }
    return environment.from_string(
        files("wrackline.report").joinpath("page.html.j2").read_text(encoding="utf-8")
    )


def _scripts(names: Iterable[str]) -> list[Any]:
    from markupsafe import Markup

    folder = files("wrackline.report")
    return [Markup(folder.joinpath(name).read_text(encoding="utf-8")) for name in names]


def _css() -> Any:
    from markupsafe import Markup

    return Markup(files("wrackline.report").joinpath("page.css").read_text(encoding="utf-8"))
