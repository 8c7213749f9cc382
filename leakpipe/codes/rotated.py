"""The rotated surface code of any odd or even distance.

Geometry: data qubits at odd coordinates (1, 1) .. (2d-1, 2d-1), checks at even ones; a check at
(x, y) is of type Z where (x + y) / 2 is even, X where it is odd. Z checks close the left and right
edges, X checks the bottom and top. The logical Z is the bottom row, the logical X the left column.
Gate order (Tomita and Svore, Phys. Rev. A 90, 062320 (2014)): Z checks run along one pair of
diagonals, X checks along the other, so that a hook error never lies along its logical operator.
"""

from __future__ import annotations

import numpy as np

from leakpipe.codes.layout import Basis, Layout
from leakpipe.errors import LayoutError

GATE_OFFSETS: dict[Basis, tuple[tuple[int, int], ...]] = {
    "Z": ((1, 1), (1, -1), (-1, 1), (-1, -1)),
    "X": ((1, 1), (-1, 1), (1, -1), (-1, -1)),
}
"""Where the data qubit of time slot 0..3 stands, relative to its check."""


def rotated_surface(distance: int) -> Layout:
    """Return the rotated surface code: d^2 data qubits and d^2 - 1 checks.

    Raises
    ------
    LayoutError
        The distance is below 2.
    """
    if distance < 2:
        raise LayoutError(f"a rotated surface code needs a distance of 2 or more, got {distance}")
    spots = [(2 * col + 1, 2 * row + 1) for row in range(distance) for col in range(distance)]
    index_of = {spot: index for index, spot in enumerate(spots)}
    measure_at: list[tuple[int, int]] = []
    checks: list[Basis] = []
    touches: list[tuple[int, ...]] = []
    slots: list[tuple[int, ...]] = []
    edge = 2 * distance
    for x in range(0, edge + 1, 2):
        for y in range(0, edge + 1, 2):
            kind: Basis = "Z" if (x + y) % 4 == 0 else "X"
            on_side, on_end = x in (0, edge), y in (0, edge)
            if (on_side and on_end) or (on_side and kind == "X") or (on_end and kind == "Z"):
                continue
            gates = [
                (slot, index_of[x + dx, y + dy])
                for slot, (dx, dy) in enumerate(GATE_OFFSETS[kind])
                if (x + dx, y + dy) in index_of
            ]
            measure_at.append((x, y))
            checks.append(kind)
            slots.append(tuple(slot for slot, _ in gates))
            touches.append(tuple(qubit for _, qubit in gates))
    return Layout(
        family="rotated surface",
        distance=distance,
        data=tuple(f"D{index}" for index in range(len(spots))),
        measure=tuple(f"M{index}" for index in range(len(measure_at))),
        data_at=np.array(spots, dtype=float),
        measure_at=np.array(measure_at, dtype=float),
        checks=tuple(checks),
        touches=tuple(touches),
        slots=tuple(slots),
        logical={
            "Z": tuple(range(distance)),
            "X": tuple(row * distance for row in range(distance)),
        },
    )
