"""From ``study.yaml`` to the typed configuration, with every fault of the file told at once."""

from __future__ import annotations

import unicodedata
from pathlib import Path
from typing import Any

import yaml
from pydantic import BaseModel, ValidationError

from wrackline.study.config import StudyConfig
from wrackline.study.faults import FaultLog, StudyFaults
from wrackline.study.vocabulary import did_you_mean

Place = tuple[str | int, ...]
DEEPEST = 20
"""Levels of a study file; the deepest key of the configuration stands on the fourth."""
TOO_DEEP = "brackets or indentation are nested far deeper than any study needs"


class UnreadableStudy(StudyFaults):
    """The study file itself cannot be read, so nothing can be said about the study."""


class _StudyLoader(yaml.SafeLoader):
    """Safe YAML that leaves dates as text, takes no aliases, and tells every odd value with its line.

    Aliases can stand for endless or gigantic content in a few lines, and a study file needs none.
    """

    def compose_node(self, parent: yaml.Node | None, index: int) -> yaml.Node | None:
        if self.check_event(yaml.AliasEvent):
            raise yaml.MarkedYAMLError(
                problem="an alias (`*name`) stands here; write its content out",
                problem_mark=self.peek_event().start_mark,
            )
        node: yaml.Node | None = super().compose_node(parent, index)
        return node

    def construct_object(self, node: yaml.Node, deep: bool = False) -> Any:
        try:
            value = super().construct_object(node, deep)
        except (ValueError, TypeError, LookupError, AttributeError):
            kind = node.tag.rpartition(":")[2]
            raise yaml.MarkedYAMLError(
                problem=f"the value cannot be read as {kind}", problem_mark=node.start_mark
            ) from None
        if isinstance(value, str) and any(
            unicodedata.category(c) in ("Cc", "Cs") for c in value if c not in "\n\t"
        ):
            raise yaml.MarkedYAMLError(
                problem="the text holds a control character", problem_mark=node.start_mark
            )
        return value


_StudyLoader.yaml_implicit_resolvers = {
    start: [(tag, pattern) for tag, pattern in resolvers if tag != "tag:yaml.org,2002:timestamp"]
    for start, resolvers in yaml.SafeLoader.yaml_implicit_resolvers.items()
}


def load_config(study_file: Path) -> StudyConfig:
    """Read a study's configuration.

    Raises
    ------
    UnreadableStudy
        When there is no such file, or it is not YAML text.
    StudyFaults
        When keys are unknown or doubled, or values are of the wrong type or out of range: all of them.
    """
    study_file = Path(study_file)
    shown = study_file.name
    node = _compose(_read_text(study_file, shown), shown)
    log = FaultLog()
    if node is None:
        return StudyConfig.model_validate({})
    if not isinstance(node, yaml.MappingNode):
        log.problem(
            "not_a_mapping", shown, "The study file holds no `key: value` lines.", "See `wrackline new`."
        )
        raise UnreadableStudy(log.problems)
    _refuse_doubled_keys(node, shown, log)
    loader = _StudyLoader("")
    try:
        content = loader.construct_document(node)
    except yaml.MarkedYAMLError as error:
        raise _yaml_fault(error, shown) from None
    finally:
        loader.dispose()
    try:
        config = StudyConfig.model_validate(_without_blanks(content))
    except ValidationError as error:
        for fault in error.errors():
            _report(dict(fault), node, shown, log)
        config = StudyConfig.model_validate({})
    log.stop_on_problems()
    return config


def line_of(study_file: Path, place: Place) -> int | None:
    """Return the line of the study file on which the key at ``place`` stands."""
    node = _compose(_read_text(study_file, study_file.name), study_file.name)
    return _line_of(node, place) if node is not None else None


def _read_text(study_file: Path, shown: str) -> str:
    log = FaultLog()
    try:
        return study_file.read_bytes().decode("utf-8-sig")
    except UnicodeDecodeError as error:
        log.problem(
            "wrong_encoding",
            shown,
            f"The study file is not UTF-8 text (byte {error.start + 1}).",
            "Save it as UTF-8.",
        )
    except FileNotFoundError:
        log.problem(
            "missing_file",
            str(study_file),
            "There is no such study file.",
            "Make one with `wrackline new FOLDER`.",
        )
    except IsADirectoryError:
        log.problem(
            "missing_file",
            str(study_file),
            "This is a folder.",
            f"Give the study file, {study_file / 'study.yaml'}.",
        )
    except OSError as error:
        log.problem("unreadable_file", str(study_file), f"The study file cannot be read: {error.strerror}.")
    raise UnreadableStudy(log.problems)


def _compose(text: str, shown: str) -> yaml.Node | None:
    try:
        node = yaml.compose(text, Loader=_StudyLoader)
        _refuse_depth(node)
        return node
    except yaml.MarkedYAMLError as error:
        raise _yaml_fault(error, shown) from None
    except RecursionError:
        raise _yaml_fault(yaml.MarkedYAMLError(problem=TOO_DEEP), shown) from None
    except yaml.reader.ReaderError as error:
        log = FaultLog()
        log.problem(
            "yaml_syntax",
            shown,
            f"The study file holds a character that YAML does not allow: {error.reason}.",
        )
        raise UnreadableStudy(log.problems) from None


