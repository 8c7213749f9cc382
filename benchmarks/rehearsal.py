"""Speed of the memory rehearsal, as ratios to an outside sampler in the same run.

The outside reference samples detection events of the same error-only circuit; it stores bits, knows
no leakage and hands out no readings, so it does less. A ratio above 1 means that ours is faster.
"""

from __future__ import annotations

import sys
import time
from collections.abc import Callable
from pathlib import Path

import numpy as np
import stim

from leakpipe.codes.rotated import rotated_surface
from leakpipe.rehearsal.device import REFERENCE
from leakpipe.rehearsal.memory import simulate
from leakpipe.rehearsal.noise import MemoryNoise
from leakpipe.rehearsal.readout import points, traces

sys.path.insert(0, str(Path(__file__).parents[1] / "tests" / "rehearsal"))

ROUNDS = 25
SHOTS = 1 << 15
REPEATS = 3
REQUIRED_ROUND_SHOTS = 100_000
"""Rounds of a shot per second and core at distance 5 (the acceptance figure)."""
REQUIRED_RATIO = 0.3
"""Memory with leakage against the outside sampler; ours, so that a slow-down shows."""
REQUIRED_POINTS = 20.0
"""Points drawn directly against points from traces; ours (the study says thousands, counting
simulated trajectories of every shot; traces without jumps are cheaper here)."""


def seconds(work: Callable[[], object]) -> float:
    """Return the best time of a few repeats, compilation left out."""
    work()
    times = []
    for _ in range(REPEATS):
        start = time.perf_counter()
        work()
        times.append(time.perf_counter() - start)
    return min(times)


def main() -> int:
    """Print the ratios; return 0 if they hold."""
    from rehearsal_stim import circuit_of

    errors = MemoryNoise(idle=2e-3, reset=1e-3, measurement=1e-2)
    leaky = MemoryNoise(idle=2e-3, reset=1e-3, measurement=1e-2, injection=5e-4, seepage=0.18)
    failed = False
    for distance in (3, 5):
        layout = rotated_surface(distance)
        circuit: stim.Circuit = circuit_of(layout, "Z", ROUNDS, errors)
        sampler = circuit.compile_detector_sampler(seed=1)
        theirs = seconds(lambda s=sampler: s.sample(SHOTS))
        for name, noise in (("errors only", errors), ("with leakage", leaky)):
            rng = np.random.default_rng(2)
            ours = seconds(
                lambda lay=layout, n=noise, r=rng: simulate(lay, "Z", ROUNDS, SHOTS, n, r)
            )
            speed = SHOTS * ROUNDS / ours
            ratio = theirs / ours
            print(
                f"distance {distance}, {name}: {speed / 1e6:.1f} M rounds of a shot per second, "
                f"{ratio:.2f} times the outside sampler"
            )
            failed |= ratio < REQUIRED_RATIO
            failed |= distance == 5 and speed < REQUIRED_ROUND_SHOTS
    qubit = REFERENCE["average"]
    rng = np.random.default_rng(3)
    starts = rng.integers(0, 3, 1 << 14).astype(np.uint8)
    direct = seconds(lambda: points(qubit, starts, rng))
    whole = seconds(lambda: traces(qubit, starts, rng) @ np.ones(2))
    print(
        f"points: {len(starts) / direct / 1e6:.1f} M per second, {whole / direct:.0f} times faster "
        f"than through traces"
    )
    failed |= whole / direct < REQUIRED_POINTS
    return int(failed)


if __name__ == "__main__":
    sys.exit(main())
