"""The detection stage: readings in, detection probabilities and their covariances out."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from leakpipe.codes.events import MISSING, bits_of, defined_layers, detection_events
from leakpipe.config.detection import DetectionSettings
from leakpipe.detection.doubts import findings_of_counts
from leakpipe.detection.sums import LAGS, DetectionSums, count, merge
from leakpipe.findings import with_findings
from leakpipe.recordings.shots import BATCHES, BLOCK, Frame, Readings

__all__ = ["DetectionSums", "detection", "events_of", "merge", "partial"]

LEAKED = 2
"""State code of a leaked reading (docs/conventions.md)."""


def events_of(readings: Readings, frame: Frame) -> tuple[NDArray[np.uint8], NDArray[np.bool_]]:
    """Return detection events and where they are valid, both (shot, layer, check).

    An event is valid where its layer is defined and every reading that enters it was recorded.
    """
    events = detection_events(
        bits_of(readings.states, frame.leaked_reads),
        bits_of(readings.final_states, frame.leaked_reads),
        readings.prepared,
        frame.layout,
        frame.basis,
        reset=frame.reset,
    )
    defined = defined_layers(frame.layout, frame.basis, frame.rounds)
    valid = np.broadcast_to(defined, events.shape)
    lost = readings.states == MISSING
    lost_final = readings.final_states == MISSING
    if lost.any() or lost_final.any():
        valid = valid.copy()
        # With reset an event compares readings r and r - 1; without, the change of the XOR of
        # successive readings, in which r - 1 cancels, compares r and r - 2.
        back = 1 if frame.reset else 2
        valid[:, : frame.rounds] &= ~lost
        valid[:, back : frame.rounds] &= ~lost[:, : max(frame.rounds - back, 0)]
        valid[:, frame.rounds] &= ~lost[:, max(frame.rounds - back, 0) :].any(axis=1)
        for check, qubits in enumerate(frame.layout.touches):
            valid[:, frame.rounds, check] &= ~lost_final[:, list(qubits)].any(axis=1)
    return events, valid


def partial(readings: Readings, frame: Frame) -> DetectionSums:
    """Count the detection events and leaked labels of some consecutive shots.

    Raises
    ------
    ValueError
        The first shot does not start a block, so that local means would straddle chunks.
    """
    if readings.first % BLOCK:
        raise ValueError(
            f"the first shot must be a multiple of {BLOCK}, got {readings.first} instead"
        )
    events, valid = events_of(readings, frame)
    lost = int(np.count_nonzero(readings.states == MISSING))
    lost += int(np.count_nonzero(readings.final_states == MISSING))
    return count(
        events,
        valid,
        readings.states == LEAKED,
        readings.final_states == LEAKED,
        np.array(frame.layout.sharing_pairs, dtype=np.int64).reshape(-1, 2),
        frame.batch_of(readings.first, readings.shots),
        lost,
    )


def detection(
    reduced: Sequence[tuple[Frame, DetectionSums]], settings: DetectionSettings
) -> xr.Dataset:
    """Label the sums of all recordings of one patch and basis.

    Parameters
    ----------
    reduced
        Frame and sums per recording.
    settings
        The `detection` section.

    Returns
    -------
    dataset
        `events`, `trials` (recording, batch, layer, check); `products`, `block_products` (batch,
        pair, round, lag) and `blocks`, `product_shots` (batch, round) pooled over the recordings
        without an injected leak; leaked-label counts.
    """
    frames = [frame for frame, _ in reduced]
    layout = frames[0].layout
    rounds = max(frame.rounds for frame in frames)
    checks, data = len(layout.measure), len(layout.data)
    pairs = layout.sharing_pairs
    events = np.zeros((len(reduced), BATCHES, rounds + 1, checks), dtype=np.int64)
    trials = np.zeros_like(events)
    leaked = np.zeros((len(reduced), BATCHES, rounds, checks), dtype=np.int64)
    closing = np.zeros((len(reduced), BATCHES, data), dtype=np.int64)
    shots = np.zeros((len(reduced), BATCHES), dtype=np.int64)
    after = np.zeros((len(reduced), LAGS, checks, data), dtype=np.int64)
    before = np.zeros((len(reduced), LAGS, checks), dtype=np.int64)
    products = np.zeros((BATCHES, len(pairs), rounds, LAGS), dtype=np.int64)
    block_products = np.zeros_like(products)
    product_shots = np.zeros((BATCHES, rounds), dtype=np.int64)
    blocks = np.zeros((BATCHES, rounds), dtype=np.int64)
    for row, (frame, sums) in enumerate(reduced):
        events[row, :, : frame.rounds + 1] = sums.events
        trials[row, :, : frame.rounds + 1] = sums.trials
        leaked[row, :, : frame.rounds] = sums.leaked
        closing[row], shots[row] = sums.closing_leaked, sums.shots
        after[row], before[row] = sums.after_leaked, sums.leaked_before
        if frame.injected is None:
            inner = slice(1, frame.rounds)
            products[:, :, inner] += sums.products
            block_products[:, :, inner] += sums.block_products
            product_shots[:, inner] += sums.shots[:, None]
            blocks[:, inner] += sums.blocks[:, None]
    lost = [int(sums.missing) for _, sums in reduced]
    per_layer = ("recording", "batch", "layer", "check")
    variables: dict[str, Any] = {
        "events": (per_layer, events, {"units": "1", "long_name": "detection events"}),
        "trials": (per_layer, trials, {"units": "1", "long_name": "shots with a defined event"}),
        "leaked_labels": (("recording", "batch", "round", "measure"), leaked, {"units": "1"}),
        "closing_leaked_labels": (("recording", "batch", "data"), closing, {"units": "1"}),
        "batch_shots": (("recording", "batch"), shots, {"units": "1"}),
        "after_leaked": (("recording", "lag", "measure", "data"), after, {"units": "1"}),
        "leaked_before": (("recording", "lag", "measure"), before, {"units": "1"}),
        "products": (("batch", "pair", "round", "lag"), products, {"units": "1"}),
        "block_products": (("batch", "pair", "round", "lag"), block_products, {"units": "1"}),
        "product_shots": (("batch", "round"), product_shots, {"units": "1"}),
        "blocks": (("batch", "round"), blocks, {"units": "1"}),
        "missing": ("recording", np.array(lost), {"units": "1"}),
    }
    # What was put into |2> on purpose: no name, round 0 and NaN where nothing was.
    injected = [frame.injected or ("", 0, float("nan")) for frame in frames]
    for position, (name, units) in enumerate(
        (("injected_qubit", ""), ("injected_round", "rounds"), ("injected_probability", "1"))
    ):
        column = [one[position] for one in injected]
        variables[name] = ("recording", column, {"units": units, "long_name": name})
    out = xr.Dataset(
        variables,
        coords={
            "recording": [frame.name for frame in frames],
            "rounds": ("recording", [frame.rounds for frame in frames]),
            "shots": ("recording", [frame.shots for frame in frames]),
            "injected": ("recording", [int(frame.injected is not None) for frame in frames]),
            "batch": np.arange(BATCHES),
            "layer": np.arange(1, rounds + 2),
            "round": np.arange(1, rounds + 1),
            "check": list(layout.measure),
            "check_type": ("check", list(layout.checks)),
            "weight": ("check", layout.weights),
            "measure": list(layout.measure),
            "data": list(layout.data),
            "lag": np.arange(LAGS),
            "early": ("pair", [layout.measure[early] for early, _ in pairs]),
            "late": ("pair", [layout.measure[late] for _, late in pairs]),
        },
        attrs={"block": BLOCK, "reset": int(all(frame.reset for frame in frames))},
    )
    return with_findings(out, findings_of_counts(frames, lost, events, trials))
