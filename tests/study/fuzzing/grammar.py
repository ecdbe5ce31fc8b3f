"""A grammar of damage: what may be wrong with a study's cells, rows, columns, bytes, files and settings.

Every rule takes the small valid study of these tests, or a folder that holds one, and draws one fault. A broken
study is a few faults together. Texts that would do something, were they taken for more than text, name `wl_fired`.
"""

from __future__ import annotations

import codecs
import gzip
import random
from collections.abc import Callable
from pathlib import Path
from typing import Any

from hypothesis import strategies as st

Draw = Callable[[st.SearchStrategy[Any]], Any]

ACTIVE = (
    "=wl_fired()",
    "+wl_fired()",
    "-1+wl_fired()",
    "@wl_fired",
    '=HYPERLINK("http://x.example/wl_fired","see")',
    "\t=wl_fired()",
    " =wl_fired()",
    "<script>wl_fired()</script>",
    "</script><script>wl_fired()</script>",
    "</style></title><img src=x onerror=wl_fired()>",
    '"><img src=x onerror="wl_fired()">',
    "' onmouseover='wl_fired()",
    "<!--<script>wl_fired()",
    "]]><svg onload=wl_fired()>",
    "javascript:wl_fired()",
    "{{ wl_fired() }}{% wl_fired %}",
    "${wl_fired}`wl_fired`",
    "\x1b[31mwl_fired\x1b[2J",
    "\x1b]8;;http://x.example/wl_fired\x07",
    "name\r\npeaks.csv, row 2: wl_fired",
)
NUMBERS = (
    "1e308", "1.7976931348623157e308", "-1e308", "1e309", "1e-320", "5e-324", "9" * 400, "0." + "0" * 400 + "1", "-0.0", "+5",
    "9007199254740993", "18446744073709551616", "nan", "inf", "-inf", "Infinity", "0x1F", "1_000", "1,5", "1.234,5", "٣٤", "½",
    "1e5", "-999", "-9999", "1 000", "1\u00a0000", "12%", "<5", "TRUE", "1/2", "1j", "0", "0.0", "1e-5", "99999", "1e15",
)  # fmt: skip
WORDS = (
    "", " ", "\u00a0", "\u200b", "\ufeff", "\u202e", "\u2028", "\x85", "\x0b", "\x0c", "\x1f", "\x7f", "\U000e0001", "e\u0301", "ﬁ", "İ", "😀", "Å" * 300,
    "None", "NULL", "N/A", "NA", "true", "yes", "..", "../../etc", "a/b", "a\\b", "C:\\x", "CON", ".", "-", "_", "~", "*", "?", "'", '"', '""', "''x",
    "00101", "101", "101.0", "1e2", "both", "historic", "regulated regulated", "estimated;revised", "exclude", "2001-02-29", "2000-13", "0000-00-00",
    "10000-01-01", "1999-1-1", "01/02/2003", "2001-01-01T00:00", "-0001-01-01", "north", "south", "T1", "gauge_id", "water_year", "area", "x" * 70_000, "y,z" * 60_000,
)  # fmt: skip
ENCODINGS = (
    "utf-16",
    "utf-16-le",
    "utf-16-be",
    "utf-32",
    "utf-32-le",
    "utf-8-sig",
    "cp1252",
    "cp1251",
    "shift_jis",
    "cp037",
    "utf-7",
    "mac_roman",
)
SETTINGS = (
    "study: {title: '<script>wl_fired()</script>', region: '=wl_fired()', agency: '\"><img src=x onerror=wl_fired()>'}",
    "study: {title: \"\\x1b[2Jwl_fired\\0\"}",
    "study: {edition: '../../wl_fired', purpose: \"a\\nb\"}",
    "study: [1, 2]", "study: 3", "study: null", "study: {title: {a: b}}", "study: {title: 2026-01-01}", "study: !!python/object/apply:os.system [ls]",
    "study: {title: !!binary aGVsbG8=}", "study: {title: !!binary '***'}", "study: {title: !!set {a, b}}", "study: {title: !wl_fired x}",
    "seed: !!int abc", "seed: !!float abc", "seed: -1", "seed: 1e400", "seed: .nan", "seed: " + "9" * 5000, "seed: 0o17", "seed: 1:30:00", "seed: true",
    "seed: 99999999999999999999999999", "seed: [", "seed: {", "seed: 'a", "seed: \"\\q\"", "seed: *nothing", "seed: &a [*a]", "seed: &a {b: *a}",
    "confidence: 0", "confidence: 1", "confidence: .inf", "confidence: 1e-300", "confidence: 0.999999999999999999", "confidence: '0.9'",
    "water_year_starts: 13", "water_year_starts: 0", "water_year_starts: 7", "water_year_starts: 1.5", "water_year_starts: October",
    "output: ''", "output: .", "output: ..", "output: ../elsewhere", "output: /", "output: work", "output: work/intake", "output: study.yaml", "output: peaks.csv",
    "output: \"a\\0b\"", "output: " + "d" * 300, "output: 'a: b <script>wl_fired()</script>'", "output: [a]", "output: '{stage}'", "output: .wrackline.lock",
    "aeps: {gauges: [], targets: []}", "aeps: {gauges: [0.5, 0.5]}", "aeps: {gauges: [0, 1, 2]}", "aeps: {targets: [1e-300]}", "aeps: {targets: [.nan]}", "aeps: {targets: 0.5}",
    "aeps: {targets: {a: 0.5}}", "aeps: {gauges: ['0.5', x]}", "aeps: {gauges: [[0.5]]}",
    "flags: {estimated: remove}", "flags: {wl_fired: keep}", "flags: {estimated: exclude, regulated: keep}", "flags: []",
    "screening: {minimum_peaks: 1}", "screening: {minimum_peaks: 10.5}", "screening: {exclude: [nothing]}", "screening: {exclude: short_record}", "screening: {significance: 0.0}",
    "skew: {source: constant}", "skew: {source: map, given_map: nowhere.tif, why: just so}", "skew: {regressions: [[nothing]]}", "skew: {model: surface}", "skew: {regressions: [rain_mm]}",
    "pooling: {regions: polygons}", "pooling: {regions: one}", "pooling: {moves: [{gauge_id: 101, to: a, why: because}]}", "pooling: {moves: [{gauge_id: '', to: '', why: ''}]}",
    "pooling: {moves: [{gauge_id: '00101', to: '<b>wl_fired', why: '=wl_fired()'}]}", "pooling: {distributions: [{pool: south, distribution: GEV, why: because}]}",
    "regression: {attributes: [area, area, rain_mm]}", "regression: {attributes: [nothing]}", "regression: {transfer_area_ratio: [2, 1]}", "regression: {transfer_area_ratio: [1]}",
    "regression: {adopt: [{route: growth_curve, target_id: nowhere, why: because}]}",
    "? [a, b]\n: c", "? {a: b}\n: c", "<<: 3", "<<: {seed: 4}", "<<: [{seed: 4}, {seed: 5}]", "1: 2", "null: 3", "true: false", ".nan: 1", "'': 1", "\tseed: 1",
    "--- \nseed: 1", "...\nseed: 1", "%YAML 9.9\n---\nseed: 1", "- a\n- b", "|\n text", "# only a comment", "\x00", "\x07bell: 1", "\ufffe", "\ud7ff: 1", "seed : : 1",
    "deep: " + "[" * 3000 + "]" * 3000, "deep: " + "{a: " * 1200 + "1" + "}" * 1200, "deep:\n" + "\n".join("  " * n + "a:" for n in range(1, 400)),
    "l0: &l0 [x, x, x, x, x, x, x, x, x, x]\n" + "\n".join(f"l{n}: &l{n} [{', '.join([f'*l{n - 1}'] * 10)}]" for n in range(1, 9)),
    "many: {" + ", ".join(f"k{n}: {n}" for n in range(3000)) + "}",
)  # fmt: skip
INPUT_FILES = ("''", "nowhere.csv", ".", "..", "/", "study.yaml", "peaks.csv", "gauges.csv", '"a\\0b"', "n" * 300, "null", "3", "[peaks.csv]", "~/peaks.csv", "'http://x.example/peaks.csv'", "/dev/null", "'<script>wl_fired()</script>.csv'")  # fmt: skip
TABLES = (
    "gauges.csv",
    "peaks.csv",
    "thresholds.csv",
    "periods.csv",
    "targets.csv",
    "redundancy.csv",
    "ledger.csv",
)
FREE_TEXT = (("gauges.csv", "name"), ("targets.csv", "name"), ("targets.csv", "remark"), ("ledger.csv", "why"), ("ledger.csv", "by"), ("ledger.csv", "evidence"), ("periods.csv", "why"), ("thresholds.csv", "why"), ("redundancy.csv", "why"))  # fmt: skip

