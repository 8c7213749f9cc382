"""The detection stage: readings in, detection probabilities and their covariances out."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from leakpipe.codes.events import MISSING, bits_of, defined_layers, detection_events
from leakpipe.config.detection import DetectionSettings
from leakpipe.detection.sums import LAGS, DetectionSums, count, merge
from leakpipe.findings import Finding, with_findings
from leakpipe.recordings.shots import BATCHES, BLOCK, Frame, Readings

__all__ = ["DetectionSums", "detection", "events_of", "merge", "partial"]

MISSING_WATCH = 1e-3
"""Fraction of missing readings that becomes a finding (common practice, no source)."""
USELESS = 0.5
"""A check that fires in half of its rounds carries no information."""


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
        reach = 1 if frame.reset else 2
        for later in range(reach + 1):
            stop = frame.rounds + 1 - later
            valid[:, later:] &= ~lost[:, :stop] if stop > 0 else True
        closing = (lost_final[:, None, :] & frame.layout.adjacency).any(axis=2)
        valid[:, frame.rounds] &= ~closing
    return events, valid


def partial(readings: Readings, frame: Frame) -> DetectionSums:
    """Count the detection events and leaked labels of some shots."""
    events, valid = events_of(readings, frame)
    batch = frame.batch_of(readings.first, readings.shots)
    pairs = np.array(frame.layout.sharing_pairs, dtype=np.int64)
    event_sums, trials, products, block_products, blocks, block_shots = count(
        events, valid, pairs, batch, readings.first, frame.shots
    )
    leaked = readings.states == 2
    closing = readings.final_states == 2
    leaked_sums = np.zeros((BATCHES, *leaked.shape[1:]), dtype=np.int64)
    closing_sums = np.zeros((BATCHES, closing.shape[1]), dtype=np.int64)
    for home in np.unique(batch):
        leaked_sums[home] = leaked[batch == home].sum(axis=0)
        closing_sums[home] = closing[batch == home].sum(axis=0)
    after = np.zeros((LAGS, leaked.shape[2], closing.shape[1]), dtype=np.int64)
    before = np.zeros((LAGS, leaked.shape[2]), dtype=np.int64)
    for lag in range(min(LAGS, frame.rounds)):
        then = leaked[:, frame.rounds - 1 - lag]
        after[lag] = then.T.astype(np.int64) @ closing.astype(np.int64)
        before[lag] = then.sum(axis=0)
    lost = int((readings.states == MISSING).sum() + (readings.final_states == MISSING).sum())
    return DetectionSums(
        events=event_sums,
        trials=trials,
        products=products,
        block_products=block_products,
        blocks=blocks,
        block_shots=block_shots,
        leaked=leaked_sums,
        closing_leaked=closing_sums,
        after_leaked=after,
        leaked_before=before,
        shots=np.bincount(batch, minlength=BATCHES).astype(np.int64),
        missing=np.array(lost, dtype=np.int64),
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
        attrs={"block": BLOCK},
    )
    return with_findings(out, _findings(frames, lost, events, trials))


def _findings(
    frames: Sequence[Frame],
    lost: Sequence[int],
    events: NDArray[np.int64],
    trials: NDArray[np.int64],
) -> list[Finding]:
    findings = []
    for frame, count_lost in zip(frames, lost, strict=True):
        readings = frame.shots * (frame.rounds * len(frame.layout.measure) + len(frame.layout.data))
        fraction = count_lost / readings
        if fraction > MISSING_WATCH:
            findings.append(
                Finding(
                    "missing-readings",
                    "watch",
                    frame.name,
                    f"{frame.name}: {fraction:.2%} of the readings are missing; detection events "
                    "with a missing reading are left out, correlations count them as no event.",
                    {"fraction": fraction},
                )
            )
        if frame.shots < BATCHES * BLOCK:
            findings.append(
                Finding(
                    "few-shots",
                    "watch",
                    frame.name,
                    f"{frame.name}: {frame.shots} shots are fewer than {BATCHES} batches of "
                    f"{BLOCK}; its intervals rest on fewer batches.",
                    {"shots": frame.shots},
                )
            )
    total = trials.sum(axis=(0, 1, 2))
    probability = events.sum(axis=(0, 1, 2)) / np.maximum(total, 1)
    for name, value in zip(frames[0].layout.measure, probability, strict=True):
        if value > USELESS:
            findings.append(
                Finding(
                    "check-fires-always",
                    "act",
                    name,
                    f"Check {name} fires in {value:.0%} of its rounds: is its readout or its "
                    "place in the layout right?",
                    {"detection_probability": float(value)},
                )
            )
    return findings
