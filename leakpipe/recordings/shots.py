"""What flows from a recording through the stages: frames, chunks of raw shots, readings.

A *frame* says what a memory recording is, a *chunk* holds some of its consecutive shots as they
stand in the file, *readings* are the same shots after classification. All are plain arrays.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from leakpipe.codes.layout import Basis, Layout

BLOCK = 50
"""Consecutive shots that share a local mean (studied: removes slow drift at no cost)."""

BATCHES = 50
"""Contiguous batches of a recording, the clusters of every sandwich and bootstrap error."""


@dataclass(frozen=True)
class Frame:
    """What one memory recording is: everything about it but its shots.

    Attributes
    ----------
    name
        File stem, unique in its epoch.
    layout
        Code layout; its order of names is the order of every array here.
    basis
        Basis of the memory.
    rounds, shots
        R and the number of shots N.
    reset
        True if measure qubits are reset each round.
    leaked_reads
        Bit that a leaked reading enters a parity with.
    injected
        (qubit name, round, probability) of a run with a qubit put into |2> on purpose. Round m
        means before the gates of round m; 1 is the start.
    """

    name: str
    layout: Layout
    basis: Basis
    rounds: int
    shots: int
    reset: bool = True
    leaked_reads: int = 1
    injected: tuple[str, int, float] | None = None

    def batch_of(self, first: int, count: int) -> NDArray[np.int64]:
        """Return the batch (0..BATCHES-1) of shots ``first .. first+count-1``.

        Batches are whole blocks, as equal as they can be; the shots of an unfinished last block
        belong to the last batch. With fewer than BATCHES blocks some batches stay empty.
        """
        blocks = max(self.shots // BLOCK, 1)
        block = np.minimum((first + np.arange(count)) // BLOCK, blocks - 1)
        return block * BATCHES // blocks


@dataclass(frozen=True)
class Chunk:
    """Consecutive raw shots of a memory recording, starting at shot `first` (a multiple of BLOCK).

    Exactly one of `iq`, `trace`, `states` is set, and one of the three `final_` arrays. Shapes:
    iq (shot, round, measure, 2) float32, trace (shot, round, measure, sample, 2) int16 or float32,
    states (shot, round, measure) uint8; final_iq (shot, data, 2), final_trace (shot, data, sample,
    2), final_states (shot, data). Missing readings are NaN (points), 255 (states).
    prepared (shot, data) uint8; verdict (shot,) uint8 or None; started_at (shot,) seconds or None.
    """

    first: int
    prepared: NDArray[np.uint8]
    iq: NDArray[np.float32] | None = None
    trace: NDArray[np.int16] | NDArray[np.float32] | None = None
    states: NDArray[np.uint8] | None = None
    final_iq: NDArray[np.float32] | None = None
    final_trace: NDArray[np.int16] | NDArray[np.float32] | None = None
    final_states: NDArray[np.uint8] | None = None
    verdict: NDArray[np.uint8] | None = None
    started_at: NDArray[np.float64] | None = None

    @property
    def shots(self) -> int:
        """Number of shots in the chunk."""
        return len(self.prepared)


@dataclass(frozen=True)
class Readings:
    """Classified shots.

    Attributes
    ----------
    first
        Index of the first shot in its recording (a multiple of BLOCK).
    states
        (shot, round, measure) uint8: 0, 1, 2, or 255 where the reading is missing.
    leak
        (shot, round, measure) float32: posterior of being leaked, at the prior the readout stage
        chose for this recording and qubit; the prior itself where the reading is missing.
    final_states, final_leak
        The same for the closing readout, (shot, data).
    prepared
        (shot, data) uint8 starting bits.
    verdict
        (shot,) uint8, 1 where the lab's decoder ended wrong, or None.
    started_at
        (shot,) seconds, or None.
    """

    first: int
    states: NDArray[np.uint8]
    leak: NDArray[np.float32]
    final_states: NDArray[np.uint8]
    final_leak: NDArray[np.float32]
    prepared: NDArray[np.uint8]
    verdict: NDArray[np.uint8] | None = None
    started_at: NDArray[np.float64] | None = None

    @property
    def shots(self) -> int:
        """Number of shots."""
        return len(self.prepared)
