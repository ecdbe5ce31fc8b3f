"""The import as a user meets it: what is written, what is refused, how the study checks afterwards."""

from __future__ import annotations

import sys
from pathlib import Path
from typing import Any

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

import wrackline
from wrackline import cli
from wrackline.study.faults import StudyFaults

HEADER = "agency_cd\tsite_no\tpeak_dt\tpeak_tm\tpeak_va\tpeak_cd\tgage_ht\tgage_ht_cd\tyear_last_pk\n"
WIDTHS = "5s\t15s\t10d\t6s\t8s\t33s\t8s\t27s\t4s\n"
SITES = "agency_cd\tsite_no\tstation_nm\tdec_lat_va\tdec_long_va\tdrain_area_va\n5s\t15s\t50s\t16s\t16s\t8s\n"


def peaks_text() -> str:
    """Six invented gauges of 15 years, with a historic flood, bounds, a partial date and a flood without discharge."""
    rows = [
        f"USGS\t0099010{gauge}\t{year}-0{1 + (gauge * year) % 9}-14\t\t{1000 + 37 * ((gauge + 2) * year % 101)}\t\t9.1\t\t"
        for gauge in range(6)
        for year in range(1971, 1986)
    ]
    rows += [
        "USGS\t00990100\t1869-07\t\t\t7\t42.30\t\t",
        "USGS\t00990101\t1936-03-18\t\t90000\t7,Bd\t24.50\t\t1902",
        "USGS\t00990102\t1986-01-09\t\t310\t4\t\t\t",
        "USGS\t00990102\t1987-01-09\t\t5100\t2,8\t\t\t",
        "USGS\t00990103\t1988\t\t1700\tBm\t\t\t",
    ]
    return "# Invented\n#\n" + HEADER + WIDTHS + "\n".join(rows) + "\n"


def sites_text(*, areas: bool = True) -> str:
    rows = [f"USGS\t0099010{n}\tBROOK {n}\t4{n}.125\t-80.{n}5\t{20.5 + n if areas else ''}" for n in range(6)]
    return SITES + "\n".join(rows) + "\n"


def put(folder: Path, **texts: str) -> list[Path]:
    for name, text in texts.items():
        (folder / f"{name}.txt").write_text(text, encoding="utf-8")
    return [folder / f"{name}.txt" for name in texts]


def run(monkeypatch: Any, capsys: Any, *words: object) -> tuple[int, str, str]:
    monkeypatch.setattr(sys, "argv", ["wrackline", *map(str, words)])
    with pytest.raises(SystemExit) as ended:
        cli.main()
    printed = capsys.readouterr()
    return int(ended.value.code or 0), printed.out, printed.err


def test_an_import_with_a_site_list_checks_clean(tmp_path: Path) -> None:
    done = wrackline.import_peaks(put(tmp_path, peaks=peaks_text(), sites=sites_text()), tmp_path / "study")
    checked = wrackline.check(tmp_path / "study" / "study.yaml")
    assert () == checked.problems
    assert "6 gauges, 94 rows of peaks (91 used, 2 as intervals, 1 left out)" in checked.summary
    assert 101 == len(done.account)
    assert ["1986", "310"] == [str(done.thresholds[name].iloc[0]) for name in ("first_year", "low")]


def test_flows_keep_their_unit_through_the_study(tmp_path: Path) -> None:
    wrackline.import_peaks(put(tmp_path, peaks=peaks_text(), sites=sites_text()), tmp_path / "study")
    study = wrackline.read_study(tmp_path / "study" / "study.yaml")
    first = next(line.split("\t") for line in peaks_text().splitlines() if "\t1971-" in line)
    # 0.3048 m per foot, exact by definition.
    assert float(first[4]) * 0.3048**3 == pytest.approx(study.records.flow_low[0], rel=1e-12)
    # 1.609344 km per mile, exact by definition.
    assert 20.5 * 1.609344**2 == pytest.approx(study.gauges["area_km2"].iloc[0], rel=1e-9)


def test_missing_areas_are_told_by_the_import_and_by_the_check(tmp_path: Path) -> None:
    files = put(tmp_path, peaks=peaks_text(), sites=sites_text(areas=False))
    done = wrackline.import_peaks(files, tmp_path / "study")
    (warning,) = (w for w in done.warnings if w.code == "to_fill_in")
    assert ("area", True) == (warning.column, "in mi2" in warning.mend)
    problems = wrackline.check(tmp_path / "study" / "study.yaml").problems
    assert {("gauges.csv", "area", "blank")} == {(f.file, f.column, f.code) for f in problems}


