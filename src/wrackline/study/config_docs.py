"""The configuration's reference: defaults, description and schema, made from the typed model.

``python -m wrackline.study.config_docs`` writes them into the repository it runs in.
"""

from __future__ import annotations

import json
import textwrap
import types
import typing
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import annotated_types
from pydantic import BaseModel
from pydantic.fields import FieldInfo

from wrackline.study.config import StudyConfig
from wrackline.study.tables import write_text

MADE_BY = "python -m wrackline.study.config_docs"
WIDTH = 100


@dataclass(frozen=True)
class Key:
    """One key of the configuration: where it stands, its default, what it takes, and why it is as it is."""

    place: tuple[str, ...]
    default: Any
    takes: str
    description: str
    required: bool = False


@dataclass(frozen=True)
class Group:
    """A part of the configuration that holds keys; ``each`` marks a list or mapping of such parts."""

    place: tuple[str, ...]
    description: str
    each: str = ""


def list_keys(model: type[BaseModel] = StudyConfig, place: tuple[str, ...] = ()) -> Iterator[Key | Group]:
    """Walk the typed model in its own order."""
    for name, info in model.model_fields.items():
        here = (*place, name)
        part, each = _part_of(info.annotation)
        description = " ".join((info.description or "").split())
        if part is None:
            required = info.is_required()
            yield Key(
                here,
                None if required else _plain(info.get_default(call_default_factory=True)),
                _takes(info),
                description,
                required,
            )
        elif each:
            yield Group(here, description, each)
            yield from list_keys(part, (*here, "NAME" if each == "mapping" else "-"))
        else:
            yield Group(here, description)
            yield from list_keys(part, here)


def render_defaults() -> str:
    """Every key with its default, as YAML that reads back to the default configuration."""
    lines = [
        *_comment(
            "Every key of a study's configuration with its default. A study.yaml names only what differs; its values are laid over these."
        ),
        *_comment(f"Made from the typed model by `{MADE_BY}`: edit the study file, not this file."),
    ]
    for entry in list_keys():
        depth = len(entry.place) - 1
        indent = "  " * depth
        if any(step in ("NAME", "-") for step in entry.place):
            continue
        if depth == 0:
            lines.append("")
        if isinstance(entry, Group):
            lines += _comment(entry.description, indent)
            empty = {"mapping": " {}", "list": " []"}.get(entry.each, "")
            lines.append(f"{indent}{entry.place[-1]}:{empty}")
            lines += _comment_item(entry, indent)
        else:
            lines += _comment(_sentence(entry), indent)
            lines.append(f"{indent}{entry.place[-1]}: {json.dumps(entry.default, ensure_ascii=False)}")
    return "\n".join(lines) + "\n"


def render_readme() -> str:
    """The same for reading: one table a part."""
    lines = [
        "# The configuration of a study",
        "",
        f"Made from the typed model by `{MADE_BY}`. [defaults.yaml](defaults.yaml) holds the same as YAML, and",
        "[the schema](../workflow/schemas/study.schema.json) lets an editor check a study file while it is written.",
        "A `study.yaml` names only what differs from the defaults; a key left blank means its default; an unknown key is refused.",
    ]
    top = [e for e in list_keys() if isinstance(e, Key) and len(e.place) == 1]
    lines += ["", "## Keys at the top", "", *_rows(top)]
    for group in (e for e in list_keys() if isinstance(e, Group)):
        keys = [e for e in list_keys() if isinstance(e, Key) and _group_of(e.place) == group.place]
        lines += ["", f"## `{'.'.join(group.place)}`", "", group.description]
        if group.each:
            lines += ["", {"mapping": "One entry a name:", "list": "A list; every entry has:"}[group.each]]
        lines += ["", *_rows(keys)]
    return "\n".join(lines) + "\n"


def render_schema() -> str:
    """JSON Schema of a study file."""
    schema = StudyConfig.model_json_schema()
    schema["$schema"] = "https://json-schema.org/draft/2020-12/schema"
    schema["title"] = "study.yaml"
    return json.dumps(schema, indent=2, ensure_ascii=False) + "\n"


DOCUMENTS = {
    "config/defaults.yaml": render_defaults,
    "config/README.md": render_readme,
    "workflow/schemas/study.schema.json": render_schema,
}


