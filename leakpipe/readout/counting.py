"""Classifying shots and summing their posteriors."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from leakpipe.readout.kernel import classify, kernel_arrays, label_shift
from leakpipe.readout.model import STATE_NAMES
from leakpipe.readout.population import CLASSES, WORKING_PRIOR
from leakpipe.readout.tuning import Tuned
from leakpipe.readout.weights import integrate
from leakpipe.recordings.shots import BATCHES, Chunk, Frame, Readings


@dataclass(frozen=True)
class ReadoutSums:
    """Posterior sums of one recording.

    Attributes
    ----------
    rounds
        (batch, round, measure, 5): four posterior sums and the number of readings.
    closing
        (batch, data, 5).
    round_squares, closing_squares
        (round, measure, 4, 4) and (data, 4, 4) sums of products of posteriors, lower triangle.
    """

    rounds: NDArray[np.float64]
    closing: NDArray[np.float64]
    round_squares: NDArray[np.float64]
    closing_squares: NDArray[np.float64]


def partial(tuned: Tuned, chunk: Chunk, frame: Frame) -> tuple[Readings, ReadoutSums]:
    """Classify a chunk and sum its posteriors.

    Returns
    -------
    readings, sums
        The classified shots, and their posterior sums per batch.
    """
    measures, data = len(frame.layout.measure), len(frame.layout.data)
    rounds = frame.rounds
    batch = frame.batch_of(chunk.first, chunk.shots)
    first = slice(0, measures)
    states, leak, sums, squares = _classified(
        chunk.states, chunk.iq, chunk.trace, tuned, first, batch, rounds
    )
    closing = _classified(
        chunk.final_states,
        chunk.final_iq,
        chunk.final_trace,
        tuned,
        slice(measures, measures + data),
        batch,
        1,
    )
    readings = Readings(
        first=chunk.first,
        states=states.reshape(chunk.shots, rounds, measures),
        leak=leak.reshape(chunk.shots, rounds, measures),
        final_states=closing[0],
        final_leak=closing[1],
        prepared=chunk.prepared,
        verdict=chunk.verdict,
        started_at=chunk.started_at,
    )
    return readings, ReadoutSums(
        sums.reshape(BATCHES, rounds, measures, CLASSES + 1),
        closing[2],
        squares.reshape(rounds, measures, CLASSES, CLASSES),
        closing[3],
    )


def _classified(
    states: NDArray[np.uint8] | None,
    points: NDArray[np.float32] | None,
    traces: NDArray[Any] | None,
    tuned: Tuned,
    columns: slice,
    batch: NDArray[np.int64],
    rounds: int,
) -> tuple[NDArray[np.uint8], NDArray[np.float32], NDArray[np.float64], NDArray[np.float64]]:
    rules = np.tile(tuned.rules[columns], (rounds, 1))
    priors = np.tile(tuned.priors[columns], rounds)
    shots, count = len(batch), len(rules)
    if states is not None:
        return _counted(states.reshape(shots, count), batch)
    if traces is not None:
        assert tuned.weights is not None
        flat = traces.reshape(shots, count, *traces.shape[-2:])
        points = integrate(flat, np.tile(tuned.weights[columns], (rounds, 1, 1, 1)))
    assert points is not None
    out = kernel_arrays(shots, count, BATCHES)
    classify(
        points.reshape(shots, count, 2),
        rules,
        priors.astype(np.float32),
        batch,
        np.array(label_shift(WORKING_PRIOR), dtype=np.float32),
        *out,
    )
    return out


def _counted(
    states: NDArray[np.uint8], batch: NDArray[np.int64]
) -> tuple[NDArray[np.uint8], NDArray[np.float32], NDArray[np.float64], NDArray[np.float64]]:
    """Count states that were classified elsewhere; a posterior is then 0 or 1."""
    shots, count = states.shape
    _, leak, sums, squares = kernel_arrays(shots, count, BATCHES)
    leak = (states == 2).astype(np.float32)
    for state in STATE_NAMES:
        hit = (states == state).astype(np.float64)
        np.add.at(sums[:, :, state], batch, hit)
        squares[:, state, state] = hit.sum(axis=0)
    sums[:, :, CLASSES] = sums[:, :, :3].sum(axis=-1)
    return states, leak, sums, squares


def merge(a: ReadoutSums, b: ReadoutSums) -> ReadoutSums:
    """Add the sums of two parts of a recording."""
    return ReadoutSums(
        a.rounds + b.rounds,
        a.closing + b.closing,
        a.round_squares + b.round_squares,
        a.closing_squares + b.closing_squares,
    )
