"""Detection events against a loop that follows the definition word by word."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from leakpipe.codes.events import (
    MISSING,
    bits_of,
    defined_layers,
    detection_events,
    logical_parity,
    parities,
)
from leakpipe.codes.layout import Layout
from leakpipe.codes.repetition import repetition
from leakpipe.codes.rotated import rotated_surface

LAYOUTS = [rotated_surface(2), rotated_surface(3), repetition(4)]


def slow_events(
    bits: np.ndarray,
    closing: np.ndarray,
    prepared: np.ndarray,
    layout: Layout,
    basis: str,
    reset: bool,
) -> np.ndarray:
    """Count events shot by shot from the definition in docs/conventions.md."""
    shots, rounds, checks = bits.shape
    events = np.zeros((shots, rounds + 1, checks), int)
    for shot in range(shots):
        for check in range(checks):
            qubits = layout.touches[check]
            measured = [int(bit) for bit in bits[shot, :, check]]
            value = [
                measured[r] if reset or r == 0 else (measured[r] + measured[r - 1]) % 2
                for r in range(rounds)
            ]
            own = layout.checks[check] == basis
            start = sum(int(prepared[shot, q]) for q in qubits) % 2
            end = sum(int(closing[shot, q]) for q in qubits) % 2
            if own:
                events[shot, 0, check] = value[0] != start
                events[shot, rounds, check] = value[-1] != end
            for r in range(1, rounds):
                events[shot, r, check] = value[r] != value[r - 1]
    return events


@settings(deadline=None, max_examples=40)
@given(
    st.sampled_from(LAYOUTS),
    st.integers(1, 5),
    st.booleans(),
    st.sampled_from(["Z", "X"]),
    st.integers(0, 2**32),
)
def test_events_against_a_slow_loop(
    layout: Layout, rounds: int, reset: bool, basis: str, seed: int
) -> None:
    """With and without reset, for one round and more, every event is the definition's."""
    rng = np.random.default_rng(seed)
    bits = rng.integers(0, 2, (7, rounds, len(layout.measure)), np.uint8)
    closing, prepared = rng.integers(0, 2, (2, 7, len(layout.data)), np.uint8)
    before = bits.copy()
    events = detection_events(bits, closing, prepared, layout, basis, reset=reset)  # type: ignore[arg-type]
    np.testing.assert_array_equal(
        events, slow_events(bits, closing, prepared, layout, basis, reset)
    )
    np.testing.assert_array_equal(bits, before)
    undefined = ~defined_layers(layout, basis, rounds)  # type: ignore[arg-type]
    assert not events[:, undefined].any()


@pytest.mark.parametrize("reset", [True, False])
@pytest.mark.parametrize("layout", LAYOUTS)
def test_a_quiet_device_has_no_events(layout: Layout, reset: bool) -> None:
    """Without errors nothing is detected, whatever state the data qubits were prepared in."""
    rng = np.random.default_rng(7)
    prepared = rng.integers(0, 2, (50, len(layout.data)), np.uint8)
    value = parities(prepared, layout)
    value[:, ~layout.of_basis("Z")] = rng.integers(0, 2, (50, int((~layout.of_basis("Z")).sum())))
    values = np.repeat(value[:, None], 6, axis=1)
    bits = values if reset else np.bitwise_xor.accumulate(values, axis=1)
    assert not detection_events(bits, prepared, prepared, layout, "Z", reset=reset).any()


def test_one_data_error_makes_one_event_per_check() -> None:
    """A bit flip before round 3 lights its Z checks once, at layer 3, and turns the logical."""
    layout, error = rotated_surface(3), 4
    prepared = np.zeros((1, 9), np.uint8)
    closing = prepared.copy()
    closing[0, error] = 1
    touched = layout.adjacency[:, error] & layout.of_basis("Z")
    bits = np.zeros((1, 5, 8), np.uint8)
    bits[0, 2:, touched] = 1
    events = detection_events(bits, closing, prepared, layout, "Z", reset=True)
    assert events.sum() == touched.sum()
    assert (events[0, 2] == touched).all()


def test_one_wrong_reading_makes_a_pair_of_events() -> None:
    """A reading error is two events one layer apart with reset, two events two apart without."""
    layout = repetition(3)
    zeros = np.zeros((1, 3), np.uint8)
    bits = np.zeros((1, 6, 2), np.uint8)
    bits[0, 2, 0] = 1
    with_reset = detection_events(bits, zeros, zeros, layout, "Z", reset=True)
    without = detection_events(bits, zeros, zeros, layout, "Z", reset=False)
    assert np.argwhere(with_reset[0]).tolist() == [[2, 0], [3, 0]]
    assert np.argwhere(without[0]).tolist() == [[2, 0], [4, 0]]


@pytest.mark.parametrize("leaked_reads", [0, 1])
def test_bits_of_states(leaked_reads: int) -> None:
    """0 and 1 are themselves, leaked is what the config says, missing counts as 0."""
    states = np.array([[0, 1], [2, MISSING]], np.uint8)
    assert bits_of(states, leaked_reads).tolist() == [[0, 1], [leaked_reads, 0]]


def test_logical_parity_is_the_sum_of_the_support() -> None:
    """The logical value is the joint parity of the operator's data qubits."""
    layout = rotated_surface(3)
    bits = np.random.default_rng(8).integers(0, 2, (40, 9), np.uint8)
    for basis in ("Z", "X"):
        expected = bits[:, list(layout.logical[basis])].sum(axis=1) % 2  # type: ignore[index]
        np.testing.assert_array_equal(logical_parity(bits, layout, basis), expected)  # type: ignore[arg-type]


@pytest.mark.parametrize("layout", LAYOUTS)
def test_a_check_error_never_changes_the_logical_parity(layout: Layout) -> None:
    """Flipping the data qubits of a check of the other type is no logical error."""
    for check, qubits in enumerate(layout.touches):
        flip = np.zeros((1, len(layout.data)), np.uint8)
        flip[0, list(qubits)] = 1
        for basis in layout.logical:
            if basis != layout.checks[check]:
                assert logical_parity(flip, layout, basis).tolist() == [0]
