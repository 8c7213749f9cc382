"""The layout of a code: data qubits, checks, gate order and logical operators."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from leakpipe.errors import LayoutError, numbered

Basis = Literal["Z", "X"]


@dataclass(frozen=True)
class Layout:
    """One code instance, with names as they stand in the recordings.

    Attributes
    ----------
    family
        ``"rotated surface"``, ``"repetition"`` or ``"layout file"``.
    distance
        Code distance.
    data, measure
        Names of the data qubits (D) and measure qubits (M).
    data_at, measure_at
        Positions on the chip, (D, 2) and (M, 2), in units of half the data-qubit spacing.
    checks
        Type of each measure qubit's check, ``"Z"`` or ``"X"``, length M.
    touches
        Per measure qubit the indices of its data qubits, in gate order.
    slots
        Per measure qubit the time slot of each of those gates (same lengths as `touches`); two
        gates in one slot never share a qubit.
    logical
        Per basis the indices of the data qubits whose joint parity is the logical value.

    Raises
    ------
    LayoutError
        The parts contradict each other; every contradiction is listed.
    """

    family: str
    distance: int
    data: tuple[str, ...]
    measure: tuple[str, ...]
    data_at: NDArray[np.float64]
    measure_at: NDArray[np.float64]
    checks: tuple[Basis, ...]
    touches: tuple[tuple[int, ...], ...]
    slots: tuple[tuple[int, ...], ...]
    logical: dict[Basis, tuple[int, ...]]

    def __post_init__(self) -> None:
        problems = list(_contradictions(self))
        if problems:
            raise LayoutError(numbered(problems, "the layout cannot be used"))

    @cached_property
    def adjacency(self) -> NDArray[np.bool_]:
        """Which check touches which data qubit, (M, D)."""
        table = np.zeros((len(self.measure), len(self.data)), dtype=bool)
        for check, qubits in enumerate(self.touches):
            table[check, list(qubits)] = True
        return table

    @cached_property
    def weights(self) -> NDArray[np.int64]:
        """Number of data qubits of each check, (M,)."""
        return np.asarray(self.adjacency.sum(axis=1), dtype=np.int64)

    @cached_property
    def sharing_pairs(self) -> tuple[tuple[int, int], ...]:
        """Ordered pairs (early, late) of checks that share a data qubit, each check with itself."""
        shared = (self.adjacency.astype(int) @ self.adjacency.T.astype(int)) > 0
        early, late = np.nonzero(shared)
        return tuple(zip(early.tolist(), late.tolist(), strict=True))

    def of_basis(self, basis: Basis) -> NDArray[np.bool_]:
        """Which checks have a definite value when data qubits are prepared in `basis`, (M,)."""
        return np.array([check == basis for check in self.checks])

    def neighbours(self, qubit: str) -> tuple[str, ...]:
        """Return the names of the qubits that share a gate with `qubit`.

        Raises
        ------
        KeyError
            The layout has no qubit of that name.
        """
        if qubit in self.data:
            column = self.adjacency[:, self.data.index(qubit)]
            return tuple(np.array(self.measure)[column].tolist())
        if qubit in self.measure:
            return tuple(self.data[i] for i in self.touches[self.measure.index(qubit)])
        raise KeyError(qubit)


def _contradictions(layout: Layout) -> list[str]:
    problems = []
    names = [*layout.data, *layout.measure]
    for name in sorted({name for name in names if names.count(name) > 1}):
        problems.append(f"qubit name {name!r} stands more than once")
    if layout.data_at.shape != (len(layout.data), 2):
        problems.append(f"data positions have shape {layout.data_at.shape}, expected (data, 2)")
    if layout.measure_at.shape != (len(layout.measure), 2):
        problems.append(
            f"check positions have shape {layout.measure_at.shape}, expected (check, 2)"
        )
    busy: dict[tuple[str, int], str] = {}
    for name, qubits, slots in zip(layout.measure, layout.touches, layout.slots, strict=True):
        if len(set(qubits)) != len(qubits) or not qubits:
            problems.append(f"check {name} needs one or more different data qubits")
        if len(slots) != len(qubits):
            problems.append(f"check {name} has {len(qubits)} data qubits but {len(slots)} slots")
        for qubit, slot in zip(qubits, slots, strict=False):
            for user in (layout.data[qubit], name):
                if (user, slot) in busy:
                    both = f"{busy[user, slot]} and {name}"
                    problems.append(f"qubit {user} is in two gates of slot {slot}: {both}")
                busy[user, slot] = name
    problems += _anticommuting(layout)
    return problems


def _anticommuting(layout: Layout) -> list[str]:
    """Checks and logical operators of opposite type must overlap on an even number of qubits."""
    problems = []
    operators = [
        (name, check, set(qubits))
        for name, check, qubits in zip(layout.measure, layout.checks, layout.touches, strict=True)
    ]
    for position, (name, check, qubits) in enumerate(operators):
        for other, other_check, other_qubits in operators[position + 1 :]:
            if check != other_check and len(qubits & other_qubits) % 2:
                problems.append(f"checks {name} and {other} do not commute")
        for basis, support in layout.logical.items():
            if check != basis and len(qubits & set(support)) % 2:
                problems.append(f"check {name} does not commute with the logical {basis} operator")
    return problems
