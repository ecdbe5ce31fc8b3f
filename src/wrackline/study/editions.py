"""Editions: a finished run kept under a name, whole, and verifiable for as long as the files last."""

from __future__ import annotations

import hashlib
import json
import os
import shutil
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path, PurePosixPath
from typing import Any

import yaml

from wrackline.study.config import StudyConfig
from wrackline.study.contribution import to_json
from wrackline.study.faults import Fault, FaultLog
from wrackline.study.loading import load_config
from wrackline.study.provenance import (
    MANIFEST,
    describe_file,
    digest_file,
    digest_run,
    input_files,
)

RECORD = "edition.json"
INPUTS = "inputs"
RESULTS = "results"
OUTSIDE = "from_elsewhere"
FORMAT = 1


@dataclass(frozen=True)
class Edition:
    """A finished run as others read it: frozen, or the results of a study that lies beside them.

    Attributes
    ----------
    name : str
    config : StudyConfig
    manifest : dict
    inputs : dict of str to Path
        The study's input files by their key in the configuration (``peaks``, ``gauges`` ...).
    results : Path
    """

    name: str
    config: StudyConfig
    manifest: dict[str, Any]
    inputs: dict[str, Path]
    results: Path

    @property
    def table_folder(self) -> Path:
        return self.results / "tables"


def freeze(study_file: Path, name: str) -> Path:
    """Keep a finished run as an edition: inputs, results, manifest, and a digest of every file; return its folder.

    Raises
    ------
    StudyFaults
        When there is no finished run, when inputs or results changed since, when the name is taken or no plain name.
    """
    log = FaultLog()
    study_file = Path(study_file).resolve()
    config = load_config(study_file)
    place = study_file.parent / config.editions.folder
    folder = place / name
    _check_name(name, folder, log)
    results = study_file.parent / config.output
    manifest = _read_manifest(results, study_file.name, log)
    log.stop_on_problems()
    part = place / f".{name}.part"
    if part.exists():
        _remove(part)
    try:
        named = _copy_inputs(config, study_file, part / INPUTS)
        for path in sorted(results.rglob("*")):
            if path.is_file() and path.relative_to(results).parts[0] in _tops(manifest):
                _copy(path, part / RESULTS / path.relative_to(results))
        _compare_with_manifest(part, named, manifest, study_file.name, log)
        log.stop_on_problems()
        files = {
            path.relative_to(part).as_posix(): digest_file(path)
            for path in sorted(part.rglob("*"))
            if path.is_file()
        }
        record = {
            "format": FORMAT,
            "edition": name,
            "run_digest": manifest["run_digest"],
            "seed": manifest["seed"],
            "software": manifest["software"],
            "study_file": study_file.name,
            "inputs": named,
            "files": files,
        }
        record["edition_digest"] = digest_record(record)
        (part / RECORD).write_text(to_json(record), encoding="utf-8")
        for path in part.rglob("*"):
            if path.is_file():
                _to_disk(path)
                path.chmod(0o444)
        os.rename(part, folder)
    finally:
        if part.exists():
            _remove(part)
    return folder


def digest_record(record: Mapping[str, Any]) -> str:
    """Digest an edition's record without its own digest; it stands for every byte of the edition."""
    content = {key: value for key, value in record.items() if key != "edition_digest"}
    return hashlib.sha256(to_json(content).encode("utf-8")).hexdigest()


def is_edition(path: Path) -> bool:
    """Whether this is the folder of an edition."""
    return (Path(path) / RECORD).is_file()


def check_edition(folder: Path) -> list[Fault]:
    """Verify a frozen edition against its own digests; return what was altered, is missing or was added."""
    log = FaultLog()
    folder = Path(folder)
    record = _read_record(folder, log)
    if record is None:
        return log.problems
    if record.get("edition_digest") != digest_record(record):
        log.problem("altered_record", RECORD, "The edition's record was altered after freezing.")
    lying = {path.relative_to(folder).as_posix() for path in folder.rglob("*") if path.is_file()} - {RECORD}
    named = record["files"]
    for name in sorted(set(named) - lying):
        log.problem("missing_file", name, "The file of the edition is gone.")
    for name in sorted(lying - set(named)):
        log.problem("added_file", name, "The file was not there when the edition was frozen.")
    for name in sorted(lying & set(named)):
        if digest_file(folder / name) != named[name]:
            log.problem("altered_file", name, "The file was altered after freezing.")
    manifest = _read_manifest(folder / RESULTS, f"{RESULTS}/{MANIFEST}", log)
    if manifest:
        if manifest["run_digest"] != record["run_digest"]:
            log.problem(
                "another_run",
                f"{RESULTS}/{MANIFEST}",
                "The manifest is of another run than the edition's record.",
            )
        if not log.problems:
            _compare_with_manifest(folder, record["inputs"], manifest, record["study_file"], log)
    return log.problems


