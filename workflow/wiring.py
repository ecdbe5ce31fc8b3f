"""What every rule shares: how a stage is called, and what makes its results out of date."""

from __future__ import annotations

import ast
import hashlib
import json
import os
import shlex
import sys
from collections.abc import Callable
from functools import cache
from pathlib import Path
from typing import Any

SOURCES = Path(__file__).resolve().parents[1] / "src"
PACKAGE = "wrackline"
DATA_ENDINGS = {".j2", ".css", ".js", ".yaml"}
STAGES = (
    "intake",
    "screen",
    "dependence",
    "atsite",
    "skew",
    "weight",
    "pool",
    "regress",
    "validate",
    "estimate",
    "publish",
)


FAILED = "work/logs/failed"
"""Stages that failed in this run, the first one first; the engine ends others that ran beside it."""


def stage_caller(study: str) -> Callable[[str], str]:
    """Return a function that gives the shell command of a stage; ``study`` is the study file as seen from the working folder.

    A stage's output goes to the screen and to the rule's log. The command holds no place of a machine, so a study or a
    repository that moves is not run anew; `prepare_shell` sets the variable. ``-P`` keeps files of the study's own folder
    from being taken for modules.
    """
    study = shlex.quote(study).replace("{", "{{").replace("}", "}}")

    def stage_call(stage: str) -> str:
        place = (
            f"[{STAGES.index(stage) + 1} of {len(STAGES)}] {stage} ..."
            if stage in STAGES
            else f"[beside] {stage} ..."
        )
        return (
            f"echo '{place}'; PYTHONPATH=\"$WRACKLINE_SOURCES\" python -P -m {PACKAGE}.stages.{stage} {study}"
            f' 2>&1 | tee {{log:q}} || {{{{ echo {stage} >> "$(dirname {{log:q}})"/failed; exit 1; }}}}'
        )

    return stage_call


def stages_of(config: Any) -> tuple[str, ...]:
    """Stages of a study, in order; `compare` where the study names a previous edition."""
    return (*STAGES[:-1], "compare", STAGES[-1]) if config.editions.previous else STAGES


def prepare_shell() -> None:
    """Let stages find the sources that `source_digest` watches, and the Python that runs the workflow.

    The latter also where its environment was not activated.
    """
    os.environ["WRACKLINE_SOURCES"] = str(SOURCES)
    folder = str(Path(sys.executable).parent)
    path = os.environ.get("PATH", "").split(os.pathsep)
    if path[0] != folder:
        os.environ["PATH"] = os.pathsep.join([folder, *path])


def settings(config: Any, *parts: str) -> str:
    """Return the named parts of the typed configuration as text: a change of any other part is no reason to rerun.

    ``part.key`` names one key of a part.
    """
    content = config.model_dump(mode="json")
    named = {}
    for name in parts:
        part, _, key = name.partition(".")
        named[name] = content[part][key] if key else content[part]
    return json.dumps(named, sort_keys=True)


def source_digest(stage: str) -> str:
    """Digest the sources of a stage: its module, every module it imports in turn, and the templates beside them."""
    digest = hashlib.sha256()
    for path in stage_sources(stage):
        digest.update(path.relative_to(SOURCES).as_posix().encode() + b"\0" + path.read_bytes() + b"\0")
    return digest.hexdigest()[:16]


def stage_sources(stage: str) -> list[Path]:
    """List the files of the package that a stage uses, in order of name."""
    found: set[Path] = set()
    waiting = _module_files(f"{PACKAGE}.stages.{stage}")
    while waiting:
        path = waiting.pop()
        if path in found or not path.is_file():
            continue
        found.add(path)
        if path.suffix == ".py":
            waiting.extend(_files_of(path))
    return sorted(found)


@cache
def _files_of(path: Path) -> tuple[Path, ...]:
    """Files that one module draws in: imported modules, their packages, and all data files beside it."""
    names: set[str] = set()
    data = {file for file in path.parent.iterdir() if file.suffix in DATA_ENDINGS}
    for node in ast.walk(ast.parse(path.read_bytes())):
        if isinstance(node, ast.Import):
            names.update(alias.name for alias in node.names)
        elif isinstance(node, ast.ImportFrom):
            origin = _absolute_name(path, node)
            names.add(origin)
            names.update(f"{origin}.{alias.name}" for alias in node.names)
    own = {name for name in names if name.split(".")[0] == PACKAGE}
    return tuple(sorted({file for name in own for file in _module_files(name)} | data))


def _absolute_name(path: Path, node: ast.ImportFrom) -> str:
    if node.level == 0:
        return node.module or ""
    package = path.relative_to(SOURCES).parts[: -node.level]
    return ".".join([*package, *([node.module] if node.module else [])])


def _module_files(name: str) -> list[Path]:
    """Files that importing a dotted name runs: the module and the ``__init__`` of every package above it."""
    steps = name.split(".")
    files = [SOURCES.joinpath(*steps[:depth], "__init__.py") for depth in range(1, len(steps) + 1)]
    return [file for file in [*files, SOURCES.joinpath(*steps).with_suffix(".py")] if file.is_file()]
