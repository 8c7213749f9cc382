"""Writing recordings in the contract, in bounded memory, beside their place and then renamed."""

from __future__ import annotations

import os
from collections.abc import Mapping, Sequence
from pathlib import Path
from types import TracebackType
from typing import Any, Literal

import numpy as np
from numpy.typing import NDArray

from leakpipe.codes.events import MISSING
from leakpipe.recordings.contract import CLOSING_DIMS, CONTRACT, MEASURE_DIMS
from leakpipe.recordings.shots import Chunk, Frame

PACKED_FILL = np.int16(-32768)
PACKED_RANGE = 32000
"""Largest packed value used; the rest of int16 is head room for values beyond the range."""

Kind = Literal["iq", "trace", "state"]


class MemoryWriter:
    """Writes one memory recording chunk by chunk; use as a context manager.

    Parameters
    ----------
    path
        Final place of the file.
    frame
        What the recording is.
    attributes
        calibration_id, acquired_at, device, patch.
    kind
        ``"iq"`` (packed int16), ``"trace"`` (int16 as given) or ``"state"``; also of the closing
        readout.
    span
        Largest absolute value of the points, sets the packing.
    sample_ns
        Times of the samples, for traces.
    verdict, started_at
        Whether those variables are written.
    """

    def __init__(
        self,
        path: Path,
        frame: Frame,
        attributes: Mapping[str, str],
        kind: Kind = "iq",
        *,
        span: float = 4.0,
        sample_ns: Sequence[float] = (),
        verdict: bool = False,
        started_at: bool = False,
    ) -> None:
        self._path, self._frame, self._kind = path, frame, kind
        self._attributes, self._span, self._samples = dict(attributes), span, sample_ns
        self._optional = {"verdict": verdict, "started_at": started_at}
        self._partial = path.with_name(f".{path.name}.part")

    def __enter__(self) -> MemoryWriter:
        self._path.parent.mkdir(parents=True, exist_ok=True)
        self._dataset = _new_dataset(self._partial)
        frame = self._frame
        sizes = {
            "shot": frame.shots,
            "round": frame.rounds,
            "measure": len(frame.layout.measure),
            "data": len(frame.layout.data),
        }
        if self._kind != "state":
            sizes["quadrature"] = 2
        if self._kind == "trace":
            sizes["sample"] = len(self._samples)
        for name, size in sizes.items():
            self._dataset.createDimension(name, size)
        _coordinate(self._dataset, "round", np.arange(1, frame.rounds + 1))
        _coordinate(self._dataset, "measure", frame.layout.measure)
        _coordinate(self._dataset, "data", frame.layout.data)
        if self._kind != "state":
            _coordinate(self._dataset, "quadrature", ("I", "Q"))
        if self._kind == "trace":
            _coordinate(self._dataset, "sample", np.asarray(self._samples, float), units="ns")
        _signal_variable(self._dataset, self._kind, MEASURE_DIMS[self._kind], self._span)
        _signal_variable(self._dataset, f"final_{self._kind}", CLOSING_DIMS[self._kind], self._span)
        self._dataset.createVariable("prepared", "u1", ("shot", "data"))
        if self._optional["verdict"]:
            self._dataset.createVariable("verdict", "u1", ("shot",))
        if self._optional["started_at"]:
            self._dataset.createVariable("started_at", "f8", ("shot",))
            self._dataset.variables["started_at"].units = "s"
        self._dataset.setncatts(_attributes("memory", self._attributes, frame))
        return self

    def append(self, chunk: Chunk) -> None:
        """Write the shots of a chunk at their place."""
        here = slice(chunk.first, chunk.first + chunk.shots)
        for prefix in ("", "final_"):
            name = f"{prefix}{self._kind}"
            field = f"{prefix}states" if self._kind == "state" else name
            values = getattr(chunk, field)
            self._dataset.variables[name][here] = (
                packed(values, self._span) if self._kind == "iq" else values
            )
        self._dataset.variables["prepared"][here] = chunk.prepared
        for name, wanted in self._optional.items():
            if wanted:
                self._dataset.variables[name][here] = getattr(chunk, name)

    def __exit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        trace: TracebackType | None,
    ) -> None:
        self._dataset.close()
        if kind is None:
            os.replace(self._partial, self._path)
        else:
            self._partial.unlink(missing_ok=True)


