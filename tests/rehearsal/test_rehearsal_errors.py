"""Error-only memories against a general stabilizer simulator that nobody here wrote."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pymatching
import pytest
from rehearsal_stim import circuit_of, detector_places
from scipy.stats import chi2, norm

from leakpipe.codes.events import (
    bits_of,
    defined_layers,
    detection_events,
    logical_parity,
)
from leakpipe.codes.layout import Basis, Layout
from leakpipe.codes.repetition import repetition
from leakpipe.codes.rotated import rotated_surface
from leakpipe.rehearsal.memory import simulate
from leakpipe.rehearsal.noise import MemoryNoise

FALSE_ALARM = 1e-4
"""Chance that a correct simulator fails one of these tests; the seeds are fixed besides."""

ORDINARY = MemoryNoise(single_qubit=2e-3, two_qubit=6e-3, idle=4e-3, reset=2e-3, measurement=1e-2)


def uneven(layout: Layout) -> MemoryNoise:
    """Return noise that differs from qubit to qubit, to catch swapped indices."""
    qubits = len(layout.data) + len(layout.measure)
    spread = np.linspace(0.3, 1.7, qubits)
    return MemoryNoise(
        single_qubit=3e-3 * spread,
        two_qubit=8e-3 * spread[::-1],
        idle=6e-3 * spread**2,
        reset=4e-3 * spread[::-1] ** 2,
        measurement=2e-2 * spread,
    )


CASES = [
    pytest.param(rotated_surface(3), "Z", True, id="surface 3 Z"),
    pytest.param(rotated_surface(3), "X", True, id="surface 3 X"),
    pytest.param(rotated_surface(3), "Z", False, id="surface 3 Z, no reset"),
    pytest.param(rotated_surface(5), "Z", True, id="surface 5 Z"),
    pytest.param(rotated_surface(5), "X", True, id="surface 5 X"),
    pytest.param(repetition(5), "Z", True, id="repetition 5 Z"),
    pytest.param(repetition(5, basis="X"), "X", True, id="repetition 5 X"),
]


def both(
    layout: Layout, basis: Basis, reset: bool, noise: MemoryNoise, rounds: int, shots: int
) -> tuple:
    """Return circuit, our detectors and logical flips, the simulator's detectors and flips."""
    circuit = circuit_of(layout, basis, rounds, noise, reset=reset)
    memory = simulate(layout, basis, rounds, shots, noise, np.random.default_rng(7), reset=reset)
    closing = bits_of(memory.final_states)
    events = detection_events(
        bits_of(memory.states), closing, memory.prepared, layout, basis, reset=reset
    )
    layers, checks = detector_places(circuit).T
    flips = logical_parity(closing ^ memory.prepared, layout, basis)
    theirs, their_flips = circuit.compile_detector_sampler(seed=11).sample(
        shots, separate_observables=True
    )
    return circuit, events[:, layers, checks], flips, theirs, their_flips[:, 0]


@pytest.mark.parametrize("noise", [pytest.param(None, id="uneven"), pytest.param(ORDINARY)])
@pytest.mark.parametrize(("layout", "basis", "reset"), CASES)
def test_detection_probability_agrees_detector_by_detector(
    layout: Layout, basis: Basis, reset: bool, noise: MemoryNoise | None
) -> None:
    """Every detector fires as often as in the outside simulator, and so does every pair."""
    shots = 100_000
    rounds = 4
    _, ours, _, theirs, _ = both(layout, basis, reset, noise or uneven(layout), rounds, shots)

    def agree(first: np.ndarray, second: np.ndarray) -> None:
        pooled = (first + second) / 2
        seen = pooled * shots > 20  # the normal approximation of a count needs some events
        z = (first - second)[seen] / np.sqrt(2 * (pooled * (1 - pooled))[seen] / shots)
        assert seen.any()
        assert np.abs(z).max() < norm.isf(FALSE_ALARM / 2 / seen.sum())

    ours, theirs = ours.astype(np.float32), theirs.astype(np.float32)
    d_ours, d_theirs = ours.mean(0), theirs.mean(0)
    z = (d_ours - d_theirs) / np.sqrt((d_ours * (1 - d_ours) + d_theirs * (1 - d_theirs)) / shots)
    # The detectors are correlated, which widens the chi-square: its variance is 2 sum of squared
    # correlations instead of 2 per detector.
    squared = (np.corrcoef(theirs.T) ** 2).sum()
    freedom = len(z) ** 2 / squared
    statistic = (z**2).sum() * freedom / len(z)
    assert statistic < chi2.isf(FALSE_ALARM, freedom)
    agree(d_ours, d_theirs)
    agree(ours.T @ ours / shots, theirs.T @ theirs / shots)


@pytest.mark.parametrize(("layout", "basis", "reset"), CASES)
def test_logical_error_agrees_with_the_same_decoder(
    layout: Layout, basis: Basis, reset: bool
) -> None:
    """One matching, made from the outside simulator's error model, fails as often on both."""
    shots = 40_000
    # A repetition code hardly fails at ordinary error rates: it gets more of them.
    noise = replace(ORDINARY, two_qubit=5e-2) if layout.family == "repetition" else ORDINARY
    circuit, ours, flips, theirs, their_flips = both(layout, basis, reset, noise, 6, shots)
    matching = pymatching.Matching.from_detector_error_model(
        circuit.detector_error_model(decompose_errors=True)
    )
    failed = (matching.decode_batch(ours.astype(np.uint8))[:, 0] != flips).mean()
    their_failed = (matching.decode_batch(theirs)[:, 0] != their_flips).mean()
    assert their_failed * shots > 20
    spread = np.sqrt((failed * (1 - failed) + their_failed * (1 - their_failed)) / shots)
    assert abs(failed - their_failed) < norm.isf(FALSE_ALARM / 2) * spread


def test_a_broken_rate_is_noticed() -> None:
    """The comparison has teeth: ten percent more two-qubit error in one of the two shows."""
    shots = 100_000
    layout = rotated_surface(3)
    _, ours, _, _, _ = both(layout, "Z", True, replace(ORDINARY, two_qubit=6.6e-3), 4, shots)
    _, _, _, theirs, _ = both(layout, "Z", True, ORDINARY, 4, shots)
    first, second = ours.sum(axis=1), theirs.sum(axis=1)
    spread = np.hypot(first.std(), second.std()) / np.sqrt(shots)
    assert first.mean() - second.mean() > norm.isf(FALSE_ALARM) * spread


def test_undefined_layers_are_random() -> None:
    """Checks of the other basis start from random values, as on hardware."""
    layout = rotated_surface(3)
    shots = 20_000
    memory = simulate(layout, "Z", 2, shots, ORDINARY, np.random.default_rng(5))
    other = ~layout.of_basis("Z")
    assert not defined_layers(layout, "Z", 2)[0, other].any()
    ones = memory.states[:, 0, other].mean(axis=0)
    # 6 standard errors of a fair coin
    assert np.abs(ones - 0.5).max() < 6 * 0.5 / np.sqrt(shots)
    together = np.corrcoef(memory.states[:, 0, other].T)
    assert np.abs(together - np.eye(other.sum())).max() < 6 / np.sqrt(shots)
