"""Safe YAML with the scalars of YAML 1.2, no duplicate keys, and line numbers kept.

YAML 1.1 loaders read 1e-3 as text, `on` as true, 12:30 as 750 and 010 as 8, and silently keep the
last of two equal keys.
"""

from __future__ import annotations

import re
from collections.abc import Hashable
from typing import Any

import yaml

LONGEST_QUOTE = 40
"""Characters of a value that an error repeats."""


class Loader(yaml.SafeLoader):
    """Safe loader whose scalars follow the core schema of YAML 1.2 (yaml.org/spec/1.2.2, 10.3)."""

    def construct_object(self, node: yaml.Node, deep: bool = False) -> Any:
        """Return the value of a node; what Python cannot convert is an error with a place."""
        try:
            return super().construct_object(node, deep=deep)
        except ValueError:
            raise yaml.constructor.ConstructorError(
                None, None, f"{_shortened(node.value)} is not of its type", node.start_mark
            ) from None


def _shortened(value: Any) -> str:
    text = repr(value)
    return text if len(text) <= LONGEST_QUOTE else f"{text[:LONGEST_QUOTE]}..."


Loader.yaml_implicit_resolvers = {}
for _tag, _pattern, _first in (
    ("bool", r"^(?:true|True|TRUE|false|False|FALSE)$", "tTfF"),
    ("null", r"^(?:~|null|Null|NULL|)$", "~nN"),
    ("int", r"^[-+]?(?:0|[1-9][0-9]*)$", "-+0123456789"),
    (
        "float",
        r"^[-+]?(?:\.[0-9]+|(?:0|[1-9][0-9]*)(?:\.[0-9]*)?)(?:[eE][-+]?[0-9]+)?$"
        r"|^[-+]?\.(?:inf|Inf|INF)$|^\.(?:nan|NaN|NAN)$",
        "-+0123456789.",
    ),
):
    Loader.add_implicit_resolver(f"tag:yaml.org,2002:{_tag}", re.compile(_pattern), list(_first))
Loader.add_implicit_resolver("tag:yaml.org,2002:null", re.compile(r"^$"), [""])


def _mapping(loader: Loader, node: yaml.MappingNode) -> dict[Hashable, Any]:
    seen: dict[Hashable, yaml.Mark] = {}
    for key_node, _ in node.value:
        key = loader.construct_object(key_node, deep=True)
        if not isinstance(key, Hashable):
            raise yaml.constructor.ConstructorError(
                None, None, "a key must be a word", key_node.start_mark
            )
        if key in seen:
            raise yaml.constructor.ConstructorError(
                None,
                None,
                f"key {key!r} stands twice, first on line {seen[key].line + 1}",
                key_node.start_mark,
            )
        seen[key] = key_node.start_mark
    return loader.construct_mapping(node, deep=True)


Loader.add_constructor("tag:yaml.org,2002:map", _mapping)


def compose(text: str) -> tuple[yaml.Node | None, Any]:
    """Return the node tree (with line marks) and the plain value of a YAML text.

    Raises
    ------
    yaml.YAMLError
        The text is no YAML, or a key stands twice; the error carries a mark where it can.
        Also where the text is nested deeper than Python can follow.
    """
    loader = Loader(text)
    try:
        node = loader.get_single_node()
        return node, None if node is None else loader.construct_document(node)
    except RecursionError:
        raise yaml.YAMLError("nested too deeply") from None
    finally:
        loader.dispose()


def line_of(node: yaml.Node | None, path: tuple[str | int, ...]) -> int:
    """Return the line (from 1) of the deepest part of `path` that the node tree has."""
    line = 1
    for step in path:
        if isinstance(node, yaml.MappingNode):
            for key, value in node.value:
                if key.value == str(step):
                    line, node = key.start_mark.line + 1, value
                    break
            else:
                return line
        elif isinstance(node, yaml.SequenceNode) and isinstance(step, int):
            if step >= len(node.value):
                return line
            node = node.value[step]
            line = node.start_mark.line + 1
        else:
            return line
    return line
