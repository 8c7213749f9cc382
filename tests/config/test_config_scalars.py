"""Scalars of the config files: YAML 1.2, no silent conversions, no duplicates."""

from __future__ import annotations

import math

import pytest
import yaml
from hypothesis import given
from hypothesis import strategies as st

from leakpipe.config.scalars import compose, line_of


def value_of(text: str) -> object:
    return compose(f"key: {text}\n")[1]["key"]


@pytest.mark.parametrize(
    ("text", "expected"),
    [
        ("1e-3", 1e-3),
        ("1E3", 1000.0),
        ("-2.5e-4", -2.5e-4),
        (".5", 0.5),
        ("3.", 3.0),
        ("7", 7),
        ("-7", -7),
        ("0", 0),
        ("on", "on"),
        ("yes", "yes"),
        ("no", "no"),
        ("off", "off"),
        ("y", "y"),
        ("true", True),
        ("False", False),
        ("12:30", "12:30"),
        ("12:30:45", "12:30:45"),
        ("010", "010"),
        ("0x10", "0x10"),
        ("1_000", "1_000"),
        ("2026-11-20", "2026-11-20"),
        ("", None),
        ("~", None),
        ("null", None),
        ('"1e-3"', "1e-3"),
        ("<<", "<<"),
    ],
)
def test_scalars_follow_the_core_schema(text: str, expected: object) -> None:
    """A scalar is what a reader takes it for: 1e-3 a number; on, 12:30, 010 and dates text."""
    found = value_of(text)
    assert found == expected
    assert type(found) is type(expected)


def test_infinity_and_not_a_number_are_read() -> None:
    """The two special floats keep their YAML 1.2 spelling."""
    assert value_of("-.inf") == -math.inf
    assert math.isnan(value_of(".nan"))  # type: ignore[arg-type]


@given(st.floats(allow_nan=False, allow_infinity=False))
def test_every_printed_float_comes_back(number: float) -> None:
    """What Python prints as a float is a float of the same bits in a config."""
    assert value_of(repr(number)) == number
    assert isinstance(value_of(repr(number)), float)


@given(st.integers(min_value=-(10**30), max_value=10**30))
def test_every_printed_integer_comes_back(number: int) -> None:
    """What Python prints as an integer is that integer in a config."""
    assert value_of(str(number)) == number


def test_duplicates_name_both_lines() -> None:
    """The second of two equal keys is refused; the message and mark give both lines."""
    with pytest.raises(yaml.YAMLError) as caught:
        compose("rates:\n  draws: 200\n  boundary_rounds: 1\n  draws: 300\n")
    assert "'draws' stands twice, first on line 2" in str(caught.value.problem)  # type: ignore[attr-defined]
    assert caught.value.problem_mark.line + 1 == 4  # type: ignore[attr-defined]


def test_a_list_cannot_be_a_key() -> None:
    """A key that is no word is refused with a sentence, not with a TypeError."""
    with pytest.raises(yaml.YAMLError, match="a key must be a word"):
        compose("? [a, b]\n: 1\n")


@pytest.mark.parametrize(
    "text",
    ["a: !!python/object/apply:os.getcwd []\n", "a: !made_up 1\n", "a: &x [*x]\n"],
    ids=["python object", "own tag", "contains itself"],
)
def test_nothing_executable_and_nothing_endless(text: str) -> None:
    """Tags that would build objects and values that contain themselves are refused."""
    with pytest.raises(yaml.YAMLError):
        compose(text)


@pytest.mark.parametrize(
    "text",
    ["a: !!int many\n", "a: " + "9" * 5000 + "\n", "a: " + "[" * 3000 + "]" * 3000 + "\n"],
    ids=["int of words", "5000 digits", "3000 brackets"],
)
def test_values_that_break_python_are_yaml_errors(text: str) -> None:
    """A value that Python's own conversions refuse is an error of the text like any other."""
    with pytest.raises(yaml.YAMLError):
        compose(text)


TEXT = """\
recordings:
  folder: a
  patterns:
    - "*.nc"
    - "*.zarr"
rates: {draws: 200,
  boundary_rounds: 2}
"""


@pytest.mark.parametrize(
    ("path", "line"),
    [
        (("recordings",), 1),
        (("recordings", "folder"), 2),
        (("recordings", "patterns", 1), 5),
        (("rates", "boundary_rounds"), 7),
        (("rates", "not there"), 6),
        (("recordings", "patterns", 7), 3),
        (("not there", "at all"), 1),
    ],
)
def test_lines_of_paths(path: tuple[str | int, ...], line: int) -> None:
    """A path has the line of its deepest part that the file has."""
    assert line_of(compose(TEXT)[0], path) == line
