"""Readings of known states: integrated points drawn exactly, or whole traces.

With additive Gaussian noise and linear weights an integrated point is the weighted field plus one
Gaussian number per quadrature. Without a jump the weighted field is one number per state, so a
trajectory is followed only for the shots whose qubit jumps during the window.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from leakpipe.rehearsal.device import ReadoutQubit
from leakpipe.rehearsal.resonator import follow

MAX_JUMPS = 4
"""Jumps followed per window; five of them have a probability below 1e-6 even on a poor device."""

CHUNK = 1 << 14
"""Trajectories followed at a time, to bound memory."""

TRACE_COUNTS = 64.0
"""Digitiser counts per unit of the field on resonance: noise of tens of counts."""

States = NDArray[np.uint8]


def jump_probability(qubit: ReadoutQubit) -> NDArray[np.float64]:
    """Return the probability that a qubit starting in each state jumps in the window, (3,)."""
    return np.asarray(-np.expm1(-qubit.jump_rates.sum(axis=1) * qubit.window_ns / 1000))


def draw_jumps(
    qubit: ReadoutQubit, starts: NDArray[np.int64], rng: np.random.Generator
) -> tuple[NDArray[np.float64], NDArray[np.int64]]:
    """Draw jump times and visited states for shots known to jump at least once.

    Returns
    -------
    times
        (shot, MAX_JUMPS) in microseconds, infinite where there is no further jump.
    visited
        (shot, MAX_JUMPS) state after each jump.
    """
    rates = qubit.jump_rates
    total = rates.sum(axis=1)
    window = qubit.window_ns / 1000
    times = np.full((len(starts), MAX_JUMPS), np.inf)
    visited = np.zeros((len(starts), MAX_JUMPS), dtype=np.int64)
    # The first jump is conditioned on falling inside the window: invert the truncated exponential.
    inside = -np.expm1(-total[starts] * window)
    clock = -np.log1p(-rng.random(len(starts)) * inside) / total[starts]
    state = starts
    for jump in range(MAX_JUMPS):
        happens = clock < window
        times[happens, jump] = clock[happens]
        downward = rng.random(len(starts)) * total[state] < np.tril(rates).sum(axis=1)[state]
        state = np.where(happens, np.where(downward, state - 1, state + 1), state)
        visited[:, jump] = state
        with np.errstate(divide="ignore"):
            clock = clock + rng.exponential(size=len(starts)) / total[state]
    return times, visited


def _jumping(qubit: ReadoutQubit, states: States, rng: np.random.Generator) -> NDArray[np.int64]:
    """Return which shots of a flat array of states jump in the window."""
    return np.flatnonzero(rng.random(len(states)) < jump_probability(qubit)[states])


def fields_with_jumps(
    qubit: ReadoutQubit, starts: NDArray[np.int64], rng: np.random.Generator
) -> NDArray[np.complex128]:
    """Return the field of shots known to jump, (shot, sample)."""
    out = np.empty((len(starts), qubit.samples), dtype=complex)
    times, visited = draw_jumps(qubit, starts, rng)
    follow(starts, times, visited, qubit.decay_rates, qubit.steady_fields, qubit.step_us, out)
    return out


def points(qubit: ReadoutQubit, states: States, rng: np.random.Generator) -> NDArray[np.float32]:
    """Return integrated points of a qubit that starts its window in the given states.

    Parameters
    ----------
    qubit
        Readout of the qubit.
    states
        Start states 0, 1, 2, any shape.

    Returns
    -------
    points
        Shape of `states` with a last axis I, Q, in the digitiser's units.
    """
    flat = np.ascontiguousarray(states).reshape(-1)
    # Exact without jumps; those who jump are replaced below.
    mean = qubit.to_signal(qubit.fields @ qubit.weights)
    table = np.stack([mean.real, mean.imag], axis=1).astype(np.float32)
    out = rng.standard_normal((len(flat), 2), dtype=np.float32)
    out *= np.float32(qubit.integrated_noise * qubit.gain)
    noise_free = table[flat]
    jumping = _jumping(qubit, flat, rng)
    for first in range(0, len(jumping), CHUNK):
        part = jumping[first : first + CHUNK]
        field = fields_with_jumps(qubit, flat[part].astype(np.int64), rng) @ qubit.weights
        signal = qubit.to_signal(field)
        noise_free[part] = np.stack([signal.real, signal.imag], axis=1)
    out += noise_free
    return out.reshape(*states.shape, 2)


def traces(
    qubit: ReadoutQubit,
    states: States,
    rng: np.random.Generator,
    *,
    rail: float | None = None,
) -> NDArray[np.int16]:
    """Return digitised traces of a qubit that starts its window in the given states.

    Parameters
    ----------
    qubit
        Readout of the qubit.
    states
        Start states 0, 1, 2, any shape.
    rail
        Largest magnitude the digitiser can hold, in the signal's units; None for the full range of
        16 bits.

    Returns
    -------
    traces
        Shape of `states` with last axes sample and quadrature, in counts (`TRACE_COUNTS` per unit).
    """
    from scipy.signal import lfilter

    flat = np.ascontiguousarray(states).reshape(-1)
    out = np.empty((len(flat), qubit.samples, 2), dtype=np.int16)
    quiet = qubit.fields
    kept = qubit.noise_correlation
    limit = 32767.0 if rail is None else rail * TRACE_COUNTS
    for first in range(0, len(flat), CHUNK):
        part = flat[first : first + CHUNK]
        field = quiet[part]
        jumping = _jumping(qubit, part, rng)
        if len(jumping):
            field[jumping] = fields_with_jumps(qubit, part[jumping].astype(np.int64), rng)
        noise = rng.standard_normal((*field.shape, 2))
        if kept:
            # Stationary autoregression: the first sample already has the full variance.
            noise[:, 1:] *= np.sqrt(1 - kept**2)
            noise = lfilter([1.0], [1.0, -kept], noise, axis=1)
        signal = qubit.to_signal(field)
        values = np.stack([signal.real, signal.imag], axis=-1) + noise * qubit.noise * qubit.gain
        counts = np.rint(values * TRACE_COUNTS)
        out[first : first + CHUNK] = np.clip(counts, -limit, limit).astype(np.int16)
    return out.reshape(*states.shape, qubit.samples, 2)


def prepare(qubit: ReadoutQubit, prepared: int, shots: int, rng: np.random.Generator) -> States:
    """Return true start states of shots prepared in a state, with preparation errors."""
    chances = np.array(qubit.preparation[prepared])
    return rng.choice(3, size=shots, p=chances / chances.sum()).astype(np.uint8)


def nearest_states(
    qubit: ReadoutQubit, readings: NDArray[np.float32], prior_leaked: float = 0.01
) -> States:
    """Return hard labels as a lab's own classifier would give them.

    The label of the nearest mean, with the leaked mean at the disadvantage that its prior gives.

    Parameters
    ----------
    qubit
        Readout with the true means.
    readings
        Integrated points, last axis I, Q.
    prior_leaked
        Working prior of state 2; 0 and 1 share the rest.
    """
    mean = qubit.to_signal(qubit.fields @ qubit.weights)
    spread = qubit.integrated_noise * qubit.gain
    prior = np.array([(1 - prior_leaked) / 2, (1 - prior_leaked) / 2, prior_leaked])
    centres = np.stack([mean.real, mean.imag], axis=1).astype(np.float32)
    score = np.stack(
        [
            ((readings - centre) ** 2).sum(axis=-1) / (2 * spread**2) - np.log(weight)
            for centre, weight in zip(centres, prior, strict=True)
        ]
    )
    return np.asarray(score.argmin(axis=0), dtype=np.uint8)
