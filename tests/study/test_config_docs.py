"""The configuration's reference is what the typed model says."""

from __future__ import annotations

import json
from pathlib import Path

import jsonschema
import pytest
import yaml

from wrackline.study.config import FLAG_NAMES, StudyConfig
from wrackline.study.config_docs import DOCUMENTS, Key, list_keys, render_defaults, render_schema


@pytest.mark.parametrize("name", DOCUMENTS)
def test_committed_reference_is_the_one_the_model_gives(name: str, repository: Path) -> None:
    assert DOCUMENTS[name]() == (repository / name).read_text(encoding="utf-8"), (
        "run `python -m wrackline.study.config_docs` in the repository's root"
    )


def test_defaults_read_back_to_the_default_configuration() -> None:
    assert StudyConfig() == StudyConfig.model_validate(yaml.safe_load(render_defaults()))


def test_defaults_name_every_key_that_has_one() -> None:
    content = yaml.safe_load(render_defaults())
    for key in list_keys():
        if isinstance(key, Key) and not {"NAME", "-"} & set(key.place):
            value = content
            for step in key.place:
                value = value[step]
            assert key.default == value, key.place


def test_every_key_says_what_it_is_for() -> None:
    silent = [
        ".".join(key.place)
        for key in list_keys()
        if not key.description and key.place[-1] not in ("gauge_id", "pool", "distribution", "why")
    ]
    assert silent == []


def test_every_flag_has_a_key() -> None:
    assert set(FLAG_NAMES) == {
        key.place[1] for key in list_keys() if key.place[0] == "flags" and len(key.place) == 2
    }


def test_limits_are_told() -> None:
    takes = {key.place: key.takes for key in list_keys() if isinstance(key, Key)}
    assert takes[("water_year_starts",)] == "whole number, at least 1, at most 12"
    assert takes[("confidence",)] == "number, above 0, below 1"
    assert takes[("aeps", "gauges")] == "list of: number, above 0, below 1"
    assert takes[("index_flood", "statistic")] == "one of `median`, `mean`"


def test_schema_accepts_the_defaults_and_refuses_an_unknown_key() -> None:
    schema = json.loads(render_schema())
    defaults = yaml.safe_load(render_defaults())
    jsonschema.validate(defaults, schema)
    with pytest.raises(jsonschema.ValidationError, match="colour"):
        jsonschema.validate({**defaults, "colour": "blue"}, schema)
