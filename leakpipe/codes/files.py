"""Layout files: names, positions, checks and logical operators of a code of one's own."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
from pydantic import ConfigDict

from leakpipe.codes.layout import Basis, Layout
from leakpipe.codes.repetition import repetition
from leakpipe.codes.rotated import rotated_surface
from leakpipe.config.base import Section
from leakpipe.config.loading import read_mapping, validated
from leakpipe.config.models import CodeSettings
from leakpipe.errors import ConfigError, LayoutError, numbered

FULL_WEIGHT = 4


class CheckEntry(Section):
    """One measure qubit of a layout file."""

    at: tuple[float, float]
    check: Basis
    of: tuple[str, ...]


class LayoutFile(Section):
    """The content of a layout file."""

    model_config = ConfigDict(title="layout")
    data: dict[str, tuple[float, float]]
    measure: dict[str, CheckEntry]
    logical: dict[Basis, tuple[str, ...]]


def layout_for(code: CodeSettings, found: Path | None = None) -> Layout:
    """Return the layout that a config names.

    Parameters
    ----------
    code
        The `code` section.
    found
        Layout file found in the folder of recordings, used when the config names none.

    Raises
    ------
    ConfigError
        No layout is named or found.
    LayoutError
        The layout file cannot be used.
    """
    if code.family == "rotated surface":
        return rotated_surface(code.distance or 0)
    if code.family == "repetition":
        return repetition(code.distance or 0)
    path = code.layout or found
    if path is None:
        raise ConfigError(
            "code  no layout: name a family and a distance, a layout file, or put layout.yaml "
            "into the folder of recordings"
        )
    return layout_from_file(path)


def layout_from_file(path: Path) -> Layout:
    """Read a layout file.

    Raises
    ------
    LayoutError
        The file is missing, malformed, names unknown qubits or contradicts itself.
    """
    try:
        node, value = read_mapping(path)
        content = validated(LayoutFile, value, node, str(path))
    except ConfigError as error:
        raise LayoutError(str(error)) from None
    unknown = [
        f"{path}  {owner} names data qubit {name!r}, which the layout does not have"
        for owner, names in [
            *((name, entry.of) for name, entry in content.measure.items()),
            *((f"logical {basis}", names) for basis, names in content.logical.items()),
        ]
        for name in names
        if name not in content.data
    ]
    if unknown or not content.data or not content.measure or not content.logical:
        problems = unknown or [f"{path}  needs data, measure and logical, each with an entry"]
        raise LayoutError(numbered(problems, "the layout cannot be used"))
    try:
        return _layout(content)
    except LayoutError as error:
        *problems, closing = str(error).splitlines()
        named = [f"{path}  {problem}" for problem in problems]
        raise LayoutError("\n".join([*named, closing])) from None


def _layout(content: LayoutFile) -> Layout:
    index = {name: position for position, name in enumerate(content.data)}
    return Layout(
        family=_family(content),
        distance=min(len(names) for names in content.logical.values()),
        data=tuple(content.data),
        measure=tuple(content.measure),
        data_at=np.array(list(content.data.values()), dtype=float),
        measure_at=np.array([entry.at for entry in content.measure.values()], dtype=float),
        checks=tuple(entry.check for entry in content.measure.values()),
        touches=tuple(
            tuple(index[name] for name in entry.of) for entry in content.measure.values()
        ),
        slots=_slots(content),
        logical={
            basis: tuple(index[name] for name in names) for basis, names in content.logical.items()
        },
    )


def _family(content: LayoutFile) -> str:
    """A file whose checks are all of one type and weight at most 2 is a repetition code."""
    kinds = {entry.check for entry in content.measure.values()}
    light = all(len(entry.of) <= 2 for entry in content.measure.values())
    return "repetition" if len(kinds) == 1 and light else "rotated surface"


def _slots(content: LayoutFile) -> tuple[tuple[int, ...], ...]:
    """Infer time slots: full checks in listed order, lighter ones by the offset of their gates.

    The file gives the order of each check's gates only. A full check uses slots 0 to 3; a lighter
    check does the gate at a given offset when the full checks of its type do; where that is
    ambiguous, or would use a qubit twice, each gate takes the first free slot in order.
    """
    offset_slot: dict[tuple[Any, ...], int] = {}
    for entry in content.measure.values():
        if len(entry.of) == FULL_WEIGHT:
            for slot, name in enumerate(entry.of):
                offset_slot.setdefault((entry.check, *_offset(content, entry, name)), slot)
    by_offset = [
        tuple(
            offset_slot.get((entry.check, *_offset(content, entry, name)), slot)
            for slot, name in enumerate(entry.of)
        )
        for entry in content.measure.values()
    ]
    entries = list(content.measure.values())
    uses = [
        (name, slot)
        for entry, slots in zip(entries, by_offset, strict=True)
        for name, slot in zip(entry.of, slots, strict=True)
    ]
    distinct = all(len(set(slots)) == len(slots) for slots in by_offset)
    ordered = all(list(slots) == sorted(slots) for slots in by_offset)
    if distinct and ordered and len(set(uses)) == len(uses):
        return tuple(by_offset)
    return _first_free(entries)


def _offset(content: LayoutFile, entry: CheckEntry, name: str) -> tuple[float, float]:
    x, y = content.data[name]
    return round(x - entry.at[0], 6), round(y - entry.at[1], 6)


def _first_free(entries: list[CheckEntry]) -> tuple[tuple[int, ...], ...]:
    busy: set[tuple[str, int]] = set()
    out = []
    for entry in entries:
        slots: list[int] = []
        for name in entry.of:
            slot = slots[-1] + 1 if slots else 0
            while (name, slot) in busy:
                slot += 1
            busy.add((name, slot))
            slots.append(slot)
        out.append(tuple(slots))
    return tuple(out)