texts = st.one_of(
    st.sampled_from(ACTIVE), st.sampled_from(NUMBERS), st.sampled_from(WORDS), st.text(max_size=12)
).map(lambda text: text.encode("utf-8", "ignore").decode("utf-8"))
"""What may stand in a cell; lone surrogates cannot be saved as UTF-8."""


# --- cells, rows and columns of the study before it is written ---


def free_text(draw: Draw, study: Any) -> str:
    """Text that is valid where it stands, so that it travels to the page and the tables."""
    file, column = draw(st.sampled_from(FREE_TEXT))
    word = draw(st.sampled_from(ACTIVE))
    row = draw(st.integers(2, len(study.tables[file]))) if len(study.tables[file]) > 1 else 1
    study.put(file, row, column, word)
    return f"{file} row {row} {column} says {word!r}"


def any_cell(draw: Draw, study: Any) -> str:
    file = draw(st.sampled_from(sorted(study.tables)))
    table = study.tables[file]
    row = draw(st.integers(0, len(table) - 1))
    word = draw(texts)
    if table[row]:
        at = draw(st.integers(0, len(table[row]) - 1))
        table[row][at] = word
        return f"{file} row {row + 1} cell {at + 1} is {word[:40]!r}"
    return "nothing"


def a_number(draw: Draw, study: Any) -> str:
    """A cell of a numeric column becomes an odd number."""
    file, column = draw(
        st.sampled_from(
            [
                ("peaks.csv", "flow"),
                ("peaks.csv", "low"),
                ("peaks.csv", "high"),
                ("peaks.csv", "water_year"),
                ("gauges.csv", "area"),
                ("gauges.csv", "latitude"),
                ("gauges.csv", "rain_mm"),
                ("targets.csv", "area"),
                ("targets.csv", "longitude"),
                ("thresholds.csv", "low"),
                ("thresholds.csv", "first_year"),
                ("periods.csv", "last_year"),
                ("ledger.csv", "value"),
                ("ledger.csv", "water_year"),
            ]
        )
    )
    if len(study.tables[file]) < 2 or column not in study.tables[file][0]:
        return "nothing"
    row, word = draw(st.integers(2, len(study.tables[file]))), draw(st.sampled_from(NUMBERS))
    at = study.tables[file][0].index(column)
    if at < len(study.tables[file][row - 1]):
        study.tables[file][row - 1][at] = word
    return f"{file} row {row} {column} is {word[:40]}"


