"""Layout files: equal to the built-in layouts, and refused with sentences when broken."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
import pytest
import yaml

from leakpipe.codes.files import layout_for, layout_from_file
from leakpipe.codes.layout import Layout
from leakpipe.codes.repetition import repetition
from leakpipe.codes.rotated import rotated_surface
from leakpipe.config.models import CodeSettings
from leakpipe.errors import ConfigError, LayoutError


def content_of(layout: Layout) -> dict[str, Any]:
    """Write a layout in the format of layout files."""
    return {
        "data": {name: at for name, at in zip(layout.data, layout.data_at.tolist(), strict=True)},
        "measure": {
            name: {
                "at": layout.measure_at[check].tolist(),
                "check": layout.checks[check],
                "of": [layout.data[qubit] for qubit in layout.touches[check]],
            }
            for check, name in enumerate(layout.measure)
        },
        "logical": {
            basis: [layout.data[qubit] for qubit in qubits]
            for basis, qubits in layout.logical.items()
        },
    }


def written(tmp_path: Path, content: Any) -> Path:
    path = tmp_path / "layout.yaml"
    path.write_text(yaml.safe_dump(content, sort_keys=False))
    return path


def equal(one: Layout, other: Layout) -> None:
    for name in ("distance", "data", "measure", "checks", "touches", "slots", "logical"):
        assert getattr(one, name) == getattr(other, name), name
    np.testing.assert_array_equal(one.data_at, other.data_at)
    np.testing.assert_array_equal(one.measure_at, other.measure_at)


@pytest.mark.parametrize("d", [3, 4, 5, 7])
def test_a_file_of_a_rotated_code_equals_the_built_in(tmp_path: Path, d: int) -> None:
    """The time slots, which the file does not hold, are inferred as they were."""
    layout = rotated_surface(d)
    found = layout_from_file(written(tmp_path, content_of(layout)))
    equal(found, layout)
    assert found.family == "rotated surface"


@pytest.mark.parametrize("d", [2, 3, 6])
def test_a_file_of_a_repetition_code(tmp_path: Path, d: int) -> None:
    """A line of checks of weight 2 is a repetition code with the same gates."""
    layout = repetition(d)
    found = layout_from_file(written(tmp_path, content_of(layout)))
    assert found.family == "repetition"
    for name in ("data", "measure", "checks", "touches", "logical"):
        assert getattr(found, name) == getattr(layout, name), name


def test_the_order_of_names_is_the_files(tmp_path: Path) -> None:
    """Qubits keep the order and the spelling in which the file lists them."""
    content = content_of(repetition(3))
    content["data"] = {name: content["data"][name] for name in ("D2", "D0", "D1")}
    found = layout_from_file(written(tmp_path, content))
    assert found.data == ("D2", "D0", "D1")
    assert found.touches == ((1, 2), (2, 0))


def test_names_that_yaml_takes_for_something_else(tmp_path: Path) -> None:
    """Names such as 010, on and 12:30 stay the words that people wrote."""
    path = tmp_path / "layout.yaml"
    path.write_text(
        "data: {010: [0, 0], on: [2, 0]}\n"
        "measure: {12:30: {at: [1, 0], check: Z, of: [010, on]}}\n"
        "logical: {Z: [010]}\n"
    )
    layout = layout_from_file(path)
    assert (layout.data, layout.measure) == (("010", "on"), ("12:30",))


def broken(content: dict[str, Any], case: str) -> None:
    """Break a layout file's content in place."""
    measure = content["measure"]
    match case:
        case "unknown qubit":
            measure["M0"]["of"] = ["D0", "D99"]
        case "unknown logical":
            content["logical"]["Z"] = ["D0", "Q1"]
        case "key":
            measure["M0"]["chek"] = "Z"
        case "type":
            measure["M0"]["check"] = "Y"
        case "no checks":
            content["measure"] = {}
        case "no logical":
            del content["logical"]
        case "position":
            content["data"]["D0"] = [1.0]
        case "twice in a check":
            measure["M0"]["of"] = ["D0", "D0"]
        case "name of both":
            measure["D0"] = measure.pop("M0")
        case "logical anticommutes":
            content["logical"]["X"] = ["D0"]
        case "no qubits":
            measure["M0"]["of"] = []


@pytest.mark.parametrize(
    ("case", "sentence"),
    [
        ("unknown qubit", "M0 names data qubit 'D99', which the layout does not have"),
        ("unknown logical", "logical Z names data qubit 'Q1', which the layout does not have"),
        ("key", 'measure.M0.chek  unknown key; did you mean "check"?'),
        ("type", "measure.M0.check  must be 'Z' or 'X', got \"Y\""),
        ("no checks", "needs data, measure and logical, each with an entry"),
        ("no logical", "logical  is required"),
        ("position", "data.D0.1  is required"),
        ("twice in a check", "check M0 needs one or more different data qubits"),
        ("name of both", "qubit name 'D0' stands more than once"),
        ("logical anticommutes", "check M0 does not commute with the logical X operator"),
        ("no qubits", "check M0 needs one or more different data qubits"),
    ],
)
def test_bad_layout_files(tmp_path: Path, case: str, sentence: str) -> None:
    """A broken layout file is refused with the file, the place and what is wrong."""
    content = content_of(repetition(3))
    broken(content, case)
    path = written(tmp_path, content)
    with pytest.raises(LayoutError) as caught:
        layout_from_file(path)
    message = str(caught.value)
    assert sentence in message
    assert all(line.startswith(str(path)) for line in message.splitlines()[:-1]), message
    assert caught.value.exit_code == 3


def test_missing_layout_file(tmp_path: Path) -> None:
    """A layout file that is not there is named."""
    path = tmp_path / "layout.yaml"
    with pytest.raises(LayoutError, match=r"layout\.yaml  cannot be read: No such file"):
        layout_from_file(path)


def test_the_config_decides_which_layout(tmp_path: Path) -> None:
    """A family wins over a file found; a file named wins over one found; neither is an error."""
    found = written(tmp_path, content_of(repetition(3)))
    (tmp_path / "other").mkdir()
    named = written(tmp_path / "other", content_of(repetition(5)))
    built_in = CodeSettings(family="rotated surface", distance=3)
    assert layout_for(built_in, found).data == rotated_surface(3).data
    assert len(layout_for(CodeSettings(), found).data) == 3
    assert len(layout_for(CodeSettings(layout=named), found).data) == 5
    with pytest.raises(ConfigError, match="no layout"):
        layout_for(CodeSettings(), None)
