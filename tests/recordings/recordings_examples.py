"""Small recordings for the tests of this folder, made up of random numbers."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import xarray as xr

from leakpipe.codes.layout import Layout
from leakpipe.codes.repetition import repetition
from leakpipe.recordings.opening import MemoryRecording, chunks, describe_memory
from leakpipe.recordings.shots import Chunk

LAYOUT = repetition(3)
SHOTS, ROUNDS = 120, 2
MEMORY_ATTRIBUTES: dict[str, Any] = {
    "recording": "memory",
    "contract": "1",
    "calibration_id": "cal-1",
    "acquired_at": "2026-11-20T01:00:00+00:00",
    "device": "bench",
    "patch": "north",
    "basis": "Z",
    "reset": "each round",
}
CALIBRATION_ATTRIBUTES: dict[str, Any] = {
    name: "calibration" if name == "recording" else MEMORY_ATTRIBUTES[name]
    for name in ("recording", "contract", "calibration_id", "acquired_at", "device")
}


def memory_dataset(seed: int = 0) -> xr.Dataset:
    """A memory recording of points, in the contract."""
    rng = np.random.default_rng(seed)
    measure, data = list(LAYOUT.measure), list(LAYOUT.data)
    points = rng.normal(size=(SHOTS, ROUNDS, len(measure), 2)).astype(np.float32)
    closing = rng.normal(size=(SHOTS, len(data), 2)).astype(np.float32)
    return xr.Dataset(
        {
            "iq": (("shot", "round", "measure", "quadrature"), points),
            "final_iq": (("shot", "data", "quadrature"), closing),
            "prepared": (("shot", "data"), rng.integers(0, 2, (SHOTS, len(data)), np.uint8)),
            "verdict": (("shot",), rng.integers(0, 2, SHOTS, np.uint8)),
            "started_at": (("shot",), np.arange(SHOTS) * 1e-3),
        },
        coords={
            "round": np.arange(1, ROUNDS + 1),
            "measure": measure,
            "data": data,
            "quadrature": ["I", "Q"],
        },
        attrs=MEMORY_ATTRIBUTES,
    )


def calibration_dataset(seed: int = 1) -> xr.Dataset:
    """A calibration recording of points, in the contract."""
    rng = np.random.default_rng(seed)
    qubits = [*LAYOUT.data, *LAYOUT.measure]
    points = rng.normal(size=(len(qubits), 3, 40, 2)).astype(np.float32)
    return xr.Dataset(
        {"iq": (("qubit", "prepared", "shot", "quadrature"), points)},
        coords={"qubit": qubits, "prepared": [0, 1, 2], "quadrature": ["I", "Q"]},
        attrs=CALIBRATION_ATTRIBUTES,
    )


def described(path: Path, layout: Layout = LAYOUT) -> MemoryRecording:
    return describe_memory(path, lambda _patch: layout)


def joined(parts: list[Chunk], name: str) -> Any:
    """One array of all chunks, or None where no chunk has it."""
    values = [getattr(part, name) for part in parts]
    return None if values[0] is None else np.concatenate(values)


def whole(recording: MemoryRecording, size: int = 10**6) -> list[Chunk]:
    return list(chunks(recording, size))


Change = Callable[[xr.Dataset], xr.Dataset]
FIELDS = (
    "iq",
    "trace",
    "states",
    "final_iq",
    "final_trace",
    "final_states",
    "prepared",
    "verdict",
    "started_at",
)
