"""The rehearsal against outside references and closed forms, at statistics too long for a test.

Every line is a measured figure with what is required of it; seeds are fresh in every run (printed),
limits are set for one false alarm in ten thousand runs a line unless a line says otherwise.
"""

from __future__ import annotations

import sys
import time
from dataclasses import replace
from pathlib import Path

import numpy as np
import pymatching
from scipy.stats import chi2, norm

from leakpipe.codes.events import bits_of, detection_events, logical_parity
from leakpipe.codes.layout import Basis, Layout
from leakpipe.codes.matching import matching_decoder
from leakpipe.codes.repetition import repetition
from leakpipe.codes.rotated import rotated_surface
from leakpipe.rehearsal.counterfactual import Setting, share_truth
from leakpipe.rehearsal.device import REFERENCE
from leakpipe.rehearsal.memory import simulate
from leakpipe.rehearsal.noise import Injected, MemoryNoise
from leakpipe.rehearsal.populations import expected_leaked
from leakpipe.rehearsal.readout import nearest_states, points

sys.path.insert(0, str(Path(__file__).parents[1] / "tests" / "rehearsal"))

FALSE_ALARM = 1e-4
ERRORS = MemoryNoise(single_qubit=1e-3, two_qubit=6e-3, idle=4e-3, reset=2e-3, measurement=1e-2)
CHUNK = 1 << 16
ROUNDS = 8

Line = tuple[str, str, str, bool]