def read_edition(path: Path) -> Edition:
    """Open an edition's folder, or the results of a study (their folder, or the study's) with inputs beside them.

    Raises
    ------
    StudyFaults
        When it is none of these, was altered, or its inputs changed since the run.
    """
    path, log = Path(path), FaultLog()
    if is_edition(path):
        for fault in check_edition(path):
            log.problem(
                fault.code, f"{path.name}/{fault.file}", fault.problem, "Take the edition from a backup."
            )
        log.stop_on_problems()
        record, inputs = read_record(path), path / INPUTS
        return Edition(
            name=record["edition"],
            config=load_config(inputs / record["study_file"]),
            manifest=_read_manifest(path / RESULTS, path.name, log),
            inputs={key: inputs / place for key, place in record["inputs"].items()},
            results=path / RESULTS,
        )
    return _read_results(path, log)


def _read_results(path: Path, log: FaultLog) -> Edition:
    study_file = _find_study(path)
    if study_file is None:
        log.problem(
            "no_edition",
            str(path),
            "This is neither an edition nor the results of a study that lies beside them.",
            "Give the folder of an edition (`wrackline freeze` makes one), or the results folder of a finished study.",
        )
        log.stop_on_problems()
    assert study_file is not None
    config = load_config(study_file)
    results = study_file.parent / config.output
    manifest = _read_manifest(results, study_file.name, log)
    log.stop_on_problems()
    named = input_files(config, study_file)
    for name, file in named.items():
        if not file.is_file() or digest_file(file) != manifest["inputs"].get(name, {}).get("sha256"):
            log.problem(
                "input_changed", name, "The input is not the one that these results were made from.",
                "Run the study again, or compare frozen editions, which hold their inputs.",
            )  # fmt: skip
    log.stop_on_problems()
    inputs = {key: study_file.parent / name for key, name in _inputs_by_key(config).items()}
    return Edition(manifest["edition"], config, manifest, inputs, results)


def _find_study(path: Path) -> Path | None:
    """The study file whose results ``path`` holds: ``path`` itself, its folder's, or one in a folder above."""
    path = path.resolve()
    if path.is_file() and path.suffix in {".yaml", ".yml"}:
        return path
    for folder in (path, *path.parents[:3]):
        for file in sorted(folder.glob("*.yaml")):
            try:
                config = load_config(file)
            except Exception:
                continue
            results = (folder / config.output).resolve()
            if (results / MANIFEST).is_file() and path in (folder, results):
                return file
    return None


def write_study(edition_inputs: Mapping[str, Path], config: StudyConfig, folder: Path) -> Path:
    """Lay out a study in a folder of its own: the files by key, and a study file that names them; return the file."""
    folder.mkdir(parents=True, exist_ok=True)
    names, given_map = {}, config.skew.given_map
    for key, path in edition_inputs.items():
        name = f"{key}{path.suffix}"
        if path.resolve() != (folder / name).resolve():
            shutil.copyfile(path, folder / name)
        if key == "given_map":
            given_map = name
        else:
            names[key] = name
    content = config.model_dump(mode="json")
    content["inputs"] = {key: names.get(key, "") for key in content["inputs"]}
    content["skew"]["given_map"] = given_map
    content["output"] = "results"
    content["editions"] = {"folder": "editions", "previous": ""}
    study_file = folder / "study.yaml"
    study_file.write_text(yaml.safe_dump(content, allow_unicode=True, sort_keys=False), encoding="utf-8")
    return study_file


