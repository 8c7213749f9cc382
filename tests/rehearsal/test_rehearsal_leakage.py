"""Leakage of rehearsed memories: populations, returns, transport, what a leaked partner does."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.stats import norm

from leakpipe.codes.events import bits_of, detection_events
from leakpipe.codes.layout import Layout
from leakpipe.codes.repetition import repetition
from leakpipe.codes.rotated import rotated_surface
from leakpipe.errors import ConfigError
from leakpipe.rehearsal.memory import MemoryShots, simulate
from leakpipe.rehearsal.noise import Granularity, Injected, MemoryNoise, QubitOverrides
from leakpipe.rehearsal.populations import (
    LeakageRates,
    code_settling,
    expected_leaked,
    leakage_rates,
    settled_leaked,
    with_rates,
)

FALSE_ALARM = 1e-4
SURFACE = rotated_surface(3)
QUIET = MemoryNoise(single_qubit=0.0, two_qubit=0.0)
LEAKY = replace(QUIET, injection=4e-3, seepage=0.2)


def worst_z(seen: np.ndarray, expected: np.ndarray, shots: int) -> float:
    """Return the largest deviation in standard errors of a binomial fraction."""
    return float(np.abs((seen - expected) / np.sqrt(expected * (1 - expected) / shots)).max())


def limit(count: int) -> float:
    """Return the largest of `count` deviations that chance allows."""
    return float(norm.isf(FALSE_ALARM / 2 / count))


@pytest.mark.parametrize(
    "noise",
    [
        LEAKY,
        replace(LEAKY, initial=0.1, reset_removes=0.5),
        replace(LEAKY, injection=np.linspace(1e-3, 8e-3, 17), seepage=np.linspace(0.05, 0.9, 17)),
        replace(LEAKY, injection=0.0, injection_round=0.02),
        replace(LEAKY, two_qubit=0.05, single_qubit=0.01, depolarise=1.0),
    ],
)
@pytest.mark.parametrize("reset", [True, False])
def test_leaked_population_obeys_the_closed_form(noise: MemoryNoise, reset: bool) -> None:
    """The fraction of leaked shots follows the map of a round, qubit by qubit, round by round."""
    shots, rounds = 50_000, 12
    memory = simulate(SURFACE, "Z", rounds, shots, noise, np.random.default_rng(2), reset=reset)
    expected = expected_leaked(SURFACE, noise, rounds, reset=reset)
    assert worst_z(memory.leaked, expected, shots) < limit(expected.size)


@settings(deadline=None, max_examples=40)
@given(
    injection=st.floats(0, 0.05),
    once=st.floats(0, 0.05),
    seepage=st.floats(0, 1),
    initial=st.floats(0, 1),
    removes=st.floats(0, 1),
)
def test_closed_form_obeys_the_recurrence(
    injection: float, once: float, seepage: float, initial: float, removes: float
) -> None:
    """G and S reproduce every later round: p[r+1] = p[r] + G (1 - p[r]) - S p[r]."""
    noise = replace(
        QUIET,
        injection=injection,
        injection_round=once,
        seepage=seepage,
        initial=initial,
        reset_removes=removes,
    )
    rates = leakage_rates(SURFACE, noise)
    path = expected_leaked(SURFACE, noise, 6)
    before = np.vstack([noise.per_qubit("initial", SURFACE), path[:-1]])
    after = before + rates.injection * (1 - before) - rates.seepage * before
    np.testing.assert_allclose(path, after, atol=1e-14)


def test_accumulation_agrees_with_the_published_formula() -> None:
    """L1 = .001, L2 = .09 give the populations of Wood and Gambetta, PRA 97, 032306 (2018)."""
    noise = replace(QUIET, injection_round=1e-3, seepage=0.09)
    # Their L2 acts together with L1; here seepage comes first, so G = L1 and S = L2 (1 - L1).
    noise = replace(noise, seepage=0.09 / (1 - 1e-3))
    path = expected_leaked(SURFACE, noise, 50)[:, 0]
    published = {1: 0.00100000, 5: 0.00416911, 10: 0.00675651, 20: 0.00935883, 50: 0.01089587}
    for turn, value in published.items():
        assert path[turn - 1] == pytest.approx(value, abs=5e-9)  # eight printed decimals
    rates = leakage_rates(SURFACE, noise)
    assert rates.steady_leakage[0] == pytest.approx(0.0109890, abs=5e-8)
    assert rates.settling_rounds[0] == pytest.approx(-1 / np.log(0.909), rel=1e-12)


def test_states_and_counts_tell_the_same_story() -> None:
    """Leaked readings and the truth of leaked qubits agree exactly."""
    memory = simulate(SURFACE, "X", 5, 3000, LEAKY, np.random.default_rng(3))
    np.testing.assert_allclose((memory.states == 2).mean(axis=0), memory.leaked[:, 9:])
    np.testing.assert_allclose((memory.final_states == 2).mean(axis=0), memory.leaked[-1, :9])
    assert set(np.unique(memory.states)) == {0, 1, 2}


@pytest.mark.parametrize("shots", [1, 63, 64, 1023, 1024, 1025, 2500])
def test_any_number_of_shots(shots: int) -> None:
    """Blocks of 1024 shots never show: shapes and counts are right, and a run is a prefix."""
    short = simulate(SURFACE, "Z", 3, shots, LEAKY, np.random.default_rng(4))
    longer = simulate(SURFACE, "Z", 3, 3000, LEAKY, np.random.default_rng(4))
    assert short.states.shape == (shots, 3, 8)
    np.testing.assert_array_equal(short.states, longer.states[:shots])
    np.testing.assert_array_equal(short.final_states, longer.final_states[:shots])
    np.testing.assert_array_equal(short.prepared, longer.prepared[:shots])


def test_same_seed_same_shots() -> None:
    """A run is reproducible, and another seed gives another run."""
    runs = [simulate(SURFACE, "Z", 3, 2000, LEAKY, np.random.default_rng(s)) for s in (5, 5, 6)]
    np.testing.assert_array_equal(runs[0].states, runs[1].states)
    assert (runs[0].states != runs[2].states).any()


def test_granularity_keeps_the_rates() -> None:
    """Injecting once per round instead of per gate changes neither G nor S, there and back."""
    noise = replace(LEAKY, injection=np.linspace(1e-4, 9e-3, 17))
    per_gate = leakage_rates(SURFACE, noise)
    once = noise.at_granularity("once per round", SURFACE)
    again = once.at_granularity("per gate", SURFACE)
    for other in (once, again):
        rates = leakage_rates(SURFACE, other)
        np.testing.assert_allclose(rates.injection, per_gate.injection, rtol=1e-12)
        np.testing.assert_allclose(rates.seepage, per_gate.seepage, rtol=1e-12)
    np.testing.assert_allclose(again.injection, noise.injection, rtol=1e-9)


def detection(memory: MemoryShots, layout: Layout) -> np.ndarray:
    """Return detection events (shot, layer, check) as floats."""
    return detection_events(
        bits_of(memory.states),
        bits_of(memory.final_states),
        memory.prepared,
        layout,
        "Z",
        reset=True,
    ).astype(float)


@pytest.mark.parametrize("strength", [1.0, 0.5, 0.0])
@pytest.mark.parametrize("depolarise", [0.0, 1.0])
def test_leaked_data_qubit_flips_outcomes_with_half_the_strength(
    strength: float, depolarise: float
) -> None:
    """In a repetition code, checks of a leaked data qubit flip with probability strength / 2.

    The check misses the qubit, whose bit was random, so the first event is a fair coin; later
    events compare two outcomes that flipped independently. Both consequence models agree here: the
    phase part of a depolarised measure qubit harms no bit.
    """
    shots, rounds = 20_000, 4
    line = repetition(5)
    noise = replace(QUIET, strength=strength, depolarise=depolarise)
    memory = simulate(line, "Z", rounds, shots, noise, np.random.default_rng(8), Injected("D2", 2))
    inside = detection(memory, line)[:, 1:rounds].mean(axis=0)
    flip = strength / 2
    expected = np.array([0.5, 2 * flip * (1 - flip), 2 * flip * (1 - flip)])
    for check in (1, 2):
        sure = expected == 0
        np.testing.assert_array_equal(inside[sure, check], 0)
        assert worst_z(inside[~sure, check], expected[~sure], shots) < limit(3)
    assert not inside[:, [0, 3]].any()


@pytest.mark.parametrize("strength", [1.0, 0.0])
def test_leaked_data_qubit_randomises_surface_checks(strength: float) -> None:
    """In a surface code the checks of a leaked data qubit are fair coins even without any strike.

    Two checks of opposite type that lose the data qubit they share overlap on an odd number of
    qubits, so each of them randomises the other in every round.
    """
    shots, rounds = 20_000, 4
    noise = replace(QUIET, strength=strength)
    memory = simulate(
        SURFACE, "Z", rounds, shots, noise, np.random.default_rng(8), Injected("D4", 2)
    )
    inside = detection(memory, SURFACE)[:, 1:rounds].mean(axis=0)
    near = SURFACE.adjacency[:, 4]
    assert worst_z(inside[:, near], np.full((3, near.sum()), 0.5), shots) < limit(3 * near.sum())
    assert not inside[:, ~near].any()


def test_depolarised_partner_spreads_to_other_checks() -> None:
    """Full depolarisation of a measure qubit between its gates leaves hook errors on data qubits.

    A phase-type flip cannot: the flip of a measure qubit it causes does not pass to data qubits.
    """
    far = ~SURFACE.adjacency[:, 4]
    for depolarise, seen in ((0.0, False), (1.0, True)):
        noise = replace(QUIET, depolarise=depolarise)
        memory = simulate(SURFACE, "Z", 4, 5000, noise, np.random.default_rng(8), Injected("D4", 2))
        assert detection(memory, SURFACE)[:, 1:4][:, :, far].any() == seen


@pytest.mark.parametrize(("depolarise", "phase_kicks"), [(0.0, False), (1.0, True)])
def test_leaked_measure_qubit_strikes_its_data_qubits(depolarise: float, phase_kicks: bool) -> None:
    """The two consequence models differ in which errors a leaked Z-type measure qubit leaves.

    A phase-type flip of the data qubits of a Z check shows in X checks only; full depolarisation
    shows in Z checks as well.
    """
    shots = 20_000
    noise = replace(QUIET, depolarise=depolarise, seepage=1.0)
    leaky = next(
        m for m, kind in enumerate(SURFACE.checks) if kind == "Z" and SURFACE.weights[m] == 4
    )
    memory = simulate(
        SURFACE, "Z", 4, shots, noise, np.random.default_rng(9), Injected(SURFACE.measure[leaky], 2)
    )
    assert (memory.states[:, 1, leaky] == 2).all()
    assert not (memory.states[:, 2, leaky] == 2).any()
    events = detection(memory, SURFACE)[:, 1:3].any(axis=1)
    near = set(SURFACE.touches[leaky])
    for check, kind in enumerate(SURFACE.checks):
        if check == leaky or not near & set(SURFACE.touches[check]):
            continue
        rate = events[:, check].mean()
        if kind == "X":
            assert rate > 0.4
        else:
            assert (rate > 0.4) == phase_kicks
            assert phase_kicks or rate == 0.0


def test_transport_moves_leakage() -> None:
    """A leaked qubit hands its leakage on: the total stays, the mean-field closed form holds."""
    shots = 40_000
    line = repetition(5)
    noise = replace(QUIET, transport=0.1)
    memory = simulate(line, "Z", 6, shots, noise, np.random.default_rng(10), Injected("D2"))
    total = memory.leaked.sum(axis=1)
    np.testing.assert_allclose(total, 1.0, atol=1e-12)  # exactly one leaked qubit in every shot
    start = replace(noise, initial=np.eye(9)[2])
    # With a single leaked qubit there is nothing to correlate with except itself: exchange needs
    # the partner unleaked, which is certain, so the mean field overstates p (1 - p') by p p'.
    path = expected_leaked(line, start, 1)
    assert memory.leaked[0, 2] < 1
    assert abs(memory.leaked[0, 2] - 0.81) < 5 * np.sqrt(0.81 * 0.19 / shots)
    assert path[0, 2] == pytest.approx(0.81, abs=0.01)


def test_transport_off_keeps_leakage_in_place() -> None:
    """Without transport no neighbour of a leaked qubit ever leaks."""
    memory = simulate(SURFACE, "Z", 5, 2000, QUIET, np.random.default_rng(11), Injected("D4"))
    expected = np.zeros(17)
    expected[4] = 1
    np.testing.assert_array_equal(memory.leaked, np.tile(expected, (5, 1)))


def test_injected_leak_starts_where_it_should() -> None:
    """An injected leak of some probability appears in its round and seeps from the next."""
    shots = 40_000
    noise = replace(QUIET, seepage=0.25)
    memory = simulate(
        SURFACE, "Z", 5, shots, noise, np.random.default_rng(12), Injected("D0", 3, 0.8)
    )
    np.testing.assert_array_equal(memory.leaked[:2], 0)
    expected = 0.8 * 0.75 ** np.arange(3)
    assert worst_z(memory.leaked[2:, 0], expected, shots) < limit(3)


def test_returned_qubits_are_mixed() -> None:
    """A data qubit that comes back is random: closing parities of a quiet code are coins."""
    shots = 20_000
    noise = replace(QUIET, seepage=1.0, strength=0.0)
    memory = simulate(SURFACE, "Z", 2, shots, noise, np.random.default_rng(13), Injected("D8"))
    closing = detection(memory, SURFACE)[:, 1]
    for check, touches in enumerate(SURFACE.touches):
        if 8 in touches:
            assert abs(closing[:, check].mean() - 0.5) < 5 * 0.5 / np.sqrt(shots)
        else:
            assert not closing[:, check].any()


def test_heating_raises_ordinary_errors_only() -> None:
    """The error scale multiplies gate errors round by round and leaves leakage alone."""
    shots = 40_000
    noise = replace(LEAKY, two_qubit=5e-3)
    scale = np.array([1.0, 1.0, 4.0, 4.0, 1.0, 1.0])
    cold = simulate(SURFACE, "Z", 6, shots, noise, np.random.default_rng(14))
    hot = simulate(SURFACE, "Z", 6, shots, noise, np.random.default_rng(15), error_scale=scale)
    spread = np.sqrt(2 * cold.leaked * (1 - cold.leaked) / shots)
    assert np.abs((hot.leaked - cold.leaked) / spread).max() < limit(cold.leaked.size)
    rise = detection(hot, SURFACE).mean(axis=(0, 2)) / detection(cold, SURFACE).mean(axis=(0, 2))
    assert rise[3] > 1.3
    assert abs(rise[1] - 1) < 0.05


@pytest.mark.parametrize(
    ("change", "words"),
    [
        ({"two_qubit": 1.5}, "two_qubit must lie between 0 and 1"),
        ({"seepage": np.zeros(4)}, "seepage must be one number or 17"),
        ({"idle": -0.1, "reset": 2.0}, "2 problems"),
    ],
)
def test_impossible_noise_is_refused(change: dict[str, object], words: str) -> None:
    """Impossible noise ends in one message that lists every problem."""
    with pytest.raises(ConfigError, match=words):
        simulate(SURFACE, "Z", 2, 10, replace(QUIET, **change), np.random.default_rng(1))


@pytest.mark.parametrize("injected", [Injected("Q99"), Injected("D0", 3), Injected("D0", 1, 1.5)])
def test_impossible_injection_is_refused(injected: Injected) -> None:
    """An injected leak of an unknown qubit, round or probability is refused."""
    with pytest.raises(ConfigError, match="injected"):
        simulate(SURFACE, "Z", 2, 10, QUIET, np.random.default_rng(1), injected)


def test_overrides_name_their_qubits() -> None:
    """Overrides multiply the named qubits' rates and list what they do not know."""
    noise = QubitOverrides({"injection": {"D4": 4.0}}).apply(LEAKY, SURFACE)
    values = noise.per_qubit("injection", SURFACE)
    assert values[4] == pytest.approx(16e-3)
    assert np.delete(values, 4) == pytest.approx(4e-3)
    with pytest.raises(ConfigError, match="no qubit 'Q1'"):
        QubitOverrides({"injection": {"Q1": 2.0}}).apply(LEAKY, SURFACE)
    with pytest.raises(ConfigError, match="no field 'sepage'"):
        QubitOverrides({"sepage": {"D1": 2.0}}).apply(LEAKY, SURFACE)


