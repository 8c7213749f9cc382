"""Foreign HDF5, netCDF, Zarr and NPZ files as recordings of the contract, through a mapping.

A mapped file answers `Source` like any recording, so that nothing after it knows the difference.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from contextlib import contextmanager
from fnmatch import fnmatch
from pathlib import Path
from typing import Any, Literal

import numpy as np
from numpy.typing import NDArray

from leakpipe.config.mapping import (
    ArrayMapping,
    CalibrationMapping,
    FromFile,
    MappingSettings,
    MemoryMapping,
)
from leakpipe.errors import RecordingError, numbered
from leakpipe.recordings.arrays import Arrays, foreign
from leakpipe.recordings.contract import (
    CALIBRATION_DIMS,
    CLOSING_DIMS,
    CONTRACT,
    MEASURE_DIMS,
    Outline,
)

NUMERIC = "iufbc"
Role = Literal["calibration", "memory"]


def role_of(path: Path, mapping: MappingSettings | None) -> Role | None:
    """Return what a file is mapped as by its name, or None where no pattern fits."""
    if mapping is None:
        return None
    if mapping.calibration is not None and fnmatch(path.name, mapping.calibration.files):
        return "calibration"
    if mapping.memory is not None and fnmatch(path.name, mapping.memory.files):
        return "memory"
    return None


@contextmanager
def mapped(path: Path, mapping: MappingSettings, role: Role) -> Iterator[MappedSource]:
    """Open a foreign file as the recording that a mapping makes of it.

    Raises
    ------
    RecordingError
        The file cannot be opened, or lacks what the mapping names; everything is listed.
    """
    one = mapping.calibration if role == "calibration" else mapping.memory
    assert one is not None
    with foreign(path) as arrays:
        problems = _problems(arrays, one)
        if problems:
            said = [f"{path}  {problem}" for problem in problems]
            raise RecordingError(numbered(said, "the recording was refused"))
        yield MappedSource(arrays, one, role)


class MappedSource:
    """A foreign file in the words of the contract.

    Parameters
    ----------
    arrays
        The open file.
    mapping
        Which of its arrays and axes play which role.
    role
        What it is.
    """

    def __init__(
        self, arrays: Arrays, mapping: CalibrationMapping | MemoryMapping, role: Role
    ) -> None:
        self._arrays, self._mapping, self._role = arrays, mapping, role
        self._roles: Mapping[str, ArrayMapping] = {str(k): v for k, v in mapping.arrays.items()}

    def outline(self) -> Outline:
        """Return what the file says of itself, in the words of the contract."""
        kinds = {name: self._arrays.dtype(one.array).kind for name, one in self._roles.items()}
        sizes = _sizes(self._arrays, self._roles)
        if any(kind == "c" for kind in kinds.values()):
            sizes["quadrature"] = 2
        attributes = {
            str(name): _attribute(self._arrays, value)
            for name, value in self._mapping.attributes.items()
        }
        return Outline(
            attributes={**attributes, "recording": self._role, "contract": CONTRACT},
            dims={name: self._dims(name) for name in self._roles},
            sizes=sizes,
            coordinates={
                str(name): _coordinate(self._arrays, value)
                for name, value in self._mapping.coordinates.items()
            },
            numeric={name: kind in NUMERIC for name, kind in kinds.items()},
        )

    def read(self, name: str, start: int = 0, stop: int | None = None) -> NDArray[Any]:
        """Return a slice along the contract's first dimension, axes in the contract's order."""
        one, dims = self._roles[name], self._dims(name)
        index = tuple(slice(start, stop) if axis == dims[0] else slice(None) for axis in one.axes)
        values = self._arrays.read(one.array, index)
        if values.dtype.kind == "c":
            values = np.stack([values.real, values.imag], axis=-1)
        axes = self._axes(one)
        return np.ascontiguousarray(values.transpose([axes.index(dim) for dim in dims]))

    def encoding(self, name: str) -> dict[str, float]:
        """Return scale_factor, add_offset and _FillValue where the array has them."""
        return self._arrays.encoding(self._roles[name].array)

    def _axes(self, one: ArrayMapping) -> tuple[str, ...]:
        """Return the roles of an array's axes, with the one that complex points gain."""
        is_complex = self._arrays.dtype(one.array).kind == "c"
        return (*one.axes, "quadrature") if is_complex else one.axes

    def _dims(self, name: str) -> tuple[str, ...]:
        """Return the contract's dimensions if the axes are those, in any order, else the axes."""
        axes = self._axes(self._roles[name])
        expected = _expected(self._role, name)
        return expected if set(expected) == set(axes) else axes


