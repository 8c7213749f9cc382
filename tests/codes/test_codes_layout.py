"""Layouts of the built-in codes: counts, weights, commuting, neighbours, gates."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from leakpipe.codes.layout import Layout
from leakpipe.codes.repetition import repetition
from leakpipe.codes.rotated import GATE_OFFSETS, rotated_surface
from leakpipe.errors import LayoutError

DISTANCES = range(2, 8)


def supports(layout: Layout, basis: str) -> np.ndarray:
    return layout.adjacency[[check == basis for check in layout.checks]].astype(int)


def rank_mod_2(rows: np.ndarray) -> int:
    """Rank over the field of two elements by elimination."""
    rows, rank = rows.copy() % 2, 0
    for column in range(rows.shape[1]):
        hits = np.nonzero(rows[rank:, column])[0]
        if hits.size == 0:
            continue
        rows[[rank, rank + hits[0]]] = rows[[rank + hits[0], rank]]
        others = np.nonzero(rows[:, column])[0]
        rows[others[others != rank]] ^= rows[rank]
        rank += 1
        if rank == len(rows):
            break
    return rank


@pytest.mark.parametrize("d", DISTANCES)
def test_counts_of_the_rotated_surface_code(d: int) -> None:
    """d^2 data qubits, d^2 - 1 checks, 2 (d - 1) of weight 2 and the rest of weight 4."""
    layout = rotated_surface(d)
    assert (len(layout.data), len(layout.measure)) == (d * d, d * d - 1)
    weights, counts = np.unique(layout.weights, return_counts=True)
    expected = {2: 2 * (d - 1), 4: (d - 1) ** 2}
    assert dict(zip(weights.tolist(), counts.tolist(), strict=True)) == expected
    kinds = [layout.checks.count("Z"), layout.checks.count("X")]
    assert abs(kinds[0] - kinds[1]) == (0 if d % 2 else 1)


@pytest.mark.parametrize("d", DISTANCES)
def test_counts_of_the_repetition_code(d: int) -> None:
    """D data qubits on a line and d - 1 checks of weight 2 between them."""
    layout = repetition(d)
    assert (len(layout.data), len(layout.measure)) == (d, d - 1)
    assert layout.weights.tolist() == [2] * (d - 1)


@pytest.mark.parametrize("d", DISTANCES)
def test_checks_and_logical_operators_commute(d: int) -> None:
    """Operators of opposite type overlap evenly; the two logical operators anticommute."""
    layout = rotated_surface(d)
    z, x = supports(layout, "Z"), supports(layout, "X")
    assert not ((z @ x.T) % 2).any()
    logical = np.zeros((2, d * d), int)
    logical[0, list(layout.logical["Z"])] = 1
    logical[1, list(layout.logical["X"])] = 1
    assert not ((z @ logical[1]) % 2).any()
    assert not ((x @ logical[0]) % 2).any()
    assert logical[0] @ logical[1] % 2 == 1
    assert logical.sum(axis=1).tolist() == [d, d]


@pytest.mark.parametrize("d", DISTANCES)
def test_one_logical_qubit(d: int) -> None:
    """The checks are independent, so n - (n - 1) = 1 logical qubit is left, and it is no check."""
    layout = rotated_surface(d)
    z, x = supports(layout, "Z"), supports(layout, "X")
    assert rank_mod_2(z) + rank_mod_2(x) == d * d - 1
    for rows, basis in ((z, "Z"), (x, "X")):
        operator = np.zeros((1, d * d), int)
        operator[0, list(layout.logical[basis])] = 1
        assert rank_mod_2(np.vstack([rows, operator])) == len(rows) + 1


@pytest.mark.parametrize("d", [2, 3])
def test_distance_by_trying_every_operator(d: int) -> None:
    """No operator of fewer than d data qubits commutes with the checks and flips the logical."""
    layout = rotated_surface(d)
    errors = np.array([[n >> i & 1 for i in range(d * d)] for n in range(2 ** (d * d))])
    for checks, basis in (("Z", "Z"), ("X", "X")):
        silent = ~((errors @ supports(layout, checks).T) % 2).any(axis=1)
        flips = errors[:, list(layout.logical[basis])].sum(axis=1) % 2 == 1
        assert errors[silent & flips].sum(axis=1).min() == d


@pytest.mark.parametrize("d", DISTANCES)
def test_gates_of_a_slot_share_no_qubit(d: int) -> None:
    """In each of the four slots every qubit does one gate at most, at its check's offset."""
    layout = rotated_surface(d)
    for slot in range(4):
        busy = [
            name
            for check, (qubits, slots) in enumerate(zip(layout.touches, layout.slots, strict=True))
            for qubit, when in zip(qubits, slots, strict=True)
            if when == slot
            for name in (layout.measure[check], layout.data[qubit])
        ]
        assert len(busy) == len(set(busy))
    for check, (qubits, slots) in enumerate(zip(layout.touches, layout.slots, strict=True)):
        for qubit, slot in zip(qubits, slots, strict=True):
            offset = layout.data_at[qubit] - layout.measure_at[check]
            assert tuple(offset) == GATE_OFFSETS[layout.checks[check]][slot]


