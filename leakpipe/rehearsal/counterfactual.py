"""Truth that only a simulation with many shots can tell: logical error and leakage's share.

The share is (eps with - eps without) / eps with, where "without" is the same device, read and
decoded alike, that has no way to leak.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from leakpipe.codes.events import bits_of, detection_events, logical_parity
from leakpipe.codes.layout import Basis, Layout
from leakpipe.rehearsal.labels import misread
from leakpipe.rehearsal.memory import MemoryShots, simulate
from leakpipe.rehearsal.noise import MemoryNoise

CHUNK = 1 << 14
"""Shots simulated and decoded at a time, to bound memory."""

SCORING_STEPS = 12
"""Fisher scoring converges quadratically; four steps reach double precision from a log fit."""

LEAST_FIDELITY = 0.02
"""Smallest 1 - 2 P of the starting fit, where noise can make it negative."""

Decode = Callable[[NDArray[np.uint8]], NDArray[np.uint8]]
"""Events (shot, layer, check) to the predicted flip of the logical value, (shot,)."""

DecoderFor = Callable[[int], Decode]
"""Number of rounds to the decoder of its recordings."""


@dataclass(frozen=True)
class Setting:
    """A memory as it is run and read.

    Attributes
    ----------
    layout, basis, reset
        Code, basis, and whether measure qubits are reset before every round.
    noise
        Errors and leakage.
    table
        (D + M, 3, 3) label given true state, or None for perfect readout.
    """

    layout: Layout
    basis: Basis
    noise: MemoryNoise
    table: NDArray[np.float64] | None = None
    reset: bool = True


@dataclass(frozen=True)
class Outcome:
    """What happened in many shots of one number of rounds.

    Attributes
    ----------
    rounds, shots, failures
        R, shots, and shots in which the decoder ended on the wrong logical value.
    detection
        (layer, check) detection probability.
    leaked
        (round, D + M) leaked population.
    """

    rounds: int
    shots: int
    failures: int
    detection: NDArray[np.float64]
    leaked: NDArray[np.float64]


@dataclass(frozen=True)
class PerRound:
    """Fit of 1 - 2 P(R) = A (1 - 2 eps)^R.

    Attributes
    ----------
    value, error
        Logical error per round and its standard error.
    amplitude
        A.
    chi_square, freedom
        Of the fit. Under leakage the curve is not exactly exponential.
    influence
        Per number of rounds the slope of `value` with P(R).
    """

    value: float
    error: float
    amplitude: float
    chi_square: float
    freedom: int
    influence: Mapping[int, float]


def labelled(
    setting: Setting, memory: MemoryShots, rng: np.random.Generator
) -> tuple[NDArray[np.uint8], NDArray[np.uint8]]:
    """Return the states and closing states as they are read."""
    if setting.table is None:
        return memory.states, memory.final_states
    data = len(setting.layout.data)
    return (
        misread(memory.states, setting.table[data:], rng),
        misread(memory.final_states, setting.table[:data], rng),
    )


def failed(
    setting: Setting,
    states: NDArray[np.uint8],
    final_states: NDArray[np.uint8],
    prepared: NDArray[np.uint8],
    decode: Decode,
) -> tuple[NDArray[np.uint8], NDArray[np.uint8]]:
    """Return which shots end on the wrong logical value, (shot,), and their detection events."""
    closing = bits_of(final_states)
    events = detection_events(
        bits_of(states), closing, prepared, setting.layout, setting.basis, reset=setting.reset
    )
    flips = logical_parity(closing ^ prepared, setting.layout, setting.basis)
    return flips ^ decode(events), events


def run_many(
    setting: Setting, rounds: int, shots: int, decode: Decode, rng: np.random.Generator
) -> Outcome:
    """Simulate, read and decode many shots of one number of rounds."""
    return run_together([setting], rounds, shots, decode, rng)[0][0]


def run_together(
    settings: Sequence[Setting],
    rounds: int,
    shots: int,
    decode: Decode,
    rng: np.random.Generator,
) -> tuple[list[Outcome], int]:
    """Simulate several settings with the same random numbers, read and decode them.

    Settings that differ in their leakage only make the same errors and misreadings, so a difference
    between them is known better than each of them (common random numbers; Law and Kelton,
    Simulation Modeling and Analysis, chapter on variance reduction, recalled from memory).

    Returns
    -------
    outcomes
        One per setting.
    all_failed
        Number of shots in which every setting ended on the wrong logical value.
    """
    layout = settings[0].layout
    wrong = np.zeros(len(settings), dtype=int)
    together = 0
    fired = np.zeros((len(settings), rounds + 1, len(layout.measure)))
    leaked = np.zeros((len(settings), rounds, len(layout.data) + len(layout.measure)))
    for first in range(0, shots, CHUNK):
        count = min(CHUNK, shots - first)
        seed = int(rng.integers(2**63))
        every = np.ones(count, dtype=np.uint8)
        for index, one in enumerate(settings):
            mine = np.random.default_rng(seed)
            memory = simulate(layout, one.basis, rounds, count, one.noise, mine, reset=one.reset)
            states, final_states = labelled(one, memory, mine)
            bad, events = failed(one, states, final_states, memory.prepared, decode)
            wrong[index] += int(bad.sum())
            every &= bad
            fired[index] += events.sum(axis=0)
            leaked[index] += memory.leaked * count
        together += int(every.sum())
    outcomes = [
        Outcome(rounds, shots, int(wrong[k]), fired[k] / shots, leaked[k] / shots)
        for k in range(len(settings))
    ]
    return outcomes, together


def fit_per_round(outcomes: Sequence[Outcome]) -> PerRound:
    """Fit the logical error per round; R = 1 is left out where others remain.

    Maximum likelihood of the binomial counts by Fisher scoring.

    Raises
    ------
    ValueError
        Fewer than two numbers of rounds remain.
    """
    used = [one for one in outcomes if one.rounds > 1] or list(outcomes)
    rounds = np.array([one.rounds for one in used], dtype=float)
    shots = np.array([one.shots for one in used], dtype=float)
    seen = np.array([one.failures for one in used]) / shots
    if len(set(rounds)) < 2:
        raise ValueError("a logical error per round needs two numbers of rounds")

    logs = np.log(np.clip(1 - 2 * seen, LEAST_FIDELITY, None))
    solution = np.polynomial.polynomial.polyfit(rounds, logs, 1)
    for _ in range(SCORING_STEPS):
        fidelity = np.exp(solution[0] + solution[1] * rounds)
        model = np.clip((1 - fidelity) / 2, 1 / (2 * shots), 0.5)
        weight = shots / (model * (1 - model))
        slope = -fidelity[:, None] / 2 * np.stack([np.ones_like(rounds), rounds], axis=1)
        covariance = np.linalg.inv((slope * weight[:, None]).T @ slope)
        solution = solution + covariance @ (slope.T @ (weight * (seen - (1 - fidelity) / 2)))
    keep = float(np.exp(solution[1]))
    influence = -keep / 2 * (covariance @ (slope * weight[:, None]).T)[1]
    return PerRound(
        value=(1 - keep) / 2,
        error=keep / 2 * float(np.sqrt(covariance[1, 1])),
        amplitude=float(np.exp(solution[0])),
        chi_square=float((weight * (seen - model) ** 2).sum()),
        freedom=len(rounds) - 2,
        influence=dict(zip((one.rounds for one in used), influence.tolist(), strict=True)),
    )


@dataclass(frozen=True)
class Share:
    """Leakage's share of the logical error per round, by counterfactual.

    Attributes
    ----------
    value, error
        Share and its standard error.
    with_leakage, without
        The two logical errors per round.
    outcomes, outcomes_without
        What was simulated for them.
    """

    value: float
    error: float
    with_leakage: PerRound
    without: PerRound
    outcomes: tuple[Outcome, ...]
    outcomes_without: tuple[Outcome, ...]


def share_truth(
    setting: Setting,
    rounds: Sequence[int],
    shots: int,
    decoder_for: DecoderFor,
    rng: np.random.Generator,
) -> Share:
    """Return the share of the logical error per round that leakage causes.

    Parameters
    ----------
    setting
        The memory with its leakage.
    rounds, shots
        Numbers of rounds, and shots of each, with and without leakage.
    decoder_for
        The decoder of both.

    Raises
    ------
    ValueError
        Fewer than two numbers of rounds, or no shot failed at all.
    """
    both = [setting, replace(setting, noise=setting.noise.without_injection())]
    pairs = [run_together(both, turns, shots, decoder_for(turns), rng) for turns in rounds]
    outcomes, without = (tuple(made[k] for made, _ in pairs) for k in (0, 1))
    first, second = fit_per_round(outcomes), fit_per_round(without)
    # The same random numbers make the two curves rise and fall together.
    shared = sum(
        first.influence.get(a.rounds, 0.0)
        * second.influence.get(a.rounds, 0.0)
        * (together / shots - a.failures * b.failures / shots**2)
        / shots
        for (a, b), together in ((tuple(made), count) for made, count in pairs)
    )
    if first.value <= 0:
        raise ValueError("no logical error in any shot: the share needs more shots or rounds")
    ratio = second.value / first.value
    variance = first.error**2 * ratio**2 + second.error**2 - 2 * ratio * shared
    error = float(np.sqrt(max(variance, 0.0))) / first.value
    return Share(1 - ratio, error, first, second, outcomes, without)
