"""Which combinations of levels a set of observations cannot tell: rank, condition, words."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]

RELATIVE_RANK = 1e-9
"""Singular values below this part of the largest count as 0: designs hold small whole numbers."""
SAME = 0.1
"""Entries of a null direction below this part of its largest are not named."""


@dataclass(frozen=True)
class Directions:
    """What a linear design determines.

    Attributes
    ----------
    rank, qubits
        Number of determined combinations, of how many levels.
    condition
        Largest over smallest singular value that is not 0.
    null
        (direction, qubit) orthonormal combinations that do not show.
    """

    rank: int
    qubits: int
    condition: float
    null: FloatArray

    @property
    def undetermined(self) -> NDArray[np.bool_]:
        """(qubit,) True where a level is part of a null direction."""
        if not len(self.null):
            return np.zeros(self.qubits, dtype=bool)
        return np.asarray(np.sqrt((self.null**2).sum(axis=0)) > 1e-6)

    def words(self, names: Sequence[str]) -> str:
        """Say what cannot be told, by the names of the qubits."""
        if not len(self.null):
            return "every qubit apart"
        said = []
        for direction in _simple(self.null):
            keep = np.abs(direction) > SAME * np.abs(direction).max()
            up = [names[i] for i in np.flatnonzero(keep & (direction > 0)).tolist()]
            down = [names[i] for i in np.flatnonzero(keep & (direction < 0)).tolist()]
            if not down or not up:
                said.append(f"{_some(up or down)} at all")
            else:
                said.append(f"more on {_some(up)} and less on {_some(down)}")
        return "cannot tell " + "; nor ".join(said)


def directions(design: FloatArray) -> Directions:
    """Return what a design (observation, qubit) determines."""
    count = design.shape[1]
    if not design.size:
        return Directions(0, count, float("inf"), np.eye(count))
    _, values, rows = np.linalg.svd(design)
    kept = values > RELATIVE_RANK * max(values[0], 1e-300)
    rank = int(kept.sum())
    condition = float(values[0] / values[rank - 1]) if rank else float("inf")
    return Directions(rank, count, condition, rows[rank:])


def _simple(null: FloatArray) -> FloatArray:
    """Return a sparse basis of the null space, by elimination from its largest entries."""
    rows = null.copy()
    for index in range(len(rows)):
        at = int(np.argmax(np.abs(rows[index])))
        rows[index] /= rows[index, at]
        for other in range(len(rows)):
            if other != index:
                rows[other] -= rows[other, at] * rows[index]
    return rows


def _some(names: Sequence[str]) -> str:
    shown = list(names[:6])
    return ", ".join(shown) + (f" and {len(names) - 6} others" if len(names) > 6 else "")