def _check_name(name: str, folder: Path, log: FaultLog) -> None:
    plain = name and not name.startswith(".") and PurePosixPath(name).name == name
    if not plain or any(not (letter.isalnum() or letter in "-_.") for letter in name):
        log.problem(
            "bad_edition_name",
            "--name",
            "The name of an edition holds letters, digits, `-`, `_` and `.` only, and does not start with a dot.",
            value=name,
        )
    elif os.path.lexists(folder):
        log.problem(
            "edition_exists", str(folder), "There is an edition of this name, and editions are never overwritten.",
            "Choose another name.",
        )  # fmt: skip


def _inputs_by_key(config: StudyConfig) -> dict[str, str]:
    named = {key: name for key, name in config.inputs.model_dump().items() if name}
    if config.skew.source == "map":
        named["given_map"] = config.skew.given_map
    return named


def _copy_inputs(config: StudyConfig, study_file: Path, folder: Path) -> dict[str, str]:
    """Copy the study file and its inputs; return where each lies in ``folder``, by key of the configuration."""
    _copy(study_file, folder / study_file.name)
    places = {}
    for key, name in _inputs_by_key(config).items():
        source = study_file.parent / name
        inside = source.resolve().is_relative_to(study_file.parent.resolve())
        place = (
            source.resolve().relative_to(study_file.parent.resolve()).as_posix()
            if inside
            else f"{OUTSIDE}/{key}{source.suffix}"
        )
        if source.is_file():
            _copy(source, folder / place)
        places[key] = place
    return places


def _compare_with_manifest(
    part: Path, named: Mapping[str, str], manifest: Mapping[str, Any], study_name: str, log: FaultLog
) -> None:
    """Compare copies with the manifest of the run: freezing never mixes two runs."""
    run_again = "Run the study again, then freeze it."
    config = load_config(part / INPUTS / study_name)
    by_key = _inputs_by_key(config)
    files = {study_name: part / INPUTS / study_name}
    files |= {by_key[key]: part / INPUTS / place for key, place in named.items() if key in by_key}
    for name, described in manifest["inputs"].items():
        path = files.get(name)
        if path is None or not path.is_file() or describe_file(path, by_bytes=True) != described:
            log.problem(
                "input_changed", name, "The input is not the one that the run was made from.", run_again
            )
    for name, described in manifest["outputs"].items():
        path = part / RESULTS / name
        if not path.is_file():
            log.problem("result_missing", name, "The run wrote this file and it is gone.", run_again)
        elif describe_file(path) != described:
            log.problem("result_changed", name, "The file is not the one that the run wrote.", run_again)
    if digest_run(manifest) != manifest["run_digest"]:
        log.problem("altered_manifest", MANIFEST, "The manifest was altered after the run.", run_again)


def _tops(manifest: Mapping[str, Any]) -> set[str]:
    return {PurePosixPath(name).parts[0] for name in manifest["outputs"]} | {MANIFEST}


def _read_manifest(results: Path, shown: str, log: FaultLog) -> dict[str, Any]:
    try:
        manifest = json.loads((results / MANIFEST).read_text(encoding="utf-8"))
        if isinstance(manifest, dict) and {"run_digest", "inputs", "outputs"} <= set(manifest):
            return manifest
    except (OSError, ValueError):
        pass
    log.problem("no_finished_run", shown, "There is no finished run (its manifest is missing or unreadable).",
                "Run the study first.")  # fmt: skip
    return {}


def read_record(folder: Path) -> dict[str, Any]:
    """Read the record of an edition: its name, digests, seed and versions."""
    log = FaultLog()
    record = _read_record(Path(folder), log)
    log.stop_on_problems()
    assert record is not None
    return record


def _read_record(folder: Path, log: FaultLog) -> dict[str, Any] | None:
    try:
        record = json.loads((folder / RECORD).read_text(encoding="utf-8"))
        if isinstance(record, dict) and {"files", "inputs", "study_file", "run_digest"} <= set(record):
            return record
    except (OSError, ValueError):
        pass
    log.problem("unreadable_record", RECORD, "The edition's record cannot be read.", "Take it from a backup.")
    return None


def _copy(source: Path, target: Path) -> None:
    target.parent.mkdir(parents=True, exist_ok=True)
    shutil.copyfile(source, target)


def _to_disk(path: Path) -> None:
    with path.open("rb") as file:
        os.fsync(file.fileno())


def _remove(folder: Path) -> None:
    shutil.rmtree(folder)
