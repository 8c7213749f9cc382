"""The data contract, version "1": what a recording must hold, and everything wrong with one."""

from __future__ import annotations

import difflib
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass, field
from datetime import datetime
from typing import Any

import numpy as np

CONTRACT = "1"
KINDS = ("iq", "trace", "state")
FEW = 4
"""Values of a long coordinate that a message repeats."""

MEASURE_DIMS = {
    "iq": ("shot", "round", "measure", "quadrature"),
    "trace": ("shot", "round", "measure", "sample", "quadrature"),
    "state": ("shot", "round", "measure"),
}
CLOSING_DIMS = {
    "iq": ("shot", "data", "quadrature"),
    "trace": ("shot", "data", "sample", "quadrature"),
    "state": ("shot", "data"),
}
CALIBRATION_DIMS = {
    "iq": ("qubit", "prepared", "shot", "quadrature"),
    "trace": ("qubit", "prepared", "shot", "sample", "quadrature"),
}


@dataclass(frozen=True)
class Outline:
    """What a file says of itself without its shots.

    Attributes
    ----------
    attributes
        Global attributes.
    dims
        Variable name to dimension names.
    sizes
        Dimension name to length.
    coordinates
        Coordinate name to its values (small ones only).
    numeric
        Variable name to whether it holds numbers; variables left out are taken for numbers.
    """

    attributes: Mapping[str, Any]
    dims: Mapping[str, tuple[str, ...]]
    sizes: Mapping[str, int]
    coordinates: Mapping[str, np.ndarray[Any, Any]]
    numeric: Mapping[str, bool] = field(default_factory=dict)


def kind_of(outline: Outline, prefix: str = "") -> str | None:
    """Return which of iq, trace, state a recording holds (under `prefix`), or None."""
    return next((kind for kind in KINDS if f"{prefix}{kind}" in outline.dims), None)


def calibration_problems(outline: Outline) -> list[str]:
    """Return everything that keeps a file from being a calibration recording."""
    problems = _attribute_problems(outline, "calibration")
    kind = kind_of(outline)
    if kind not in CALIBRATION_DIMS:
        return [*problems, "variable iq or trace: found neither"]
    problems += _dims_problems(outline, kind, CALIBRATION_DIMS[kind])
    problems += _quadrature_problems(outline)
    problems += _name_problems(outline, "qubit")
    prepared = outline.coordinates.get("prepared")
    if prepared is None:
        problems.append("coordinate prepared: not found, expected 0, 1 and, where there is one, 2")
    else:
        values = prepared.tolist()
        if not {0, 1} <= set(values) <= {0, 1, 2} or len(set(values)) != len(values):
            problems.append(f"coordinate prepared: found {values}, expected 0, 1 and perhaps 2")
    return problems + _size_problems(outline, ("qubit", "shot"))


def memory_problems(outline: Outline) -> list[str]:
    """Return everything that keeps a file from being a memory recording."""
    problems = _attribute_problems(outline, "memory")
    for name, allowed in (("basis", ("Z", "X")), ("reset", ("each round", "none"))):
        found = outline.attributes.get(name)
        if found not in allowed:
            expected = " or ".join(f'"{value}"' for value in allowed)
            problems.append(f"attribute {name}: found {_quoted(found)}, expected {expected}")
    if not outline.attributes.get("patch"):
        problems.append("attribute patch: not found, expected the name of the patch")
    for prefix, dims in (("", MEASURE_DIMS), ("final_", CLOSING_DIMS)):
        kind = kind_of(outline, prefix)
        if kind is None:
            names = ", ".join(f"{prefix}{name}" for name in KINDS)
            problems.append(f"variable {names}: found none of them")
        else:
            problems += _dims_problems(outline, f"{prefix}{kind}", dims[kind])
            if kind != "state":
                problems += _quadrature_problems(outline)
    prepared = outline.dims.get("prepared")
    if prepared not in (("shot", "data"), ("data",)):
        problems.append(
            f"variable prepared: found {_dims_text(prepared)}, expected (shot, data) or (data)"
        )
    problems += _number_problems(outline, ("prepared", "verdict", "started_at"))
    for name in ("verdict", "started_at"):
        if name in outline.dims and outline.dims[name] != ("shot",):
            problems.append(
                f"variable {name}: found {_dims_text(outline.dims[name])}, expected (shot)"
            )
    problems += _name_problems(outline, "measure") + _name_problems(outline, "data")
    rounds = outline.coordinates.get("round")
    size = outline.sizes.get("round", 0)
    if rounds is not None and rounds.tolist() != list(range(1, size + 1)):
        problems.append(f"coordinate round: found {_start_of(rounds)}, expected 1 to {size}")
    problems += _injected_problems(outline)
    return problems + _size_problems(outline, ("shot", "round", "measure", "data"))


