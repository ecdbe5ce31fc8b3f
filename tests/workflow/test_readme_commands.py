"""The README's commands are the ones that exist."""

from __future__ import annotations

import os
import re
import shlex
import subprocess
import sys
import tomllib
from pathlib import Path

import pytest

import start


@pytest.fixture(scope="module")
def commands(repository: Path) -> list[str]:
    """Lines of the README's blocks of commands, without comments."""
    blocks = re.findall(
        r"^```sh\n(.*?)^```$",
        (repository / "README.md").read_text(encoding="utf-8"),
        re.DOTALL | re.MULTILINE,
    )
    return [line.split("#")[0].strip() for block in blocks for line in block.splitlines() if line.strip()]


def test_readme_gives_the_two_commands_first(commands: list[str]) -> None:
    assert commands[:2] == ["python3 workflow/start.py run", "python3 workflow/start.py test"]


def test_every_start_command_of_the_readme_is_understood(
    commands: list[str], monkeypatch: pytest.MonkeyPatch
) -> None:
    own = [shlex.split(command) for command in commands if "workflow/start.py" in command]
    assert len(own) >= 3
    for words in own:
        monkeypatch.setattr(sys, "argv", words[1:])
        assert words[2] == start.read_arguments().command


def test_start_needs_only_the_standard_library(repository: Path) -> None:
    helped = subprocess.run(
        [sys.executable, "-I", "-S", str(repository / "workflow" / "start.py"), "--help"],
        capture_output=True,
        text=True,
    )
    assert helped.returncode == 0, helped.stderr
    assert "run" in helped.stdout
    assert "test" in helped.stdout


def test_snakemake_alone_finds_snakefile_and_profile_from_the_repositorys_root(
    tmp_path: Path, repository: Path
) -> None:
    study = tmp_path / "study.yaml"
    study.write_text("units: {flow: buckets}\n", encoding="utf-8")
    run = subprocess.run(
        [sys.executable, "-m", "snakemake", "--configfile", os.path.relpath(study, repository)],
        cwd=repository,
        capture_output=True,
        text=True,
    )
    assert "profiles/default" in run.stderr
    assert "value 'buckets'" in run.stderr
    assert run.returncode == 1


def test_environment_that_is_whole_is_not_set_up_again(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    done = []
    monkeypatch.setattr(start, "ENVIRONMENT", tmp_path / ".venv")
    monkeypatch.setattr(start, "MARK", tmp_path / ".venv" / "complete")
    monkeypatch.setattr(
        start, "make_environment", lambda: (tmp_path / ".venv").mkdir(exist_ok=True) or done.append("made")
    )
    monkeypatch.setattr(start, "install_packages", lambda: done.append("installed"))
    start.set_up()
    start.set_up()
    assert done == ["made", "installed"]

    start.MARK.write_text(start.environment_digest().split()[0] + " other-packages\n", encoding="utf-8")
    start.set_up()
    assert done == ["made", "installed", "installed"], "other packages: the environment itself stays"

    start.MARK.unlink()
    start.set_up()
    assert done == ["made", "installed", "installed", "made", "installed"], "a broken-off set-up is redone"


def test_missing_system_package_is_named(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(
        start.importlib.util, "find_spec", lambda name: None if name == "ensurepip" else object()
    )
    monkeypatch.setattr(start, "ENVIRONMENT", tmp_path / ".venv")
    with pytest.raises(SystemExit, match=r"apt-get install python3\.\d+-venv"):
        start.make_environment()


def test_exit_status_is_that_of_what_ran(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(start, "tool", lambda name: Path(sys.executable))
    assert start.call([sys.executable, "-c", "raise SystemExit(7)"]) == 7
    monkeypatch.setattr(start, "call", lambda command: 3 if "snakemake" in command else 5)
    assert start.run_study(start.EXAMPLE, 1) == 3
    assert start.run_tests(["-k", "nothing"]) == 5
    monkeypatch.setattr(start, "call", lambda command: 0 if "pytest" in command else 1)
    assert start.run_tests([]) == 1, "a failed check fails the command even when all tests pass"


def test_every_wrackline_command_of_the_readme_exists_with_its_options(commands: list[str]) -> None:
    from typer.testing import CliRunner

    from wrackline.cli import app

    own = [shlex.split(command) for command in commands if command.startswith("wrackline ")]
    assert {"new", "import", "check", "fit", "estimate", "freeze", "compare"} == {words[1] for words in own}
    for words in own:
        told = CliRunner().invoke(app, [words[1], "--help"])
        assert 0 == told.exit_code, words
        for option in [word for word in words if word.startswith("--")]:
            assert re.search(rf"^ +{option}\b", told.output, re.MULTILINE), (words[1], option)


def test_commands_for_one_gauge_and_for_a_new_study_work_as_written(
    commands: list[str], tmp_path: Path
) -> None:
    rows = "".join(f"{1980 + n},{90 + 31 * n % 47}\n" for n in range(25))
    (tmp_path / "peaks_of_one_gauge.csv").write_text("water_year,flow\n" + rows, encoding="utf-8")
    for name in ("new", "fit"):
        (command,) = [command for command in commands if command.startswith(f"wrackline {name} ")]
        ran = subprocess.run(
            [sys.executable, "-m", "wrackline.cli", *shlex.split(command)[1:]],
            cwd=tmp_path,
            capture_output=True,
            text=True,
        )
        assert 0 == ran.returncode, ran.stderr
    assert (tmp_path / "my_region" / "study.yaml").is_file()


def test_readme_fits_two_screens_and_its_links_lead_somewhere(repository: Path) -> None:
    text = (repository / "README.md").read_text(encoding="utf-8")
    assert 90 >= len(text.splitlines()), "about two screens"
    for page in ("README.md", "DEVELOPERS.md", "CHANGELOG.md", "example_region/README.md"):
        links = re.findall(r"\]\(([^)#]+)\)", (repository / page).read_text(encoding="utf-8"))
        for link in links:
            assert "://" in link or (repository / page).parent.joinpath(link).exists(), (page, link)


def test_version_is_the_same_wherever_it_stands(repository: Path) -> None:
    def found(pattern: str, page: str) -> str:
        match = re.search(pattern, (repository / page).read_text(encoding="utf-8"), re.MULTILINE)
        assert match, page
        return match[1]

    version = found(r'^version = "(.+)"$', "pyproject.toml")
    assert version == found(r"^version: (.+)$", "CITATION.cff")
    assert version == found(r"^## (\S+) \(", "CHANGELOG.md")
    date = found(r'^date-released: "(.+)"$', "CITATION.cff")
    assert date == found(r"^## \S+ \((.+)\)$", "CHANGELOG.md")


def test_minimum_versions_are_met_by_the_pinned_ones(repository: Path) -> None:
    project = tomllib.loads((repository / "pyproject.toml").read_text(encoding="utf-8"))["project"]
    pinned = dict(
        line.lower().replace("_", "-").split("==")
        for line in (repository / "workflow/envs/constraints.txt").read_text(encoding="utf-8").splitlines()
        if "==" in line
    )
    wanted = [
        *project["dependencies"],
        *(need for extra in project["optional-dependencies"].values() for need in extra),
    ]
    assert len(wanted) > 20
    for need in wanted:
        name, least = re.match(r"([\w-]+)>=([\d.]+)$", need).groups()  # type: ignore[union-attr]
        assert numbers(least) <= numbers(pinned[name.lower()]), need


def numbers(version: str) -> tuple[int, ...]:
    return tuple(int(part) for part in re.findall(r"\d+", version)[:3])
