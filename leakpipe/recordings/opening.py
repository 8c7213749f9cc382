"""Opening recordings: calibrations whole, memory recordings a chunk of shots at a time."""

from __future__ import annotations

import hashlib
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from datetime import datetime
from pathlib import Path
from typing import Any

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from leakpipe.codes.events import MISSING
from leakpipe.codes.layout import Layout
from leakpipe.config.mapping import MappingSettings
from leakpipe.errors import RecordingError, numbered
from leakpipe.recordings.contract import (
    CALIBRATION_DIMS,
    calibration_problems,
    kind_of,
    memory_problems,
    name_mismatches,
    parse_time,
)
from leakpipe.recordings.shots import BLOCK, Chunk, Frame
from leakpipe.recordings.source import Source, decoded, opened

HASH_BLOCK = 1 << 20
REFUSED = "the recording was refused"


@dataclass(frozen=True)
class MemoryRecording:
    """A memory recording on disk, checked but not read.

    Attributes
    ----------
    path
        The file or store.
    frame
        What it is.
    calibration_id, acquired_at, device, patch
        From its attributes.
    kind, closing_kind
        ``"iq"``, ``"trace"`` or ``"state"`` of the rounds and of the closing readout.
    measure_order, data_order
        Positions in the file of the layout's measure and data qubits.
    has_verdict, has_started_at
        Whether the optional variables are there.
    mapping
        How a foreign file is read.
    """

    path: Path
    frame: Frame
    calibration_id: str
    acquired_at: datetime
    device: str
    patch: str
    kind: str
    closing_kind: str
    measure_order: tuple[int, ...]
    data_order: tuple[int, ...]
    has_verdict: bool
    has_started_at: bool
    mapping: MappingSettings | None = None


def content_hash(path: Path) -> str:
    """Return the SHA-256 of a file, or of all files of a store in the order of their names."""
    digest = hashlib.sha256()
    files = [path] if path.is_file() else sorted(p for p in path.rglob("*") if p.is_file())
    for file in files:
        if file != path:
            digest.update(str(file.relative_to(path)).encode())
        with file.open("rb") as handle:
            while block := handle.read(HASH_BLOCK):
                digest.update(block)
    return digest.hexdigest()


def open_calibration(path: Path, mapping: MappingSettings | None = None) -> xr.Dataset:
    """Return a calibration recording.

    Parameters
    ----------
    path
        File or store.
    mapping
        How a foreign file is read.

    Returns
    -------
    dataset
        `iq` (qubit, prepared, shot, quadrature) float32 with NaN for missing readings, or `trace`
        (qubit, prepared, shot, sample, quadrature) as stored where it is plain int16, else float32.

    Raises
    ------
    RecordingError
        The file breaks the contract; everything wrong is listed.
    """
    with opened(path, mapping) as source:
        outline = source.outline()
        problems = calibration_problems(outline)
        if problems:
            raise _refused(path, problems)
        kind = kind_of(outline)
        assert kind is not None
        values = _signal(source, kind)
        coordinates = {
            name: np.asarray(outline.coordinates[name]).astype(str if name == "qubit" else float)
            for name in ("qubit", "prepared", "sample")
            if name in outline.coordinates
        }
        coordinates["prepared"] = coordinates["prepared"].astype(int)
    if not np.isfinite(values).any():
        raise _refused(path, [f"variable {kind}: every value is missing"])
    attributes = {
        name: str(outline.attributes[name]) for name in ("calibration_id", "acquired_at", "device")
    }
    return xr.Dataset(
        {kind: (CALIBRATION_DIMS[kind], values)},
        coords={**coordinates, "quadrature": ["I", "Q"]},
        attrs={**attributes, "source": path.name},
    )


