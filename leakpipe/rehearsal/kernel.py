"""Compiled core of the memory rehearsal: 1024 shots at a time, one bit per shot and qubit.

Pauli frame: per qubit one word array for bit flips (x), one for phase flips (z), one for "leaked".
Rare events are not drawn site by site. One exponential clock runs over all sites: a site that fires
with probability p has the hazard -ln(1 - p) per shot, and the next event is where the accumulated
hazard reaches the clock. The position inside a site is the integer part of an exponential variable,
which is geometric (Devroye, Non-Uniform Random Variate Generation (1986), chapter X.2), so the
result is exactly one independent trial per shot at the cost of one logarithm per *event*.

The random words come from xoshiro256++ (Blackman and Vigna, ACM Trans. Math. Softw. 47, 36 (2021)),
seeded per block by the caller's generator, so that the result does not depend on threads.

Everything the kernel calls stands in this file: numba's cache does not notice changes elsewhere.
"""

from __future__ import annotations

from typing import Any

import numpy as np
from numba import njit, uint64
from numpy.typing import NDArray

WORDS = 16
"""Machine words per block; the working set of 49 qubits stays inside a first-level cache."""

BLOCK_SHOTS = 64 * WORDS

HAZARD_CAP = 40.0
"""Stands for certainty: the clock holds at most 53 ln 2 = 36.7, so a capped site always fires."""

_ONE = np.uint64(1)
_TO_UNIT = 2.0**-53

Words = NDArray[np.uint64]


@njit(cache=True, nogil=True)
def _next(random: Words) -> Any:
    """Return the next 64 random bits (xoshiro256++)."""
    total = random[0] + random[3]
    result = ((total << uint64(23)) | (total >> uint64(41))) + random[0]
    shifted = random[1] << uint64(17)
    random[2] ^= random[0]
    random[3] ^= random[1]
    random[1] ^= random[2]
    random[0] ^= random[3]
    random[2] ^= shifted
    random[3] = (random[3] << uint64(45)) | (random[3] >> uint64(19))
    return result


@njit(cache=True, nogil=True)
def _unit(random: Words) -> float:
    """Return a uniform number in [0, 1)."""
    value: float = (_next(random) >> uint64(11)) * _TO_UNIT
    return value


@njit(cache=True, nogil=True)
def _exponential(random: Words) -> float:
    """Return an exponential number of mean 1."""
    value: float = -np.log(((_next(random) >> uint64(11)) + uint64(1)) * _TO_UNIT)
    return value


@njit(cache=True, nogil=True)
def _next_shot(first: int, hazard: float, clock: NDArray[np.float64], random: Words) -> int:
    """Return the next shot, from `first` on, in which the site fires, or BLOCK_SHOTS if none."""
    left = BLOCK_SHOTS - first
    if clock[0] >= left * hazard:
        clock[0] -= left * hazard
        return BLOCK_SHOTS
    # Rounding could carry the quotient up to `left`; the comparison above says it is below.
    step = min(int(clock[0] / hazard), left - 1)
    clock[0] = _exponential(random)
    return first + step


@njit(cache=True, nogil=True)
def _set(row: Words, hazard: float, clock: NDArray[np.float64], random: Words) -> None:
    """Set a bit of `row` in every shot in which the site fires."""
    shot = _next_shot(0, hazard, clock, random)
    while shot < BLOCK_SHOTS:
        row[shot >> 6] |= _ONE << uint64(shot & 63)
        shot = _next_shot(shot + 1, hazard, clock, random)


@njit(cache=True, nogil=True)
def _flip(row: Words, hazard: float, clock: NDArray[np.float64], random: Words) -> None:
    """Flip a bit of `row` in every shot in which the site fires."""
    shot = _next_shot(0, hazard, clock, random)
    while shot < BLOCK_SHOTS:
        row[shot >> 6] ^= _ONE << uint64(shot & 63)
        shot = _next_shot(shot + 1, hazard, clock, random)


