"""The matching decoder against a general stabilizer simulator's own error model."""

from __future__ import annotations

import numpy as np
import pytest
import stim
from pymatching import Matching

from leakpipe.codes.events import bits_of, detection_events, logical_parity
from leakpipe.codes.layout import Basis, Layout
from leakpipe.codes.matching import FaultRates, edges_of_round, matching_decoder
from leakpipe.codes.repetition import repetition
from leakpipe.codes.rotated import rotated_surface
from leakpipe.rehearsal.memory import simulate
from leakpipe.rehearsal.noise import MemoryNoise

ROUNDS = 7
SHOTS = 40_000


def memory_circuit(layout: Layout, basis: Basis, rounds: int, two_qubit: float) -> stim.Circuit:
    """A memory with two-qubit depolarising noise only, written for stim from the layout."""
    data = list(range(len(layout.data)))
    checks = [len(data) + m for m in range(len(layout.measure))]
    own = [m for m, kind in enumerate(layout.checks) if kind == basis]
    other = [checks[m] for m, kind in enumerate(layout.checks) if kind == "X"]
    gates = sorted(
        (slot, m, q)
        for m in range(len(checks))
        for slot, q in zip(layout.slots[m], layout.touches[m], strict=True)
    )
    lines = [f"{'RX' if basis == 'X' else 'R'} {' '.join(map(str, data))}"]
    for r in range(rounds):
        lines.append(f"R {' '.join(map(str, checks))}")
        if other:
            lines.append(f"H {' '.join(map(str, other))}")
        for _, m, q in gates:
            pair = (q, checks[m]) if layout.checks[m] == "Z" else (checks[m], q)
            lines.append(f"CX {pair[0]} {pair[1]}")
            lines.append(f"DEPOLARIZE2({two_qubit}) {pair[0]} {pair[1]}")
        if other:
            lines.append(f"H {' '.join(map(str, other))}")
        lines.append(f"M {' '.join(map(str, checks))}")
        for m in own:
            back = f" rec[{m - 2 * len(checks)}]" if r else ""
            lines.append(f"DETECTOR rec[{m - len(checks)}]{back}")
    lines.append(f"{'MX' if basis == 'X' else 'M'} {' '.join(map(str, data))}")
    total = len(data)
    for m in own:
        closing = " ".join(f"rec[{q - total}]" for q in layout.touches[m])
        lines.append(f"DETECTOR {closing} rec[{m - total - len(checks)}]")
    support = " ".join(f"rec[{q - total}]" for q in layout.logical[basis])
    lines.append(f"OBSERVABLE_INCLUDE(0) {support}")
    return stim.Circuit("\n".join(lines))


@pytest.mark.parametrize(
    ("layout", "basis"),
    [
        (rotated_surface(3), "Z"),
        (rotated_surface(3), "X"),
        (rotated_surface(5), "Z"),
        (repetition(5), "Z"),
    ],
    ids=["rotated 3 Z", "rotated 3 X", "rotated 5 Z", "repetition 5"],
)
def test_as_good_as_the_error_model_of_a_stabilizer_simulator(layout: Layout, basis: Basis) -> None:
    """On the same samples our graph fails no more often than stim's, within 3 sigma and 5 %."""
    noise = 8e-3
    circuit = memory_circuit(layout, basis, ROUNDS, noise)
    detectors, flips = circuit.compile_detector_sampler(seed=5).sample(
        SHOTS, separate_observables=True
    )
    reference = Matching(circuit.detector_error_model(decompose_errors=True))
    theirs = (reference.decode_batch(detectors)[:, 0] != flips[:, 0]).mean()
    own = layout.of_basis(basis)
    events = np.zeros((SHOTS, ROUNDS + 1, len(own)), dtype=np.uint8)
    events[:, :, own] = detectors.reshape(SHOTS, ROUNDS + 1, -1)
    # The same single kind of fault as the circuit, so that the weights agree.
    decoder = matching_decoder(layout, basis, ROUNDS, FaultRates(noise, 1e-9, 1e-9))
    ours = (decoder.decode(events) != flips[:, 0]).mean()
    # The samples are shared, so the difference is far quieter than this binomial error.
    slack = 3 * np.sqrt(2 * theirs * (1 - theirs) / SHOTS) + 0.05 * theirs
    assert ours < theirs + slack
    assert theirs < flips.mean()


def test_edges_are_those_of_the_stabilizer_simulator() -> None:
    """Fault by fault, one round's edges and probabilities are those of stim's error model."""
    layout, noise = rotated_surface(3), 8e-3
    circuit = memory_circuit(layout, "Z", 3, noise)
    place = {int(check): index for index, check in enumerate(np.flatnonzero(layout.of_basis("Z")))}
    count = len(place)
    theirs: dict[tuple[tuple[int, ...], bool], float] = {}
    for instruction in circuit.detector_error_model(decompose_errors=False).flattened():
        if instruction.type != "error":
            continue
        targets = instruction.targets_copy()
        nodes = tuple(sorted(t.val for t in targets if t.is_relative_detector_id()))
        logical = any(t.is_logical_observable_id() for t in targets)
        if 1 <= len(nodes) <= 2:
            theirs[nodes, logical] = instruction.args_copy()[0]
    ours = {}
    for edge in edges_of_round(layout, "Z", FaultRates(noise, 1e-12, 1e-12)):
        # Round 2 of 3: its faults see neither the first nor the last layer alone.
        nodes = tuple(sorted((1 + after) * count + place[check] for after, check in edge.nodes))
        ours[nodes, edge.logical] = edge.probability
    # Faults of rounds 1 and 3 reach the same edges within one layer; only edges that cross from
    # layer 2 to layer 3 belong to round 2 alone.
    crossing = {
        key: p
        for key, p in ours.items()
        if len(key[0]) == 2 and key[0][0] < 2 * count <= key[0][1] and p > 1e-6
    }
    assert len(crossing) > 5
    for key, probability in crossing.items():
        # The Paulis of one gate exclude each other; merged as if independent, they differ by
        # about their own probability.
        assert theirs[key] == pytest.approx(probability, rel=noise)


def test_decoding_helps_with_leakage_and_wrong_readings() -> None:
    """On a rehearsed memory with leakage the decoded error is far below the undecoded one."""
    layout = rotated_surface(3)
    noise = MemoryNoise(measurement=0.02, injection=4e-4, seepage=0.2)
    shots = simulate(layout, "Z", 8, 10_000, noise, np.random.default_rng(1))
    closing = bits_of(shots.final_states)
    events = detection_events(
        bits_of(shots.states), closing, shots.prepared, layout, "Z", reset=True
    )
    flipped = logical_parity(closing, layout, "Z") ^ logical_parity(shots.prepared, layout, "Z")
    decoded = matching_decoder(layout, "Z", 8).decode(events) ^ flipped
    assert decoded.mean() < 0.5 * flipped.mean()
