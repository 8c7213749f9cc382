"""The readout stage: calibrations in, states and leaked populations with errors out."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from leakpipe.config.readout import ReadoutSettings
from leakpipe.errors import RecordingError, numbered
from leakpipe.findings import Finding, findings_of, with_findings
from leakpipe.readout.adaptation import GAIN_RANGE, Change, check_run, find_change
from leakpipe.readout.calibration import QubitModel, model_qubit, tail_names
from leakpipe.readout.kernel import classify, kernel_arrays, label_shift, packed_rule
from leakpipe.readout.mixture import Mixture
from leakpipe.readout.population import CLASSES, WORKING_PRIOR, discriminant, posteriors
from leakpipe.readout.weights import integrate, learn_weights
from leakpipe.recordings.shots import BATCHES, Chunk, Frame, Readings

STATE_NAMES = [0, 1, 2]
PRIOR_RANGE = (1e-4, 0.2)
"""Range of the prior of being leaked that a run's first shots may set."""
CHECK_POINTS = 20_000
MISFIT = 3e-3
"""Excess chi-square per shot that becomes a finding (prototype study)."""
BY_CHANCE = 1e-4
"""A misfit counts only if chance makes one as large this rarely."""
OVERLAP_WATCH, OVERLAP_REFUSED = 3.0, 5.0
"""Standard error over that of a perfect readout (prototype study)."""
MISSING_WATCH = 1e-3
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


def calibrate(
    calibrations: Sequence[xr.Dataset], settings: ReadoutSettings, seed: int
) -> xr.Dataset:
    """Fit a readout model per qubit.

    Parameters
    ----------
    calibrations
        Calibration recordings, newest last; a qubit comes from the newest that has it.
    settings
        The `readout` section.
    seed
        Seed of the bootstrap; each qubit has a stream of its own.

    Returns
    -------
    model
        Over dimension `qubit`; reused by later epochs.

    Raises
    ------
    RecordingError
        A qubit has too few finite shots in a preparation to fit a class.
    """
    newest: dict[str, xr.Dataset] = {}
    for calibration in calibrations:
        for name in calibration["qubit"].values:
            newest[str(name)] = calibration
    names = sorted(newest)
    streams = np.random.default_rng(seed).spawn(len(names))
    models, weights, problems = [], [], []
    for name, stream in zip(names, streams, strict=True):
        prepared = [int(state) for state in newest[name]["prepared"].values]
        points, weight = _points(newest[name].sel(qubit=name), settings)
        few = [
            f'{newest[name].attrs["source"]}  qubit "{name}": preparation {state} has '
            f"{int(np.isfinite(x).all(axis=1).sum())} finite shots, expected {FEWEST_SHOTS} or more"
            for state, x in zip(prepared, points, strict=True)
            if np.isfinite(x).all(axis=1).sum() < FEWEST_SHOTS
        ]
        problems += few
        if not few:
            models.append(
                model_qubit(
                    points,
                    prepared,
                    stream,
                    replicas=settings.replicas,
                    decay=settings.decay == "fitted",
                )
            )
            weights.append(weight)
    if problems:
        raise RecordingError(numbered(problems, "nothing was run"))
    model = _label(names, models, weights)
    model["calibration_id"] = ("qubit", [newest[n].attrs["calibration_id"] for n in names])
    current = calibrations[-1].attrs["calibration_id"]
    return with_findings(model, _model_findings(model, models, current))


FEWEST_SHOTS = 100
"""Finite shots per preparation below which no class can be fitted."""


def _points(
    calibration: xr.Dataset, settings: ReadoutSettings
) -> tuple[list[NDArray[np.float64]], NDArray[np.float64] | None]:
    if "iq" in calibration:
        values = calibration["iq"].values
        return [values[p].astype(np.float64) for p in range(len(values))], None
    traces = [calibration["trace"].values[p] for p in range(calibration.sizes["prepared"])]
    weight = learn_weights(traces, settings.weights)
    points = [
        integrate(x[:, None], weight[None].astype(np.float32))[:, 0].astype(np.float64)
        for x in traces
    ]
    return points, weight


