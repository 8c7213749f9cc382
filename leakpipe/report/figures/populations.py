"""Leaked population per round: measure qubits in every round, data qubits at the end."""

from __future__ import annotations

import numpy as np
from matplotlib.axes import Axes
from numpy.typing import NDArray

from leakpipe.report.figures.detection import HALF_WIDTH
from leakpipe.report.figures.style import (
    COLUMN,
    Array,
    Drawing,
    NothingToDraw,
    band,
    canvas,
    end_label,
    points,
    spread_apart,
)
from leakpipe.report.inputs import PatchReport
from leakpipe.report.palette import LIGHT

TITLE = "Leaked population per round"


def draw(patch: PatchReport, place: str) -> Drawing:
    """Draw readings of the measure qubits per round, closing data readings per R, and the model.

    Raises
    ------
    NothingToDraw
        There is neither a leaked population nor a model of one.
    """
    measure = measure_points(patch)
    data = closing_points(patch)
    expected = patch.array("rates", "expected_leaked", (_role_dim(patch), "round"))
    if expected is not None and not np.isfinite(expected).any():
        expected = None
    if measure is None and data is None and expected is None:
        raise NothingToDraw("no leaked population is identifiable, and no model of one")
    figure = canvas(COLUMN, 3.4, TITLE, place)
    axes = figure.subplots()
    said = []
    for role, found, marker in (("data", data, "o"), ("measure", measure, "s")):
        if found is not None:
            rounds, value, error, _ = found
            points(axes, rounds, 100 * value, 100 * error, color=role, marker=marker)
            last = 100 * value[-1]
            said.append(f"{role} qubits reach {last:.2g} % in round {rounds[-1]:.0f}")
    ends = _curves(patch, axes, expected)
    bottom, top = axes.get_ylim()
    if ends:
        heights = spread_apart([height for _, _, height in ends], 0.08 * (top - bottom))
        for (role, edge, _), height in zip(ends, heights, strict=True):
            end_label(axes, edge, height, role, role)
    elif measure is not None and data is not None:
        axes.legend(["data", "measure"])
    axes.axhline(0, color=LIGHT["quiet"], linewidth=0.8)
    axes.set_xlabel("round")
    axes.set_ylabel("leaked population (%)")
    common = [
        f"{role} {100 * found[3]:.2g} %"
        for role, found in (("data", data), ("measure", measure))
        if found
    ]
    shared = (
        f" Common to all rounds, from the calibration, at 95 %: {', '.join(common)}."
        if common
        else ""
    )
    return Drawing(
        figure,
        TITLE,
        "Means over the qubits of each kind: circles, data qubits in the closing readout after R "
        "rounds; squares, measure qubits in every round. Bars are 95 % intervals from the number "
        f"of shots. Curves: the fitted injection and seepage with their band.{shared}",
        f"Leaked population against the round: {'; '.join(said) or 'model curves only'}.",
    )


def _role_dim(patch: PatchReport) -> str:
    """Return the name of the dimension over data and measure qubits of the rates stage."""
    data = patch.stage("rates")
    return "role_name" if data is not None and "role_name" in data.dims else "role"


def _curves(
    patch: PatchReport, axes: Axes, expected: Array | None
) -> list[tuple[str, float, float]]:
    """Draw the model per role; return (role, last round, last height in percent)."""
    if expected is None:
        return []
    rounds = np.asarray(patch.labels("rates", "round"), dtype=float)
    low = patch.array("rates", "expected_leaked_low", (_role_dim(patch), "round"))
    high = patch.array("rates", "expected_leaked_high", (_role_dim(patch), "round"))
    ends = []
    for row, role in enumerate(patch.labels("rates", _role_dim(patch))):
        known = np.isfinite(expected[row])
        if role not in ("data", "measure") or not known.any():
            continue
        axes.plot(rounds[known], 100 * expected[row, known], color=LIGHT[role], zorder=2)
        if low is not None and high is not None:
            band(axes, rounds, 100 * low[row], 100 * high[row], role)
        ends.append((role, float(rounds[known][-1]), 100 * float(expected[row, known][-1])))
    return ends