@njit(cache=True, nogil=True)
def _depolarise(
    x: Words, z: Words, hazard: float, clock: NDArray[np.float64], random: Words
) -> None:
    """Apply one of the three Pauli errors in every shot in which the site fires."""
    shot = _next_shot(0, hazard, clock, random)
    while shot < BLOCK_SHOTS:
        pauli = uint64(1 + int(3.0 * _unit(random)))
        word, place = shot >> 6, uint64(shot & 63)
        x[word] ^= (pauli & _ONE) << place
        z[word] ^= (pauli >> _ONE) << place
        shot = _next_shot(shot + 1, hazard, clock, random)


@njit(cache=True, nogil=True)
def _depolarise_pair(
    x: Words, z: Words, a: int, b: int, hazard: float, clock: NDArray[np.float64], random: Words
) -> None:
    """Apply one of the fifteen two-qubit Pauli errors in every shot in which the site fires."""
    shot = _next_shot(0, hazard, clock, random)
    while shot < BLOCK_SHOTS:
        pauli = uint64(1 + int(15.0 * _unit(random)))
        word, place = shot >> 6, uint64(shot & 63)
        x[a, word] ^= (pauli & _ONE) << place
        z[a, word] ^= ((pauli >> uint64(1)) & _ONE) << place
        x[b, word] ^= ((pauli >> uint64(2)) & _ONE) << place
        z[b, word] ^= (pauli >> uint64(3)) << place
        shot = _next_shot(shot + 1, hazard, clock, random)


@njit(cache=True, nogil=True)
def _seep(x: Words, z: Words, leak: Words, probability: float, random: Words) -> None:
    """Return each leaked shot with the given probability, into a fully mixed qubit."""
    for word in range(WORDS):
        left = leak[word]
        while left != uint64(0):
            bit = left & (~left + _ONE)
            left ^= bit
            if _unit(random) < probability:
                leak[word] ^= bit
                x[word] = (x[word] & ~bit) | (_next(random) & bit)
                z[word] = (z[word] & ~bit) | (_next(random) & bit)


@njit(cache=True, nogil=True)
def _chosen(mask: Any, probability: float, random: Words) -> Any:
    """Keep each set bit of a word with the given probability."""
    if probability >= 1.0:
        return mask
    if probability <= 0.0:
        return uint64(0)
    kept = uint64(0)
    left = mask
    while left != uint64(0):
        bit = left & (~left + _ONE)
        left ^= bit
        if _unit(random) < probability:
            kept |= bit
    return kept


@njit(cache=True, nogil=True)
def _meet_leaked(
    x: Words,
    z: Words,
    leak: Words,
    control: int,
    target: int,
    word: int,
    consequence: NDArray[np.float64],
    random: Words,
) -> None:
    """Act on the unleaked partner of a leaked qubit in a controlled-NOT gate, then transport.

    `consequence` holds the strength, the depolarising part and the transport probability. The gate
    is a controlled phase between two Hadamards on the target, so a stray phase of the partner is a
    phase flip of the control and a bit flip of the target.
    """
    control_leaked = leak[control, word] & ~leak[target, word]
    target_leaked = leak[target, word] & ~leak[control, word]
    struck_target = _chosen(control_leaked, consequence[0], random)
    struck_control = _chosen(target_leaked, consequence[0], random)
    full_target = _chosen(struck_target, consequence[1], random)
    full_control = _chosen(struck_control, consequence[1], random)
    x[target, word] ^= _next(random) & struck_target
    z[target, word] ^= _next(random) & full_target
    z[control, word] ^= _next(random) & struck_control
    x[control, word] ^= _next(random) & full_control
    if consequence[2] > 0.0:
        moved = _chosen(control_leaked | target_leaked, consequence[2], random)
        leak[control, word] ^= moved
        leak[target, word] ^= moved
        for qubit in (control, target):
            fresh = moved & ~leak[qubit, word]
            x[qubit, word] = (x[qubit, word] & ~fresh) | (_next(random) & fresh)
            z[qubit, word] = (z[qubit, word] & ~fresh) | (_next(random) & fresh)