def rows(draw: Draw, study: Any) -> str:
    file = draw(st.sampled_from(sorted(study.tables)))
    table = study.tables[file]
    what = draw(
        st.sampled_from(
            [
                "twice",
                "gone",
                "ragged",
                "blank",
                "only_header",
                "no_header",
                "shuffled",
                "reversed",
                "header_again",
                "turned",
            ]
        )
    )
    at = draw(st.integers(1, max(len(table) - 1, 1)))
    if what == "twice":
        table.insert(at, list(table[min(at, len(table) - 1)]))
    elif what == "gone":
        del table[at : at + draw(st.integers(1, 20))]
    elif what == "ragged":
        table.insert(at, ["x"] * draw(st.integers(0, 30)))
    elif what == "blank":
        table.insert(at, [" "] * len(table[0]))
    elif what == "only_header":
        del table[1:]
    elif what == "no_header":
        del table[0]
        if not table:
            table.append([""])
    elif what == "shuffled":
        random.Random(draw(st.integers(0, 99))).shuffle(table)
    elif what == "reversed":
        table[1:] = table[1:][::-1]
    elif what == "header_again":
        table.insert(at, list(table[0]))
    elif what == "turned" and len({len(line) for line in table}) == 1:
        table[:] = [list(line) for line in zip(*table, strict=True)]
    return f"{file}: row {at + 1} {what}"