def outside(layout: Layout, basis: Basis, noise: MemoryNoise, shots: int, seed: int) -> list[Line]:
    """Compare with the general stabilizer simulator: every detector, and the logical error."""
    from rehearsal_stim import circuit_of, detector_places

    circuit = circuit_of(layout, basis, ROUNDS, noise)
    layers, checks = detector_places(circuit).T
    matching = pymatching.Matching.from_detector_error_model(
        circuit.detector_error_model(decompose_errors=True)
    )
    sampler = circuit.compile_detector_sampler(seed=seed)
    rng = np.random.default_rng(seed)
    count = np.zeros((2, len(layers)))
    wrong = np.zeros(2)
    squares = np.zeros((len(layers), len(layers)))
    for _ in range(shots // CHUNK):
        memory = simulate(layout, basis, ROUNDS, CHUNK, noise, rng)
        closing = bits_of(memory.final_states)
        ours = detection_events(
            bits_of(memory.states), closing, memory.prepared, layout, basis, reset=True
        )[:, layers, checks]
        flips = logical_parity(closing ^ memory.prepared, layout, basis)
        theirs, their_flips = sampler.sample(CHUNK, separate_observables=True)
        count += [ours.sum(axis=0), theirs.sum(axis=0)]
        wrong[0] += (matching.decode_batch(ours)[:, 0] != flips).sum()
        wrong[1] += (matching.decode_batch(theirs)[:, 0] != their_flips[:, 0]).sum()
        single = theirs.astype(np.float32)
        squares += single.T @ single
    used = shots // CHUNK * CHUNK
    rate = count / used
    variance = (rate * (1 - rate)).sum(axis=0) / used
    statistic = ((rate[0] - rate[1]) ** 2 / variance).sum()
    # Correlated detectors: match mean and variance of the sum (Satterthwaite, Biometrics 2, 110
    # (1946)) with the measured correlations.
    centred = squares / used - np.outer(rate[1], rate[1])
    width = np.sqrt(np.diag(centred))
    freedom = len(layers) ** 2 / ((centred / np.outer(width, width)) ** 2).sum()
    scaled = statistic * freedom / len(layers)
    limit = chi2.isf(FALSE_ALARM, freedom) * len(layers) / freedom
    failed = wrong / used
    z = (failed[0] - failed[1]) / np.sqrt((failed * (1 - failed)).sum() / used)
    name = f"{layout.family} {layout.distance} {basis}"
    return [
        (
            f"{name}: chi-square of {len(layers)} detectors, {used} shots",
            f"{statistic:.0f}",
            f"< {limit:.0f}",
            bool(scaled < chi2.isf(FALSE_ALARM, freedom)),
        ),
        (
            f"{name}: logical error {failed[0]:.6f} against {failed[1]:.6f}",
            f"{z:+.2f} sigma",
            f"within {norm.isf(FALSE_ALARM / 2):.1f}",
            bool(abs(z) < norm.isf(FALSE_ALARM / 2)),
        ),
    ]


def populations(shots: int, seed: int) -> list[Line]:
    """Compare leaked populations with the closed form, transport included."""
    layout = rotated_surface(5)
    lines = []
    base = replace(ERRORS, injection=np.linspace(2e-4, 2e-3, 49), seepage=0.18, initial=1e-3)
    for name, noise in (
        ("no transport", base),
        ("reset removes half", replace(base, reset_removes=0.5)),
        ("once per round", base.at_granularity("once per round", layout)),
    ):
        memory = simulate(layout, "Z", 20, shots, noise, np.random.default_rng(seed))
        expected = expected_leaked(layout, noise, 20)
        z = (memory.leaked - expected) / np.sqrt(expected * (1 - expected) / shots)
        # Rounds of one qubit are correlated; the last round of every qubit is not.
        statistic = (z[-1] ** 2).sum()
        limit = chi2.isf(FALSE_ALARM, z.shape[1])
        lines.append(
            (
                f"population of 49 qubits after 20 rounds, {name}",
                f"chi-square {statistic:.0f}",
                f"< {limit:.0f}",
                bool(statistic < limit),
            )
        )
    moving = replace(base, transport=0.1)
    memory = simulate(layout, "Z", 20, shots, moving, np.random.default_rng(seed + 1))
    ratio = memory.leaked[-1].mean() / expected_leaked(layout, moving, 20)[-1].mean()
    lines.append(
        (
            "mean population with 10 % transport over its mean-field form",
            f"{ratio:.3f}",
            "within 2 % (neglects correlations)",
            bool(abs(ratio - 1) < 0.02),
        )
    )
    return lines


def readout(seed: int) -> list[Line]:
    """Compare reference devices with the figures of the prototype study."""
    lines = []
    rng = np.random.default_rng(seed)
    printed = {"good": 0.9961, "average": 0.982, "poor": 0.959}
    for name, figure in printed.items():
        qubit = REFERENCE[name]
        starts = rng.integers(0, 3, 2_000_000).astype(np.uint8)
        seen = (nearest_states(qubit, points(qubit, starts, rng), 1 / 3) == starts).mean()
        lines.append(
            (
                f"{name} device: true-start assignment",
                f"{seen:.4f}",
                f"{figure} +- 1e-3",
                bool(abs(seen - figure) < 1e-3),
            )
        )
    return lines


def consequences(shots: int, seed: int) -> list[Line]:
    """Show what a leaked data qubit does to its checks: fair coins under both models."""
    lines = []
    layout = rotated_surface(5)
    for depolarise in (0.0, 1.0):
        noise = MemoryNoise(0.0, 0.0, depolarise=depolarise)
        memory = simulate(
            layout, "Z", 5, shots, noise, np.random.default_rng(seed), Injected("D12", 2)
        )
        events = detection_events(
            bits_of(memory.states),
            bits_of(memory.final_states),
            memory.prepared,
            layout,
            "Z",
            reset=True,
        )
        near = layout.adjacency[:, 12]
        inside = events[:, 2:5][:, :, near].mean(axis=0)
        worst = np.abs(inside - 0.5).max() / (0.5 / np.sqrt(shots))
        limit = norm.isf(FALSE_ALARM / 2 / inside.size)
        lines.append(
            (
                f"checks of a leaked data qubit, depolarise {depolarise:.0f}: coins",
                f"{worst:.1f} sigma at worst",
                f"< {limit:.1f}",
                bool(worst < limit),
            )
        )
    return lines


def share_errors(seed: int) -> list[Line]:
    """Check that the stated error of the counterfactual share is its real spread."""
    layout = rotated_surface(3)
    noise = replace(ERRORS, injection=5e-4, seepage=0.18)
    setting = Setting(layout, "Z", noise)
    rng = np.random.default_rng(seed)
    repeats = 40

    def decoder(rounds: int):
        return matching_decoder(layout, "Z", rounds).decode

    found = [share_truth(setting, (3, 7, 11, 15), 6000, decoder, rng) for _ in range(repeats)]
    values = np.array([one.value for one in found])
    stated = np.sqrt(np.mean([one.error**2 for one in found]))
    ratio = values.std(ddof=1) / stated
    low, high = np.sqrt(
        chi2.ppf([FALSE_ALARM / 2, 1 - FALSE_ALARM / 2], repeats - 1) / (repeats - 1)
    )
    return [
        (
            f"share {values.mean():.3f}: spread of {repeats} truths over their stated error",
            f"{ratio:.2f}",
            f"{low:.2f} to {high:.2f}",
            bool(low < ratio < high),
        )
    ]


def speed() -> list[Line]:
    """Measure rounds of a shot per second at distance 5, with leakage."""
    layout = rotated_surface(5)
    noise = replace(ERRORS, injection=5e-4, seepage=0.18)
    rng = np.random.default_rng(1)
    simulate(layout, "Z", 25, 1024, noise, rng)
    start = time.perf_counter()
    simulate(layout, "Z", 25, 1 << 15, noise, rng)
    rate = 25 * (1 << 15) / (time.perf_counter() - start)
    return [("rounds of a shot per second, distance 5", f"{rate:.3g}", "> 1e5", rate > 1e5)]


def main() -> int:
    """Print measured against required; return 1 if a line fails."""
    seed = int(np.random.SeedSequence().generate_state(1)[0] % 2**31)
    print(f"seed {seed}")
    lines: list[Line] = []
    harder = replace(ERRORS, two_qubit=5e-2)
    cases: list[tuple[Layout, Basis, MemoryNoise, int]] = [
        (rotated_surface(3), "Z", ERRORS, 1 << 20),
        (rotated_surface(3), "X", ERRORS, 1 << 20),
        (rotated_surface(5), "Z", ERRORS, 1 << 18),
        (rotated_surface(5), "X", ERRORS, 1 << 18),
        (repetition(5), "Z", harder, 1 << 18),
    ]
    for layout, basis, noise, shots in cases:
        lines += outside(layout, basis, noise, shots, seed)
    lines += populations(1 << 19, seed)
    lines += readout(seed)
    lines += consequences(1 << 17, seed)
    lines += share_errors(seed)
    lines += speed()
    for what, measured, required, holds in lines:
        print(f"{'ok  ' if holds else 'FAIL'}  {what}: {measured}  (required {required})")
    return int(not all(holds for *_, holds in lines))


if __name__ == "__main__":
    sys.exit(main())