def test_the_command_prints_what_became_of_rows_and_codes(
    tmp_path: Path, monkeypatch: Any, capsys: Any
) -> None:
    files = put(tmp_path, peaks=peaks_text())
    status, out, err = run(monkeypatch, capsys, "import", *files, "--into", tmp_path / "study")
    assert (0, "") == (status, err)
    assert "peaks.txt: 95 rows read: 94 peaks, 1 left out." in out
    assert (
        "code 4 on 1 rows (less than the value, the smallest recordable: high, that year's threshold)" in out
    )
    assert "94 peaks (1 historic) of 6 gauges, 1 spans of thresholds." in out


def test_a_second_import_is_refused_and_nothing_changes(
    tmp_path: Path, monkeypatch: Any, capsys: Any
) -> None:
    files = put(tmp_path, peaks=peaks_text())
    wrackline.import_peaks(files, tmp_path / "study")
    before = {path: path.read_bytes() for path in (tmp_path / "study").iterdir()}
    status, _, err = run(monkeypatch, capsys, "import", *files, "--into", tmp_path / "study")
    assert 1 == status
    assert "The table has rows already; nothing is overwritten. Import into another folder" in err
    assert before == {path: path.read_bytes() for path in (tmp_path / "study").iterdir()}


@pytest.mark.parametrize(
    ("content", "status"), [("<html>busy</html>", 2), ("", 2), (HEADER + "USGS\t00990100\tx\t\t5\n", 1)]
)
def test_exit_status_tells_unreadable_from_faulty(
    content: str, status: int, tmp_path: Path, monkeypatch: Any, capsys: Any
) -> None:
    files = put(tmp_path, good=peaks_text(), bad=content)
    got, out, err = run(monkeypatch, capsys, "import", *files, "--into", tmp_path / "study")
    assert status == got
    assert "bad.txt" in err
    assert "Traceback" not in out + err


def test_a_missing_file_and_a_folder_end_with_2(tmp_path: Path, monkeypatch: Any, capsys: Any) -> None:
    status, _, err = run(
        monkeypatch, capsys, "import", tmp_path, tmp_path / "no.txt", "--into", tmp_path / "s"
    )
    assert 2 == status
    assert "There is no such file" in err
    assert "This is a folder" in err


def test_a_new_study_in_other_units_refuses_the_import_until_its_units_are_set(tmp_path: Path) -> None:
    folder = tmp_path / "study"
    from wrackline.study.starting import start_study

    start_study(folder)
    files = put(tmp_path, peaks=peaks_text(), sites=sites_text())
    with pytest.raises(StudyFaults) as caught:
        wrackline.import_peaks(files, folder)
    assert ["other_unit", "other_unit"] == [fault.code for fault in caught.value.problems]
    study_file = folder / "study.yaml"
    text = study_file.read_text(encoding="utf-8").replace("flow: m3/s", "flow: ft3/s")
    study_file.write_text(text.replace("area: km2", "area: mi2"), encoding="utf-8")
    written = wrackline.import_peaks(files, folder).written
    assert study_file not in written
    assert 95 == len((folder / "peaks.csv").read_text(encoding="utf-8").splitlines())


def test_the_study_decides_on_the_water_year_and_a_different_option_is_refused(tmp_path: Path) -> None:
    folder = tmp_path / "study"
    folder.mkdir()
    (folder / "study.yaml").write_text(
        "units: {flow: ft3/s, area: mi2}\nwater_year_starts: 7\n", encoding="utf-8"
    )
    row = "USGS\t00990100\t1936-08-18\t\t500\t\t\t\t\n"
    files = put(tmp_path, peaks=HEADER + WIDTHS + row)
    with pytest.raises(StudyFaults) as caught:
        wrackline.import_peaks(files, folder, water_year_starts=10)
    assert ["other_water_year"] == [fault.code for fault in caught.value.problems]
    assert [1937] == wrackline.import_peaks(files, folder).peaks["water_year"].tolist()


