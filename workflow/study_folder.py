"""A study's folder as the workflow finds it: which study, whether another run is at it, what is damaged."""

from __future__ import annotations

import json
import sys
from pathlib import Path
from typing import IO, Any, NoReturn

LOCK = ".wrackline.lock"
_held: list[IO[str]] = []


def find_study(workflow: Any, default: Path) -> Path:
    """Return the study file of this run: that of ``--configfile``, or the example's."""
    named = workflow.overwrite_configfiles
    if len(named) > 1:
        stop("Give one study file only: snakemake --configfile FOLDER/study.yaml")
    if workflow.config_settings.config:
        stop(
            "Settings on the command line (--config) would not be on record: write them into the study file."
        )
    study = Path(named[0] if named else default).resolve()
    if workflow.overwrite_workdir and Path(workflow.overwrite_workdir).resolve() != study.parent:
        stop(f"Leave out --directory: a study's files lie in its own folder, {study.parent}")
    return study


def named_study(config: dict[str, Any]) -> Path:
    """Return the study file that another workflow names where it uses this one as a module."""
    if not config.get("study_file"):
        stop(
            'The module statement must name the study: config: {"study_file": "FOLDER/study.yaml"}, prefix: "FOLDER"'
        )
    return Path(config["study_file"]).resolve()


def read_study(study: Path) -> Any:
    """Return the typed configuration; on faults, print them all and end the run before it touches anything."""
    try:
        from wrackline.study.faults import StudyFaults
        from wrackline.study.loading import load_config
    except ModuleNotFoundError as missing:
        stop(
            f"Python module {missing.name} is not installed here: run `python3 workflow/start.py run`, or `pip install -e .`."
        )
    try:
        return load_config(study)
    except StudyFaults as faults:
        stop("\n".join([*map(str, faults.problems), str(faults), f"Study file: {study}"]))


def require_previous(study: Path, config: Any) -> None:
    """End the run when the edition that the study is to be compared with is not there."""
    if not config.editions.previous:
        return
    edition = Path(config.editions.folder) / config.editions.previous
    if not (study.parent / edition / "edition.json").is_file():
        stop(
            f"{study.name}: `editions.previous` names {edition}, and no edition lies there. "
            "Freeze one (`wrackline freeze`), correct the name, or leave it blank."
        )


def lock_study(folder: Path) -> None:
    """Hold the study's folder until this process ends, however it ends; end politely if another run holds it."""
    try:
        import fcntl
    except ImportError:
        return
    try:
        handle = (folder / LOCK).open("a", encoding="utf-8")
    except OSError as error:
        stop(f"The study's folder cannot be written to ({error.strerror}): {folder}")
    try:
        fcntl.flock(handle, fcntl.LOCK_EX | fcntl.LOCK_NB)
    except BlockingIOError:
        stop(f"Another run is at work on this study: {folder}\nWait until it has ended; nothing was touched.")
    _held.append(handle)


def forget_damaged(folder: Path, stages: tuple[str, ...], output: str) -> list[str]:
    """Make the workflow redo stages from whose files something was deleted; return their names.

    A stage's ``contribution.json`` names its tables and figures, the manifest names the results. Where one
    of them is gone, the naming file is removed: the workflow then sees that the stage is not done.
    """
    redo = []
    for stage in stages[:-1]:
        naming = folder / "work" / stage / "contribution.json"
        if naming.is_file() and not all(path.is_file() for path in _contributed(naming)):
            naming.unlink()
            redo.append(stage)
    manifest = folder / output / "manifest.json"
    if manifest.is_file() and not all(
        (manifest.parent / name).is_file() for name in _read(manifest).get("outputs", {})
    ):
        manifest.unlink()
        redo.append(stages[-1])
    return redo


def _contributed(naming: Path) -> list[Path]:
    document = _read(naming)
    if not document:
        return [naming.with_name("unreadable")]
    return [
        *(naming.parent / "tables" / f"{name}.csv" for name in document["tables"]),
        *(naming.parent / "tables" / f"{name}.json" for name in document["models"]),
        *(
            naming.parent / "figures" / f["file"]
            for section in document["sections"]
            for f in section["figures"]
        ),
    ]


def _read(path: Path) -> dict[str, Any]:
    try:
        return dict(json.loads(path.read_text(encoding="utf-8")))
    except ValueError:
        return {}


def stop(message: str) -> NoReturn:
    """End the run with a message for the user."""
    print(f"\n{message}", file=sys.stderr)
    raise SystemExit(1)