def _label(
    names: list[str], models: list[QubitModel], weights: list[NDArray[np.float64] | None]
) -> xr.Dataset:
    def stack(get: Any) -> NDArray[Any]:
        return np.array([get(one) for one in models])

    preparations = max(len(one.shots) for one in models)

    def padded(get: Any) -> NDArray[np.float64]:
        out = np.full((len(models), preparations, *np.shape(get(models[0]))[1:]), np.nan)
        for row, one in enumerate(models):
            out[row, : len(get(one))] = get(one)
        return out

    variables: dict[str, Any] = {
        "mean": (("qubit", "state", "feature"), stack(lambda m: m.mixture.means)),
        "covariance": (
            ("qubit", "feature", "feature_2"),
            stack(lambda m: m.mixture.covariance),
        ),
        "preparation_weight": (("qubit", "prepared", "state"), padded(lambda m: m.mixture.weights)),
        "background_weight": (("qubit", "prepared"), padded(lambda m: m.mixture.background)),
        "decay": (("qubit", "tail"), stack(lambda m: m.mixture.decay)),
        "box": (("qubit", "feature", "end"), stack(lambda m: m.mixture.box)),
        "likelihood": ("qubit", stack(lambda m: m.mixture.likelihood)),
        "converged": ("qubit", stack(lambda m: np.int8(m.mixture.converged))),
        "response": (("qubit", "start", "class"), stack(lambda m: m.response)),
        "response_replica": (("qubit", "replica", "start", "class"), stack(lambda m: m.replicas)),
        "assignment": (("qubit", "state", "label"), stack(lambda m: m.labels)),
        "assignment_as_prepared": (("qubit", "prepared", "label"), padded(lambda m: m.as_prepared)),
        "shots": (("qubit", "prepared"), padded(lambda m: m.shots)),
        "missing": ("qubit", stack(lambda m: m.missing)),
        "separation": (("qubit", "pair_of_states"), stack(lambda m: m.separations)),
        "error_ratio": ("qubit", stack(lambda m: m.error_ratio)),
        "usable": ("qubit", stack(lambda m: np.int8(m.usable))),
        "usable_reason": ("qubit", stack(lambda m: m.reason)),
    }
    if weights[0] is not None:
        variables["integration"] = (
            ("qubit", "sample", "quadrature", "feature"),
            np.array(weights),
        )
    return xr.Dataset(
        variables,
        coords={
            "qubit": names,
            "state": STATE_NAMES,
            "label": STATE_NAMES,
            "prepared": np.arange(preparations),
            "tail": tail_names(),
            "class": ["0", "1", "2", "background"],
            "pair_of_states": ["0-1", "1-2", "0-2"],
        },
        attrs={"working_prior": json_prior()},
    )


def json_prior() -> str:
    """Return the working prior as text, for the model file."""
    return " ".join(str(value) for value in WORKING_PRIOR)


def _model_findings(model: xr.Dataset, models: list[QubitModel], current: str) -> list[Finding]:
    findings = []
    older = [
        f"{q} ({c})"
        for q, c in zip(
            model["qubit"].values.tolist(), model["calibration_id"].values.tolist(), strict=True
        )
        if c != current
    ]
    if older:
        findings.append(
            Finding(
                "older-calibration",
                "note",
                ", ".join(older),
                f"{len(older)} qubits are not in the newest calibration and use an older one: "
                f"{', '.join(older)}.",
            )
        )
    for name, one in zip(model["qubit"].values.tolist(), models, strict=True):
        if not one.usable:
            findings.append(
                Finding("leak-not-identifiable", "watch", name, f"{name}: {one.reason}.")
            )
        elif one.error_ratio > OVERLAP_WATCH:
            findings.append(
                Finding(
                    "readout-overlap",
                    "watch",
                    name,
                    f"{name}: overlapping readout classes widen the error of its leaked "
                    f"population {one.error_ratio:.1f} times.",
                    {"error_ratio": one.error_ratio},
                )
            )
        if one.missing > MISSING_WATCH:
            findings.append(
                Finding(
                    "missing-readings",
                    "watch",
                    name,
                    f"{name}: {one.missing:.2%} of its calibration shots are missing.",
                    {"fraction": one.missing},
                )
            )
        if not one.mixture.converged:
            findings.append(
                Finding(
                    "readout-fit-unfinished",
                    "watch",
                    name,
                    f"{name}: its mixture did not converge.",
                )
            )
    return findings


def _mixture(model: xr.Dataset) -> Mixture:
    weights = model["preparation_weight"].values
    return Mixture(
        means=model["mean"].values,
        covariance=model["covariance"].values,
        weights=weights,
        decay=model["decay"].values,
        background=model["background_weight"].values,
        box=model["box"].values,
        likelihood=float(model["likelihood"]),
        steps=0,
        converged=bool(model["converged"]),
    )


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
    mixture, change, reason = _mixture(one), Change(), ""
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