def name_mismatches(found: Iterable[str], expected: Sequence[str], role: str) -> list[str]:
    """Return how the qubit names of a recording differ from the layout's; never guessed away."""
    found = list(found)
    problems = []
    for name in found:
        if name not in expected:
            close = difflib.get_close_matches(name, expected, n=1)
            hint = f'; the nearest is "{close[0]}"' if close else ""
            problems.append(f'{role} qubit "{name}": not in the layout{hint}')
    problems += [
        f'{role} qubit "{name}": in the layout but not in the recording'
        for name in expected
        if name not in found
    ]
    return problems


def _attribute_problems(outline: Outline, kind: str) -> list[str]:
    attributes = outline.attributes
    problems = []
    if str(attributes.get("contract")) != CONTRACT:
        found = _quoted(attributes.get("contract"))
        problems.append(f'attribute contract: found {found}, expected "{CONTRACT}"')
    if attributes.get("recording") != kind:
        found = _quoted(attributes.get("recording"))
        problems.append(f'attribute recording: found {found}, expected "{kind}"')
    problems += [
        f"attribute {name}: not found, expected text"
        for name in ("calibration_id", "device")
        if not attributes.get(name)
    ]
    if parse_time(attributes.get("acquired_at")) is None:
        problems.append(
            f"attribute acquired_at: found {_quoted(attributes.get('acquired_at'))}, expected "
            "an ISO 8601 time with a zone, such as 2026-11-20T01:00:00+00:00"
        )
    return problems


def parse_time(text: object) -> datetime | None:
    """Return the time of an ISO 8601 text with a zone, or None if it is not one."""
    try:
        time = datetime.fromisoformat(str(text))
    except ValueError:
        return None
    return time if time.tzinfo is not None else None


def _dims_problems(outline: Outline, name: str, expected: tuple[str, ...]) -> list[str]:
    found = outline.dims[name]
    problems = _number_problems(outline, (name,))
    if found == expected:
        return problems
    return [
        *problems,
        f"variable {name}: found {_dims_text(found)}, expected {_dims_text(expected)}",
    ]


def _number_problems(outline: Outline, names: Sequence[str]) -> list[str]:
    return [
        f"variable {name}: found values of type text, expected numbers"
        for name in names
        if not outline.numeric.get(name, True)
    ]


def _quadrature_problems(outline: Outline) -> list[str]:
    values = outline.coordinates.get("quadrature")
    size = outline.sizes.get("quadrature")
    if values is None and size == 2:
        return []
    found = None if values is None else [str(value) for value in values]
    if found == ["I", "Q"]:
        return []
    return [f'coordinate quadrature: found {found}, expected ["I", "Q"]']


def _name_problems(outline: Outline, dim: str) -> list[str]:
    found = outline.coordinates.get(dim)
    if found is None:
        return [f"coordinate {dim}: not found, expected the names of the qubits"]
    names = [str(name) for name in found]
    twice = sorted({name for name in names if names.count(name) > 1})
    return [f'coordinate {dim}: "{name}" stands more than once' for name in twice]


def _injected_problems(outline: Outline) -> list[str]:
    attributes = outline.attributes
    present = [name for name in ("injected_qubit", "injected_round") if name in attributes]
    if len(present) == 1:
        return ["attributes injected_qubit and injected_round: only one of the two is there"]
    if present:
        names = [
            str(name)
            for dim in ("measure", "data")
            for name in outline.coordinates.get(dim, np.array([]))
        ]
        qubit = str(attributes["injected_qubit"])
        if qubit not in names:
            return [f'attribute injected_qubit: found "{qubit}", expected a qubit of the recording']
        return _injected_number_problems(attributes, outline.sizes.get("round", 0))
    return []


def _injected_number_problems(attributes: Mapping[str, Any], rounds: int) -> list[str]:
    problems = []
    at, probability = attributes["injected_round"], attributes.get("injected_probability", 1.0)
    if _number(at) not in range(1, rounds + 1):
        problems.append(
            f"attribute injected_round: found {_quoted(at)}, expected a round from 1 to {rounds}"
        )
    value = _number(probability)
    if value is None or not 0 <= value <= 1:
        problems.append(
            f"attribute injected_probability: found {_quoted(probability)}, expected a fraction "
            "from 0 to 1"
        )
    return problems


def _number(value: object) -> float | None:
    try:
        return float(str(value))
    except ValueError:
        return None


def _start_of(values: np.ndarray[Any, Any]) -> str:
    """Return the first few values as people write them."""
    first = ", ".join(str(value) for value in values.tolist()[:FEW])
    return f"[{first}{', ...' if len(values) > FEW else ''}]"


def _size_problems(outline: Outline, dims: Sequence[str]) -> list[str]:
    return [
        f"dimension {dim}: found length 0, expected 1 or more"
        for dim in dims
        if outline.sizes.get(dim, 1) == 0
    ]


def _dims_text(dims: tuple[str, ...] | None) -> str:
    return "nothing" if dims is None else f"({', '.join(dims)})"


def _quoted(value: object) -> str:
    return "nothing" if value is None else f'"{value}"'
