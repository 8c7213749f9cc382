"""The `recordings.mapping` section: which arrays and axes of foreign files play which role."""

from __future__ import annotations

from typing import Annotated, Literal

from pydantic import Field, model_validator

from leakpipe.config.base import Section

Axis = Literal["shot", "round", "measure", "data", "qubit", "prepared", "sample", "quadrature"]
CalibrationRole = Literal["iq", "trace"]
MemoryRole = Literal[
    "iq",
    "trace",
    "state",
    "final_iq",
    "final_trace",
    "final_state",
    "prepared",
    "verdict",
    "started_at",
]
CalibrationCoordinate = Literal["qubit", "prepared", "sample"]
MemoryCoordinate = Literal["measure", "data", "sample"]
CalibrationAttribute = Literal["calibration_id", "acquired_at", "device"]
MemoryAttribute = Literal[
    "calibration_id",
    "acquired_at",
    "device",
    "patch",
    "basis",
    "reset",
    "injected_qubit",
    "injected_round",
    "injected_probability",
]


class ArrayMapping(Section):
    """One array of a foreign file."""

    array: Annotated[str, Field(min_length=1)]
    """Name of the array; in groups with slashes, such as `run/points`."""
    axes: Annotated[tuple[Axis, ...], Field(min_length=1)]
    """The role of each axis, in the order of the file. Complex points have no quadrature axis."""

    @model_validator(mode="after")
    def _once(self) -> ArrayMapping:
        if len(set(self.axes)) != len(self.axes):
            raise ValueError("each axis may stand once")
        return self


class FromFile(Section):
    """A value that the file itself holds: name an array or an attribute."""

    array: str | None = None
    """An array of the file (of one value, for an attribute)."""
    attribute: str | None = None
    """A global attribute of the file (not in NPZ)."""

    @model_validator(mode="after")
    def _one(self) -> FromFile:
        if (self.array is None) == (self.attribute is None):
            raise ValueError("name an array or an attribute")
        return self


class CalibrationMapping(Section):
    """How calibration files are read."""

    files: Annotated[str, Field(min_length=1)]
    """Pattern of the names of these files, such as `cal-*.npz`."""
    arrays: dict[CalibrationRole, ArrayMapping]
    """The points or traces."""
    coordinates: dict[CalibrationCoordinate, tuple[str | int | float, ...] | FromFile]
    """Names of the qubits, prepared states, times of samples: a list, or an array of the file."""
    attributes: dict[CalibrationAttribute, str | FromFile]
    """A constant for all files, or where the file holds it."""


class MemoryMapping(Section):
    """How memory files are read."""

    files: Annotated[str, Field(min_length=1)]
    """Pattern of the names of these files, such as `mem-*.h5`."""
    arrays: dict[MemoryRole, ArrayMapping]
    """Readout of the rounds, closing readout, starting bits and, optionally, the rest."""
    coordinates: dict[MemoryCoordinate, tuple[str | int | float, ...] | FromFile]
    """Names of the measure and data qubits, times of samples: a list, or an array of the file."""
    attributes: dict[MemoryAttribute, str | int | float | FromFile]
    """A constant for all files, or where the file holds it."""


class MappingSettings(Section):
    """Foreign files: one way to read calibrations and one to read memory recordings."""

    calibration: CalibrationMapping | None = None
    memory: MemoryMapping | None = None
