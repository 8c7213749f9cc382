"""Loading a configuration: every problem at once, each with file, line, path, found, allowed."""

from __future__ import annotations

import difflib
import json
from collections.abc import Sequence
from pathlib import Path
from typing import Any, TypeVar, get_args, get_origin

import yaml
from pydantic import BaseModel, ValidationError
from pydantic_core import ErrorDetails

from leakpipe.config.base import Section
from leakpipe.config.models import Config
from leakpipe.config.scalars import compose, line_of
from leakpipe.errors import ConfigError, numbered

Model = TypeVar("Model", bound=Section)
UNION_PARTS = ("literal", "tagged-union", "str", "int", "float", "FromFile")
NOTHING_RUN = "nothing was run"


def load(
    path: Path,
    overrides: Sequence[str] = (),
    *,
    recordings: Path | None = None,
    out: Path | None = None,
) -> Config:
    """Read a configuration file.

    Parameters
    ----------
    path
        YAML file; relative paths in it are relative to its folder.
    overrides
        ``KEY=VALUE`` texts, dotted key, YAML value; they act like editing the file.
    recordings, out
        Replace the folders of recordings and results (relative to the working directory).

    Raises
    ------
    ConfigError
        The file cannot be read or breaks the model; all problems in one message.
    """
    node, value = read_mapping(path)
    problems: list[str] = []
    changed: dict[tuple[str | int, ...], str] = {}
    for text in overrides:
        _override(value, text, changed, problems)
    if recordings is not None:
        value.setdefault("recordings", {})
        if isinstance(value["recordings"], dict):
            value["recordings"]["folder"] = str(recordings.absolute())
    if out is not None:
        value["results"] = str(out.absolute())
    config = validated(Config, value, node, str(path), changed, problems)
    return config.relative_to(path.absolute().parent)


def read_mapping(path: Path) -> tuple[yaml.Node | None, dict[str, Any]]:
    """Return the node tree and the top mapping of a YAML file.

    Raises
    ------
    ConfigError
        The file is missing, unreadable, empty, not YAML or not a mapping.
    """
    try:
        text = path.read_text(encoding="utf-8")
    except (OSError, UnicodeDecodeError) as error:
        reason = getattr(error, "strerror", None) or "not UTF-8 text"
        raise ConfigError(f"{path}  cannot be read: {reason}") from None
    try:
        node, value = compose(text)
    except yaml.YAMLError as error:
        mark = getattr(error, "problem_mark", None)
        place = f"{path}:{mark.line + 1}" if mark is not None else str(path)
        problem = getattr(error, "problem", None) or str(error).splitlines()[0]
        raise ConfigError(f"{place}  not valid YAML: {problem}") from None
    if not isinstance(value, dict):
        found = "nothing" if value is None else type(value).__name__
        raise ConfigError(f"{path}:1  must be a mapping of sections, got {found}")
    return node, value


def validated(
    model: type[Model],
    value: dict[str, Any],
    node: yaml.Node | None,
    source: str,
    changed: dict[tuple[str | int, ...], str] | None = None,
    problems: Sequence[str] = (),
) -> Model:
    """Return the model made from a plain value, or say everything that is wrong with it.

    Validation is strict and goes through JSON, so that lists and paths still work.

    Raises
    ------
    ConfigError
        The value breaks the model, or `problems` were found before.
    """
    found = list(problems)
    result = None
    try:
        result = model.model_validate_json(json.dumps(value, default=str))
    except ValidationError as error:
        for path, sentence in _sentences(model, error):
            place = next(
                (
                    text
                    for key, text in (changed or {}).items()
                    if path and key[: len(path)] == path[: len(key)]
                ),
                f"{source}:{line_of(node, path)}",
            )
            found.append(f"{place}  {'.'.join(map(str, path))}  {sentence}")
    if found or result is None:
        raise ConfigError(numbered(sorted(found, key=_by_line), NOTHING_RUN))
    return result


def _sentences(
    model: type[BaseModel], error: ValidationError
) -> list[tuple[tuple[str | int, ...], str]]:
    """Return the path and sentence of each problem; those of a union's members become one."""
    details = error.errors()
    paths = [tuple(part for part in one["loc"] if _in_value(part)) for one in details]
    said: dict[tuple[str | int, ...], list[str]] = {}
    for path, detail in zip(paths, details, strict=True):
        in_union = len(path) < len(detail["loc"])
        if in_union and any(len(one) > len(path) and one[: len(path)] == path for one in paths):
            continue  # one member fits so well that its own problem is told
        said.setdefault(path, []).append(_say(model, path, detail))
    return [(path, _one_of(sentences)) for path, sentences in said.items()]