@pytest.mark.parametrize("d", DISTANCES)
def test_neighbouring_checks_of_other_type_interleave_rightly(d: int) -> None:
    """Two checks of opposite type that share two qubits do both gates in the same order.

    Otherwise their circuits do not measure commuting operators.
    """
    layout = rotated_surface(d)
    when = [
        dict(zip(qubits, slots, strict=True))
        for qubits, slots in zip(layout.touches, layout.slots, strict=True)
    ]
    for a, first in enumerate(when):
        for b, second in enumerate(when):
            shared = first.keys() & second.keys()
            if layout.checks[a] != layout.checks[b] and shared:
                assert len({first[q] < second[q] for q in shared}) == 1


@pytest.mark.parametrize("d", DISTANCES)
def test_hook_errors_lie_across_their_logical_operator(d: int) -> None:
    """The last two gates of a Z check stand in a column, those of an X check in a row.

    A fault of the measure qubit half-way spreads its check's own type onto them; logical Z is a
    row and logical X a column here, so the pair advances by one step only.
    """
    layout = rotated_surface(d)
    for check, (qubits, kind) in enumerate(zip(layout.touches, layout.checks, strict=True)):
        if layout.weights[check] == 4:
            step = layout.data_at[qubits[3]] - layout.data_at[qubits[2]]
            across = 0 if kind == "Z" else 1
            assert step[across] == 0


@pytest.mark.parametrize("layout", [rotated_surface(3), rotated_surface(4), repetition(5)])
def test_sharing_pairs_against_sets(layout: Layout) -> None:
    """The pairs are all ordered pairs of checks with a common data qubit, each with itself."""
    sets = [set(qubits) for qubits in layout.touches]
    expected = {(a, b) for a, s in enumerate(sets) for b, t in enumerate(sets) if s & t}
    assert len(layout.sharing_pairs) == len(expected)
    assert set(layout.sharing_pairs) == expected
    assert all((check, check) in expected for check in range(len(sets)))


def test_neighbours_go_both_ways() -> None:
    """A check's neighbours are its data qubits, and each of those has the check as neighbour."""
    layout = rotated_surface(3)
    for name in layout.measure:
        for other in layout.neighbours(name):
            assert name in layout.neighbours(other)
    degrees = [len(layout.neighbours(name)) for name in layout.data]
    assert sum(degrees) == layout.weights.sum()
    with pytest.raises(KeyError):
        layout.neighbours("Q9")


@pytest.mark.parametrize("make", [rotated_surface, repetition])
@pytest.mark.parametrize("d", [1, 0, -3])
def test_too_small_distances(make: object, d: int) -> None:
    """A distance below 2 is refused."""
    with pytest.raises(LayoutError, match=f"needs a distance of 2 or more, got {d}"):
        make(d)  # type: ignore[operator]


def test_every_contradiction_is_listed() -> None:
    """A layout with four mistakes says four sentences."""
    good = rotated_surface(2)
    with pytest.raises(LayoutError) as caught:
        replace(
            good,
            data=("D0", "D0", "D2", "D3"),
            data_at=good.data_at[:3],
            slots=(good.slots[0], good.slots[1], (0,)),
        )
    lines = str(caught.value).splitlines()
    assert "qubit name 'D0' stands more than once" in lines
    assert "data positions have shape (3, 2), expected (data, 2)" in lines
    assert "check M2 has 2 data qubits but 1 slots" in lines
    assert lines[-1].endswith("the layout cannot be used.")


def test_checks_that_do_not_commute_are_refused() -> None:
    """A check moved by one data qubit no longer commutes, and the sentence names both."""
    with pytest.raises(LayoutError, match="do not commute"):
        replace(
            rotated_surface(2),
            checks=("Z", "X", "Z"),
            touches=((0, 1), (1, 2), (2, 3)),
            slots=((0, 1), (2, 3), (0, 1)),
        )
