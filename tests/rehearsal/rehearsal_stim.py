"""The rehearsal's circuit for the general stabilizer simulator, built from the layout alone."""

from __future__ import annotations

import numpy as np
import stim

from leakpipe.codes.layout import Basis, Layout
from leakpipe.rehearsal.noise import MemoryNoise


def circuit_of(
    layout: Layout, basis: Basis, rounds: int, noise: MemoryNoise, *, reset: bool = True
) -> stim.Circuit:
    """Return the error-only circuit with detectors in the order (layer, check), layer 1..R+1.

    Only defined (layer, check) pairs get a detector; its coordinates are (layer from 0, check).
    """
    full = noise.checked(layout)
    one, two, idle, flip, wrong = (
        np.asarray(getattr(full, name))
        for name in ("single_qubit", "two_qubit", "idle", "reset", "measurement")
    )
    data, checks = len(layout.data), len(layout.measure)
    circuit = stim.Circuit()

    def noisy(name: str, qubits: list[int], rates: np.ndarray) -> None:
        for qubit in qubits:
            circuit.append(name, [qubit], float(rates[qubit]))

    def hadamard(qubits: list[int]) -> None:
        if qubits:
            circuit.append("H", qubits)
            noisy("DEPOLARIZE1", qubits, one)

    everyone_data = list(range(data))
    everyone_measure = list(range(data, data + checks))
    turned = [data + check for check in range(checks) if layout.checks[check] == "X"]
    circuit.append("R", everyone_data)
    noisy("X_ERROR", everyone_data, flip)
    if basis == "X":
        hadamard(everyone_data)
    own = layout.of_basis(basis)
    for turn in range(rounds):
        if reset or turn == 0:
            circuit.append("R", everyone_measure)
            noisy("X_ERROR", everyone_measure, flip)
        hadamard(turned)
        for slot in sorted({slot for slots in layout.slots for slot in slots}):
            for check in range(checks):
                for qubit, at in zip(layout.touches[check], layout.slots[check], strict=True):
                    if at == slot:
                        pair = [qubit, data + check]
                        if layout.checks[check] == "X":
                            pair.reverse()
                        circuit.append("CX", pair)
                        error = float((two[qubit] + two[data + check]) / 2)
                        circuit.append("DEPOLARIZE2", pair, error)
        hadamard(turned)
        for qubit in everyone_measure:
            circuit.append("M", [qubit], float(wrong[qubit]))
        noisy("DEPOLARIZE1", everyone_data, idle)
        for check in range(checks):
            if turn == 0 and not own[check]:
                continue
            # With reset a check's value is the bit itself, without it the XOR of two bits.
            back = (0, 1) if reset else (0, 2)
            seen = [stim.target_rec(check - checks - checks * k) for k in back if k <= turn]
            circuit.append("DETECTOR", seen, [turn, check])
    if basis == "X":
        hadamard(everyone_data)
    for qubit in everyone_data:
        circuit.append("M", [qubit], float(wrong[qubit]))
    for check in range(checks):
        if not own[check]:
            continue
        seen = [stim.target_rec(qubit - data) for qubit in layout.touches[check]]
        seen += [
            stim.target_rec(check - checks - data - checks * k)
            for k in ((0,) if reset else (0, 1))
            if k < rounds
        ]
        circuit.append("DETECTOR", seen, [rounds, check])
    logical = [stim.target_rec(qubit - data) for qubit in layout.logical[basis]]
    circuit.append("OBSERVABLE_INCLUDE", logical, 0)
    return circuit


def detector_places(circuit: stim.Circuit) -> np.ndarray:
    """Return (detectors, 2): layer from 0 and check of each detector."""
    places = circuit.get_detector_coordinates()
    return np.array([places[k] for k in range(circuit.num_detectors)], dtype=int)
