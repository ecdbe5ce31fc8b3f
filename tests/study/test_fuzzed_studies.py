"""Studies broken at random: never a traceback, never a silent loss, never active content.

The suite takes 200 of them, always the same. For more, and others every time:

    WRACKLINE_FUZZ=2000 python -m pytest tests/study/test_fuzzed_studies.py --hypothesis-show-statistics
"""

from __future__ import annotations

import csv
import io
import os
import tempfile
import unicodedata
from html.parser import HTMLParser
from pathlib import Path
from typing import Any

import pytest
from hypothesis import HealthCheck, Phase, event, given, note, settings
from hypothesis import strategies as st

from tests.study.conftest import SmallStudy
from tests.study.fuzzing.grammar import ACTIVE, FREE_TEXT, break_study
from wrackline.cli import print_faults
from wrackline.stages import intake, publish
from wrackline.stages.running import StudyFiles
from wrackline.study.checking import check
from wrackline.study.faults import Fault
from wrackline.study.inputs import Study, read_study
from wrackline.study.loading import load_config

MORE = os.environ.get("WRACKLINE_FUZZ")
EXAMPLES = int(MORE or 200)
fuzzed = settings(
    max_examples=EXAMPLES,
    derandomize=MORE is None,
    deadline=None,
    database=None,
    report_multiple_bugs=MORE is not None,
    phases=[Phase.generate, Phase.shrink] if MORE else [Phase.generate],
    suppress_health_check=[HealthCheck.too_slow, HealthCheck.data_too_large, HealthCheck.large_base_example],
)


@fuzzed
@given(st.data())
def test_broken_study_is_told_or_taken_whole(data: st.DataObject) -> None:
    with tempfile.TemporaryDirectory() as folder:
        study_file, faults = break_study(data.draw, SmallStudy(), Path(folder))
        note("; ".join(faults))
        before = contents(Path(folder))
        found = check(study_file)
        assert before == contents(Path(folder)), "a check writes nothing"
        event(("clean", "problems", "unreadable")[found.exit_status])
        for fault in (*found.problems, *found.warnings):
            assert fault.code, fault
            assert fault.problem, fault
        assert_told_line_by_line(found.problems, found.warnings)
        if found.exit_status == 0:
            assert_nothing_is_lost(read_study(study_file))


def contents(folder: Path) -> dict[str, Any]:
    return {path.name: path.read_bytes() if path.is_file() else None for path in folder.iterdir()}


def assert_told_line_by_line(problems: tuple[Fault, ...], warnings: tuple[Fault, ...]) -> None:
    """Whatever stands in a cell: a fault is one short line, and nothing in it commands a terminal."""
    told = io.StringIO()
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr("sys.stdout", told)
        print_faults(problems, warnings)
    lines = told.getvalue().split("\n")
    heads = len({f.file for f in problems}) + len({f.file for f in warnings})
    assert len(problems) + len(warnings) + heads == len(lines) - 1, lines
    for line in lines:
        assert not [c for c in line if unicodedata.category(c) in ("Cc", "Cf", "Zl", "Zp", "Cs")], repr(line)
        assert len(line) < 2000, line[:200]


def assert_nothing_is_lost(study: Study) -> None:
    """Every row of the files is in the study, and every row of peaks in the account, once, with its fate."""
    inputs = study.config.inputs
    assert not study.folder.resolve().is_relative_to((study.folder / study.config.output).resolve())
    for name, table in (("gauges", study.gauges), ("targets", study.targets), ("ledger", study.ledger)):
        file = getattr(inputs, name)
        assert len(data_rows(study.folder / file) if file else []) == len(table), file

    peaks, account = data_rows(study.folder / inputs.peaks), study.accounting
    head = header(study.folder / inputs.peaks)
    assert [row for row, _ in peaks] == account["row"].tolist()
    at = head.index("gauge_id")
    assert [cells[at].strip() for _, cells in peaks] == account["gauge_id"].tolist()
    assert set(account["fate"]) <= {"used", "interval", "excluded"}
    assert (account.loc[account["fate"] != "used", "reason"] != "").all()

    records = study.records
    seen = [
        (records.gauge_ids[gauge], int(year))
        for gauge, year, observed in zip(
            records.gauge_index, records.water_year, records.observed, strict=True
        )
        if observed
    ]
    kept = account[account["fate"] != "excluded"]
    assert sorted(seen) == sorted(zip(kept["gauge_id"], kept["water_year"].astype(int), strict=True))