@njit(cache=True, nogil=True)
def _gate(
    x: Words,
    z: Words,
    leak: Words,
    control: int,
    target: int,
    consequence: NDArray[np.float64],
    random: Words,
) -> None:
    """Run one controlled-NOT gate; a shot with a leaked partner gets the consequence instead."""
    met = uint64(0)
    for word in range(WORDS):
        either = leak[control, word] | leak[target, word]
        x[target, word] ^= x[control, word] & ~either
        z[control, word] ^= z[target, word] & ~either
        met |= either
    if met != uint64(0):
        for word in range(WORDS):
            if leak[control, word] != leak[target, word]:
                _meet_leaked(x, z, leak, control, target, word, consequence, random)


@njit(cache=True, nogil=True)
def _exchange(x: Words, z: Words) -> None:
    """Hadamard: exchange bit and phase flips of one qubit."""
    for word in range(WORDS):
        kept = x[word]
        x[word] = z[word]
        z[word] = kept


@njit(cache=True, nogil=True)
def _unpack(read: Words, leak: Words, shots: int, out: NDArray[np.uint8]) -> None:
    """Write states 0, 1, 2 of (qubit, word) bit rows into (shot, qubit)."""
    for shot in range(shots):
        word, place = shot >> 6, uint64(shot & 63)
        for qubit in range(read.shape[0]):
            leaked = (leak[qubit, word] >> place) & _ONE
            bit = (read[qubit, word] >> place) & _ONE
            out[shot, qubit] = np.uint8((leaked << _ONE) | (bit & ~leaked))


@njit(cache=True, nogil=True)
def _count(row: Words, shots: int) -> int:
    """Return the number of set bits among the first `shots` shots."""
    total = 0
    for word in range(WORDS):
        left = row[word]
        if shots < 64 * word + 64:
            keep = shots - 64 * word
            left = left & ((_ONE << uint64(keep)) - _ONE) if keep > 0 else uint64(0)
        while left != uint64(0):
            left &= left - _ONE
            total += 1
    return total


