"""Memory experiments with errors and leakage, shot by shot, with the truth in plain sight.

The circuit of one shot (the tests rebuild it in a general stabilizer simulator):

1. Data qubits are reset into random bits (`reset` error); in basis X a Hadamard follows
   (`single_qubit` error).
2. Every round: leaked qubits seep back; measure qubits are reset (every round, or only before the
   first); injection before the gates; a Hadamard on the measure qubits of X checks; the
   controlled-NOT gates of `Layout.slots` (data controls measure in a Z check, measure controls data
   in an X check), each followed by a two-qubit depolarising error and injection; the Hadamards
   again; the readout of the measure qubits, while the data qubits idle.
3. In basis X a Hadamard on the data qubits, then their readout.

A gate with a leaked qubit does nothing but strike the partner. A qubit that returns is fully mixed.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from leakpipe.codes.layout import Basis, Layout
from leakpipe.errors import ConfigError
from leakpipe.rehearsal.kernel import BLOCK_SHOTS, HAZARD_CAP, run_blocks
from leakpipe.rehearsal.noise import Injected, MemoryNoise


@dataclass(frozen=True)
class MemoryShots:
    """Simulated shots of one number of rounds.

    Attributes
    ----------
    states
        (shot, round, M) uint8: true state 0, 1, 2 of each measure qubit when it is read (bits
        already flipped by the noise's `measurement` error, if any).
    final_states
        (shot, D) uint8: the same for the closing readout of the data qubits.
    prepared
        (shot, D) uint8 starting bits, random and independent.
    leaked
        (round, D + M): fraction of shots in which each qubit is leaked at the end of the round.
    """

    states: NDArray[np.uint8]
    final_states: NDArray[np.uint8]
    prepared: NDArray[np.uint8]
    leaked: NDArray[np.float64]

    @property
    def shots(self) -> int:
        """Number of shots."""
        return len(self.prepared)


def hazard(probability: NDArray[np.float64]) -> NDArray[np.float64]:
    """Return -ln(1 - p), capped where the event is certain."""
    with np.errstate(divide="ignore"):
        return np.minimum(-np.log1p(-probability), HAZARD_CAP)


def gate_list(layout: Layout) -> tuple[NDArray[np.int64], NDArray[np.bool_]]:
    """Return the two-qubit gates of a round and the measure qubits that need Hadamards.

    Returns
    -------
    gates
        (gates, 2): control and target in time order, data qubits numbered before measure qubits.
    turned
        (M,) True for X checks.
    """
    data = len(layout.data)
    timed = []
    for check, kind in enumerate(layout.checks):
        for qubit, slot in zip(layout.touches[check], layout.slots[check], strict=True):
            pair = (qubit, data + check) if kind == "Z" else (data + check, qubit)
            timed.append((slot, check, pair))
    gates = np.array([pair for _, _, pair in sorted(timed)], dtype=np.int64)
    return gates, np.array([kind == "X" for kind in layout.checks])


def simulate(
    layout: Layout,
    basis: Basis,
    rounds: int,
    shots: int,
    noise: MemoryNoise,
    rng: np.random.Generator,
    injected: Injected | None = None,
    *,
    reset: bool = True,
    error_scale: NDArray[np.float64] | None = None,
) -> MemoryShots:
    """Simulate a memory experiment.

    Parameters
    ----------
    layout, basis, rounds, shots
        Code, basis of the memory, number of rounds and of shots, each 1 or more.
    noise
        Errors and leakage.
    rng
        Source of the seeds; two generator states are drawn from it per 1024 shots, and nothing
        else. Errors and leakage have one each: runs with the same seed and the same error rates
        make the same errors, whatever leaks in them.
    injected
        A leak made on purpose.
    reset
        True if measure qubits are reset before every round.
    error_scale
        (round,) factor on the hazards of gate errors and idling, for devices that heat up.

    Raises
    ------
    ConfigError
        Rounds, shots, noise or the injected leak make no sense.
    """
    if rounds < 1 or shots < 1:
        raise ConfigError(f"rounds and shots must be 1 or more, got {rounds} and {shots}")
    data, measures = len(layout.data), len(layout.measure)
    full = noise.checked(layout)
    gates, turned = gate_list(layout)
    two_qubit = np.asarray(full.two_qubit)[gates].mean(axis=1)
    rare = (
        full.single_qubit,
        full.idle,
        full.reset,
        full.measurement,
        full.injection,
        full.injection_round,
        full.initial,
    )
    where, certainty = _injected(layout, rounds, injected)
    scale = np.ones(rounds) if error_scale is None else np.asarray(error_scale, dtype=float)
    if scale.shape != (rounds,) or not np.all(scale >= 0):
        raise ConfigError("error_scale must hold one factor of 0 or more per round")
    blocks = -(-shots // BLOCK_SHOTS)
    seeds = rng.integers(0, 2**64, size=(blocks, 8), dtype=np.uint64)
    states = np.empty((shots, rounds, measures), dtype=np.uint8)
    final_states = np.empty((shots, data), dtype=np.uint8)
    prepared = np.empty((shots, data), dtype=np.uint8)
    leaked = np.zeros((rounds, data + measures), dtype=np.int64)
    run_blocks(
        states,
        final_states,
        prepared,
        leaked,
        seeds,
        gates,
        turned,
        basis == "X",
        reset,
        hazard(np.stack([np.asarray(one) for one in rare])),
        hazard(two_qubit),
        np.stack([np.asarray(full.seepage), np.asarray(full.reset_removes)]),
        np.array([full.strength, full.depolarise, full.transport]),
        scale,
        where,
        float(hazard(np.array(certainty))),
    )
    return MemoryShots(states, final_states, prepared, leaked / shots)


def _injected(
    layout: Layout, rounds: int, injected: Injected | None
) -> tuple[NDArray[np.int64], float]:
    """Return the qubit number and round (from 0, -1 for never) and the probability."""
    if injected is None:
        return np.array([0, -1]), 0.0
    names = [*layout.data, *layout.measure]
    if injected.qubit not in names:
        raise ConfigError(f"injected qubit must be in the layout, got {injected.qubit!r}")
    if not (1 <= injected.round <= rounds and 0 <= injected.probability <= 1):
        raise ConfigError(
            f"an injected leak needs a round of 1 to {rounds} and a probability, "
            f"got {injected.round} and {injected.probability}"
        )
    return np.array([names.index(injected.qubit), injected.round - 1]), injected.probability
