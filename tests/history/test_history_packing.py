"""Packing of nested values: back to the bit, nothing executable, damage is told."""

from __future__ import annotations

import json
from dataclasses import dataclass

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from leakpipe.findings import Finding
from leakpipe.history.packing import packed, unpacked


@dataclass(frozen=True)
class Inner:
    values: np.ndarray
    name: str


@dataclass(frozen=True)
class Outer:
    inner: Inner
    weights: np.ndarray | None
    flags: tuple[bool, bool]
    findings: tuple[Finding, ...]


PLAIN = st.recursive(
    st.none()
    | st.booleans()
    | st.integers(-(2**60), 2**60)
    | st.floats(allow_nan=False)
    | st.text(max_size=5),
    lambda inner: (
        st.lists(inner, max_size=3)
        | st.tuples(inner, inner)
        | st.dictionaries(st.text(max_size=4), inner, max_size=3)
    ),
    max_leaves=8,
)


@settings(deadline=None, max_examples=100)
@given(PLAIN)
def test_plain_values_come_back_as_they_were(value: object) -> None:
    """Through JSON and back, tuples stay tuples and floats keep every bit."""
    arrays, structure = packed(value)
    found = unpacked(arrays, json.loads(json.dumps(structure)), ())
    assert found == value
    assert repr(found) == repr(value)


def test_dataclasses_and_arrays_come_back_to_the_bit() -> None:
    """Nested dataclasses, absent parts, types of scalars and arrays, NaN."""
    finding = Finding("a", "note", "D0", "Said.", {"x": 1.5, "y": None})
    value = Outer(
        Inner(np.array([[1.5, np.nan]], dtype=np.float32), "ü"), None, (True, False), (finding,)
    )
    arrays, structure = packed((value, np.float32(0.1), np.array(["D0", "D10"])))
    found, scalar, names = unpacked(
        arrays, json.loads(json.dumps(structure)), (Outer, Inner, Finding)
    )
    assert found.inner.values.tobytes() == value.inner.values.tobytes()
    assert found.inner.values.dtype == np.float32
    assert (found.weights, found.flags, found.findings) == (None, (True, False), (finding,))
    assert type(scalar) is np.float32
    assert names.tolist() == ["D0", "D10"]


def test_only_named_classes_are_made() -> None:
    """A structure cannot ask for any other class."""
    arrays, structure = packed(Inner(np.arange(3), "x"))
    with pytest.raises(ValueError, match="cannot be read"):
        unpacked(arrays, structure, (Outer,))


def test_another_version_of_a_class_is_told() -> None:
    """A field that came or went since is an error, not a guess."""
    arrays, structure = packed(Inner(np.arange(3), "x"))
    structure[2]["new"] = ["plain", 1]
    with pytest.raises(ValueError, match="cannot be read"):
        unpacked(arrays, structure, (Inner,))
    with pytest.raises(ValueError, match="cannot be read"):
        unpacked({}, ["array", "a0"], ())
    with pytest.raises(ValueError, match="unknown kind"):
        unpacked({}, ["code", "import os"], ())


def test_what_cannot_be_packed_is_refused() -> None:
    """Python objects have no place in a cache."""
    for value in (object(), {1, 2}, np.array([{}], dtype=object), [lambda: 1]):
        with pytest.raises(TypeError, match="cannot be packed"):
            packed(value)
