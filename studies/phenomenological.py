"""A fast phenomenological memory for studies of the rates: detection events without circuits.

Each qubit leaks and seeps on its own (two states per round); while it is leaked, each check it
touches is flipped with probability v per round (v = 1/2 randomises it). Ordinary errors are pairs
of events: one data error seen by the checks of one type in one layer (space), a wrong outcome
(time) and a data error between two checks' gates (diagonal). No code is shared with the estimators.
"""

from __future__ import annotations

from dataclasses import dataclass, field, replace
from typing import Literal

import numpy as np
from numba import njit
from numpy.typing import NDArray

from leakpipe.codes.layout import Layout
from leakpipe.codes.rotated import rotated_surface
from leakpipe.detection.sums import DetectionSums, count
from leakpipe.recordings.shots import Frame

FloatArray = NDArray[np.float64]
Observation = Literal["detector random", "outcome random"]

SPACE, TIME, DIAGONAL = 0.018, 0.022, 0.016
"""Probabilities per round: a check of weight 4 then fires in .15 of its rounds without leakage."""


TOGETHER = 1_000
"""Shots drawn together, so that their events stay in a core's cache."""


@dataclass(frozen=True)
class Truth:
    """What a phenomenological memory does.

    Attributes
    ----------
    layout
        Code.
    rounds
        R.
    injection, seepage, start
        (qubit,) G, S per round and leaked population before round 1; data, then measure qubits.
    flip
        v: probability that a leaked qubit flips a check it touches, per round.
    observation
        Whether it flips detection events or outcomes (an outcome enters two events).
    space, time, diagonal
        Probabilities of the error pairs, per round and place.
    course
        (rounds,) factor of the error probabilities by round: heating, transients.
    drift
        Relative size of a slow sine of the error probabilities over the shots (one period).
    """

    layout: Layout
    rounds: int
    injection: FloatArray
    seepage: FloatArray
    start: FloatArray
    flip: float = 0.5
    observation: Observation = "detector random"
    space: float = SPACE
    time: float = TIME
    diagonal: float = DIAGONAL
    course: FloatArray = field(default_factory=lambda: np.ones(0))
    drift: float = 0.0

    @property
    def factors(self) -> FloatArray:
        """Factor of the error probabilities in each round."""
        return self.course if len(self.course) else np.ones(self.rounds)

    @property
    def populations(self) -> FloatArray:
        """Leaked population before round 1 and after rounds 1..R, (R + 1, qubit)."""
        memory = 1 - self.injection - self.seepage
        total = self.injection + self.seepage
        level = np.where(total > 0, self.injection / np.where(total > 0, total, 1), self.start)
        power = memory ** np.arange(self.rounds + 1)[:, None]
        return np.asarray(level + (self.start - level) * power)


def usual(distance: int, rounds: int = 25, *, level: float = 0.0105, tau: float = 5.0) -> Truth:
    """Return a rotated code whose qubits all leak alike, cold at the start."""
    layout = rotated_surface(distance)
    qubits = len(layout.data) + len(layout.measure)
    gone = 1 - np.exp(-1 / tau)
    return Truth(
        layout,
        rounds,
        np.full(qubits, level * gone),
        np.full(qubits, (1 - level) * gone),
        np.zeros(qubits),
    )


def without_leakage(truth: Truth, course: FloatArray | None = None) -> Truth:
    """Return the same memory without leakage, its errors following `course` over rounds."""
    nothing = np.zeros_like(truth.injection)
    course = truth.course if course is None else course
    return replace(truth, injection=nothing, start=nothing, course=course)


def _mechanisms(truth: Truth) -> tuple[NDArray[np.int64], FloatArray]:
    """Return rows (check, layers later, other check or -1, layers later) and probabilities."""
    rows, rates = [], []
    layout = truth.layout
    for data in range(len(layout.data)):
        for kind in ("Z", "X"):
            seen = [
                c
                for c in np.flatnonzero(layout.adjacency[:, data]).tolist()
                if layout.checks[c] == kind
            ]
            if not seen:
                continue
            rows.append((seen[0], 0, seen[1] if len(seen) > 1 else -1, 0))
            rates.append(truth.space)
            rows.append((seen[0], 0, seen[1] if len(seen) > 1 else -1, 1))
            rates.append(truth.diagonal)
    for check in range(len(layout.measure)):
        rows.append((check, 0, check, 1))
        rates.append(truth.time)
    return np.array(rows, dtype=np.int64), np.array(rates)


@dataclass(frozen=True)
class Shots:
    """Simulated shots: events (shot, layer, check), leaked (shot, round, measure), closing."""

    events: NDArray[np.uint8]
    leaked: NDArray[np.bool_]
    closing: NDArray[np.bool_]


