"""A built wheel is whole: it works in an environment that holds nothing of this repository."""

from __future__ import annotations

import csv
import json
import os
import shutil
import subprocess
import sys
import sysconfig
import venv
import zipfile
from collections.abc import Callable
from email.parser import Parser
from pathlib import Path

import pytest

pytestmark = pytest.mark.workflow

ADDED = {"py.typed", "report/page.html.j2", "report/page.css"}
"""Files beside the modules that the package cannot do without."""


@pytest.fixture(scope="module")
def wheel(tmp_path_factory: pytest.TempPathFactory, repository: Path) -> Path:
    """Build from a copy, so that nothing an earlier build left behind can get in."""
    sources = tmp_path_factory.mktemp("sources")
    for name in ("pyproject.toml", "README.md", "LICENSE"):
        shutil.copy(repository / name, sources / name)
    for name in ("src", "config", "workflow/schemas"):
        leave_out = shutil.ignore_patterns("__pycache__", "*.egg-info", ".*")
        shutil.copytree(repository / name, sources / name, ignore=leave_out)
    into = tmp_path_factory.mktemp("wheel")
    command = [sys.executable, "-m", "pip", "wheel", "--quiet", "--no-deps", "--no-index"]
    built = subprocess.run(
        [*command, "--no-build-isolation", "--wheel-dir", str(into), str(sources)],
        capture_output=True,
        text=True,
    )
    assert built.returncode == 0, built.stdout + built.stderr
    (found,) = into.glob("wrackline-*.whl")
    return found


@pytest.fixture(scope="module")
def installed(wheel: Path, tmp_path_factory: pytest.TempPathFactory) -> Path:
    """The programs of an environment with the wheel in it; other packages are those that run this test.

    They come by a path file, whose folder's own path files are not followed: the editable install stays unseen.
    """
    environment = tmp_path_factory.mktemp("environment")
    venv.create(environment, with_pip=False)
    programs = environment / "bin"
    packages = Path(
        sysconfig.get_path(
            "purelib", vars={"base": str(environment), "platbase": str(environment)}, scheme="venv"
        )
    )
    (packages / "others.pth").write_text(sysconfig.get_path("purelib") + "\n", encoding="utf-8")
    command = [sys.executable, "-m", "pip", "--python", str(programs / "python"), "install", "--quiet"]
    put = subprocess.run([*command, "--no-deps", "--no-index", str(wheel)], capture_output=True, text=True)
    assert put.returncode == 0, put.stdout + put.stderr
    return programs


@pytest.fixture(scope="module")
def call(
    installed: Path, tmp_path_factory: pytest.TempPathFactory
) -> Callable[..., subprocess.CompletedProcess[str]]:
    """Run one of its programs, from a folder that holds nothing, with nothing of the caller's Python paths."""
    elsewhere = tmp_path_factory.mktemp("elsewhere")
    bare = {name: value for name, value in os.environ.items() if not name.startswith("PYTHON")}
    bare["MPLCONFIGDIR"] = str(elsewhere / "matplotlib")

    def run(program: str, *words: str) -> subprocess.CompletedProcess[str]:
        return subprocess.run(
            [str(installed / program), *words], cwd=elsewhere, env=bare, capture_output=True, text=True
        )

    return run


def is_cache(path: Path) -> bool:
    """Whether Python or a checker left the file."""
    return any(part == "__pycache__" or part.startswith(".") for part in path.parts)


def test_wheel_holds_every_module_and_file_of_the_package(wheel: Path, repository: Path) -> None:
    package = repository / "src" / "wrackline"
    wanted = {
        path.relative_to(package).as_posix()
        for path in package.rglob("*")
        if path.is_file() and not is_cache(path.relative_to(package))
    }
    assert wanted >= ADDED
    held = set(zipfile.ZipFile(wheel).namelist())
    assert set() == wanted - {name.removeprefix("wrackline/") for name in held}
    assert {"wrackline"} == {
        name.split("/")[0] for name in held if ".dist-info/" not in name and ".data/" not in name
    }


def test_wheel_brings_schema_and_defaults_for_editors(wheel: Path, repository: Path) -> None:
    archive = zipfile.ZipFile(wheel)
    brought = {
        name.split("/")[-1]: archive.read(name) for name in archive.namelist() if "/share/wrackline/" in name
    }
    assert {"study.schema.json", "defaults.yaml"} == set(brought)
    assert (repository / "workflow/schemas/study.schema.json").read_bytes() == brought["study.schema.json"]
    assert (repository / "config/defaults.yaml").read_bytes() == brought["defaults.yaml"]


def test_wheel_names_its_licence_and_asks_for_nothing_that_only_tests_need(wheel: Path) -> None:
    archive = zipfile.ZipFile(wheel)
    (name,) = [name for name in archive.namelist() if name.endswith(".dist-info/METADATA")]
    metadata = Parser().parsestr(archive.read(name).decode("utf-8"))
    assert "GPL-3.0-or-later" == metadata["License-Expression"]
    always = [need for need in metadata.get_all("Requires-Dist") if "extra ==" not in need]
    assert any(need.startswith("numpy") for need in always)
    assert not any(need.startswith(("pytest", "hypothesis", "snakemake", "lmoments3")) for need in always)


def test_package_comes_from_the_wheel_alone(
    call: Callable[..., subprocess.CompletedProcess[str]], installed: Path
) -> None:
    told = call("python", "-c", "import wrackline; print(wrackline.__file__)")
    assert told.returncode == 0, told.stderr
    assert Path(told.stdout.strip()).is_relative_to(installed.parent)


def test_every_stage_and_page_template_loads(call: Callable[..., subprocess.CompletedProcess[str]]) -> None:
    program = (
        "import importlib, pkgutil, wrackline\n"
        "names = [m.name for m in pkgutil.walk_packages(wrackline.__path__, 'wrackline.')]\n"
        "[importlib.import_module(name) for name in names]\n"
        "from importlib.resources import files\n"
        "here = files('wrackline.report')\n"
        "assert len((here / 'page.css').read_text()) > 1000 and '<html' in (here / 'page.html.j2').read_text()\n"
        "print(len(names))\n"
    )
    told = call("python", "-W", "error", "-c", program)
    assert told.returncode == 0, told.stderr
    assert int(told.stdout) > 80


def test_commands_work_outside_the_repository(
    call: Callable[..., subprocess.CompletedProcess[str]], tmp_path: Path
) -> None:
    helped = call("wrackline", "--help")
    assert helped.returncode == 0, helped.stderr
    assert {"check", "new", "import", "fit"} <= set(helped.stdout.split())

    started = call("wrackline", "new", str(tmp_path / "region"))
    assert started.returncode == 0, started.stderr
    assert (tmp_path / "region" / "study.yaml").is_file()
    empty = call("wrackline", "check", str(tmp_path / "region" / "study.yaml"))
    assert 1 == empty.returncode, "tables without rows are told, not a crash"
    assert "Traceback" not in empty.stderr

    peaks = tmp_path / "peaks.csv"
    with peaks.open("w", encoding="utf-8", newline="") as file:
        rows = csv.writer(file)
        rows.writerow(["water_year", "flow"])
        rows.writerows((1990 + n, 100 + 37 * n % 61 + n * n % 17) for n in range(30))
    fitted = call("wrackline", "fit", str(peaks), "--json")
    assert fitted.returncode == 0, fitted.stderr
    document = json.loads(fitted.stdout)
    assert 30 == document["n_peaks"]
    assert all(q["lower"] < q["flow"] < q["upper"] for q in document["quantiles"])
