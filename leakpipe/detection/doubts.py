"""Findings of the detection stage: what in the counts should make a reader careful."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from leakpipe.findings import Finding
from leakpipe.recordings.shots import BATCHES, BLOCK, Frame

MISSING_WATCH = 1e-3
"""Fraction of missing readings that becomes a finding (common practice, no source)."""
USELESS = 0.5
"""A check that fires in half of its rounds carries no information; above, a sign is wrong."""
SURE = 5.0
"""Standard errors above `USELESS` before it is said: 3e-7 a test, so that thousands of checks and
nights raise none by chance (normal tail)."""
_REASONS = {
    "first": "do the starting bits in the recording belong to it",
    "interior": "is its readout or its place in the layout right",
    "closing": "are the closing readout of its data qubits and their order right",
}

IntArray = NDArray[np.int64]


def findings_of_counts(
    frames: Sequence[Frame], lost: Sequence[int], events: IntArray, trials: IntArray
) -> list[Finding]:
    """Return the doubts about missing readings, few shots, empty checks and absurd probabilities.

    Parameters
    ----------
    frames
        One per recording.
    lost
        Missing readings per recording.
    events, trials
        (recording, batch, layer, check).
    """
    findings = []
    for frame, count_lost in zip(frames, lost, strict=True):
        findings += _missing(frame, count_lost) + _few_shots(frame)
    return findings + _absurd(frames, events.sum(axis=1), trials.sum(axis=1))


def _missing(frame: Frame, lost: int) -> list[Finding]:
    readings = frame.shots * (frame.rounds * len(frame.layout.measure) + len(frame.layout.data))
    fraction = lost / max(readings, 1)
    if fraction <= MISSING_WATCH:
        return []
    sentence = (
        f"{frame.name}: {fraction:.2%} of the readings are missing; detection events with a "
        "missing reading are left out, correlations count them as no event."
    )
    numbers = {"fraction": fraction}
    return [Finding("missing-readings", "watch", frame.name, sentence, numbers)]


def _few_shots(frame: Frame) -> list[Finding]:
    if frame.shots >= BATCHES * BLOCK:
        return []
    blocks = max(frame.shots // BLOCK, 1)
    sentence = (
        f"{frame.name}: {frame.shots} shots make {min(blocks, BATCHES)} batches of whole blocks of "
        f"{BLOCK}, not {BATCHES}; intervals that rest on it come from fewer batches."
    )
    numbers = {"shots": frame.shots, "batches": min(blocks, BATCHES)}
    return [Finding("few-shots", "watch", frame.name, sentence, numbers)]


def _absurd(frames: Sequence[Frame], events: IntArray, trials: IntArray) -> list[Finding]:
    """Look at the first, the interior and the closing layers of each check apart."""
    shape = (len(_REASONS), events.shape[2])
    fired, defined = np.zeros(shape, dtype=np.int64), np.zeros(shape, dtype=np.int64)
    for frame, e, n in zip(frames, events, trials, strict=True):
        parts = (slice(0, 1), slice(1, frame.rounds), slice(frame.rounds, frame.rounds + 1))
        for kind, layers in enumerate(parts):
            fired[kind] += e[layers].sum(axis=0)
            defined[kind] += n[layers].sum(axis=0)
    findings = []
    for check, name in enumerate(frames[0].layout.measure):
        if max(frame.rounds for frame in frames) > 1 and not defined[1, check]:
            sentence = (
                f"Check {name} has no interior detection event with all its readings: nothing is "
                "known about its rise."
            )
            findings.append(Finding("check-without-readings", "act", name, sentence))
        for kind, (layer, reason) in enumerate(_REASONS.items()):
            number = int(defined[kind, check])
            if not number:
                continue
            probability = fired[kind, check] / number
            error = np.sqrt(USELESS * (1 - USELESS) / number)
            if probability > USELESS + SURE * error:
                sentence = (
                    f"Check {name} fires in {probability:.0%} of its {layer} layers: {reason}?"
                )
                numbers = {"detection_probability": float(probability), "events": number}
                findings.append(Finding("check-fires-always", "act", name, sentence, numbers))
    return findings