@njit(cache=True, nogil=True)
def run_blocks(
    states: NDArray[np.uint8],
    final_states: NDArray[np.uint8],
    prepared: NDArray[np.uint8],
    leaked: NDArray[np.int64],
    seeds: Words,
    gates: NDArray[np.int64],
    turned: NDArray[np.bool_],
    turn_data: bool,
    reset: bool,
    hazards: NDArray[np.float64],
    gate_hazard: NDArray[np.float64],
    chances: NDArray[np.float64],
    consequence: NDArray[np.float64],
    error_scale: NDArray[np.float64],
    injected: NDArray[np.int64],
    injected_hazard: float,
) -> None:
    """Simulate a memory block by block; see `leakpipe.rehearsal.memory.simulate` for the circuit.

    Parameters
    ----------
    states, final_states, prepared, leaked
        Outputs: (shot, round, M), (shot, D), (shot, D) uint8; (round, D + M) counts of leaked shots
        at the end of each round.
    seeds
        (blocks, 8) generator states: four words for errors, four for everything about leakage. Two
        runs with the same seeds and error rates make the same errors, whatever leaks in them.
    gates
        (gates, 2) control and target in time order; qubits are numbered data first.
    turned
        (M,) which measure qubits have a Hadamard before and after their gates.
    turn_data
        Whether data qubits are prepared and read in the X basis.
    reset
        Whether measure qubits are reset before every round, not only before the first.
    hazards
        (7, D + M) per shot: single-qubit gate, idling, reset, measurement, injection per two-qubit
        gate, injection per round, initially leaked.
    gate_hazard
        (gates,) of a two-qubit error.
    chances
        (2, D + M): seepage per round, removal of leakage by a reset.
    consequence
        Strength, depolarising part, transport probability.
    error_scale
        (round,) factor on the hazards of gate errors and idling.
    injected, injected_hazard
        Qubit and round (from 0; -1 for never) of an injected leak, and its hazard.
    """
    shots, rounds, measures = states.shape
    data = final_states.shape[1]
    x = np.empty((data + measures, WORDS), dtype=np.uint64)
    z = np.empty((data + measures, WORDS), dtype=np.uint64)
    leak = np.empty((data + measures, WORDS), dtype=np.uint64)
    read = np.empty((max(data, measures), WORDS), dtype=np.uint64)
    random = np.empty(4, dtype=np.uint64)
    leaky = np.empty(4, dtype=np.uint64)
    clock = np.empty(1)
    leak_clock = np.empty(1)
    for block in range(seeds.shape[0]):
        first = block * BLOCK_SHOTS
        here = min(shots - first, BLOCK_SHOTS)
        random[:] = seeds[block, :4]
        leaky[:] = seeds[block, 4:]
        clock[0] = _exponential(random)
        leak_clock[0] = _exponential(leaky)
        for qubit in range(data + measures):
            leak[qubit] = uint64(0)
            _set(leak[qubit], hazards[6, qubit], leak_clock, leaky)
        for qubit in range(data):
            for word in range(WORDS):
                x[qubit, word] = _next(random)
                z[qubit, word] = _next(random)
        _unpack(x[:data], np.zeros_like(leak[:data]), here, prepared[first : first + here])
        for qubit in range(data):
            _flip(x[qubit], hazards[2, qubit], clock, random)
            if turn_data:
                _exchange(x[qubit], z[qubit])
                _depolarise(x[qubit], z[qubit], hazards[0, qubit], clock, random)
        for turn in range(rounds):
            scale = error_scale[turn]
            for qubit in range(data + measures):
                _seep(x[qubit], z[qubit], leak[qubit], chances[0, qubit], leaky)
            for qubit in range(data, data + measures):
                if reset or turn == 0:
                    _seep(x[qubit], z[qubit], leak[qubit], chances[1, qubit], leaky)
                    x[qubit] = uint64(0)
                    _flip(x[qubit], hazards[2, qubit], clock, random)
                # The state is a definite bit here, so its phase frame is arbitrary; drawing it
                # anew is what makes checks of the other basis start from random values.
                for word in range(WORDS):
                    z[qubit, word] = _next(random)
            for qubit in range(data + measures):
                _set(leak[qubit], hazards[5, qubit], leak_clock, leaky)
            if injected[1] == turn:
                _set(leak[injected[0]], injected_hazard, leak_clock, leaky)
            for check in range(measures):
                if turned[check]:
                    qubit = data + check
                    _exchange(x[qubit], z[qubit])
                    _depolarise(x[qubit], z[qubit], scale * hazards[0, qubit], clock, random)
            for gate in range(gates.shape[0]):
                control, target = gates[gate]
                _gate(x, z, leak, control, target, consequence, leaky)
                _depolarise_pair(x, z, control, target, scale * gate_hazard[gate], clock, random)
                _set(leak[control], hazards[4, control], leak_clock, leaky)
                _set(leak[target], hazards[4, target], leak_clock, leaky)
            for check in range(measures):
                qubit = data + check
                if turned[check]:
                    _exchange(x[qubit], z[qubit])
                    _depolarise(x[qubit], z[qubit], scale * hazards[0, qubit], clock, random)
                read[check] = x[qubit]
                _flip(read[check], hazards[3, qubit], clock, random)
            _unpack(read[:measures], leak[data:], here, states[first : first + here, turn])
            for qubit in range(data):
                _depolarise(x[qubit], z[qubit], scale * hazards[1, qubit], clock, random)
            for qubit in range(data + measures):
                leaked[turn, qubit] += _count(leak[qubit], here)
        for qubit in range(data):
            if turn_data:
                _exchange(x[qubit], z[qubit])
                _depolarise(x[qubit], z[qubit], hazards[0, qubit], clock, random)
            read[qubit] = x[qubit]
            _flip(read[qubit], hazards[3, qubit], clock, random)
        _unpack(read[:data], leak[:data], here, final_states[first : first + here])
