"""The study page from ready-made parts: order, limits, wording."""

import doctest
from dataclasses import replace

import pytest

from wrackline.report import maps, page
from wrackline.report.page import (
    LONG_TABLE,
    SHOWN_PEAKS,
    SHOWN_ROWS,
    SHOWN_WARNINGS,
    GaugePeaks,
    StudyPage,
    cite,
    number_columns,
    order_sections,
    render_page,
)
from wrackline.study.config import StudyConfig
from wrackline.study.contribution import PageTable, Section
from wrackline.study.faults import Fault
from wrackline.study.provenance import Run

RUN = Run("ab" * 32, {"python": "3.11.0", "wrackline": "0.1.0"}, {"study.yaml": {"sha256": "cd" * 32}})


def make_page(**parts) -> StudyPage:
    empty = StudyPage(StudyConfig(), RUN, (), (), None, (), {}, (), None, ())
    return replace(empty, **parts)


def test_sections_come_in_reading_order_whatever_the_order_of_stages():
    keys = ("estimates", "later_stage", "growth", "data", "homogeneity", "screening")
    sections = order_sections(Section(key, key) for key in keys)
    assert ["data", "screening", "homogeneity", "growth", "later_stage", "estimates"] == [
        s.key for s in sections
    ]


def test_two_stages_that_write_one_section_share_its_heading():
    sections = order_sections(
        [Section("data", "Data", ("one",)), Section("data", "More", ("two",), method=("m",))]
    )
    assert [Section("data", "Data", ("one", "two"), method=("m",))] == list(sections)


def test_numbers_stand_flush_right_and_identifiers_do_not():
    table = PageTable(
        "t",
        ("id", "flow", "name", "share", "blank"),
        (("0101", "1 230", "3rd", "5 %", ""), ("0102", "", "x", "−2", "")),
        "",
    )
    assert [False, True, False, True, False] == number_columns(table)


def test_page_of_an_empty_study_is_whole():
    text = render_page(make_page())
    assert text.startswith("<!DOCTYPE html>")
    assert text.endswith("</html>\n")
    assert "The run gave no warnings." in text
    assert "No peaks were used." in text
    assert 'id="ledger"' not in text


@pytest.mark.parametrize(
    "landmark", ["<header", "<nav", "<main", "<footer", 'href="#main"', '<html lang="en">']
)
def test_page_has_landmarks_and_a_way_past_the_contents(landmark):
    assert landmark in render_page(make_page())


def test_many_warnings_are_counted_by_kind_and_listed_up_to_a_limit():
    kinds = ["short_record"] * SHOWN_WARNINGS + ["trend"]
    faults = tuple(Fault(kind, "warning", "screen", f"number {i}") for i, kind in enumerate(kinds))
    text = render_page(make_page(warnings=faults))
    assert f"{SHOWN_WARNINGS} short record, 1 trend" in text
    assert f"number {SHOWN_WARNINGS - 1}<" in text
    assert f"number {SHOWN_WARNINGS}<" not in text


def test_a_national_list_of_peaks_is_left_to_its_table():
    few = GaugePeaks("001", "Mill", (("1990", "12.0"),))
    many = GaugePeaks("002", "Weir", (("1991", "13.0"),) * SHOWN_PEAKS)
    assert "<b>1990</b> 12.0" in render_page(make_page(peaks=(few,)))
    text = render_page(make_page(peaks=(few, many)))
    assert "<b>1990</b>" not in text
    assert "too many to list here" in text


def test_long_tables_are_folded_up_and_very_long_ones_left_to_their_file():
    def text_of(n_rows: int) -> str:
        table = PageTable(
            "Gauges.", ("gauge",), tuple((f"g-{i}",) for i in range(n_rows)), "tables/pools.csv"
        )
        return render_page(make_page(sections=(Section("data", "Data", tables=(table,)),)))

    assert "<details" not in text_of(LONG_TABLE)
    assert f"Gauges <span>{LONG_TABLE + 1} rows</span>" in text_of(LONG_TABLE + 1)
    assert f">g-{SHOWN_ROWS - 1}<" in text_of(SHOWN_ROWS + 1)
    assert f">g-{SHOWN_ROWS}<" not in text_of(SHOWN_ROWS + 1)
    assert "the rest stand in <code>tables/pools.csv</code>" in text_of(SHOWN_ROWS + 1)


def test_declared_units_and_water_year_stand_in_the_head():
    config = StudyConfig.model_validate({"units": {"flow": "ft3/s", "area": "mi2"}, "water_year_starts": 7})
    text = render_page(make_page(config=config))
    assert "flows in ft³/s, areas in mi²" in text
    assert "starts in July" in text


def test_cautions_name_limits_of_use():
    text = render_page(make_page())
    for subject in (
        "uncertain",
        "range of the gauges",
        "reservoirs",
        "safety of dams",
        "regulations",
        "licensed",
    ):
        assert subject in text


def test_citation_names_title_agency_edition_version_and_digest():
    config = StudyConfig.model_validate(
        {"study": {"title": "Floods.", "agency": "Office", "edition": "2026"}}
    )
    assert (
        "Office. Floods. Edition 2026. Computed with wrackline 0.1.0; run digest abababababababab."
        == cite(config, RUN)
    )


def contrast(one: str, other: str) -> float:
    """Contrast ratio of two colours (WCAG 2.2, definition of relative luminance)."""

    def luminance(colour: str) -> float:
        parts = [int(colour[i : i + 2], 16) / 255 for i in (1, 3, 5)]
        linear = [c / 12.92 if c <= 0.04045 else ((c + 0.055) / 1.055) ** 2.4 for c in parts]
        return 0.2126 * linear[0] + 0.7152 * linear[1] + 0.0722 * linear[2]

    light, dark = sorted((luminance(one), luminance(other)), reverse=True)
    return (light + 0.05) / (dark + 0.05)


@pytest.mark.parametrize("scheme", [0, 1], ids=["light", "dark"])
def test_text_colours_keep_a_contrast_of_4_5_on_their_grounds(scheme):
    import re

    blocks = re.findall(r":root \{(.*?)\}", str(page._css()), flags=re.S)
    colours = dict(re.findall(r"--(\w+): (#[0-9a-f]{6})", blocks[scheme]))
    for text in ("ink", "soft", "water", "wrack"):
        for ground in ("paper", "panel"):
            assert contrast(colours[text], colours[ground]) >= 4.5, (text, ground)


@pytest.mark.parametrize("module", [page, maps])
def test_examples_in_the_documentation_hold(module):
    assert 0 == doctest.testmod(module).failed