def simulate(truth: Truth, shots: int, rng: np.random.Generator) -> Shots:
    """Draw shots: events of layers 1..R + 1 (the last only half filled), leaked states."""
    layout = truth.layout
    checks, data = len(layout.measure), len(layout.data)
    events = np.zeros((shots, truth.rounds + 1, checks), dtype=np.uint8)
    leaked = np.zeros((shots, truth.rounds, data + checks), dtype=np.uint8)
    rows, rates = _mechanisms(truth)
    slow = 1 + truth.drift * np.sin(2 * np.pi * np.arange(shots) / shots)
    touched = np.full((data + checks, 4), -1, dtype=np.int64)
    for qubit in range(data):
        seen = np.flatnonzero(layout.adjacency[:, qubit])
        touched[qubit, : len(seen)] = seen
    touched[data:, 0] = np.arange(checks)
    outcome = truth.observation == "outcome random"
    rates_of_leakage = (truth.injection, truth.seepage, truth.start, truth.flip, outcome)
    for first in range(0, shots, TOGETHER):
        some = slice(first, first + TOGETHER)
        _errors(events[some], rows, rates, truth.factors, slow[some], rng)
        _leakage(events[some], leaked[some], touched, *rates_of_leakage, rng)
    return Shots(events, leaked[:, :, data:].astype(bool), leaked[:, -1, :data].astype(bool))


@njit(cache=True, nogil=True)
def _errors(events, rows, rates, factors, slow, rng):  # type: ignore[no-untyped-def]
    """Flip the events of every error; the next error is found by a geometric step."""
    shots, layers, _ = events.shape
    rounds = layers - 1
    highest = factors.max() * slow.max()
    for m in range(len(rates)):
        most = rates[m] * highest
        if most <= 0:
            continue
        at = -1
        scale = 1 / np.log1p(-most)
        while True:
            at += 1 + int(np.log(1 - rng.random()) * scale)
            if at >= shots * rounds:
                break
            i, r = at // rounds, at % rounds
            if rng.random() * highest < factors[r] * slow[i]:
                events[i, r + rows[m, 1], rows[m, 0]] ^= 1
                if rows[m, 2] >= 0:
                    events[i, r + rows[m, 3], rows[m, 2]] ^= 1


@njit(cache=True, nogil=True)
def _leakage(events, leaked, touched, injection, seepage, start, flip, outcome, rng):  # type: ignore[no-untyped-def]
    """Draw each qubit's leaked stretches and flip what they touch."""
    shots, layers, _ = events.shape
    rounds = layers - 1
    for q in range(len(injection)):
        if injection[q] <= 0 and start[q] <= 0:
            continue
        scale = 1 / np.log1p(-injection[q]) if injection[q] > 0 else -np.inf
        for i in range(shots):
            at, inside = 0, start[q] > 0 and rng.random() < start[q]
            while True:
                # `at` rounds have passed; the state after the next change decides round at + 1.
                if not inside:
                    if injection[q] <= 0:
                        break
                    at += 1 + int(np.log(1 - rng.random()) * scale)
                    if at > rounds:
                        break
                    inside = True
                else:
                    at += 1
                    if at > rounds:
                        break
                    if rng.random() < seepage[q]:
                        inside = False
                        continue
                leaked[i, at - 1, q] = 1
                for k in range(touched.shape[1]):
                    c = touched[q, k]
                    if c >= 0 and rng.random() < flip:
                        events[i, at - 1, c] ^= 1
                        if outcome:
                            events[i, at, c] ^= 1


def expected_detection(truth: Truth) -> FloatArray:
    """Return the exact detection probability of layers 2..R, (R - 1, check), without drift."""
    rows, rates = _mechanisms(truth)
    layout, data = truth.layout, len(truth.layout.data)
    clear = np.ones((truth.rounds + 1, len(layout.measure)))
    for (one, first, other, second), rate in zip(rows, rates, strict=True):
        for check, later in ((one, first), (other, second)):
            if check >= 0:
                clear[later : later + truth.rounds, check] *= 1 - 2 * rate * truth.factors
    now, before = truth.populations[1:], truth.populations[:-1]
    turn = 1 - 2 * truth.flip
    if truth.observation == "outcome random":
        both = before * (1 - truth.seepage)
        sign = 1 + (turn - 1) * (now + before - 2 * both) + (turn**2 - 1) * both
    else:
        sign = 1 + (turn - 1) * now
    for check in range(len(layout.measure)):
        qubits = [*layout.touches[check], data + check]
        clear[: truth.rounds, check] *= sign[:, qubits].prod(axis=1)
    return (1 - clear[1 : truth.rounds]) / 2


def reduced(
    truth: Truth, shots: int, rng: np.random.Generator, name: str = "memory"
) -> tuple[Frame, DetectionSums]:
    """Simulate one recording and count it the way the detection stage does."""
    frame = Frame(name, truth.layout, "Z", truth.rounds, shots)
    drawn = simulate(truth, shots, rng)
    pairs = np.array(truth.layout.sharing_pairs, dtype=np.int64)
    valid = np.ones(drawn.events.shape, dtype=bool)
    batch = frame.batch_of(0, shots)
    return frame, count(drawn.events, valid, drawn.leaked, drawn.closing, pairs, batch)
