"""Misread states: what a lab's own hard labels make of true states, without drawing points."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numba import njit
from numpy.typing import NDArray

from leakpipe.rehearsal.device import ReadoutQubit
from leakpipe.rehearsal.readout import nearest_states, points


def assignment(qubit: ReadoutQubit, shots: int, rng: np.random.Generator) -> NDArray[np.float64]:
    """Return the probability of each hard label given each true start state, (3, 3).

    Measured with `shots` drawn points per state, so known to sqrt(p (1 - p) / shots).
    """
    table = np.empty((3, 3))
    for state in range(3):
        starts = np.full(shots, state, dtype=np.uint8)
        labels = nearest_states(qubit, points(qubit, starts, rng))
        table[state] = np.bincount(labels, minlength=3) / shots
    return table


def assignments(
    readout: Sequence[ReadoutQubit], shots: int, rng: np.random.Generator
) -> NDArray[np.float64]:
    """Return the assignment of every qubit, (qubit, 3, 3)."""
    return np.stack([assignment(qubit, shots, rng) for qubit in readout])


@njit(cache=True, nogil=True)
def _relabel(
    states: NDArray[np.uint8], drawn: NDArray[np.float32], below: NDArray[np.float64]
) -> None:
    """Replace each state by a label; `below` holds P(label 0) and P(label 0 or 1)."""
    for row in range(states.shape[0]):
        for qubit in range(states.shape[1]):
            state = states[row, qubit]
            chance = drawn[row, qubit]
            label = 0
            if chance >= below[qubit, state, 0]:
                label = 1 if chance < below[qubit, state, 1] else 2
            states[row, qubit] = label


def misread(
    states: NDArray[np.uint8], table: NDArray[np.float64], rng: np.random.Generator
) -> NDArray[np.uint8]:
    """Return hard labels of true states.

    Parameters
    ----------
    states
        True start states, last axis the qubits.
    table
        (qubit, 3, 3) probability of a label given the state.
    """
    labels = np.ascontiguousarray(states).reshape(-1, states.shape[-1]).copy()
    drawn = rng.random(labels.shape, dtype=np.float32)
    below = np.cumsum(table, axis=2)[:, :, :2]
    _relabel(labels, drawn, np.ascontiguousarray(below))
    return labels.reshape(states.shape)
