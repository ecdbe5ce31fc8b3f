"""An edition holds a finished run whole, is never overwritten, and tells what was altered in it."""

from __future__ import annotations

import json
import stat
from collections.abc import Callable
from pathlib import Path

import pytest
from typer.testing import CliRunner

from wrackline.cli import app
from wrackline.study.config import StudyConfig
from wrackline.study.contribution import to_json
from wrackline.study.editions import check_edition, freeze, read_edition, read_record, write_study
from wrackline.study.faults import StudyFaults
from wrackline.study.loading import load_config
from wrackline.study.provenance import build_manifest


@pytest.fixture
def finished(tmp_path: Path) -> Path:
    """A study with two inputs and results that a manifest describes; nothing of it need be a real study."""
    folder = tmp_path / "study"
    (folder / "data").mkdir(parents=True)
    (folder / "data" / "gauges.csv").write_text("gauge_id,name\n01,A\n", encoding="utf-8")
    (tmp_path / "peaks.csv").write_text("gauge_id,water_year,flow\n01,2001,5\n", encoding="utf-8")
    study = folder / "study.yaml"
    study.write_text(
        "study: {edition: first}\ninputs: {gauges: data/gauges.csv, peaks: ../peaks.csv}\n", encoding="utf-8"
    )
    write_results(study)
    return study


def write_results(study: Path) -> None:
    tables = study.parent / "results" / "tables"
    tables.mkdir(parents=True, exist_ok=True)
    (tables / "gauge_estimates.csv").write_text("gauge_id,aep,flow\n01,0.01,9\n", encoding="utf-8")
    manifest = build_manifest(load_config(study), study, study.parent / "results")
    (study.parent / "results" / "manifest.json").write_text(to_json(manifest), encoding="utf-8")


def codes(call: Callable[[], object]) -> list[str]:
    with pytest.raises(StudyFaults) as faults:
        call()
    return [fault.code for fault in faults.value.problems]


def test_edition_holds_inputs_results_and_record_read_only(finished: Path) -> None:
    folder = freeze(finished, "2024")
    assert finished.parent / "editions" / "2024" == folder
    names = {path.relative_to(folder).as_posix() for path in folder.rglob("*") if path.is_file()}
    assert {
        "edition.json",
        "inputs/study.yaml",
        "inputs/data/gauges.csv",
        "inputs/from_elsewhere/peaks.csv",
        "results/manifest.json",
        "results/tables/gauge_estimates.csv",
    } == names
    assert {0o444} == {stat.S_IMODE((folder / name).stat().st_mode) for name in names}
    assert [] == check_edition(folder)


def test_record_names_seed_versions_and_every_file_but_itself(finished: Path) -> None:
    record = read_record(freeze(finished, "2024"))
    assert 20261001 == record["seed"]
    assert "numpy" in record["software"]
    assert 5 == len(record["files"])
    assert {"gauges": "data/gauges.csv", "peaks": "from_elsewhere/peaks.csv"} == record["inputs"]


def test_taken_name_is_refused_and_the_edition_stays_as_it_is(finished: Path) -> None:
    folder = freeze(finished, "2024")
    before = (folder / "edition.json").read_bytes()
    assert ["edition_exists"] == codes(lambda: freeze(finished, "2024"))
    assert before == (folder / "edition.json").read_bytes()
    assert ["2024"] == [path.name for path in folder.parent.iterdir()]


@pytest.mark.parametrize("name", ["", "..", "../away", "a/b", ".hidden", "two words", "x\n"])
def test_name_that_is_no_plain_name_is_refused(finished: Path, name: str) -> None:
    assert ["bad_edition_name"] == codes(lambda: freeze(finished, name))
    assert not (finished.parent / "editions").exists()


def test_name_may_be_in_any_script(finished: Path) -> None:
    assert [] == check_edition(freeze(finished, "издание_2024"))


def test_run_whose_inputs_changed_since_is_not_frozen(finished: Path) -> None:
    (finished.parent / "data" / "gauges.csv").write_text("gauge_id,name\n02,B\n", encoding="utf-8")
    assert ["input_changed"] == codes(lambda: freeze(finished, "2024"))
    assert [] == list((finished.parent / "editions").iterdir())