def lines_of(path: Path) -> list[list[str]]:
    text = path.read_bytes().decode("utf-8-sig").replace("\r\n", "\n").replace("\r", "\n")
    return list(csv.reader(io.StringIO(text, newline="")))


def header(path: Path) -> list[str]:
    return [name.strip() for name in lines_of(path)[0]]


def data_rows(path: Path) -> list[tuple[int, list[str]]]:
    """Rows below the header that hold anything, with the number a spreadsheet gives them."""
    return [(row, cells) for row, cells in enumerate(lines_of(path), start=1) if row > 1 and any(cells)]


# --- what would act, were it taken for more than text ---

CARRIED = [pair for pair in FREE_TEXT if pair != ("redundancy.csv", "why")]


@settings(fuzzed, max_examples=max(4, EXAMPLES // 50))
@given(st.data())
def test_texts_that_would_act_stay_texts_on_the_page_and_in_the_tables(data: st.DataObject) -> None:
    with tempfile.TemporaryDirectory() as folder:
        study = SmallStudy()
        for file, column in CARRIED:
            for row in range(2, len(study.tables[file]) + 1):
                study.put(file, row, column, data.draw(st.sampled_from(ACTIVE)))
        title, region = data.draw(st.sampled_from(ACTIVE[:17])), data.draw(st.sampled_from(ACTIVE[:17]))
        study.set_key("title: Six invented gauges", f"title: {quoted(title)}")
        for file in ("gauges.csv", "targets.csv"):
            for row in range(2, len(study.tables[file]) + 1):
                study.put(file, row, "region", region)
        study_file = study.write(Path(folder))
        files = StudyFiles(load_config(study_file), study_file)
        intake.run(files)
        publish.run(files)
        page = (files.results / "report.html").read_text(encoding="utf-8")
        assert "wl_fired" in page
        assert_page_is_still(page)
        tables = [*files.results.rglob("*.csv"), *files.work("intake").glob("*.csv")]
        assert len(tables) > 10
        for table in tables:
            assert_no_formula(table)


def quoted(text: str) -> str:
    """A YAML text in double quotes."""
    return '"' + text.replace("\\", "\\\\").replace('"', '\\"').replace("\t", "\\t") + '"'


class Acting(HTMLParser):
    """Collects every place of a page where `wl_fired` would be run, followed or drawn."""

    def __init__(self) -> None:
        super().__init__(convert_charrefs=True)
        self.found: list[str] = []
        self.inside = ""

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        runs = tag == "script" and dict(attrs).get("type", "text/javascript") != "application/json"
        self.inside = tag if runs or tag == "style" else ""
        for name, value in attrs:
            acts = name.startswith("on") or name in ("href", "src", "style", "srcdoc", "action", "formaction")
            if acts and "wl_fired" in (value or ""):
                self.found.append(f"<{tag} {name}={value}>")

    def handle_endtag(self, tag: str) -> None:
        self.inside = ""

    def handle_data(self, data: str) -> None:
        if self.inside and "wl_fired" in data:
            self.found.append(f"<{self.inside}> ... {data[:80]}")

    def handle_comment(self, data: str) -> None:
        if "wl_fired" in data:
            self.found.append(f"<!--{data[:80]}")


def assert_page_is_still(page: str) -> None:
    parser = Acting()
    parser.feed(page)
    parser.close()
    assert [] == parser.found


def test_watch_sees_what_acts() -> None:
    """The watch itself is not blind: each of these would act."""
    for page in (*ACTIVE[7:10], '<p onclick="wl_fired()">', '<a href="javascript:wl_fired()">x</a>'):
        parser = Acting()
        parser.feed(page)
        parser.close()
        assert parser.found, page


def assert_no_formula(path: Path) -> None:
    with path.open(encoding="utf-8", newline="") as file:
        for line in csv.reader(file):
            for cell in line:
                assert not cell.startswith(("=", "+", "-", "@", "\t", "\r")) or is_number(cell), (
                    path.name,
                    cell,
                )


def is_number(cell: str) -> bool:
    try:
        float(cell)
    except ValueError:
        return False
    return True
