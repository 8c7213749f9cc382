"""The JSON Schema for editors, and the example configs, kept current with the models."""

from __future__ import annotations

import json
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import pytest

from leakpipe.config.loading import load, read_mapping
from leakpipe.config.models import Config
from leakpipe.config.schema import FILE, json_schema, schema_text

CONFIGS = Path(__file__).parents[2] / "configs"
CHOSEN = {
    "device",
    "recordings.folder",
    "code.family",
    "code.distance",
    "history.limits.steady_leakage",
    "history.limits.leakage_share",
    "results",
    "run_log",
    "metrics",
}
"""Keys of the nightly example that must be the reader's own and are not the default."""


def test_the_committed_schema_is_current() -> None:
    """After a change of the models: `python -m leakpipe.config.schema > .../schema.json`."""
    assert FILE.read_text(encoding="utf-8") == schema_text()


def parts(node: Any) -> Iterator[dict[str, Any]]:
    """Give every mapping inside a schema, itself included."""
    if isinstance(node, dict):
        yield node
        for value in node.values():
            yield from parts(value)
    elif isinstance(node, list):
        for value in node:
            yield from parts(value)


def test_references_inside_the_schema_resolve() -> None:
    """Every reference of the schema points at one of its own definitions."""
    schema = json_schema()
    found = [part["$ref"] for part in parts(schema) if "$ref" in part]
    assert found
    assert {one.removeprefix("#/$defs/") for one in found} <= set(schema["$defs"])


def test_the_schema_refuses_unknown_keys_everywhere() -> None:
    """An editor marks a misspelt key in every section, as the loader does."""
    schema = json_schema()
    sections = [schema, *schema["$defs"].values()]
    open_ones = [
        one.get("title") for one in sections if one.get("additionalProperties") is not False
    ]
    assert open_ones == []


def test_every_key_is_explained() -> None:
    """What an editor shows for a key is the sentence of the model; a section's is its own."""
    schema = json_schema()
    silent = [
        f"{name}.{key}"
        for name, section in [("config", schema), *schema["$defs"].items()]
        for key, field in section.get("properties", {}).items()
        if "description" not in field
        and "description" not in schema["$defs"].get(_reference(field), {})
    ]
    assert silent == []


def _reference(field: dict[str, Any]) -> str:
    found = [part["$ref"] for part in parts(field) if "$ref" in part]
    return found[0].removeprefix("#/$defs/") if found else ""


@pytest.mark.parametrize("path", sorted(CONFIGS.glob("*.yaml")), ids=lambda path: path.name)
def test_example_configs_load(path: Path) -> None:
    """Every config that the project ships is valid."""
    assert load(path).results.is_absolute()


def flat(value: Any, start: str = "") -> Iterator[tuple[str, Any]]:
    """Give the dotted path and value of every leaf."""
    if isinstance(value, dict):
        for key, inner in value.items():
            yield from flat(inner, f"{start}.{key}" if start else key)
    else:
        yield start, value


def test_the_nightly_example_shows_every_section_with_its_defaults() -> None:
    """The comment that all but the named values are defaults is true, and no section is missing."""
    _, shown = read_mapping(CONFIGS / "nightly.yaml")
    sections = {name for name, one in Config.model_fields.items()}
    assert sections - set(shown) <= {"report"}
    defaults = dict(flat(json.loads(Config().model_dump_json())))
    differing = {key for key, value in flat(shown) if value != defaults.get(key)}
    assert differing == CHOSEN
