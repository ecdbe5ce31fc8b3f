"""A rule reruns exactly when its inputs, its part of the configuration or its sources change."""

from __future__ import annotations

import ast
import json
import re
from pathlib import Path

import pytest

import wiring
from wiring import STAGES, settings, source_digest, stage_sources
from wrackline.study.config import StudyConfig

DERIVED = {"flow_in_m3s": "units", "area_in_km2": "units"}
"""Properties of the configuration and the part that they are made from."""


def declared_parts(repository: Path, stage: str) -> set[str]:
    text = (repository / "workflow" / "rules" / f"{stage}.smk").read_text(encoding="utf-8")
    inside = re.search(r"settings=settings\((.*?)\),\n", text, flags=re.DOTALL)
    assert inside, stage
    if "model_fields" in inside[1]:
        return set(StudyConfig.model_fields)
    return set(re.findall(r'"(\w+)"', inside[1]))


def parts_read_by(stage: str) -> set[str]:
    """Parts of the configuration read anywhere in the stage's own module."""
    found = set()
    for node in ast.walk(ast.parse((wiring.SOURCES / "wrackline" / "stages" / f"{stage}.py").read_bytes())):
        if isinstance(node, ast.Attribute):
            owner = node.value
            name = (
                owner.id
                if isinstance(owner, ast.Name)
                else owner.attr
                if isinstance(owner, ast.Attribute)
                else ""
            )
            if name == "config":
                found.add(DERIVED.get(node.attr, node.attr))
    return found & set(StudyConfig.model_fields)


@pytest.mark.parametrize("stage", STAGES)
def test_rule_declares_every_part_of_the_configuration_its_stage_reads(stage: str, repository: Path) -> None:
    assert set() == parts_read_by(stage) - declared_parts(repository, stage)


@pytest.mark.parametrize("stage", STAGES)
def test_rule_names_log_environment_settings_and_sources(stage: str, repository: Path) -> None:
    text = (repository / "workflow" / "rules" / f"{stage}.smk").read_text(encoding="utf-8")
    for needed in (
        f'"work/logs/{stage}.log"',
        "../envs/python.yaml",
        f'source_digest("{stage}")',
        f'stage_call("{stage}")',
    ):
        assert needed in text


def test_another_part_of_the_configuration_leaves_a_rules_settings_as_they_are() -> None:
    before, after = StudyConfig(), StudyConfig(seed=1)
    assert settings(before, "units", "aeps") == settings(after, "units", "aeps")
    assert settings(before, "seed") != settings(after, "seed")
    assert json.loads(settings(after, "seed")) == {"seed": 1}


def test_sources_are_followed_through_imports_of_imports_and_inside_functions(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    package = tmp_path / "wrackline"
    files = {
        "__init__.py": "",
        "stages/__init__.py": "",
        "stages/a.py": "from wrackline.low import deep\nTEMPLATE = 'page.j2'\n",
        "stages/page.j2": "<p>",
        "stages/b.py": "import wrackline.unrelated\n",
        "low/__init__.py": "",
        "low/deep.py": "def late():\n    from . import lazy\n    return lazy\n",
        "low/lazy.py": "X = 1\n",
        "unrelated.py": "",
    }
    for name, text in files.items():
        (package / name).parent.mkdir(parents=True, exist_ok=True)
        (package / name).write_text(text, encoding="utf-8")
    monkeypatch.setattr(wiring, "SOURCES", tmp_path)
    wiring._files_of.cache_clear()

    names = [path.relative_to(package).as_posix() for path in stage_sources("a")]
    assert names == [
        "__init__.py",
        "low/__init__.py",
        "low/deep.py",
        "low/lazy.py",
        "stages/__init__.py",
        "stages/a.py",
        "stages/page.j2",
    ]

    before_a, before_b = source_digest("a"), source_digest("b")
    (package / "low" / "lazy.py").write_text("X = 2\n", encoding="utf-8")
    assert before_a != source_digest("a")
    assert before_b == source_digest("b")
    wiring._files_of.cache_clear()


@pytest.mark.parametrize("stage", STAGES)
def test_stages_own_module_is_among_its_sources(stage: str) -> None:
    assert f"{stage}.py" in [path.name for path in stage_sources(stage)]


def test_packages_are_pinned_exactly_and_without_places(repository: Path) -> None:
    lines = (repository / "workflow" / "envs" / "constraints.txt").read_text(encoding="utf-8").splitlines()
    pins = [line for line in lines if line and not line.startswith("#")]
    assert len(pins) > 80
    assert [line for line in pins if not re.fullmatch(r"[A-Za-z0-9._-]+==[A-Za-z0-9.+!]+", line)] == []