def test_results_that_the_run_did_not_write_are_not_frozen(finished: Path) -> None:
    (finished.parent / "results" / "tables" / "gauge_estimates.csv").write_text("x\n", encoding="utf-8")
    assert ["result_changed"] == codes(lambda: freeze(finished, "2024"))


def test_study_that_never_ran_is_not_frozen(finished: Path) -> None:
    (finished.parent / "results" / "manifest.json").unlink()
    assert ["no_finished_run"] == codes(lambda: freeze(finished, "2024"))


@pytest.mark.parametrize(
    ("name", "code"),
    [
        ("inputs/data/gauges.csv", "altered_file"),
        ("results/tables/gauge_estimates.csv", "altered_file"),
        ("results/manifest.json", "altered_file"),
    ],
)
def test_one_altered_byte_is_told_with_the_file(finished: Path, name: str, code: str) -> None:
    path = freeze(finished, "2024") / name
    path.chmod(0o644)
    content = bytearray(path.read_bytes())
    content[-2] ^= 1
    path.write_bytes(content)
    found = check_edition(finished.parent / "editions" / "2024")
    assert (code, name) in [(fault.code, fault.file) for fault in found]


def test_missing_and_added_files_are_told(finished: Path) -> None:
    folder = freeze(finished, "2024")
    (folder / "inputs" / "data" / "gauges.csv").unlink()
    (folder / "results" / "new.txt").touch()
    assert [("missing_file", "inputs/data/gauges.csv"), ("added_file", "results/new.txt")] == [
        (fault.code, fault.file) for fault in sorted(check_edition(folder), key=lambda fault: fault.file)
    ]


def test_record_made_to_fit_an_altered_file_is_told(finished: Path) -> None:
    folder = freeze(finished, "2024")
    path = folder / "edition.json"
    path.chmod(0o644)
    record = json.loads(path.read_text(encoding="utf-8"))
    record["seed"] = 1
    path.write_text(to_json(record), encoding="utf-8")
    assert ["altered_record"] == [fault.code for fault in check_edition(folder)]


def test_edition_opens_with_its_own_inputs(finished: Path) -> None:
    edition = read_edition(freeze(finished, "2024"))
    assert "2024" == edition.name
    assert b"gauge_id,water_year,flow\n01,2001,5\n" == edition.inputs["peaks"].read_bytes()


@pytest.mark.parametrize("place", ["study", "study/results", "study/study.yaml"])
def test_finished_study_is_read_like_an_edition(finished: Path, tmp_path: Path, place: str) -> None:
    edition = read_edition(tmp_path / place)
    assert "first" == edition.name
    assert finished.parent / "results" == edition.results


def test_altered_edition_is_not_opened(finished: Path) -> None:
    folder = freeze(finished, "2024")
    (folder / "inputs" / "data" / "gauges.csv").unlink()
    assert ["missing_file"] == codes(lambda: read_edition(folder))


def test_folder_that_is_no_edition_is_told(tmp_path: Path) -> None:
    assert ["no_edition"] == codes(lambda: read_edition(tmp_path))


def test_study_laid_out_from_an_edition_reads_back_with_the_same_choices(
    finished: Path, tmp_path: Path
) -> None:
    edition = read_edition(freeze(finished, "2024"))
    config = load_config(write_study(edition.inputs, edition.config, tmp_path / "again"))
    assert ("gauges.csv", "peaks.csv") == (config.inputs.gauges, config.inputs.peaks)
    assert edition.config.aeps == config.aeps
    assert StudyConfig().seed == config.seed


def test_commands_freeze_verify_and_refuse(finished: Path) -> None:
    command = CliRunner().invoke
    frozen = command(app, ["freeze", str(finished), "--name", "2024"])
    assert (0, True) == (frozen.exit_code, "5 files, read-only" in frozen.output)
    folder = finished.parent / "editions" / "2024"
    checked = command(app, ["check", str(folder)])
    assert (0, True) == (checked.exit_code, "edition 2024 is as it was frozen" in checked.output)
    (folder / "results" / "new.txt").touch()
    checked = command(app, ["check", str(folder)])
    assert (1, True) == (checked.exit_code, "results/new.txt" in checked.output)