def _expected(role: Role, name: str) -> tuple[str, ...]:
    if role == "calibration":
        return CALIBRATION_DIMS[name]
    if name.startswith("final_"):
        return CLOSING_DIMS[name.removeprefix("final_")]
    return {**MEASURE_DIMS, "prepared": ("shot", "data")}.get(name, ("shot",))


def _problems(arrays: Arrays, mapping: CalibrationMapping | MemoryMapping) -> list[str]:
    """Return everything that the mapping names and the file does not have."""
    problems = []
    sizes: dict[str, tuple[int, str]] = {}
    for role, one in mapping.arrays.items():
        if one.array not in arrays:
            problems.append(f"mapping of {role}: the file has no array {one.array!r}")
            continue
        shape = arrays.shape(one.array)
        if len(shape) != len(one.axes):
            problems.append(
                f"mapping of {role}: array {one.array!r} has {len(shape)} axes, the mapping names "
                f"{len(one.axes)}: {', '.join(one.axes)}"
            )
            continue
        for axis, size in zip(one.axes, shape, strict=True):
            known, owner = sizes.setdefault(axis, (size, one.array))
            if known != size:
                problems.append(
                    f"mapping of {role}: axis {axis} of array {one.array!r} has length {size}, "
                    f"of array {owner!r} {known}"
                )
    values: list[tuple[str, Any]] = [*mapping.coordinates.items(), *mapping.attributes.items()]
    for name, value in values:
        if isinstance(value, FromFile):
            if value.array is not None and value.array not in arrays:
                problems.append(f"mapping of {name}: the file has no array {value.array!r}")
            if value.attribute is not None and value.attribute not in arrays.attributes:
                problems.append(f"mapping of {name}: the file has no attribute {value.attribute!r}")
    if problems:
        return problems
    for axis, value in mapping.coordinates.items():
        length = _coordinate(arrays, value).size
        if axis in sizes and length != sizes[axis][0]:
            problems.append(
                f"mapping of coordinate {axis}: {length} values for an axis of {sizes[axis][0]}"
            )
    return problems


def _sizes(arrays: Arrays, roles: Mapping[str, ArrayMapping]) -> dict[str, int]:
    return {
        axis: size
        for one in roles.values()
        for axis, size in zip(one.axes, arrays.shape(one.array), strict=True)
    }


def _from_file(arrays: Arrays, value: FromFile) -> NDArray[Any]:
    if value.array is not None:
        raw = arrays.read(value.array, ())
    else:
        raw = np.asarray(arrays.attributes[str(value.attribute)])
    # HDF5 holds text as bytes as often as not.
    return np.char.decode(raw, "utf-8") if raw.dtype.kind == "S" else raw


def _coordinate(arrays: Arrays, value: tuple[Any, ...] | FromFile) -> NDArray[Any]:
    values = _from_file(arrays, value) if isinstance(value, FromFile) else np.asarray(value)
    return np.atleast_1d(values)


def _attribute(arrays: Arrays, value: str | float | FromFile) -> Any:
    """Return a constant as it is, and one value of the file as text or number."""
    if not isinstance(value, FromFile):
        return value
    found = _from_file(arrays, value)
    return found.item() if found.size == 1 else str(found.tolist())