def describe_memory(
    path: Path, layout_of: Callable[[str], Layout], mapping: MappingSettings | None = None
) -> MemoryRecording:
    """Check a memory recording against the contract and its layout, without reading its shots.

    Parameters
    ----------
    path
        File or store.
    layout_of
        Gives the layout of a patch by its name.
    mapping
        How a foreign file is read.

    Raises
    ------
    RecordingError
        The file breaks the contract or its names do not match the layout; everything is listed.
    """
    with opened(path, mapping) as source:
        outline = source.outline()
    problems = memory_problems(outline)
    if problems:
        raise _refused(path, problems)
    attributes = outline.attributes
    layout = layout_of(str(attributes["patch"]))
    measure = [str(name) for name in outline.coordinates["measure"]]
    data = [str(name) for name in outline.coordinates["data"]]
    problems = name_mismatches(measure, layout.measure, "measure")
    problems += name_mismatches(data, layout.data, "data")
    if attributes["basis"] not in layout.logical:
        problems.append(
            f"attribute basis: the layout has no logical {attributes['basis']} operator"
        )
    if problems:
        raise _refused(path, problems)
    kind, closing = kind_of(outline), kind_of(outline, "final_")
    acquired = parse_time(attributes["acquired_at"])
    assert kind is not None
    assert closing is not None
    assert acquired is not None
    injected = None
    if "injected_qubit" in attributes:
        injected = (
            str(attributes["injected_qubit"]),
            int(attributes["injected_round"]),
            float(attributes.get("injected_probability", 1.0)),
        )
    frame = Frame(
        name=path.stem,
        layout=layout,
        basis=attributes["basis"],
        rounds=int(outline.sizes["round"]),
        shots=int(outline.sizes["shot"]),
        reset=attributes["reset"] == "each round",
        injected=injected,
    )
    return MemoryRecording(
        path=path,
        frame=frame,
        calibration_id=str(attributes["calibration_id"]),
        acquired_at=acquired,
        device=str(attributes["device"]),
        patch=str(attributes["patch"]),
        kind=kind,
        closing_kind=closing,
        measure_order=tuple(measure.index(name) for name in layout.measure),
        data_order=tuple(data.index(name) for name in layout.data),
        has_verdict="verdict" in outline.dims,
        has_started_at="started_at" in outline.dims,
        mapping=mapping,
    )


def chunks(
    recording: MemoryRecording, shots_per_chunk: int, first: int = 0, last: int | None = None
) -> Iterator[Chunk]:
    """Read a memory recording a chunk at a time, qubits in the layout's order.

    Parameters
    ----------
    recording
        A checked recording.
    shots_per_chunk
        Shots in a chunk; rounded down to a multiple of BLOCK, at least one block.
    first, last
        Range of shots; `first` must be a multiple of BLOCK.

    Raises
    ------
    RecordingError
        The file turned out damaged.
    """
    size = max(shots_per_chunk // BLOCK, 1) * BLOCK
    stop = recording.frame.shots if last is None else min(last, recording.frame.shots)
    with opened(recording.path, recording.mapping) as source:
        fixed = _fixed_preparation(source, recording)
        for start in range(first, stop, size):
            end = min(start + size, stop)
            prepared = fixed
            if prepared is None:
                prepared = _integers(source.read("prepared", start, end))
                prepared = prepared[:, list(recording.data_order)]
            else:
                prepared = np.broadcast_to(prepared, (end - start, prepared.size))
            yield Chunk(
                first=start,
                prepared=np.ascontiguousarray(prepared),
                verdict=_integers(source.read("verdict", start, end))
                if recording.has_verdict
                else None,
                started_at=source.read("started_at", start, end).astype(np.float64)
                if recording.has_started_at
                else None,
                **_values(source, recording.kind, "", recording.measure_order, 2, start, end),
                **_values(
                    source, recording.closing_kind, "final_", recording.data_order, 1, start, end
                ),
            )


def _fixed_preparation(source: Source, recording: MemoryRecording) -> NDArray[np.uint8] | None:
    if source.outline().dims["prepared"] == ("data",):
        return _integers(source.read("prepared"))[list(recording.data_order)]
    return None


def _values(
    source: Source,
    kind: str,
    prefix: str,
    order: tuple[int, ...],
    axis: int,
    start: int,
    end: int,
) -> dict[str, Any]:
    name = f"{prefix}{kind}"
    values = (
        _states(source.read(name, start, end), source.encoding(name))
        if kind == "state"
        else _signal(source, name, start, end)
    )
    if order != tuple(range(len(order))):
        values = np.take(values, order, axis=axis)
    return {f"{prefix}states" if kind == "state" else name: values}


def _signal(source: Source, name: str, start: int = 0, stop: int | None = None) -> NDArray[Any]:
    raw = source.read(name, start, stop)
    encoding = source.encoding(name)
    plain = raw.dtype == np.int16 and not encoding
    return raw if plain else decoded(raw, encoding)


def _integers(raw: NDArray[Any]) -> NDArray[np.uint8]:
    return np.ascontiguousarray(raw).astype(np.uint8)


def _states(raw: NDArray[Any], encoding: dict[str, float]) -> NDArray[np.uint8]:
    """Return states with anything but 0, 1, 2 as missing; higher states count as leaked."""
    states = np.where((raw >= 0) & (raw <= 2), raw, MISSING).astype(np.uint8)
    fill = encoding.get("_FillValue")
    states[(raw > 2) & (raw < MISSING)] = 2
    if fill is not None:
        states[raw == raw.dtype.type(fill)] = MISSING
    return states


def _refused(path: Path, problems: list[str]) -> RecordingError:
    return RecordingError(numbered([f"{path}  {problem}" for problem in problems], REFUSED))
