"""What the share stage takes from the datasets of the stages before it, as plain arrays."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Protocol

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from leakpipe.codes.layout import Layout
from leakpipe.recordings.shots import BATCHES, Frame
from leakpipe.share.exposures import CLOSING_STEPS, MEASURE_STEPS, ExposureSums
from leakpipe.share.injected import Injections, Kernel, fit_kernel
from leakpipe.share.leakage_free import Leakage
from leakpipe.share.regression import Shots, split_closing

FloatArray = NDArray[np.float64]


class Outcomes(Protocol):
    """What the share needs of the logical stage's sums."""

    @property
    def failed(self) -> NDArray[np.uint8]:
        """(shot,) 1 where the shot failed."""

    @property
    def batch(self) -> NDArray[np.int64]:
        """(shot,) batch of the shot."""


Reduced = Sequence[tuple[Frame, ExposureSums, Outcomes]]


def leakage_of(
    rates: xr.Dataset, readout: xr.Dataset, layout: Layout, rng: np.random.Generator
) -> Leakage:
    """Return rates of the data qubits and the population of the measure qubits, with draws."""
    picked = rates.sel(qubit=list(layout.data))
    value, error = _measure_leaked(readout)
    injection = picked["injection_draw"].values
    return Leakage(
        picked["qubit_injection"].values,
        picked["qubit_seepage"].values,
        max(value, 0.0),
        injection,
        picked["seepage_draw"].values,
        value + error * rng.normal(size=len(injection)),
    )


def _measure_leaked(readout: xr.Dataset) -> tuple[float, float]:
    """Return the mean number of leaked measure qubits per round and its standard error.

    Recordings are pooled by their shots, rounds alike; the error holds the shots of every batch and
    the bootstrapped calibrations.
    """
    plain = readout["injected"].values == 0
    shots = readout["shots"].values[plain].astype(float)

    def pooled(leaked: FloatArray) -> FloatArray:
        """Pool (..., recording, round, measure) over recordings and rounds."""
        weight = np.isfinite(leaked).all(axis=-1) * shots[:, None]
        total = np.where(weight > 0, np.nansum(leaked, axis=-1), 0.0)
        return np.asarray((total * weight).sum(axis=(-2, -1)) / weight.sum(axis=(-2, -1)))

    batches = np.moveaxis(readout["leaked_batch"].values[plain], 1, 0)
    filled = batches[np.isfinite(batches).any(axis=(1, 2, 3))]
    by_batch = pooled(filled)
    of_shots = by_batch.std(ddof=1) / np.sqrt(len(by_batch)) if len(by_batch) > 1 else 0.0
    of_calibration = pooled(readout["leaked_replica"].values[:, plain]).std(ddof=1)
    value = float(pooled(readout["leaked"].values[plain]))
    return value, float(np.hypot(of_shots, of_calibration))


def injections_of(
    reduced: Reduced,
    logical: xr.Dataset,
    leakage: Leakage,
    layout: Layout,
) -> tuple[Injections | None, Kernel | None, str]:
    """Return the injected runs of data qubits, their fitted kernel, and why there is none."""
    frames = [frame for frame, _, _ in reduced]
    error = logical["logical_error"].values
    spread = logical["logical_error_error"].values
    plain = [row for row, frame in enumerate(frames) if frame.injected is None]
    durations = sorted({frames[row].rounds for row in plain})
    rows, entries = [], []
    for row, frame in enumerate(frames):
        if frame.injected is None or frame.injected[0] not in layout.data:
            continue
        qubit, begin, probability = frame.injected
        if frame.rounds in durations:
            age = frame.rounds - begin + 1
            place = durations.index(frame.rounds)
            entries.append((layout.data.index(qubit), age, place, probability))
            rows.append(row)
    if not rows:
        return None, None, "needs runs with an injected leak and plain runs of as many rounds"
    pooled = [
        _pooled(error, spread, [r for r in plain if frames[r].rounds == d]) for d in durations
    ]
    table = np.array(entries)
    runs = Injections(
        qubit=table[:, 0].astype(np.int64),
        age=table[:, 1].astype(np.int64),
        reference=table[:, 2].astype(np.int64),
        error=error[rows],
        spread=spread[rows],
        probability=table[:, 3],
        reference_error=np.array([value for value, _ in pooled]),
        reference_spread=np.array([value for _, value in pooled]),
    )
    kernel = fit_kernel(runs, len(layout.data), leakage.episodes.ending)
    missing = [name for k, name in enumerate(layout.data) if k not in runs.qubit]
    reason = ""
    if missing:
        reason = f"no injected runs of {', '.join(missing)}"
    elif kernel is None:
        reason = "injected runs of one age only: how the cost grows is not identifiable"
    return runs, kernel, reason


def _pooled(error: FloatArray, spread: FloatArray, rows: list[int]) -> tuple[float, float]:
    """Return the inverse-variance mean of recordings of equal length, and its error."""
    weight = spread[rows] ** -2.0
    return float((error[rows] * weight).sum() / weight.sum()), float(weight.sum() ** -0.5)


def shots_of(used: Reduced) -> Shots:
    """Return the shots of all recordings as the regression wants them."""
    rounds = np.unique([frame.rounds for frame, _, _ in used])
    quiet, loud = zip(
        *(split_closing(exposure.closing / CLOSING_STEPS) for _, exposure, _ in used), strict=True
    )
    slots = max(one.shape[1] for one in loud)
    return Shots(
        group=np.concatenate(
            [np.full(len(o.failed), np.searchsorted(rounds, f.rounds)) for f, _, o in used]
        ),
        rounds=rounds.astype(np.int64),
        failed=np.concatenate([outcome.failed for _, _, outcome in used]).astype(float),
        measure=np.concatenate([exposure.measure for _, exposure, _ in used]) / MEASURE_STEPS,
        quiet=np.concatenate(quiet),
        loud=np.concatenate([np.pad(one, ((0, 0), (0, slots - one.shape[1]))) for one in loud]),
        cluster=np.concatenate(
            [row * BATCHES + outcome.batch for row, (_, _, outcome) in enumerate(used)]
        ),
    )


def interior_probability(detection: xr.Dataset) -> FloatArray:
    """Return each check's detection probability over interior layers, (check,)."""
    events = detection["events"].values.sum(axis=1).astype(float)
    trials = detection["trials"].values.sum(axis=1).astype(float)
    for row, (rounds, injected) in enumerate(
        zip(detection["rounds"].values, detection["injected"].values, strict=True)
    ):
        outside = np.ones(events.shape[1], dtype=bool)
        outside[1:rounds] = bool(injected)
        events[row, outside] = trials[row, outside] = 0.0
    with np.errstate(divide="ignore", invalid="ignore"):
        return np.asarray(events.sum(axis=(0, 1)) / trials.sum(axis=(0, 1)))


def successive_covariance(detection: xr.Dataset) -> FloatArray:
    """Return the covariance of each check's events in successive interior layers, (check,)."""
    same = np.flatnonzero(detection["early"].values == detection["late"].values)
    block = float(detection.attrs["block"])
    pooled = detection[["products", "block_products"]].isel(pair=same, lag=1).sum("batch")
    blocks = detection["blocks"].values.sum(axis=0).astype(float)
    # A product at layer r needs r + 1 interior too: the blocks of the later layer.
    behind = np.append(blocks[1:], 0.0)
    behind[0] = 0.0
    excess = pooled["products"].values - pooled["block_products"].values / block
    with np.errstate(divide="ignore", invalid="ignore"):
        return np.asarray(excess.sum(axis=1) / ((block - 1) * behind.sum()))
