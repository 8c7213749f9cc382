"""Readout clouds of every qubit, in one common scale, and a one-look overview of all qubits."""

from __future__ import annotations

import numpy as np
from matplotlib.axes import Axes
from matplotlib.patches import Circle

from leakpipe.report.figures.style import (
    FULL,
    Array,
    Drawing,
    NothingToDraw,
    canvas,
    short_name,
)
from leakpipe.report.inputs import PatchReport
from leakpipe.report.palette import LIGHT

TITLE = "Readout clouds and decision regions"
COLORS = ("data", "measure", "third")
"""Colours of the states 0, 1, 2."""

MARKERS = ("o", "s", "^")
MOST_POINTS = 120
"""Points drawn per cloud: enough to see its shape, few enough for one page."""

REACH = 3.2
"""How far beyond the outermost mean a panel reaches, in standard deviations of a cloud."""

GRID = 40
"""Grid points per axis for the decision regions."""


def plane(means: Array, covariance: Array) -> tuple[Array, Array, Array]:
    """Return the plane through the class means in units of the clouds' own spread.

    Parameters
    ----------
    means
        Class means, (state, feature); two or three states.
    covariance
        The covariance all classes share, (feature, feature).

    Returns
    -------
    origin, axes, positions
        Mean of state 0 (feature,), the map from features to the plane (feature, 2), and the class
        means in it (state, 2). State 0 is at the origin, state 1 on the positive first axis, state
        2 above it; every cloud is a unit circle.

    Raises
    ------
    numpy.linalg.LinAlgError
        The covariance is not positive definite.
    """
    lower = np.linalg.cholesky(covariance)
    whiten = np.linalg.inv(lower).T
    white = (means - means[0]) @ whiten
    first = white[1] / max(float(np.linalg.norm(white[1])), np.finfo(float).tiny)
    rest = white[2] - (white[2] @ first) * first if len(white) > 2 else np.zeros_like(first)
    if np.linalg.norm(rest) < 1e-9:
        # Two states, or three on a line: any direction across it will do.
        across = np.eye(len(first))[np.argmin(np.abs(first))]
        rest = across - (across @ first) * first
    second = rest / np.linalg.norm(rest)
    turn = whiten @ np.stack([first, second], axis=1)
    return means[0], turn, (means - means[0]) @ turn


def separations(patch: PatchReport) -> Array | None:
    """Return the distances 01, 12, 02 of every qubit's means in standard deviations, (qubit, 3).

    NaN where a state or the covariance is missing. None if there is no readout model.
    """
    found = _means(patch)
    if found is None:
        return None
    means, covariance = found
    out = np.full((len(means), 3), np.nan)
    for row, (mean, spread) in enumerate(zip(means, covariance, strict=True)):
        known = np.isfinite(mean).all(axis=1)
        for column, (a, b) in enumerate(((0, 1), (1, 2), (0, 2))):
            if b < len(mean) and known[a] and known[b] and np.isfinite(spread).all():
                apart = mean[b] - mean[a]
                out[row, column] = np.sqrt(apart @ np.linalg.solve(spread, apart))
    return out


def _means(patch: PatchReport) -> tuple[Array, Array] | None:
    """Return class means (qubit, state, feature) and covariances (qubit, feature, feature).

    The mean of a state that was placed and not measured is NaN.
    """
    data = patch.stage("model")
    if data is None or "mean" not in data or "covariance" not in data:
        return None
    means = patch.array("model", "mean", ("qubit", "state", "feature"))
    covariance = np.asarray(data["covariance"].transpose("qubit", ...).values, dtype=np.float64)
    if means is None or covariance.ndim != 3:
        return None
    means = means.copy()
    for row, usable in enumerate(patch.labels("model", "usable")):
        if not usable and means.shape[1] > 2:
            means[row, 2] = np.nan
    return means, covariance


