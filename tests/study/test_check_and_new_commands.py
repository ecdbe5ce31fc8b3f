"""The commands as a user meets them: exit status, what is printed, never a traceback."""

from __future__ import annotations

import subprocess
import sys
from pathlib import Path
from typing import Any

import pytest

import wrackline
from wrackline import cli


def run(
    monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str], *words: str
) -> tuple[int, str, str]:
    monkeypatch.setattr(sys, "argv", ["wrackline", *words])
    with pytest.raises(SystemExit) as ended:
        cli.main()
    printed = capsys.readouterr()
    return int(ended.value.code or 0), printed.out, printed.err


def test_a_clean_study_ends_with_0(small_study: Any, tmp_path: Path, monkeypatch: Any, capsys: Any) -> None:
    status, out, err = run(monkeypatch, capsys, "check", str(small_study.write(tmp_path)))
    assert (0, "") == (status, err)
    assert "6 gauges, 73 rows of peaks (70 used, 0 as intervals, 3 left out), 2 targets, 2 decisions" in out


def test_problems_end_with_1_and_stand_under_their_file(
    small_study: Any, tmp_path: Path, monkeypatch: Any, capsys: Any
) -> None:
    small_study.put("peaks.csv", 6, "cause", "rainn")
    small_study.put("peaks.csv", 9, "flow", "[red]-3[/red]")
    status, out, _ = run(monkeypatch, capsys, "check", str(small_study.write(tmp_path)))
    assert 1 == status
    assert [
        "peaks.csv",
        "  row 6, column cause, value 'rainn': The word is not known here. Did you mean 'rain'?",
        "  row 9, column flow, value '[red]-3[/red]': A number is expected.",
        "2 problems, 0 warnings.",
    ] == [line.rstrip() for line in out.splitlines()]


@pytest.mark.parametrize("content", [None, b"a: [1", b"\xff\xfe\x00", b"- 1\n- 2\n", b"a: \x01"])
def test_an_unreadable_study_file_ends_with_2(
    content: bytes | None, tmp_path: Path, monkeypatch: Any, capsys: Any
) -> None:
    if content is not None:
        (tmp_path / "study.yaml").write_bytes(content)
    status, out, err = run(monkeypatch, capsys, "check", str(tmp_path / "study.yaml"))
    assert 2 == status
    assert "1 problem, 0 warnings." in out
    assert "Traceback" not in out + err


def test_a_folder_instead_of_the_study_file_ends_with_2(
    tmp_path: Path, monkeypatch: Any, capsys: Any
) -> None:
    status, out, _ = run(monkeypatch, capsys, "check", str(tmp_path))
    assert 2 == status
    assert str(tmp_path / "study.yaml") in out


def test_new_writes_a_study_once(tmp_path: Path, monkeypatch: Any, capsys: Any) -> None:
    folder = str(tmp_path / "mine")
    assert 0 == run(monkeypatch, capsys, "new", folder)[0]
    status, _, err = run(monkeypatch, capsys, "new", folder)
    assert 1 == status
    assert "exists" in err


def test_new_below_a_file_is_no_traceback(tmp_path: Path, monkeypatch: Any, capsys: Any) -> None:
    (tmp_path / "file").write_text("", encoding="utf-8")
    status, out, err = run(monkeypatch, capsys, "new", str(tmp_path / "file" / "mine"))
    assert 0 != status
    assert "Traceback" not in out + err


@pytest.mark.parametrize("command", ["check", "new"])
def test_help_tells_units_and_an_example(command: str, monkeypatch: Any, capsys: Any) -> None:
    status, out, _ = run(monkeypatch, capsys, command, "--help")
    assert 0 == status
    assert "Example: wrackline" in out
    assert "units" in out.lower()


def test_the_python_interface_mirrors_the_command(small_study: Any, tmp_path: Path) -> None:
    small_study.put("peaks.csv", 6, "cause", "rainn")
    assert ["unknown_cause"] == [
        fault.code for fault in wrackline.check(small_study.write(tmp_path)).problems
    ]


def test_importing_the_package_imports_nothing_heavy() -> None:
    code = "import sys, wrackline; print(sorted({'pandas', 'numpy', 'scipy', 'typer'} & set(sys.modules)))"
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert "[]" == done.stdout.strip()