def write_calibration(
    path: Path,
    signal: NDArray[Any],
    prepared: Sequence[int],
    qubits: Sequence[str],
    *,
    calibration_id: str,
    acquired_at: str,
    device: str,
    sample_ns: Sequence[float] = (),
    span: float = 4.0,
) -> None:
    """Write a calibration recording.

    Parameters
    ----------
    path
        Place of the file.
    signal
        Points (qubit, prepared, shot, 2), or int16 traces (qubit, prepared, shot, sample, 2).
    prepared
        Prepared states, 0 and 1 and perhaps 2.
    qubits
        Names.
    calibration_id, acquired_at, device
        Attributes of the contract.
    sample_ns
        Times of the samples, for traces.
    span
        Largest absolute value of the points, sets the packing.
    """
    path.parent.mkdir(parents=True, exist_ok=True)
    partial = path.with_name(f".{path.name}.part")
    trace = signal.ndim == 5
    dataset = _new_dataset(partial)
    dims = ("qubit", "prepared", "shot", *(("sample",) if trace else ()), "quadrature")
    for name, size in zip(dims, signal.shape, strict=True):
        dataset.createDimension(name, size)
    _coordinate(dataset, "qubit", qubits)
    _coordinate(dataset, "prepared", np.asarray(prepared))
    _coordinate(dataset, "quadrature", ("I", "Q"))
    kind: Kind = "trace" if trace else "iq"
    if trace:
        _coordinate(dataset, "sample", np.asarray(sample_ns, float), units="ns")
    _signal_variable(dataset, kind, dims, span)
    dataset.variables[kind][:] = signal if trace else packed(signal, span)
    own = {"calibration_id": calibration_id, "acquired_at": acquired_at, "device": device}
    dataset.setncatts(_attributes("calibration", own, None))
    dataset.close()
    os.replace(partial, path)


def packed(points: NDArray[Any], span: float) -> NDArray[np.int16]:
    """Return points as int16 with step span / 32000; NaN becomes the fill value."""
    steps = np.rint(np.asarray(points, dtype=np.float64) * (PACKED_RANGE / span))
    limit = np.iinfo(np.int16).max
    clipped = np.clip(np.nan_to_num(steps), -limit, limit).astype(np.int16)
    return np.where(np.isfinite(steps), clipped, PACKED_FILL)


def _new_dataset(path: Path) -> Any:
    import netCDF4

    dataset = netCDF4.Dataset(path, "w", format="NETCDF4")
    dataset.set_auto_maskandscale(False)
    return dataset


def _coordinate(
    dataset: Any, name: str, values: Sequence[str] | NDArray[Any], units: str | None = None
) -> None:
    if isinstance(values, np.ndarray):
        variable = dataset.createVariable(name, "f8" if values.dtype.kind == "f" else "i8", (name,))
        variable[:] = values
    else:
        variable = dataset.createVariable(name, str, (name,))
        variable[:] = np.array(values, dtype=object)
    if units is not None:
        variable.units = units


def _signal_variable(dataset: Any, name: str, dims: tuple[str, ...], span: float) -> None:
    if name.endswith("state"):
        dataset.createVariable(name, "u1", dims, fill_value=MISSING)
    elif name.endswith("iq"):
        variable = dataset.createVariable(name, "i2", dims, fill_value=PACKED_FILL)
        # The dataset's own switch only reaches variables that exist already.
        variable.set_auto_maskandscale(False)
        variable.scale_factor = span / PACKED_RANGE
    else:
        dataset.createVariable(name, "i2", dims, fill_value=False)


def _attributes(kind: str, own: Mapping[str, str], frame: Frame | None) -> dict[str, Any]:
    attributes: dict[str, Any] = {"recording": kind, "contract": CONTRACT, **own}
    if frame is not None:
        attributes["basis"] = frame.basis
        attributes["reset"] = "each round" if frame.reset else "none"
        if frame.injected is not None:
            qubit, at, probability = frame.injected
            attributes |= {
                "injected_qubit": qubit,
                "injected_round": at,
                "injected_probability": probability,
            }
    return attributes
