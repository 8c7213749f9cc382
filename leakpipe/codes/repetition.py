"""The repetition code of any distance on a line."""

from __future__ import annotations

import numpy as np

from leakpipe.codes.layout import Basis, Layout
from leakpipe.errors import LayoutError


def repetition(distance: int, *, basis: Basis = "Z") -> Layout:
    """Return the distance-d repetition code: d data qubits on a line, d - 1 checks between them.

    Only the logical operator of `basis` is protected; it is the first data qubit's value.

    Raises
    ------
    LayoutError
        The distance is below 2.
    """
    if distance < 2:
        raise LayoutError(f"a repetition code needs a distance of 2 or more, got {distance}")
    data = tuple(f"D{index}" for index in range(distance))
    measure = tuple(f"M{index}" for index in range(distance - 1))
    return Layout(
        family="repetition",
        distance=distance,
        data=data,
        measure=measure,
        data_at=np.array([[2.0 * index, 0.0] for index in range(distance)]),
        measure_at=np.array([[2.0 * index + 1, 0.0] for index in range(distance - 1)]),
        checks=(basis,) * (distance - 1),
        touches=tuple((index, index + 1) for index in range(distance - 1)),
        slots=((0, 1),) * (distance - 1),
        logical={basis: (0,)},
    )
