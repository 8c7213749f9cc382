"""Map of the steady leakage on the chip, with value and uncertainty of every qubit."""

from __future__ import annotations

from typing import Any

import numpy as np
from matplotlib.axes import Axes
from matplotlib.patches import Circle, Patch, Rectangle

from leakpipe.estimates import Estimate
from leakpipe.report.figures.style import COLUMN, FULL, Drawing, NothingToDraw, canvas, short_name
from leakpipe.report.inputs import PatchReport
from leakpipe.report.palette import LIGHT
from leakpipe.report.wording import decimals_for, percent

TITLE = "Steady leakage on the chip"
LARGEST = 0.5
"""Radius of the largest symbol; neighbouring qubits stand sqrt 2 apart."""

BARE = 0.22
"""Radius of the dotted symbol of a qubit whose leakage is not identifiable."""

SQUARE = float(np.sqrt(np.pi))
"""Side of the square with the area of a circle of radius 1."""

MARGIN = 0.35
"""Room for the words of the outermost qubits."""

MANY = 24
"""With more qubits than this the map takes the full width."""


def draw(patch: PatchReport, place: str) -> Drawing:
    """Draw one symbol per qubit: area is leakage, outlines are the ends of its interval.

    Raises
    ------
    NothingToDraw
        No qubit has an estimate or a limit.
    """
    layout = patch.layout
    qubits = [*layout.data, *layout.measure]
    at = np.concatenate([layout.data_at, layout.measure_at])
    levels = [patch.estimate("rates", "qubit_steady_leakage", {"qubit": name}) for name in qubits]
    known = [level for level in levels if level.value is not None]
    if not known:
        raise NothingToDraw(f"no steady leakage per qubit: {levels[0].basis}")
    largest = max(max(level.value or 0.0, level.high or 0.0) for level in known)
    radii = np.array([_reach(level, largest) for level in levels])[:, None]
    low, high = (at - radii - MARGIN).min(axis=0), (at + radii + MARGIN).max(axis=0)
    span = high - low
    width = FULL if len(qubits) > MANY else COLUMN
    height = min(max(width * span[1] / span[0], 1.1) + 0.75, 9.5)
    figure = canvas(width, height, TITLE, place)
    axes = figure.subplots()
    axes.set_aspect("equal")
    axes.axis("off")
    axes.set_xlim(low[0], high[0])
    axes.set_ylim(low[1], high[1])
    _couplers(patch, axes)
    points_per_unit = 72 * min((width - 0.1) / span[0], (height - 0.75) / span[1])
    size = min(8.0, 0.17 * points_per_unit)
    roles = ["data"] * len(layout.data) + ["measure"] * len(layout.measure)
    for name, level, (x, y), role, clear in zip(
        qubits, levels, at, roles, radii.ravel().tolist(), strict=True
    ):
        _symbol(axes, (x, y), level, role, largest)
        # A square of the same area reaches less far up than a circle.
        up = clear if role == "data" else clear * SQUARE / 2
        _words(axes, (x, y), name, level, size, up)
    order = sorted(known, key=lambda level: -(level.value or 0.0))
    worst = qubits[levels.index(order[0])]
    unknown = len(levels) - len(known)
    lost = f" Dotted: not identifiable ({unknown})." if unknown else ""
    return Drawing(
        figure,
        TITLE,
        "Circles are data qubits, squares measure qubits; the filled area is the steady leakage, "
        "the thin outlines are the ends of its 95 % interval. Numbers: percent and half the "
        f"interval.{lost}",
        f"Map of {len(qubits)} qubits. Largest steady leakage: {worst}, {percent(order[0])}; "
        f"median {100 * float(np.median([level.value or 0.0 for level in known])):.2g} %.",
    )


def _couplers(patch: PatchReport, axes: Axes) -> None:
    """Draw a thin line for every pair of qubits that share a gate."""
    for check, touched in enumerate(patch.layout.touches):
        start = patch.layout.measure_at[check]
        for qubit in touched:
            end = patch.layout.data_at[qubit]
            axes.plot(*zip(start, end, strict=True), color=LIGHT["hair"], linewidth=1.0, zorder=1)


def _radius(amount: float | None, largest: float) -> float:
    """Return the radius of a symbol whose area stands for `amount`."""
    return LARGEST * float(np.sqrt(max(amount or 0.0, 0.0) / largest))


def _reach(level: Estimate, largest: float) -> float:
    """Return the radius that a qubit's words have to keep clear of."""
    if level.value is None:
        return BARE
    return _radius(max(level.value, level.high or 0.0), largest)


def _symbol(
    axes: Axes, at: tuple[float, float], level: Estimate, role: str, largest: float
) -> None:
    reach = _reach(level, largest)
    if level.value is None:
        hollow = {"facecolor": LIGHT["surface"], "edgecolor": LIGHT["quiet"], "linestyle": ":"}
        axes.add_patch(_shape(role, at, reach, **hollow))
        return
    paint = LIGHT[role]
    axes.add_patch(_shape(role, at, reach, facecolor=LIGHT["surface"], edgecolor="none"))
    radius = _radius(level.value, largest)
    axes.add_patch(_shape(role, at, radius, facecolor=paint, edgecolor="none", alpha=0.45))
    for end in (level.low, level.high):
        if end is not None and end > 0:
            look = {"fill": False, "edgecolor": paint, "linewidth": 0.9}
            axes.add_patch(_shape(role, at, _radius(end, largest), **look))


def _shape(role: str, at: tuple[float, float], radius: float, **look: Any) -> Patch:
    """Return a circle for a data qubit and a square of the same area for a measure qubit."""
    if role == "data":
        return Circle(at, radius, zorder=2, **look)
    side = radius * SQUARE
    corner = (at[0] - side / 2, at[1] - side / 2)
    return Rectangle(corner, side, side, zorder=2, **look)


def _words(
    axes: Axes, at: tuple[float, float], name: str, level: Estimate, size: float, clear: float
) -> None:
    """Write the name above a qubit and value and half interval below it."""
    if level.value is None:
        said = "?" if level.high is None else percent(level).replace("below ", "< ")
    else:
        half = None if level.low is None or level.high is None else 50 * (level.high - level.low)
        digits = decimals_for(100 * level.value, half)
        spread = "" if half is None else f" ±{half:.{digits}f}"
        said = f"{100 * level.value:.{digits}f}{spread}"
    for words, side, weight in ((short_name(name, 8), 1, "bold"), (said, -1, "normal")):
        axes.annotate(
            words,
            (at[0], at[1] + side * clear),
            xytext=(0, 2.5 * side),
            textcoords="offset points",
            ha="center",
            va="bottom" if side > 0 else "top",
            size=size,
            weight=weight,
            zorder=5,
        )