def draw(patch: PatchReport, place: str) -> Drawing:
    """Draw one small panel per qubit: clouds as circles, regions as shades, points if given.

    Raises
    ------
    NothingToDraw
        There is no readout model.
    """
    found = _means(patch)
    if found is None:
        raise NothingToDraw("no readout model (the recordings hold states, not points)")
    qubits, order = patch.rows_of_model()
    if not qubits:
        raise NothingToDraw("the readout model has none of the layout's qubits")
    means, covariance = found[0][order], found[1][order]
    columns = 5 if len(qubits) <= 25 else 7
    rows = -(-len(qubits) // columns)
    figure = canvas(FULL, 0.75 + FULL / columns * 0.86 * rows, TITLE, place)
    panels = np.atleast_1d(figure.subplots(rows, columns)).ravel()
    for panel in panels:
        panel.axis("off")
    for panel, name, mean, spread in zip(panels, qubits, means, covariance, strict=False):
        panel.set_title(short_name(name), size=8, pad=2)
        known = np.isfinite(mean).all(axis=1)
        if known.sum() < 2 or not np.isfinite(spread).all():
            panel.text(0.5, 0.5, "no model", ha="center", va="center", size=8)
            continue
        origin, turn, at = plane(mean[known], spread)
        _panel(panel, at, _prior(patch, int(known.sum())))
        _cloud(patch, panel, name, origin, turn)
    return Drawing(
        figure,
        TITLE,
        "Each panel looks at the plane through a qubit's class means, turned so that 0 (circle) "
        "and 1 (square) lie level, and scaled so that every cloud has a spread of one: equal "
        "lengths mean equal separation. Rings: 2 standard deviations. Shades: which label a point "
        "gets. Dashes: straight paths of a decay during the readout.",
        f"Readout clouds of {len(qubits)} qubits with their decision regions.",
    )


def _prior(patch: PatchReport, states: int) -> Array:
    """Return the working prior of the labels, equal where the model names none."""
    data = patch.stage("model")
    words = "" if data is None else str(data.attrs.get("working_prior", ""))
    try:
        values = np.array([float(word) for word in words.split()])
    except ValueError:
        values = np.array([])
    if len(values) < states or not (values[:states] > 0).all():
        return np.full(states, 1 / states)
    return values[:states]


def _panel(panel: Axes, at: Array, prior: Array) -> None:
    low, high = at.min(axis=0) - REACH, at.max(axis=0) + REACH
    side = float((high - low).max()) / 2
    middle = (low + high) / 2
    x, y = (np.linspace(middle[i] - side, middle[i] + side, GRID) for i in (0, 1))
    spots = np.stack(np.meshgrid(x, y), axis=-1)
    score = np.log(prior) - 0.5 * ((spots[:, :, None] - at) ** 2).sum(axis=-1)
    for state in range(len(at)):
        # Lead over the best other state: its zero line is the border, straight between two states.
        others = np.delete(score, state, axis=-1).max(axis=-1)
        lead = score[..., state] - others
        if (lead > 0).any():
            panel.contourf(
                x, y, lead, levels=[0, np.inf], colors=[LIGHT[COLORS[state]]], alpha=0.13
            )
    for state, spot in enumerate(at):
        color = LIGHT[COLORS[state]]
        panel.add_patch(Circle(spot, 2.0, fill=False, edgecolor=color, linewidth=1.0))
        panel.plot(*spot, MARKERS[state], color=color, markersize=3)
        if state:
            panel.plot(
                *at[[state, state - 1]].T,
                color=LIGHT["quiet"],
                linewidth=0.7,
                linestyle=(0, (3, 2)),
                zorder=1,
            )
    panel.set_xlim(x[0], x[-1])
    panel.set_ylim(y[0], y[-1])
    panel.set_aspect("equal")


def _cloud(patch: PatchReport, panel: Axes, qubit: object, origin: Array, turn: Array) -> None:
    """Draw a subsample of calibration points, where the report was given some."""
    if patch.points is None or qubit not in patch.points["qubit"].values:
        return
    iq = patch.points["iq"].sel(qubit=qubit).transpose("prepared", "point", "quadrature").values
    if iq.shape[-1] != turn.shape[0]:
        return
    for prepared, cloud in zip(patch.points["prepared"].values.tolist(), iq, strict=True):
        spots = (cloud[:MOST_POINTS] - origin) @ turn
        panel.plot(
            *spots.T, ".", color=LIGHT[COLORS[prepared]], markersize=1.6, alpha=0.5,
            markeredgewidth=0, rasterized=True, zorder=1,
        )  # fmt: skip
