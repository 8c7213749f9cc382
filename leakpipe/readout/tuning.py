"""A readout model fitted to one recording: checked, drift mended, priors set."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Any

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from leakpipe.config.readout import ReadoutSettings
from leakpipe.errors import RecordingError, numbered
from leakpipe.findings import Finding
from leakpipe.readout.adaptation import GAIN_RANGE, Change, check_run, find_change
from leakpipe.readout.kernel import packed_rule
from leakpipe.readout.model import mixture_of
from leakpipe.readout.population import CLASSES, WORKING_PRIOR, discriminant, posteriors
from leakpipe.readout.weights import integrate
from leakpipe.recordings.shots import Chunk, Frame

PRIOR_RANGE = (1e-4, 0.2)
"""Range of the prior of being leaked that a run's first shots may set."""
CHECK_POINTS = 20_000
"""Points of a qubit that the run check looks at."""
MISFIT = 3e-3
"""Excess chi-square per shot that becomes a finding (prototype study)."""
BY_CHANCE = 1e-4
"""A misfit counts only if chance makes one as large this rarely."""
OVERLAP_REFUSED = 5.0
"""Standard error over that of a perfect readout above which a population is refused (study)."""
LARGEST_LEAK = 0.1
"""A mended run with a larger leaked population has probably slipped its labels."""


@dataclass(frozen=True)
class Tuned:
    """Readout model of one memory recording: measure qubits, then data qubits.

    Attributes
    ----------
    hard
        (rounds, closing): True where the recording holds states already.
    rules
        (column, 13) float32 packed rules.
    priors
        (column,) prior of being leaked.
    unfolding
        (column, 4, 4) inverse response; `replicas` (replica, column, 4, 4) bootstrap copies.
    weights
        (column, sample, 2, 2) integration weights, or None for points.
    usable, reasons
        Whether the leaked population of each column can be had, and why not.
    phi, rotation, gain
        (column,) misfit and drift of the run.
    findings
        About this recording.
    """

    hard: tuple[bool, bool]
    rules: NDArray[np.float32]
    priors: NDArray[np.float64]
    unfolding: NDArray[np.float64]
    replicas: NDArray[np.float64]
    weights: NDArray[np.float32] | None
    usable: NDArray[np.bool_]
    reasons: tuple[str, ...]
    phi: NDArray[np.float64]
    rotation: NDArray[np.float64]
    gain: NDArray[np.float64]
    findings: tuple[Finding, ...]


def tune(model: xr.Dataset, pilot: Chunk, frame: Frame, settings: ReadoutSettings) -> Tuned:
    """Fit the readout model to one memory recording: check it, mend drift, set priors.

    Parameters
    ----------
    model
        From `calibrate`.
    pilot
        First shots of the recording.
    frame
        What the recording is.
    settings
        The `readout` section.

    Raises
    ------
    RecordingError
        No calibration has one of the recording's qubits.
    """
    names = [*frame.layout.measure, *frame.layout.data]
    hard = (pilot.states is not None, pilot.final_states is not None)
    count = len(names)
    needed = (() if hard[0] else frame.layout.measure) + (() if hard[1] else frame.layout.data)
    absent = [name for name in needed if name not in model["qubit"].values]
    if absent:
        raise RecordingError(
            numbered(
                [f'{frame.name}  qubit "{name}": in no calibration' for name in absent],
                "nothing was run",
            )
        )
    replicas = model.sizes["replica"]
    tuned = Tuned(
        hard=hard,
        rules=np.zeros((count, 13), dtype=np.float32),
        priors=np.full(count, WORKING_PRIOR[2]),
        unfolding=np.broadcast_to(np.eye(CLASSES), (count, CLASSES, CLASSES)).copy(),
        replicas=np.broadcast_to(np.eye(CLASSES), (replicas, count, CLASSES, CLASSES)).copy(),
        weights=_integration(model, names, pilot),
        usable=np.ones(count, dtype=bool),
        reasons=("",) * count,
        phi=np.full(count, np.nan),
        rotation=np.zeros(count),
        gain=np.ones(count),
        findings=(),
    )
    reasons, findings = [""] * count, []
    for column, name in enumerate(names):
        if name not in needed:
            continue
        one = model.sel(qubit=name)
        points = _pilot_points(pilot, tuned.weights, column, len(frame.layout.measure))
        reasons[column] = str(one["usable_reason"].item())
        if len(points):
            reason, found = _tune_column(tuned, column, name, one, points, settings)
            reasons[column] = reasons[column] or reason
            findings += found
    findings += _hard_findings(frame, hard)
    usable = np.array([not reason for reason in reasons])
    return replace(tuned, reasons=tuple(reasons), usable=usable, findings=tuple(findings))