def columns(draw: Draw, study: Any) -> str:
    file = draw(st.sampled_from(sorted(study.tables)))
    table = study.tables[file]
    if len({len(line) for line in table}) != 1 or not table[0]:
        return "nothing"
    what = draw(st.sampled_from(["twice", "gone", "renamed", "capital", "added", "nameless", "moved"]))
    at = draw(st.integers(0, len(table[0]) - 1))
    for number, line in enumerate(table):
        if what == "twice":
            line.append(line[at])
        elif what == "gone" and len(line) > 1:
            del line[at]
        elif what == "moved":
            line.insert(0, line.pop(at))
        elif what in ("added", "nameless"):
            line.append(("note" if what == "added" else "") if number == 0 else "x")
    if what == "renamed":
        table[0][at] = draw(texts)
    elif what == "capital":
        table[0][at] = table[0][at].upper()
    return f"{file}: column {at + 1} {what}"


def settings(draw: Draw, study: Any) -> str:
    """Lines of the study file, at its end or in the place of the part they set."""
    line = draw(st.sampled_from(SETTINGS))
    key = line.split(":")[0]
    where = draw(st.sampled_from(["end", "instead", "alone"]))
    if where == "alone":
        study.study = line + "\n"
    elif where == "instead":
        study.study = _without(study.study, key) + line + "\n"
    else:
        study.study += line + "\n"
    return f"study file, {where}: {line[:60]!r}"


def input_file(draw: Draw, study: Any) -> str:
    name = draw(
        st.sampled_from(
            [
                "gauges",
                "peaks",
                "thresholds",
                "periods",
                "targets",
                "redundancy",
                "ledger",
                "basins",
                "regions",
            ]
        )
    )
    value = draw(st.sampled_from(INPUT_FILES))
    study.study = study.study.replace(f"  {name}: {name}.csv\n", "").replace(
        "inputs:\n", f"inputs:\n  {name}: {value}\n"
    )
    return f"inputs.{name}: {value[:40]}"


def _without(text: str, key: str) -> str:
    """The study file without one part: its line and the indented ones that follow."""
    kept, inside = [], False
    for line in text.splitlines(keepends=True):
        inside = line.startswith(f"{key}:") or (inside and line.startswith((" ", "\n")))
        kept += [] if inside else [line]
    return "".join(kept)


# --- bytes and files, after the study is written ---


def saved_otherwise(draw: Draw, folder: Path) -> str:
    path = folder / draw(st.sampled_from([*TABLES, "study.yaml"]))
    if not path.is_file():
        return "nothing"
    data = path.read_bytes()
    ways: dict[str, Callable[[], bytes]] = {
        "CRLF": lambda: data.replace(b"\n", b"\r\n"),
        "CR": lambda: data.replace(b"\n", b"\r"),
        "mixed ends": lambda: data.replace(b"\n", b"\r\n", 3).replace(b"3\n", b"3\r"),
        "doubled CR": lambda: data.replace(b"\n", b"\r\r\n"),
        "empty": lambda: b"",
        "only a mark": lambda: codecs.BOM_UTF8,
        "two marks": lambda: codecs.BOM_UTF8 * 2 + data,
        "blanks": lambda: b" \n\t\n",
        "cut": lambda: data[: draw(st.integers(0, len(data)))],
        "semicolons": lambda: data.replace(b",", b";"),
        "tabs": lambda: data.replace(b",", b"\t"),
        "gzip": lambda: gzip.compress(data, mtime=0),
        "workbook": lambda: b"PK\x03\x04" + data,
        "end mark": lambda: data + b"\x1a",
        "open quote": lambda: data + b'"open\n',
        "quotes inside": lambda: data.replace(b",", b',"a"b,', 1),
        "one line": lambda: data.replace(b"\n", b" "),
        "NUL": lambda: _put(data, draw(st.integers(0, len(data))), b"\0" * draw(st.integers(1, 3))),
        "NULs at the end": lambda: data + b"\0" * 4096,
        "odd bytes": lambda: _put(
            data, draw(st.integers(0, len(data))), draw(st.binary(min_size=1, max_size=6))
        ),
        "giant cell": lambda: data + b"z" * 300_000 + b"\n",
        "many blank rows": lambda: data + b"\n" * 5000,
        "many commas": lambda: data + b"," * 5000 + b"\n",
        "bytes": lambda: draw(st.binary(max_size=400)),
        **{
            name: lambda name=name: data.decode("utf-8", "replace").encode(name, "replace")
            for name in ENCODINGS
        },  # type: ignore[misc]
    }
    way = draw(st.sampled_from(sorted(ways)))
    path.write_bytes(ways[way]())
    return f"{path.name}: {way}"


