"""The readout stage: calibrations in, states and leaked populations with errors out."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from leakpipe.config.readout import ReadoutSettings
from leakpipe.findings import Finding, findings_of, with_findings
from leakpipe.readout.counting import ReadoutSums, merge, partial
from leakpipe.readout.model import STATE_NAMES, calibrate
from leakpipe.readout.population import CLASSES
from leakpipe.readout.tuning import Tuned, tune
from leakpipe.recordings.shots import BATCHES, Frame

__all__ = ["ReadoutSums", "Tuned", "calibrate", "merge", "partial", "readout", "tune"]


def readout(
    model: xr.Dataset,
    reduced: Sequence[tuple[Frame, Tuned, ReadoutSums]],
    settings: ReadoutSettings,
) -> xr.Dataset:
    """Turn posterior sums into leaked populations with shot and calibration errors.

    Parameters
    ----------
    model
        From `calibrate`.
    reduced
        Per memory recording its frame, tuned model and sums.
    settings
        The `readout` section.

    Returns
    -------
    dataset
        `leaked` over (recording, round, measure) and `closing_leaked` over (recording, data), each
        with `_shot_error`, `_calibration_error` (common to all rounds), `_batch` and `_replica`.
    """
    layout = reduced[0][0].layout
    rounds = max(frame.rounds for frame, _, _ in reduced)
    measures = len(layout.measure)
    open_ = [
        _populations(t.unfolding[:measures], t.replicas[:, :measures], s.rounds, s.round_squares)
        for _, t, s in reduced
    ]
    closing = [
        _populations(t.unfolding[measures:], t.replicas[:, measures:], s.closing, s.closing_squares)
        for _, t, s in reduced
    ]
    variables: dict[str, Any] = {}
    dims = {
        "": ("recording",),
        "_shot_error": ("recording",),
        "_calibration_error": ("recording",),
        "_batch": ("recording", "batch"),
        "_replica": ("replica", "recording"),
    }
    for position, (suffix, lead) in enumerate(dims.items()):
        stacked = [_pad(one[position], rounds, axis=-2) for one in open_]
        axis = 1 if suffix == "_replica" else 0
        attrs = {"units": "1", "long_name": "leaked population"}
        variables[f"leaked{suffix}"] = (
            (*lead, "round", "measure"),
            np.stack(stacked, axis=axis),
            attrs,
        )
        variables[f"closing_leaked{suffix}"] = (
            (*lead, "data"),
            np.stack([one[position] for one in closing], axis=axis),
            attrs,
        )
    qubits = [*layout.data, *layout.measure]
    order = [*range(measures, measures + len(layout.data)), *range(measures)]
    reasons = [
        next((t.reasons[column] for _, t, _ in reduced if t.reasons[column]), "")
        for column in order
    ]
    variables["usable"] = ("qubit", np.array([not r for r in reasons], dtype=np.int8))
    variables["usable_reason"] = ("qubit", np.array(reasons, dtype=str))
    for name in ("phi", "rotation", "gain"):
        values = np.stack([getattr(t, name)[order] for _, t, _ in reduced])
        variables[name] = (("recording", "qubit"), values)
    assignment = np.full((len(qubits), 3, 3), np.nan)
    for row, qubit in enumerate(qubits):
        if qubit in model["qubit"].values:
            assignment[row] = model["assignment"].sel(qubit=qubit).values
    fallen = np.full(len(qubits), np.nan)
    for row, qubit in enumerate(qubits):
        if qubit in model["qubit"].values:
            fallen[row] = float(model["decay"].sel(qubit=qubit)[0])
    variables["decay"] = ("qubit", fallen, {"units": "1", "long_name": "decay 1 to 0 in readout"})
    variables["assignment"] = (("qubit", "state", "label"), assignment)
    frames = [frame for frame, _, _ in reduced]
    out = xr.Dataset(
        variables,
        coords={
            "recording": [frame.name for frame in frames],
            "rounds": ("recording", [frame.rounds for frame in frames]),
            "shots": ("recording", [frame.shots for frame in frames]),
            "injected": ("recording", [int(frame.injected is not None) for frame in frames]),
            "batch": np.arange(BATCHES),
            "round": np.arange(1, rounds + 1),
            "measure": list(layout.measure),
            "data": list(layout.data),
            "qubit": qubits,
            "role": ("qubit", ["data"] * len(layout.data) + ["measure"] * measures),
            "state": STATE_NAMES,
            "label": STATE_NAMES,
        },
    )
    findings = findings_of(model) + _merged([f for _, t, _ in reduced for f in t.findings])
    return with_findings(out, findings)


def _merged(findings: list[Finding]) -> list[Finding]:
    """Keep one finding per code and place: the one with the largest numbers comes first."""
    kept: dict[tuple[str, str], Finding] = {}
    for finding in findings:
        kept.setdefault((finding.code, finding.where), finding)
    return list(kept.values())


def _pad(values: NDArray[np.float64], rounds: int, *, axis: int) -> NDArray[np.float64]:
    width = [(0, 0)] * values.ndim
    width[axis] = (0, rounds - values.shape[axis])
    return np.pad(values, width, constant_values=np.nan)


def _populations(
    unfolding: NDArray[np.float64],
    replicas: NDArray[np.float64],
    sums: NDArray[np.float64],
    squares: NDArray[np.float64],
) -> tuple[NDArray[np.float64], ...]:
    """Return leaked population, its two errors, per batch and per replica.

    Parameters
    ----------
    unfolding, replicas
        (qubit, 4, 4) and (replica, qubit, 4, 4).
    sums
        (batch, [round,] qubit, 5).
    squares
        ([round,] qubit, 4, 4).
    """
    total = sums.sum(axis=0)
    count = total[..., CLASSES]
    with np.errstate(divide="ignore", invalid="ignore"):
        mean = total[..., :CLASSES] / count[..., None]
        batch_mean = sums[..., :CLASSES] / sums[..., CLASSES, None]
        second = squares / count[..., None, None]
    second = second + np.swapaxes(np.tril(second, -1), -1, -2)
    score = unfolding[..., :, 2]
    leaked = np.einsum("...qj,qj->...q", mean, score)
    variance = np.einsum("...qij,qi,qj->...q", second, score, score) - leaked**2
    shot_error = np.sqrt(np.maximum(variance, 0.0) / count)
    copies = np.einsum("...qj,bqj->b...q", mean, replicas[..., 2])
    per_batch = np.einsum("...qj,qj->...q", batch_mean, score)
    return leaked, shot_error, copies.std(axis=0, ddof=1), per_batch, copies
