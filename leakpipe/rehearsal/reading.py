"""What a recording holds of simulated shots: points, traces or hard labels, and the verdict."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any, Literal

import numpy as np
from numpy.typing import NDArray

from leakpipe.rehearsal.device import ReadoutQubit
from leakpipe.rehearsal.readout import TRACE_COUNTS, nearest_states, points, traces

Kind = Literal["iq", "trace", "state"]


@dataclass(frozen=True)
class Read:
    """Readings of several qubits.

    Attributes
    ----------
    values
        (..., qubit, 2) points, (..., qubit, sample, 2) traces, or (..., qubit) labels.
    labels
        (..., qubit) hard labels of the same readings, or None where nobody asked.
    """

    values: NDArray[Any]
    labels: NDArray[np.uint8] | None


def integrate(qubit: ReadoutQubit, trace: NDArray[np.int16]) -> NDArray[np.float32]:
    """Return the device's own integrated points of traces, (..., sample, 2) -> (..., 2)."""
    weights = (qubit.weights / TRACE_COUNTS).astype(np.float32)
    return np.asarray(np.einsum("...sq,s->...q", trace.astype(np.float32), weights))


def read(
    kind: Kind,
    qubits: Sequence[ReadoutQubit],
    states: NDArray[np.uint8],
    rng: np.random.Generator,
    *,
    labels: bool = False,
) -> Read:
    """Read true states.

    Parameters
    ----------
    kind
        What the recording holds.
    qubits
        Readout of each qubit.
    states
        True start states, (..., qubit).
    labels
        Whether hard labels are wanted beside points or traces.
    """
    tail = {"iq": (2,), "trace": (qubits[0].samples, 2), "state": ()}[kind]
    dtype = {"iq": np.float32, "trace": np.int16, "state": np.uint8}[kind]
    values: NDArray[Any] = np.empty((*states.shape, *tail), dtype=dtype)
    labelled: NDArray[np.uint8] | None
    labelled = np.empty(states.shape, dtype=np.uint8) if labels or kind == "state" else None
    for index, qubit in enumerate(qubits):
        mine = states[..., index]
        place: tuple[Any, ...] = (*(slice(None),) * (states.ndim - 1), index)
        if kind == "trace":
            trace = traces(qubit, mine, rng)
            values[place] = trace
            found = integrate(qubit, trace) if labels else None
        else:
            found = points(qubit, mine, rng)
            if kind == "iq":
                values[place] = found
        if labelled is not None and found is not None:
            labelled[place] = nearest_states(qubit, found)
    if kind == "state" and labelled is not None:
        values = labelled
    return Read(values, labelled)