@pytest.mark.parametrize("granularity", ["per gate", "once per round"])
def test_noise_from_rates_has_these_rates(granularity: Granularity) -> None:
    """Noise made for wanted rates per round has them, also where resets remove leakage."""
    base = replace(QUIET, reset_removes=0.3)
    data = np.arange(17) < 9
    wanted = LeakageRates(np.linspace(1e-4, 5e-3, 17), np.where(data, 0.1, 0.4))
    found = leakage_rates(SURFACE, with_rates(base, SURFACE, wanted, granularity))
    np.testing.assert_allclose(found.injection, wanted.injection, rtol=1e-10)
    np.testing.assert_allclose(found.seepage, wanted.seepage, rtol=1e-10)


def test_impossible_rates_are_refused() -> None:
    """A seepage below what the reset removes, or above 1, has no noise: every qubit is listed."""
    wanted = LeakageRates(np.full(17, 1e-3), np.full(17, 0.1))
    with pytest.raises(ConfigError, match="8 problems"):
        with_rates(replace(QUIET, reset_removes=0.3), SURFACE, wanted)


def test_code_settling_of_equal_qubits_is_their_settling_time() -> None:
    """With equal rates the time to cover 1 - 1/e is the qubits' settling time."""
    noise = with_rates(QUIET, SURFACE, LeakageRates(np.full(17, 2e-3), np.full(17, 0.18)))
    steady = settled_leaked(SURFACE, noise)
    np.testing.assert_allclose(steady, 2e-3 / 0.182, rtol=1e-9)
    path = expected_leaked(SURFACE, noise, 60)
    assert code_settling(path, steady) == pytest.approx(-1 / np.log(1 - 0.182), rel=1e-9)
    assert np.isnan(code_settling(path * 0, steady * 0))
    assert code_settling(path[:3], steady) == np.inf


