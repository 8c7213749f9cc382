"""Where to look when a qubit moved: which of its neighbours moved with it."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np

from leakpipe.history.chart import Chart
from leakpipe.history.panel import Panel
from leakpipe.history.words import joined

MOVED_WITH = 2.5
"""Errors that the mean deviation of a neighbour must reach: four neighbours reach it by chance in
2.5 % of the flags (our choice)."""
MOVED_NEAR = 3.0
"""The same for qubits one further on, of which there are more: eight reach it in 1 %."""


@dataclass(frozen=True)
class Clue:
    """What the neighbourhood says: names of neighbours that moved too, and the same in words."""

    moved: tuple[str, ...]
    words: str


def around(
    qubit: str,
    neighbours: Mapping[str, Sequence[str]],
    one: Panel,
    run: Chart,
    since: int,
    now: int,
) -> Clue:
    """Return what the qubits around a flagged one say about where to look first.

    Parameters
    ----------
    qubit
        The flagged qubit.
    neighbours
        Qubits that share a gate with each qubit.
    one, run
        Panel of the quantity and its chart.
    since, now
        First and last epoch of the change.
    """
    near = list(neighbours.get(qubit, ()))
    if not near:
        return Clue((), "its neighbours are not known")
    together = _moved_together(qubit, one, run, since, now)
    moved = tuple(name for name in near if together.get(name, 0.0) > MOVED_WITH)
    if moved:
        couplers = joined([f"{qubit}-{name}" for name in moved])
        return Clue(moved, f"{joined(moved)} moved with it: look at {couplers} first")
    known = [name for name in near if name in together]
    if not known:
        return Clue((), f"nothing is known of its neighbours {joined(near)}")
    for between in near:
        others = [name for name in neighbours.get(between, ()) if name != qubit]
        too = tuple(name for name in others if together.get(name, 0.0) > MOVED_NEAR)
        if too:
            words = f"{joined(too)} moved with it and shares {between}: look at {between} first"
            return Clue(too, words)
    return Clue((), f"{joined(known)} did not move: look at {qubit} itself first")


def _moved_together(qubit: str, one: Panel, run: Chart, since: int, now: int) -> dict[str, float]:
    """Return per qubit its summed deviation over its error, positive in the flagged direction."""
    columns = {series.qubit: column for column, series in enumerate(one.series)}
    direction = float(run.alarm[now, columns[qubit]])
    told = {}
    for name, column in columns.items():
        z = run.deviation[since : now + 1, column]
        z = z[np.isfinite(z)]
        if name != qubit and z.size:
            told[name] = float(direction * z.sum() / np.sqrt(z.size))
    return told