def _tune_column(
    tuned: Tuned,
    column: int,
    name: str,
    one: xr.Dataset,
    points: NDArray[np.float64],
    settings: ReadoutSettings,
) -> tuple[str, list[Finding]]:
    """Fill in one qubit's column; return why its leaked population is refused, and findings."""
    mixture, change, reason = mixture_of(one), Change(), ""
    findings = []
    sample = points[:: max(len(points) // CHECK_POINTS, 1)]
    check = check_run(sample, mixture)
    before = check.phi
    if check.phi > settings.refuse_misfit and check.p_value < BY_CHANCE and settings.adapt:
        change = find_change(sample, mixture)
        check = check_run(change.backward(sample), mixture)
        degrees = float(np.rad2deg(change.rotation))
        findings.append(
            Finding(
                "readout-drift",
                "watch",
                name,
                f"{name}: the run's points had drifted from the calibration (rotation "
                f"{degrees:+.1f} degrees, gain {change.gain:.3f}); the model was carried along.",
                {
                    "rotation_degrees": degrees,
                    "gain": change.gain,
                    "phi_before": before,
                    "phi_after": check.phi,
                },
            )
        )
        if not GAIN_RANGE[0] <= change.gain <= GAIN_RANGE[1]:
            reason = f"the gain changed to {change.gain:.2f} of the calibration's"
        elif check.weights[2] > LARGEST_LEAK:
            reason = f"after mending drift {check.weights[2]:.0%} of the readings look leaked"
    if check.phi > settings.refuse_misfit and check.p_value < BY_CHANCE:
        reason = reason or "the run's points do not fit the calibrated classes"
    if reason:
        findings.append(
            Finding(
                "readout-refused",
                "act",
                name,
                f"{name}: {reason}; its leaked population is not used.",
                {"phi": check.phi},
            )
        )
    elif check.phi > MISFIT and check.p_value < BY_CHANCE:
        findings.append(
            Finding(
                "readout-misfit",
                "watch",
                name,
                f"{name}: the run's points fit the calibration imperfectly (excess chi-square "
                f"per shot {check.phi:.4f}).",
                {"phi": check.phi},
            )
        )
    if float(one["error_ratio"]) > OVERLAP_REFUSED:
        reason = reason or "its readout classes overlap too much"
    moved = change.apply(mixture)
    volume = mixture.box_volume * change.gain**2
    rule = discriminant(moved.means, moved.covariance, volume)
    table = one["response"].values
    leaked = float((posteriors(points, rule).mean(axis=0) @ np.linalg.inv(table))[2])
    tuned.priors[column] = np.clip(leaked, *PRIOR_RANGE)
    tuned.rules[column] = packed_rule(rule, float(tuned.priors[column]), WORKING_PRIOR[2])
    tuned.unfolding[column] = np.linalg.inv(table)
    tuned.replicas[:, column] = np.linalg.inv(one["response_replica"].values)
    tuned.phi[column] = before
    tuned.rotation[column], tuned.gain[column] = change.rotation, change.gain
    return reason, findings


def _hard_findings(frame: Frame, hard: tuple[bool, bool]) -> list[Finding]:
    if not any(hard):
        return []
    return [
        Finding(
            "states-not-corrected",
            "watch",
            frame.name,
            f"{frame.name} holds states that were classified elsewhere: leaked populations are "
            "counts of labels and contain that classifier's false leaked readings.",
        )
    ]


def _integration(model: xr.Dataset, names: list[str], pilot: Chunk) -> NDArray[np.float32] | None:
    if pilot.trace is None and pilot.final_trace is None:
        return None
    if "integration" not in model:
        raise RecordingError("the recording holds traces but its calibration holds points")
    return model["integration"].sel(qubit=names).values.astype(np.float32)


def _pilot_points(
    pilot: Chunk, weights: NDArray[np.float32] | None, column: int, measures: int
) -> NDArray[np.float64]:
    """Return the finite points of one qubit in the pilot, (point, 2)."""
    if column < measures:
        values, trace = pilot.iq, pilot.trace
        here: tuple[Any, ...] = (slice(None), slice(None), column)
    else:
        values, trace = pilot.final_iq, pilot.final_trace
        here = (slice(None), column - measures)
    if values is not None:
        points = values[here].reshape(-1, 2)
    else:
        assert trace is not None
        assert weights is not None
        flat = trace[here].reshape(-1, 1, *trace.shape[-2:])
        flat = flat[:: max(len(flat) // CHECK_POINTS, 1)]
        points = integrate(flat, weights[column][None])[:, 0]
    points = points[np.isfinite(points).all(axis=1)]
    return np.asarray(points, dtype=np.float64)
