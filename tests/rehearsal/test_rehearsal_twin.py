"""The compiled memory against its plain numpy twin, with everything switched on."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from rehearsal_twin import twin_memory
from scipy.stats import norm

from leakpipe.codes.events import bits_of, detection_events
from leakpipe.codes.layout import Basis, Layout
from leakpipe.codes.repetition import repetition
from leakpipe.codes.rotated import rotated_surface
from leakpipe.rehearsal.kernel import _next
from leakpipe.rehearsal.memory import MemoryShots, hazard, simulate
from leakpipe.rehearsal.noise import MemoryNoise

FALSE_ALARM = 1e-4

EVERYTHING = MemoryNoise(
    single_qubit=5e-3,
    two_qubit=1e-2,
    idle=1e-2,
    reset=5e-3,
    measurement=1e-2,
    injection=1e-2,
    injection_round=2e-2,
    seepage=0.3,
    reset_removes=0.2,
    transport=0.1,
    initial=0.05,
    strength=0.7,
    depolarise=0.4,
)


def features(memory: MemoryShots, layout: Layout, basis: Basis, reset: bool) -> np.ndarray:
    """Return events and leaked readings of each shot as one row of zeros and ones."""
    events = detection_events(
        bits_of(memory.states),
        bits_of(memory.final_states),
        memory.prepared,
        layout,
        basis,
        reset=reset,
    )
    parts = [events, memory.states == 2, memory.final_states == 2]
    return np.concatenate([p.reshape(memory.shots, -1) for p in parts], axis=1).astype(np.float32)


@pytest.mark.parametrize("change", [{}, {"depolarise": 0.0, "strength": 1.0}, {"depolarise": 1.0}])
@pytest.mark.parametrize(
    ("layout", "basis", "reset"),
    [
        (rotated_surface(3), "Z", True),
        (rotated_surface(3), "X", False),
        (repetition(4), "Z", True),
        (repetition(4, basis="X"), "X", False),
    ],
)
def test_compiled_memory_equals_its_twin(
    layout: Layout, basis: Basis, reset: bool, change: dict[str, float]
) -> None:
    """Every event, leaked reading and pair of them is as frequent in both simulators."""
    shots, rounds = 40_000, 3
    noise = replace(EVERYTHING, **change)
    ours = simulate(layout, basis, rounds, shots, noise, np.random.default_rng(1), reset=reset)
    twin = twin_memory(layout, basis, rounds, shots, noise, np.random.default_rng(2), reset=reset)
    first, second = (features(one, layout, basis, reset) for one in (ours, twin))
    pairs = [(one.T @ one).astype(float) / shots for one in (first, second)]
    pooled = (pairs[0] + pairs[1]) / 2
    seen = np.triu(pooled * shots > 20)
    z = (pairs[0] - pairs[1])[seen] / np.sqrt(2 * (pooled * (1 - pooled))[seen] / shots)
    assert np.abs(z).max() < norm.isf(FALSE_ALARM / 2 / seen.sum())
    # Many small differences of one sign would pass the largest one: look at the mean square too.
    # Entries are correlated; a factor of two over independence is far beyond what seeds do.
    assert (z**2).mean() < 2


def test_twin_comparison_has_teeth() -> None:
    """A tenth more injection in one of the two is noticed by the same statistic."""
    layout = rotated_surface(3)
    shots = 40_000
    more = replace(EVERYTHING, injection=1.1e-2)
    ours = simulate(layout, "Z", 3, shots, more, np.random.default_rng(1))
    twin = twin_memory(layout, "Z", 3, shots, EVERYTHING, np.random.default_rng(2))
    first, second = (features(one, layout, "Z", True).mean(axis=0) for one in (ours, twin))
    pooled = (first + second) / 2
    seen = pooled * shots > 20
    z = (first - second)[seen] / np.sqrt(2 * (pooled * (1 - pooled))[seen] / shots)
    assert (z**2).mean() > 2


def test_random_words_are_the_published_generator() -> None:
    """Seeded with 1, 2, 3, 4 the generator gives the first words of xoshiro256++.

    The first word is computed by hand from the published recipe (rotl(s0 + s3, 23) + s0); the
    others follow its state update (values recalled from memory, they agree).
    """
    state = np.array([1, 2, 3, 4], dtype=np.uint64)
    words = [int(_next.py_func(state)) for _ in range(4)]
    assert words[0] == (5 << 23) + 1
    assert words == [41943041, 58720359, 3588806011781223, 3591011842654386]


def test_certain_and_impossible_events() -> None:
    """Probabilities 0 and 1 are exact, also in the skipping of rare events."""
    layout = repetition(3)
    shots = 5000
    always = MemoryNoise(0.0, 0.0, measurement=1.0)
    memory = simulate(layout, "Z", 2, shots, always, np.random.default_rng(3))
    expected = memory.prepared[:, :-1] ^ memory.prepared[:, 1:] ^ 1
    np.testing.assert_array_equal(memory.states[:, 0], expected)
    np.testing.assert_array_equal(memory.final_states, memory.prepared ^ 1)
    leaked = MemoryNoise(0.0, 0.0, injection_round=1.0)
    assert (simulate(layout, "Z", 1, shots, leaked, np.random.default_rng(4)).states == 2).all()
    assert hazard(np.array(0.0)) == 0


@pytest.mark.parametrize("probability", [1e-4, 0.01, 0.3, 0.97])
def test_skipping_is_independent_from_shot_to_shot(probability: float) -> None:
    """Flips drawn by the clock have the right rate and no correlation between shots or qubits."""
    layout = repetition(9)
    shots = 400_000
    noise = MemoryNoise(0.0, 0.0, measurement=probability)
    memory = simulate(layout, "Z", 1, shots, noise, np.random.default_rng(5))
    flips = (memory.final_states ^ memory.prepared).astype(float)
    spread = np.sqrt(probability * (1 - probability))
    limit = norm.isf(FALSE_ALARM / 2 / 9)
    assert np.abs(flips.mean(axis=0) - probability).max() < limit * spread / np.sqrt(shots)
    scaled = (flips - probability) / spread
    for lag in (1, 2, 64, 1024):
        # The mean product of independent standardised numbers has error 1 / sqrt(count).
        count = (shots - lag) * 9
        assert abs((scaled[lag:] * scaled[:-lag]).mean()) < 5 / np.sqrt(count)
    assert abs((scaled[:, 1:] * scaled[:, :-1]).mean()) < 5 / np.sqrt(shots * 8)