def _refuse_depth(node: yaml.Node | None) -> None:
    level = [node] if node is not None else []
    for _ in range(DEEPEST):
        level = [below for above in level for below in _children(above)]
    if level:
        raise yaml.MarkedYAMLError(problem=TOO_DEEP, problem_mark=level[0].start_mark)


def _children(node: yaml.Node) -> list[yaml.Node]:
    if isinstance(node, yaml.MappingNode):
        return [part for pair in node.value for part in pair]
    return list(node.value) if isinstance(node, yaml.SequenceNode) else []


def _yaml_fault(error: yaml.MarkedYAMLError, shown: str) -> UnreadableStudy:
    mark = error.problem_mark or error.context_mark
    log = FaultLog()
    log.problem(
        "yaml_syntax",
        shown,
        f"This is not valid YAML: {error.problem}.",
        "Look at this line and the one above: indentation by spaces (no tabs), a space after each colon, quotes closed.",
        row=mark.line + 1 if mark else None,
    )
    return UnreadableStudy(log.problems)


def _refuse_doubled_keys(node: yaml.Node, shown: str, log: FaultLog) -> None:
    if isinstance(node, yaml.SequenceNode):
        for item in node.value:
            _refuse_doubled_keys(item, shown, log)
    elif isinstance(node, yaml.MappingNode):
        seen: dict[str, int] = {}
        for key, value in node.value:
            name, line = str(key.value), key.start_mark.line + 1
            if name in seen:
                log.problem(
                    "doubled_key",
                    shown,
                    f"The key stands twice, first on line {seen[name]}.",
                    "Keep one of them.",
                    row=line,
                    column=name,
                )
            seen.setdefault(name, line)
            _refuse_doubled_keys(value, shown, log)


def _without_blanks(content: Any) -> Any:
    """Drop keys without a value: a key left blank means its default."""
    if isinstance(content, dict):
        return {str(key): _without_blanks(value) for key, value in content.items() if value is not None}
    return content


def _report(fault: dict[str, Any], node: yaml.Node, shown: str, log: FaultLog) -> None:
    place: Place = tuple(fault["loc"])
    key = ".".join(str(part) for part in place) or None
    value = None if isinstance(fault["input"], (dict, list, tuple)) else fault["input"]
    code, problem, mend = _in_words(fault, place)
    log.problem(code, shown, problem, mend, row=_line_of(node, place), column=key, value=value)


def _in_words(fault: dict[str, Any], place: Place) -> tuple[str, str, str]:
    kind, context = fault["type"], fault.get("ctx", {})
    if kind == "extra_forbidden":
        return "unknown_key", "There is no such key here.", did_you_mean(str(place[-1]), _keys_at(place[:-1]))
    if kind == "literal_error":
        valid = [word.strip("'") for word in context["expected"].replace(" or ", ", ").split(", ")]
        code = "unknown_unit" if place[0] == "units" else "unknown_word"
        return code, "The value is not one of the valid words.", did_you_mean(str(fault["input"]), valid)
    if kind == "missing":
        return "missing_key", "The key is required here.", "Add it."
    if kind == "string_type":
        return (
            "wrong_type",
            "Text is expected.",
            f'Put it in quotes: "{fault["input"]}" (and check leading zeros).',
        )
    if kind == "value_error":
        return "bad_value", str(context["error"]) + ".", ""
    if kind.startswith(("greater_than", "less_than", "string_too", "too_short", "too_long")):
        return "out_of_range", fault["msg"].replace("Input", "The value") + ".", ""
    return "wrong_type", fault["msg"].replace("Input", "The value") + ".", ""


def _keys_at(place: Place) -> tuple[str, ...]:
    """Return the valid keys of the part of the configuration at ``place``."""
    part: Any = StudyConfig
    for step in place:
        if isinstance(part, type) and issubclass(part, BaseModel):
            part = part.model_fields[str(step)].annotation
        part = next((p for p in _parts_in(part) if issubclass(p, BaseModel)), part)
    return tuple(part.model_fields) if isinstance(part, type) and issubclass(part, BaseModel) else ()


def _parts_in(annotation: Any) -> list[type]:
    if isinstance(annotation, type) and not getattr(annotation, "__args__", ()):
        return [annotation]
    return [part for argument in getattr(annotation, "__args__", ()) for part in _parts_in(argument)]


def _line_of(node: yaml.Node, place: Place) -> int | None:
    line = node.start_mark.line + 1 if place else None
    for step in place:
        if isinstance(node, yaml.MappingNode):
            entry = next(((k, v) for k, v in node.value if k.value == str(step)), None)
            if entry is None:
                return line
            line, node = entry[0].start_mark.line + 1, entry[1]
        elif isinstance(node, yaml.SequenceNode) and isinstance(step, int):
            if step >= len(node.value):
                return line
            node = node.value[step]
            line = node.start_mark.line + 1
    return line
