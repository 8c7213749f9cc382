"""Plain numpy twin of the compiled memory: one random number per site and shot, no tricks."""

from __future__ import annotations

import numpy as np

from leakpipe.codes.layout import Basis, Layout
from leakpipe.rehearsal.memory import MemoryShots
from leakpipe.rehearsal.noise import MemoryNoise


class Twin:
    """Frames and leak flags as (qubit, shot) arrays of truth values."""

    def __init__(
        self, layout: Layout, noise: MemoryNoise, shots: int, rng: np.random.Generator
    ) -> None:
        self.noise, self.rng, self.shots = noise.checked(layout), rng, shots
        qubits = len(layout.data) + len(layout.measure)
        self.x = np.zeros((qubits, shots), dtype=bool)
        self.z = np.zeros((qubits, shots), dtype=bool)
        self.leaked = np.zeros((qubits, shots), dtype=bool)

    def happens(self, probability: float) -> np.ndarray:
        return self.rng.random(self.shots) < probability

    def rate(self, name: str, qubit: int) -> float:
        return float(np.asarray(getattr(self.noise, name))[qubit])

    def mix(self, qubit: int, where: np.ndarray) -> None:
        """Replace the qubit by a fully mixed one."""
        self.x[qubit, where] = self.rng.random(where.sum()) < 0.5
        self.z[qubit, where] = self.rng.random(where.sum()) < 0.5

    def depolarise(self, qubits: list[int], probability: float) -> None:
        struck = self.happens(probability)
        pauli = self.rng.integers(1, 4 ** len(qubits), self.shots)
        for place, qubit in enumerate(qubits):
            self.x[qubit] ^= struck & ((pauli >> (2 * place)) & 1 == 1)
            self.z[qubit] ^= struck & ((pauli >> (2 * place + 1)) & 1 == 1)

    def hadamard(self, qubit: int) -> None:
        self.x[qubit], self.z[qubit] = self.z[qubit].copy(), self.x[qubit].copy()
        self.depolarise([qubit], self.rate("single_qubit", qubit))

    def leak(self, name: str, qubit: int) -> None:
        self.leaked[qubit] |= self.happens(self.rate(name, qubit))

    def give_back(self, name: str, qubit: int) -> None:
        back = self.leaked[qubit] & self.happens(self.rate(name, qubit))
        self.leaked[qubit] &= ~back
        self.mix(qubit, back)

    def controlled_not(self, control: int, target: int) -> None:
        noise = self.noise
        fine = ~self.leaked[control] & ~self.leaked[target]
        self.x[target] ^= fine & self.x[control]
        self.z[control] ^= fine & self.z[target]
        one = self.leaked[control] ^ self.leaked[target]
        struck = one & self.happens(noise.strength)
        full = struck & self.happens(noise.depolarise)
        for partner, stray in ((control, self.z), (target, self.x)):
            here = struck & ~self.leaked[partner]
            stray[partner] ^= here & ~full & self.happens(0.5)
            self.mix(partner, here & full)
        moved = one & self.happens(noise.transport)
        for qubit in (control, target):
            self.leaked[qubit] ^= moved
            self.mix(qubit, moved & ~self.leaked[qubit])
        self.depolarise(
            [control, target],
            (self.rate("two_qubit", control) + self.rate("two_qubit", target)) / 2,
        )
        self.leak("injection", control)
        self.leak("injection", target)

    def read(self, qubit: int) -> np.ndarray:
        bit = self.x[qubit] ^ self.happens(self.rate("measurement", qubit))
        return np.where(self.leaked[qubit], 2, bit).astype(np.uint8)


def twin_memory(
    layout: Layout,
    basis: Basis,
    rounds: int,
    shots: int,
    noise: MemoryNoise,
    rng: np.random.Generator,
    *,
    reset: bool = True,
) -> MemoryShots:
    """Simulate the memory of `leakpipe.rehearsal.memory.simulate`, slowly."""
    twin = Twin(layout, noise, shots, rng)
    data = range(len(layout.data))
    measure = range(len(layout.data), len(layout.data) + len(layout.measure))
    turned = [q for q, kind in zip(measure, layout.checks, strict=True) if kind == "X"]
    for qubit in (*data, *measure):
        twin.leak("initial", qubit)
    prepared = rng.integers(0, 2, (len(data), shots)).astype(np.uint8)
    for qubit in data:
        twin.x[qubit] = prepared[qubit] == 1
        twin.z[qubit] = twin.happens(0.5)
        twin.x[qubit] ^= twin.happens(twin.rate("reset", qubit))
        if basis == "X":
            twin.hadamard(qubit)
    states, leaked = [], []
    for turn in range(rounds):
        for qubit in (*data, *measure):
            twin.give_back("seepage", qubit)
        for qubit in measure:
            if reset or turn == 0:
                twin.give_back("reset_removes", qubit)
                twin.x[qubit] = twin.happens(twin.rate("reset", qubit))
            twin.z[qubit] = twin.happens(0.5)
        for qubit in (*data, *measure):
            twin.leak("injection_round", qubit)
        for qubit in turned:
            twin.hadamard(qubit)
        for slot in sorted({slot for slots in layout.slots for slot in slots}):
            for check, ancilla in enumerate(measure):
                for qubit, at in zip(layout.touches[check], layout.slots[check], strict=True):
                    if at == slot and layout.checks[check] == "Z":
                        twin.controlled_not(qubit, ancilla)
                    elif at == slot:
                        twin.controlled_not(ancilla, qubit)
        for qubit in turned:
            twin.hadamard(qubit)
        states.append([twin.read(qubit) for qubit in measure])
        for qubit in data:
            twin.depolarise([qubit], twin.rate("idle", qubit))
        leaked.append(twin.leaked.mean(axis=1))
    for qubit in data:
        if basis == "X":
            twin.hadamard(qubit)
    closing = np.array([twin.read(qubit) for qubit in data])
    return MemoryShots(
        np.ascontiguousarray(np.array(states).transpose(2, 0, 1)),
        np.ascontiguousarray(closing.T),
        np.ascontiguousarray(prepared.T),
        np.array(leaked),
    )
