"""Speed of the detection sums: shots per second on one core, and ratio to the numpy twin.

Counts events, all lag products of checks that share a qubit, block products and leaked readings of
25 rounds; events are made from states in the same run.
"""

from __future__ import annotations

import time
from collections.abc import Callable

import numpy as np

from leakpipe.codes.rotated import rotated_surface
from leakpipe.detection.stage import events_of, partial
from leakpipe.detection.sums import count, count_numpy
from leakpipe.recordings.shots import Frame, Readings

ROUNDS = 25
REPEATS = 5
REQUIRED = {3: 200_000.0, 5: 40_000.0}
"""Shots per second by distance: 200k at 3 (acceptance figure of the stage); at 5 there are five
times as many products (ours)."""
REQUIRED_RATIO = 10.0
"""Kernel against its twin (ours, so that a slow-down shows)."""


def seconds(work: Callable[[], object], repeats: int = REPEATS) -> float:
    """Return the best time of a few repeats."""
    times = []
    for _ in range(repeats):
        start = time.perf_counter()
        work()
        times.append(time.perf_counter() - start)
    return min(times)


def main() -> int:
    """Print speeds; return 0 if they hold."""
    rng = np.random.default_rng(1)
    failed = False
    for distance, required in REQUIRED.items():
        layout = rotated_surface(distance)
        shots = 20_000 if distance == 3 else 5_000
        checks, data = len(layout.measure), len(layout.data)
        states = rng.choice(3, (shots, ROUNDS, checks), p=[0.93, 0.06, 0.01]).astype(np.uint8)
        final = rng.choice(3, (shots, data), p=[0.93, 0.06, 0.01]).astype(np.uint8)
        none = np.zeros((shots, 1, 1), np.float32)
        readings = Readings(0, states, none, final, none[0], np.zeros((shots, data), np.uint8))
        frame = Frame("bench", layout, "Z", ROUNDS, shots)
        partial(readings, frame)
        speed = shots / seconds(lambda r=readings, f=frame: partial(r, f))
        events, valid = events_of(readings, frame)
        pairs = np.array(layout.sharing_pairs, dtype=np.int64)
        inputs = (events, valid, states == 2, final == 2, pairs, frame.batch_of(0, shots))
        ours = seconds(lambda i=inputs: count(*i))
        theirs = seconds(lambda i=inputs: count_numpy(*i), 1)
        print(
            f"distance {distance}: {speed / 1e3:.0f}k shots per second, kernel "
            f"{theirs / ours:.0f} times its twin, density {events.mean():.3f}"
        )
        failed |= speed < required or theirs / ours < REQUIRED_RATIO
    return int(failed)
