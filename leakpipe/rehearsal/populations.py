"""Closed-form truth of a rehearsed memory: leaked population, injection, seepage, steady level.

Every process of a round maps a qubit's leaked population p to a + b p, so a whole round is one
such map and obeys the recurrence p[r+1] = p[r] + G (1 - p[r]) - S p[r] exactly, with G = map(0) and
S = 1 - map(1) (Wood and Gambetta, Phys. Rev. A 97, 032306 (2018), L1 and L2). The map ends where
the qubit is read: at the end of the round. Transport couples the qubits; then the rates are those
of a qubit whose partners are never leaked, and `expected_leaked` follows all qubits together,
neglecting correlations between them.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from leakpipe.codes.layout import Layout
from leakpipe.errors import ConfigError, numbered
from leakpipe.rehearsal.memory import gate_list
from leakpipe.rehearsal.noise import Granularity, MemoryNoise, gates_per_round

Array = NDArray[np.float64]

SETTLED = 1e-12
"""Change per round that counts as none."""
SETTLING_ROUNDS = 200
SETTLING_TRIES = 50
"""A population that moves after 10 000 rounds has no steady level worth the name."""


@dataclass(frozen=True)
class LeakageRates:
    """Rates per round of every qubit, (D + M,), data qubits first, discrete convention.

    Attributes
    ----------
    injection, seepage
        G and S.
    """

    injection: Array
    seepage: Array

    @property
    def steady_leakage(self) -> Array:
        """Steady level G / (G + S); 0 where nothing ever leaks."""
        total = self.injection + self.seepage
        return np.divide(self.injection, total, out=np.zeros_like(total), where=total > 0)

    @property
    def settling_rounds(self) -> Array:
        """Settling time -1 / ln(1 - G - S) in rounds: infinite without, 0 with complete seepage."""
        keep = np.clip(1 - self.injection - self.seepage, 0, 1)
        with np.errstate(divide="ignore"):
            return -1 / np.log(keep)


def leakage_rates(layout: Layout, noise: MemoryNoise, *, reset: bool = True) -> LeakageRates:
    """Return the rates per round that the noise implies, without transport.

    Parameters
    ----------
    layout, noise
        Code and noise.
    reset
        True if measure qubits are reset before every round.
    """

    def one_round(start: float) -> Array:
        return _one_round(
            np.full(len(layout.data) + len(layout.measure), start), layout, noise, reset
        )

    return LeakageRates(injection=one_round(0.0), seepage=1 - one_round(1.0))


def _one_round(population: Array, layout: Layout, noise: MemoryNoise, reset: bool) -> Array:
    before = _before_gates(population, layout, noise, reset)
    stays = (1 - noise.per_qubit("injection", layout)) ** gates_per_round(layout)
    return 1 - (1 - before) * stays


def _before_gates(population: Array, layout: Layout, noise: MemoryNoise, reset: bool) -> Array:
    """Return the population after seepage, reset and the injection of the round."""
    after = population * (1 - noise.per_qubit("seepage", layout))
    if reset:
        measure = slice(len(layout.data), None)
        after[measure] *= 1 - noise.per_qubit("reset_removes", layout)[measure]
    return 1 - (1 - after) * (1 - noise.per_qubit("injection_round", layout))


def expected_leaked(
    layout: Layout, noise: MemoryNoise, rounds: int, *, reset: bool = True
) -> Array:
    """Return the leaked population at the end of each round, (round, D + M).

    Exact without transport; with it, correlations between partners are neglected (measured: the
    mean population at 10 % transport per gate is right to a percent, `studies/rehearsal.py`).
    """
    gates, _ = gate_list(layout)
    per_gate = noise.per_qubit("injection", layout)
    population = noise.per_qubit("initial", layout).copy()
    history = np.empty((rounds, len(population)))
    for turn in range(rounds):
        # Before the first round measure qubits are reset whatever the later rounds do.
        population = _before_gates(population, layout, noise, reset or turn == 0)
        for pair in gates:
            here = population[pair]
            moved = noise.transport * (here * (1 - here[::-1]))
            here = here - moved + moved[::-1]
            population[pair] = 1 - (1 - here) * (1 - per_gate[pair])
        history[turn] = population
    return history


def settled_leaked(layout: Layout, noise: MemoryNoise, *, reset: bool = True) -> Array:
    """Return the steady population of every qubit, (D + M,), transport included.

    Runs `expected_leaked` until nothing changes; NaN where it does not settle.
    """
    start = noise
    for _ in range(SETTLING_TRIES):
        path = expected_leaked(layout, start, SETTLING_ROUNDS, reset=reset)
        if np.abs(path[-1] - path[-2]).max() < SETTLED:
            return np.asarray(path[-1])
        start = replace(start, initial=path[-1])
    return np.full(path.shape[1], np.nan)


def code_settling(path: Array, steady: Array) -> float:
    """Return the rounds in which the summed population covers 1 - 1/e of its way from round 1.

    Parameters
    ----------
    path
        (round, qubit) population, long enough to get there.
    steady
        (qubit,) steady population.

    Returns
    -------
    rounds
        Of the pace of a single exponential it is the settling time; interpolated on a log axis.
        Infinite if the path ends before, NaN if there is no way to go.
    """
    left = steady.sum() - path.sum(axis=1)
    if not np.isfinite(left).all() or left[0] <= 0:
        return float("nan")
    share = left / left[0]
    below = np.flatnonzero(share <= np.exp(-1))
    if not len(below):
        return float("inf")
    after = int(below[0])
    logs = np.log(np.maximum(share[after - 1 : after + 1], np.finfo(float).tiny))
    return float(after - 1 + (-1 - logs[0]) / (logs[1] - logs[0]))


def with_rates(
    noise: MemoryNoise,
    layout: Layout,
    rates: LeakageRates,
    granularity: Granularity = "per gate",
) -> MemoryNoise:
    """Return the noise whose rates per round are the given ones: the inverse of `leakage_rates`.

    Parameters
    ----------
    noise
        Gives everything but injection and seepage.
    layout
        Code.
    rates
        Wanted G and S; S may not be above what G and a leak-removing reset leave possible.
    granularity
        Whether the injection falls on every gate or once per round.

    Raises
    ------
    ConfigError
        No probabilities have these rates; every qubit concerned is listed.
    """
    names = [*layout.data, *layout.measure]
    with np.errstate(divide="ignore", invalid="ignore"):
        stays_leaked = 1 - rates.seepage / (1 - rates.injection)
        removes = noise.per_qubit("reset_removes", layout)
        removes[: len(layout.data)] = 0
        seepage = 1 - stays_leaked / (1 - removes)
    # Rounding may carry a seepage that was exactly 0 or 1 past its end.
    seepage = np.where(np.abs(seepage - np.round(seepage)) < SETTLED, np.round(seepage), seepage)
    bad = ~((seepage >= 0) & (seepage <= 1) & (rates.injection >= 0) & (rates.injection < 1))
    if bad.any():
        problems = [
            f"{names[k]}: no noise has an injection of {rates.injection[k]:.3g} and a seepage of "
            f"{rates.seepage[k]:.3g} per round"
            for k in np.flatnonzero(bad)
        ]
        raise ConfigError(numbered(problems, "nothing was simulated"))
    once = replace(noise, injection=0.0, injection_round=rates.injection, seepage=seepage)
    return once.at_granularity(granularity, layout)