def test_transport_spreads_the_steady_level() -> None:
    """With transport a leaky qubit's neighbours settle higher, as a long simulation shows."""
    shots = 40_000
    noise = replace(LEAKY, injection=np.where(np.arange(17) == 4, 5e-3, 1e-4), transport=0.05)
    steady = settled_leaked(SURFACE, noise)
    near = 9 + np.flatnonzero(SURFACE.adjacency[:, 4])
    alone = leakage_rates(SURFACE, noise).steady_leakage
    assert (steady[near] > 2 * alone[near]).all()
    seen = simulate(SURFACE, "Z", 40, shots, noise, np.random.default_rng(16)).leaked[-1]
    # The mean field neglects correlations: allow two percent of the value beside chance.
    limits = limit(17) * np.sqrt(steady / shots) + 0.02 * steady
    assert (np.abs(seen - steady) < limits).all()


def test_leakage_leaves_the_errors_alone() -> None:
    """Two runs of one seed make the same errors: shots without any leak are the same in both."""
    noise = replace(LEAKY, two_qubit=0.01, measurement=0.02, injection=1e-3)
    leaky, quiet = (
        simulate(SURFACE, "Z", 6, 4000, one, np.random.default_rng(17))
        for one in (noise, noise.without_injection())
    )
    np.testing.assert_array_equal(leaky.prepared, quiet.prepared)
    same = (leaky.states == quiet.states).all(axis=(1, 2))
    same &= (leaky.final_states == quiet.final_states).all(axis=1)
    seen = (leaky.states == 2).any(axis=(1, 2)) | (leaky.final_states == 2).any(axis=1)
    assert not same[seen].any()
    # No leak in any of 6 rounds and 17 qubits: at least the probability that none was injected.
    gates = 48 * 6
    assert same.mean() > (1 - 1e-3) ** gates - 5 * 0.5 / np.sqrt(4000)