def _one_of(sentences: list[str]) -> str:
    others = [one for one in sentences if not one.startswith("must be ")]
    if len(sentences) == 1 or others:
        return (others or sentences)[0]
    kinds = [one.removeprefix("must be ").rpartition(", got ")[0] for one in sentences]
    got = sentences[0].rpartition(", got ")[2]
    return f"must be {', '.join(kinds[:-1])} or {kinds[-1]}, got {got}"


def _by_line(problem: str) -> tuple[str, int]:
    place = problem.split("  ", 1)[0]
    name, _, line = place.rpartition(":")
    return (name, int(line)) if line.isdigit() else (place, 0)


def _in_value(part: str | int) -> bool:
    """Union members add parts such as "function-after[...]" to a path: leave them out."""
    return isinstance(part, int) or ("[" not in part and part not in UNION_PARTS)


def _say(model: type[BaseModel], path: tuple[str | int, ...], detail: ErrorDetails) -> str:
    got = json.dumps(detail.get("input"), default=str)
    got = got if len(got) <= 60 else got[:57] + "..."
    context = detail.get("ctx", {})
    match detail["type"]:
        case "extra_forbidden":
            return "unknown key" + _nearest(model, path)
        case "missing":
            return "is required"
        case "literal_error":
            return f"must be {context['expected']}, got {got}"
        case "greater_than_equal" | "greater_than" | "less_than_equal" | "less_than":
            signs = {"ge": ">=", "gt": ">", "le": "<=", "lt": "<"}
            limit = next((f"{signs[k]} {v}" for k, v in context.items() if k in signs), "in range")
            return f"must be {limit}, got {got}"
        case "int_type" | "int_from_float" | "int_parsing":
            return f"must be a whole number, got {got}"
        case "float_type" | "float_parsing":
            return f"must be a number, got {got}"
        case "finite_number":
            return f"must be finite, got {got}"
        case "bool_type" | "bool_parsing":
            return f"must be true or false, got {got}"
        case "string_type" | "path_type":
            return f"must be text, got {got}"
        case "model_type" | "dict_type" | "model_attributes_type":
            return f"must be a mapping, got {got}"
        case "list_type" | "tuple_type":
            return f"must be a list, got {got}"
        case "value_error":
            return f"{context.get('error', detail['msg'])!s}, got {got}"
        case _:
            return f"{detail['msg'][0].lower()}{detail['msg'][1:]}, got {got}"


def _nearest(model: type[BaseModel], path: tuple[str | int, ...]) -> str:
    fields = _fields_at(model, path[:-1])
    close = difflib.get_close_matches(str(path[-1]), fields, n=1, cutoff=0.5)
    if close:
        return f'; did you mean "{close[0]}"?'
    return f"; allowed: {', '.join(sorted(fields))}" if fields else ""


def _fields_at(model: type[BaseModel], path: tuple[str | int, ...]) -> list[str]:
    """Return the field names of the model that stands at a path."""
    current: Any = model
    for part in path:
        if _is_model(current):
            if isinstance(part, int):
                continue  # a position in a list of such models
            field = current.model_fields.get(part)
            current = None if field is None else _inside(field.annotation)
        else:
            # A key of a mapping of names, or a position in a list.
            current = _inside(get_args(current)[-1]) if get_args(current) else None
    return list(current.model_fields) if _is_model(current) else []


def _is_model(annotation: Any) -> bool:
    return isinstance(annotation, type) and issubclass(annotation, BaseModel)


def _inside(annotation: Any) -> Any:
    """Return the model or mapping of an annotation that may also be None or a list."""
    if _is_model(annotation) or get_origin(annotation) is dict:
        return annotation
    return next((found for arg in get_args(annotation) if (found := _inside(arg))), None)


def _override(
    value: dict[str, Any],
    text: str,
    changed: dict[tuple[str | int, ...], str],
    problems: list[str],
) -> None:
    key, equals, raw = text.partition("=")
    parts = tuple(key.strip().split("."))
    if not equals or not all(parts):
        problems.append(f"--set {text}  must be KEY=VALUE with a dotted key")
        return
    try:
        _, parsed = compose(raw)
    except yaml.YAMLError:
        problems.append(f"--set {text}  the value is not valid YAML")
        return
    target = value
    for part in parts[:-1]:
        inner = target.setdefault(part, {})
        if not isinstance(inner, dict):
            inner = target[part] = {}
        target = inner
    target[parts[-1]] = parsed
    changed[parts] = f"--set {key}"