def _put(data: bytes, at: int, more: bytes) -> bytes:
    return data[:at] + more + data[at:]


def files(draw: Draw, folder: Path) -> str:
    """A file is gone, a folder, a link that leads nowhere, in a circle, or to another file."""
    path = folder / draw(st.sampled_from([*TABLES, "study.yaml"]))
    what = draw(
        st.sampled_from(
            [
                "gone",
                "folder",
                "link to nothing",
                "link to itself",
                "link to a neighbour",
                "link to the folder",
                "link to a copy",
            ]
        )
    )
    content = path.read_bytes() if path.is_file() else b""
    if path.is_dir() and not path.is_symlink():
        return "nothing"
    path.unlink(missing_ok=True)
    if what == "folder":
        path.mkdir()
    elif what == "link to nothing":
        path.symlink_to("nowhere.csv")
    elif what == "link to itself":
        path.symlink_to(path.name)
    elif what == "link to a neighbour":
        path.symlink_to("gauges.csv" if path.name != "gauges.csv" else "peaks.csv")
    elif what == "link to the folder":
        path.symlink_to(".")
    elif what == "link to a copy":
        copy = folder / f"copy of {path.name}"
        copy.write_bytes(content)
        path.symlink_to(copy.name)
    return f"{path.name}: {what}"


def polygons(draw: Draw, folder: Path) -> str:
    """A file of polygons that is none, or a good one damaged; the study file's inputs name it."""
    name = draw(st.sampled_from(["basins", "regions"]))
    way = draw(st.sampled_from(["none", "none", "none", "bytes", "cut", "whole", "table"]))
    if way == "none":
        content = draw(st.sampled_from(NO_POLYGONS))
    else:
        content = bytearray((EXAMPLE / "regions.gpkg").read_bytes())
        if way == "bytes":
            for _ in range(draw(st.integers(1, 6))):
                content[draw(st.integers(0, len(content) - 1))] = draw(st.integers(0, 255))
        elif way == "cut":
            del content[draw(st.integers(0, len(content) - 1)) :]
        elif way == "table":
            content = content.replace(b"POLYGON", b"NOTHING")
    (folder / f"{name}.gpkg").write_bytes(content)
    study = folder / "study.yaml"
    if study.is_file():
        line = f"inputs:\n  {name}: {name}.gpkg\n".encode()
        study.write_bytes(study.read_bytes().replace(b"inputs:\n", line, 1))
    return f"{name}.gpkg: {way} {bytes(content[:20])!r}"


NO_POLYGONS = (
    b"",
    b"SQLite format 3\0" + b"\0" * 100,
    b"site_id,wkt\n00101,POLYGON((0 0))\n",
    b"\0" * 64,
    b'{"type": "FeatureCollection", "features": []}',
    b'{"type": "FeatureCollection", "features": [{"type": "Feature", "properties": {"region": "wl"}, "geometry": null}]}',
    b"<kml>wl_fired</kml>",
)
EXAMPLE = Path(__file__).resolve().parents[3] / "example_region"

IN_STUDY = (free_text, free_text, any_cell, any_cell, a_number, rows, columns, settings, input_file)
IN_FOLDER = (saved_otherwise, saved_otherwise, files, polygons)


def break_study(draw: Draw, study: Any, folder: Path) -> tuple[Path, list[str]]:
    """Draw a few faults, write the study with them into ``folder``; return its study file and the faults in words."""
    in_study = draw(st.lists(st.sampled_from(IN_STUDY), max_size=3))
    in_folder = draw(st.lists(st.sampled_from(IN_FOLDER), max_size=1 if in_study else 2))
    told = [fault(draw, study) for fault in in_study]
    study.study = study.study.encode("utf-8", "ignore").decode("utf-8")
    study_file = study.write(folder)
    return study_file, told + [fault(draw, folder) for fault in in_folder]
