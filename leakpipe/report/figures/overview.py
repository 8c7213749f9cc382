"""One look at the readout of all qubits: separations, wrong readings, loss of precision."""

from __future__ import annotations

import numpy as np
from matplotlib.axes import Axes

from leakpipe.report.assignment import assignment
from leakpipe.report.figures.clouds import COLORS, MARKERS, separations
from leakpipe.report.figures.style import (
    COLUMN,
    FULL,
    Array,
    Drawing,
    NothingToDraw,
    canvas,
    short_name,
)
from leakpipe.report.inputs import PatchReport
from leakpipe.report.palette import LIGHT

TITLE = "Readout of all qubits"
MANY = 20
"""With more qubits than this the overview takes the full width."""

PAIRS = ("0 and 1", "1 and 2", "0 and 2")


def draw(patch: PatchReport, place: str) -> Drawing:
    """Draw the diagnostics of every qubit in strips over a common axis.

    Raises
    ------
    NothingToDraw
        There is no readout model.
    """
    apart = separations(patch)
    qubits, rows = patch.rows_of_model()
    if apart is None or not qubits:
        raise NothingToDraw("no readout model (the recordings hold states, not points)")
    apart = apart[rows]
    ratio = patch.array("model", "error_ratio", ("qubit",))
    ratio = None if ratio is None else ratio[rows]
    strips = 2 if ratio is None else 3
    wide = len(qubits) > MANY
    figure = canvas(FULL if wide else COLUMN, 0.9 + 1.35 * strips, TITLE, place)
    panels = figure.subplots(strips, 1, sharex=True)
    x = np.arange(len(qubits), dtype=float)
    _separations(panels[0], x, apart)
    _wrong(panels[1], x, patch, qubits)
    if ratio is not None:
        panels[2].plot(x, ratio, "o", color=LIGHT["ink"])
        panels[2].axhline(1, color=LIGHT["quiet"], linewidth=0.8)
        panels[2].set_ylim(0, 1.15 * max(float(np.nanmax(ratio, initial=1.0)), 1.0))
        panels[2].set_ylabel("leakage error\nagainst ideal")
    size = 7.5 if wide else 8.5
    panels[-1].set_xticks(x, [short_name(n, 10) for n in qubits], rotation=90, fontsize=size)
    panels[-1].margins(x=0.02)
    refused = _refused(patch)
    for spot, name in zip(x, qubits, strict=True):
        if name in refused:
            for panel in panels:
                panel.axvspan(spot - 0.5, spot + 0.5, color=LIGHT["hair"], alpha=0.8, linewidth=0)
    closest = qubits[int(np.nanargmin(apart[:, 0]))] if np.isfinite(apart[:, 0]).any() else "none"
    third = " Third: how much overlap widens the error of the leaked population." * (strips > 2)
    return Drawing(
        figure,
        TITLE,
        "Top: distances between class means in units of the clouds' spread; clouds closer than "
        "about 4 overlap. Second: readings of prepared 0 and 1 that are wrong, with 95 % "
        f"intervals.{third} Shaded: leaked population not identifiable "
        f"({len(refused)} of {len(qubits)}).",
        f"Separations and wrong readings of {len(qubits)} qubits; 0 and 1 are closest on "
        f"{closest}.",
    )


def _separations(axes: Axes, x: Array, apart: Array) -> None:
    for column, (words, marker, color) in enumerate(zip(PAIRS, MARKERS, COLORS, strict=True)):
        axes.plot(x, apart[:, column], marker, color=LIGHT[color], label=words, markersize=4)
    axes.set_ylabel("distance of\nmeans (sigma)")
    axes.set_ylim(0, 1.12 * max(float(np.nanmax(apart, initial=1.0)), 1.0))
    axes.legend(ncols=3, loc="lower left", bbox_to_anchor=(0, 1), borderaxespad=0.1, fontsize=8.5)


def _wrong(axes: Axes, x: Array, patch: PatchReport, qubits: list[str]) -> None:
    axes.set_ylabel("wrong readings\nof 0 and 1 (%)")
    known = [(at, assignment(patch, name)) for at, name in zip(x, qubits, strict=True)]
    drawn = [
        (at, 1 - one.value, 1 - one.high, 1 - one.low)
        for at, one in known
        if one.value is not None and one.low is not None and one.high is not None
    ]
    if not drawn:
        axes.text(0.5, 0.5, "not reported", transform=axes.transAxes, ha="center", size=8.5)
        return
    at, value, low, high = 100 * np.array(drawn).T
    ends = np.maximum([value - low, high - value], 0)
    axes.errorbar(at / 100, value, yerr=ends, fmt="o", color=LIGHT["ink"], elinewidth=1)
    axes.set_ylim(bottom=0)


def _refused(patch: PatchReport) -> set[str]:
    """Return the qubits whose leaked population the readout stage could not have."""
    stage = "readout" if patch.labels("readout", "usable") else "model"
    names, usable = patch.labels(stage, "qubit"), patch.labels(stage, "usable")
    return {str(name) for name, good in zip(names, usable, strict=False) if not good}