def write_documents(repository: Path) -> list[Path]:
    """Write all three documents below ``repository``; return their paths."""
    paths = []
    for name, render in DOCUMENTS.items():
        write_text(repository / name, render())
        paths.append(repository / name)
    return paths


def _part_of(annotation: Any) -> tuple[type[BaseModel] | None, str]:
    if isinstance(annotation, type) and issubclass(annotation, BaseModel):
        return annotation, ""
    inner = [a for a in typing.get_args(annotation) if isinstance(a, type) and issubclass(a, BaseModel)]
    if inner:
        return inner[0], "mapping" if typing.get_origin(annotation) is dict else "list"
    return None, ""


def _takes(info: FieldInfo) -> str:
    """Say in words what values a key takes."""
    bounds = []
    for limit in _limits(info):
        if isinstance(limit, annotated_types.Ge):
            bounds.append(f"at least {limit.ge}")
        elif isinstance(limit, annotated_types.Gt):
            bounds.append(f"above {limit.gt}")
        elif isinstance(limit, annotated_types.Le):
            bounds.append(f"at most {limit.le}")
        elif isinstance(limit, annotated_types.Lt):
            bounds.append(f"below {limit.lt}")
        elif isinstance(limit, annotated_types.MinLen):
            bounds.append(f"at least {limit.min_length} characters")
    return ", ".join([_type_in_words(info.annotation), *bounds])


def _limits(info: FieldInfo) -> list[Any]:
    inside = [
        item
        for argument in typing.get_args(info.annotation)
        for item in getattr(argument, "__metadata__", ())
    ]
    found: list[Any] = []
    for item in [*info.metadata, *inside]:
        found += item.metadata if isinstance(item, FieldInfo) else [item]
    return found


def _type_in_words(annotation: Any) -> str:
    origin, arguments = typing.get_origin(annotation), typing.get_args(annotation)
    if origin is typing.Literal:
        return "one of " + ", ".join(f"`{word}`" for word in arguments)
    if origin is typing.Annotated:
        return _type_in_words(arguments[0])
    if origin is tuple:
        return f"list of: {_type_in_words(arguments[0])}"
    if origin in (types.UnionType, typing.Union):
        return " or ".join(_type_in_words(a) for a in arguments if a is not type(None)) + " or blank"
    return {str: "text", int: "whole number", float: "number", bool: "true or false"}[annotation]


def _plain(value: Any) -> Any:
    return list(value) if isinstance(value, tuple) else value


def _sentence(key: Key) -> str:
    return f"{key.description} Takes: {key.takes}." if key.description else f"Takes: {key.takes}."


def _comment(text: str, indent: str = "") -> list[str]:
    return textwrap.wrap(text, WIDTH, initial_indent=f"{indent}# ", subsequent_indent=f"{indent}# ")


def _comment_item(group: Group, indent: str) -> list[str]:
    """Show, as comments, what an entry of a list or mapping looks like."""
    if not group.each:
        return []
    keys = [e for e in list_keys() if isinstance(e, Key) and _group_of(e.place) == group.place]
    lines = [f"{indent}#   NAME:"] if group.each == "mapping" else []
    for number, key in enumerate(keys):
        lead = "    " if group.each == "mapping" else ("- " if number == 0 else "  ")
        default = "" if key.required else " " + json.dumps(key.default, ensure_ascii=False)
        lines.append(f"{indent}#   {lead}{key.place[-1]}:{default}   ({_sentence(key)})")
    return lines


def _group_of(place: tuple[str, ...]) -> tuple[str, ...]:
    above = place[:-1]
    return above[:-1] if above and above[-1] in ("NAME", "-") else above


def _rows(keys: list[Key]) -> list[str]:
    lines = ["| key | default | takes | meaning and reason |", "|---|---|---|---|"]
    for key in keys:
        default = "required" if key.required else f"`{json.dumps(key.default, ensure_ascii=False)}`"
        cells = (f"`{key.place[-1]}`", default, key.takes, key.description or "")
        lines.append("| " + " | ".join(cell.replace("|", "\\|") for cell in cells) + " |")
    return lines


if __name__ == "__main__":
    for written in write_documents(Path.cwd()):
        print(written)