def measure_points(patch: PatchReport) -> tuple[Array, Array, Array, float] | None:
    """Return rounds, mean population of the measure qubits, shot half width, common half width.

    Recordings are pooled with their shots as weights; runs with an injected qubit are left out.
    """
    dims = ("recording", "round", "measure")
    parts = _parts(patch, "leaked", dims)
    if parts is None:
        return None
    value, shot, calibration, weight = parts
    mean, error, common = _pooled(value, shot, calibration, weight)
    known = np.isfinite(mean)
    if not known.any():
        return None
    rounds = np.asarray(patch.labels("readout", "round"), dtype=float)[known]
    return rounds, mean[known], error[known], common


def closing_points(patch: PatchReport) -> tuple[Array, Array, Array, float] | None:
    """Return the same for the data qubits in the closing readout, against R."""
    parts = _parts(patch, "closing_leaked", ("recording", "data"))
    if parts is None:
        return None
    value, shot, calibration, weight = parts
    counts = np.asarray(patch.labels("readout", "rounds"), dtype=float)[_plain_rows(patch)]
    rows = []
    for rounds in np.unique(counts):
        chosen = counts == rounds
        mean, error, common = _pooled(
            value[chosen][:, None],
            shot[chosen][:, None],
            calibration[chosen][:, None],
            weight[chosen],
        )
        if np.isfinite(mean[0]):
            rows.append((rounds, mean[0], error[0], common))
    if not rows:
        return None
    table = np.array(rows)
    return table[:, 0], table[:, 1], table[:, 2], float(table[:, 3].max())


def _plain_rows(patch: PatchReport) -> NDArray[np.bool_]:
    """Return which recordings have no injected qubit (bool over recordings)."""
    count = len(patch.labels("readout", "recording"))
    injected = patch.labels("readout", "injected") or [0] * count
    return np.array([int(flag) == 0 for flag in injected], dtype=bool)


def _parts(
    patch: PatchReport, name: str, dims: tuple[str, ...]
) -> tuple[Array, Array, Array, Array] | None:
    """Return population, shot error, calibration error and shots of the plain recordings."""
    found = [
        patch.array("readout", f"{name}{suffix}", dims)
        for suffix in ("", "_shot_error", "_calibration_error")
    ]
    value, shot, calibration = found
    if value is None or not len(patch.labels("readout", "recording")):
        return None
    value = np.where(_usable(patch, dims[-1]), value, np.nan)
    keep = _plain_rows(patch)
    shots = np.asarray(patch.labels("readout", "shots") or np.ones(len(keep)), dtype=float)
    nothing = np.zeros_like(value)
    shot = nothing if shot is None else np.nan_to_num(shot)
    calibration = nothing if calibration is None else np.nan_to_num(calibration)
    return value[keep], shot[keep], calibration[keep], shots[keep]


def _usable(patch: PatchReport, kind: str) -> NDArray[np.bool_]:
    """Return which qubits of a dimension have an identifiable leaked population."""
    names, flags = patch.labels("readout", "qubit"), patch.labels("readout", "usable")
    refused = {name for name, good in zip(names, flags, strict=False) if not good}
    return np.array([name not in refused for name in patch.labels("readout", kind)], dtype=bool)


def _pooled(
    value: Array, shot: Array, calibration: Array, weight: Array
) -> tuple[Array, Array, float]:
    """Pool (recording, round, qubit) over recordings by shots, then average over qubits.

    Shot errors are independent everywhere. The calibration error of a qubit is the same in every
    recording and round, and independent between qubits. Qubits without a finite value in any
    recording are left out of the mean in every round alike, so that no round averages over another
    set of qubits.
    """
    known = np.isfinite(value)
    share = weight[:, None, None] * known
    total = share.sum(axis=0)
    with np.errstate(divide="ignore", invalid="ignore"):
        share = share / total
        per_qubit = np.nansum(share * np.nan_to_num(value), axis=0)
        per_qubit[total == 0] = np.nan
        variance = np.nansum((share * shot) ** 2, axis=0)
    used = np.isfinite(per_qubit).any(axis=0)
    if not used.any():
        nothing = np.full(value.shape[1], np.nan)
        return nothing, nothing, 0.0
    mean = per_qubit[:, used].mean(axis=1)
    error = HALF_WIDTH * np.sqrt(variance[:, used].sum(axis=1)) / used.sum()
    largest = np.nanmax(np.where(known, calibration, 0.0), axis=(0, 1))[used]
    common = HALF_WIDTH * float(np.sqrt((largest**2).sum())) / int(used.sum())
    return mean, error, common