def test_filled_gauges_are_left_as_they_are(tmp_path: Path) -> None:
    wrackline.import_peaks(put(tmp_path, sites=sites_text()), tmp_path / "study")
    before = (tmp_path / "study" / "gauges.csv").read_bytes()
    done = wrackline.import_peaks(put(tmp_path, peaks=peaks_text()), tmp_path / "study")
    assert "kept_as_it_is" in {warning.code for warning in done.warnings}
    assert before == (tmp_path / "study" / "gauges.csv").read_bytes()
    assert () == wrackline.check(tmp_path / "study" / "study.yaml").problems


def test_a_file_named_twice_is_read_once(tmp_path: Path) -> None:
    (path,) = put(tmp_path, peaks=peaks_text())
    done = wrackline.import_peaks([path, tmp_path / "." / "peaks.txt"], tmp_path / "study")
    assert 95 == len(done.account)
    assert "named_twice" in {warning.code for warning in done.warnings}


def test_files_of_the_same_name_are_told_apart(tmp_path: Path) -> None:
    for name in ("a", "b"):
        (tmp_path / name).mkdir()
        put(tmp_path / name, peaks=peaks_text())
    files = [tmp_path / name / "peaks.txt" for name in ("a", "b")]
    account = wrackline.import_peaks(files, tmp_path / "study").account
    assert {str(files[0]): 95, str(files[1]): 95} == account["file"].value_counts().to_dict()


def test_a_name_cannot_become_a_spreadsheet_formula(tmp_path: Path) -> None:
    text = sites_text().replace("BROOK 0", '=HYPERLINK("x")')
    wrackline.import_peaks(put(tmp_path, sites=text), tmp_path / "study")
    assert "'=HYPERLINK" in (tmp_path / "study" / "gauges.csv").read_text(encoding="utf-8")


DAMAGE = st.lists(
    st.tuples(st.sampled_from(["byte", "cut", "double", "swap"]), st.integers(0, 10**6), st.integers(0, 255)),
    min_size=1,
    max_size=6,
)
WIDE = "water_year,00990100,B\n1990,12.5,<3\n1991,,>8\n1992,3,4\n"


def damaged(content: bytes, blows: list[tuple[str, int, int]]) -> bytes:
    data = bytearray(content)
    for kind, place, value in blows:
        at = place % (len(data) or 1)
        if kind == "byte" and data:
            data[at] = value
        elif kind == "cut":
            data = data[:at] if value % 2 else data[at:]
        elif kind == "double":
            data = data[:at] + data[max(0, at - value) :]
        else:
            data[at : at + 1] = [b"\t", b"\n", b"\r", b"#", b",", b'"', b"-", b"\xe9", b""][value % 9]
    return bytes(data)


@settings(
    max_examples=150,
    deadline=None,
    derandomize=True,
    suppress_health_check=[HealthCheck.function_scoped_fixture],
)
@given(base=st.sampled_from([peaks_text(), sites_text(), peaks_text() + sites_text(), WIDE]), blows=DAMAGE)
def test_random_damage_is_told_or_taken_and_the_account_adds_up(
    base: str, blows: list[tuple[str, int, int]], tmp_path_factory: pytest.TempPathFactory
) -> None:
    folder = tmp_path_factory.mktemp("damage")
    (folder / "file.txt").write_bytes(damaged(base.encode(), blows))
    try:
        done = wrackline.import_peaks(folder / "file.txt", folder / "study", flow_unit="ft3/s")
    except StudyFaults:
        assert not (folder / "study").exists()
        return
    assert len(done.peaks) == (done.account["fate"] == "peak").sum()
    assert not done.account.duplicated(["file", "row", "gauge_id"]).any()
    problems = wrackline.check(folder / "study" / "study.yaml").problems
    assert set() == {fault.code for fault in problems if fault.file == "peaks.csv"} - {
        "too_few_gauges",
        "no_rows",
    }


@settings(max_examples=60, deadline=None, derandomize=True)
@given(content=st.one_of(st.binary(max_size=300), st.text(max_size=300).map(str.encode)))
def test_garbage_is_told(content: bytes, tmp_path_factory: pytest.TempPathFactory) -> None:
    folder = tmp_path_factory.mktemp("garbage")
    (folder / "file.txt").write_bytes(content)
    with pytest.raises(StudyFaults):
        wrackline.import_peaks(folder / "file.txt", folder / "study", flow_unit="ft3/s")
