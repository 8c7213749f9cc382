"""Readout of a synthetic device: one set of physical numbers per qubit, and reference sets."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from leakpipe.rehearsal.resonator import field_without_jumps

LADDER = 1.8
"""Decay 2 -> 1 over decay 1 -> 0; 2 for a harmonic ladder, less for a weakly anharmonic qubit.
From the prototype study of the readout."""

RING_UP_SKIPPED = 0.2
"""Part of the window that the integration leaves out (prototype study of the readout)."""

ANGULAR = 2 * np.pi
"""Megahertz to radians per microsecond."""


@dataclass(frozen=True)
class ReadoutQubit:
    """Readout of one qubit.

    Attributes
    ----------
    kappa_mhz
        Linewidth of the resonator, kappa / 2 pi.
    pulls_mhz
        Shift of the resonator by states 0, 1, 2, relative to state 0.
    drive_mhz
        Detuning of state 0's resonance from the drive.
    window_ns, sample_ns
        Length of the readout and of one sample.
    t1_us
        Lifetime of state 1; state 2 falls to 1 at `LADDER` / t1.
    up_per_us
        Rates 0 -> 1 and 1 -> 2 while the resonator is driven.
    noise
        Standard deviation of one sample in each quadrature, in units of the field on resonance.
    noise_correlation
        Correlation of successive samples' noise (first-order autoregression).
    gain, phase_degrees, offset
        Signal = gain exp(i phase) field + offset, in the digitiser's units; the noise is scaled
        alike.
    preparation
        (3, 3) probability of true start state given prepared state.
    """

    kappa_mhz: float
    pulls_mhz: tuple[float, float, float]
    drive_mhz: float
    window_ns: float
    t1_us: float
    up_per_us: tuple[float, float]
    noise: float
    sample_ns: float = 10.0
    noise_correlation: float = 0.0
    gain: float = 1.0
    phase_degrees: float = 0.0
    offset: complex = 0j
    preparation: tuple[tuple[float, float, float], ...] = (
        (0.99, 0.0099, 0.0001),
        (0.015, 0.983, 0.002),
        (0.005, 0.025, 0.970),
    )

    @property
    def samples(self) -> int:
        """Number of samples in the window."""
        return round(self.window_ns / self.sample_ns)

    @property
    def step_us(self) -> float:
        """Sample period in microseconds."""
        return self.sample_ns / 1000

    @property
    def decay_rates(self) -> NDArray[np.complex128]:
        """Rates r_s of the field per microsecond, (3,)."""
        detuning = self.drive_mhz + np.array(self.pulls_mhz)
        return np.asarray(ANGULAR * (self.kappa_mhz / 2 + 1j * detuning))

    @property
    def steady_fields(self) -> NDArray[np.complex128]:
        """Steady field of each state, (3,)."""
        return np.asarray(ANGULAR * self.kappa_mhz / 2 / self.decay_rates)

    @property
    def jump_rates(self) -> NDArray[np.float64]:
        """Rates per microsecond from state (row) to state (column), (3, 3), zero diagonal."""
        down = 1 / self.t1_us
        up01, up12 = self.up_per_us
        return np.array([[0, up01, 0], [down, 0, up12], [0, LADDER * down, 0]])

    @property
    def fields(self) -> NDArray[np.complex128]:
        """Field of each state without jumps, (3, sample)."""
        return field_without_jumps(self.decay_rates, self.steady_fields, self.step_us, self.samples)

    @property
    def weights(self) -> NDArray[np.float64]:
        """Weights of the device's own integration: a mean without the ring-up, (sample,)."""
        weights = np.ones(self.samples)
        weights[: round(RING_UP_SKIPPED * self.samples)] = 0
        return np.asarray(weights / weights.sum())

    @property
    def integrated_noise(self) -> float:
        """Standard deviation of an integrated point per quadrature, in units of the field.

        The variance of a weighted sum of autoregressive noise is sum_jk w_j w_k c^|j-k|.
        """
        lags = np.abs(np.subtract.outer(np.arange(self.samples), np.arange(self.samples)))
        correlation = np.power(self.noise_correlation, lags)
        return float(self.noise * np.sqrt(self.weights @ correlation @ self.weights))

    def to_signal(self, field: NDArray[np.complex128]) -> NDArray[np.complex128]:
        """Return the digitised signal of a field."""
        turn = np.exp(1j * np.deg2rad(self.phase_degrees))
        return np.asarray(self.gain * turn * field + self.offset)

    @property
    def separations(self) -> NDArray[np.float64]:
        """Distances of the integrated means 01, 12, 02 in units of the noise."""
        means = self.fields @ self.weights
        gaps = np.abs([means[0] - means[1], means[1] - means[2], means[0] - means[2]])
        return np.asarray(gaps / self.integrated_noise)


REFERENCE: Mapping[str, ReadoutQubit] = {
    "good": ReadoutQubit(6.0, (0.0, -3.0, -5.2), 3.72, 500.0, 100.0, (1e-4, 1.8e-4), 0.617),
    "average": ReadoutQubit(4.0, (0.0, -2.0, -3.4), 2.60, 700.0, 50.0, (2e-4, 7.2e-4), 0.9045),
    "poor": ReadoutQubit(2.5, (0.0, -1.0, -1.6), 1.30, 1000.0, 25.0, (4e-4, 3.5e-3), 0.934),
}
"""Reference devices of the prototype study of the readout: linewidths, pulls, windows, lifetimes,
separations and jump probabilities are its numbers. The drive frequencies and noise are ours, set
so that the separations come out; the preparation errors are ours (invented, ordinary size)."""


@dataclass(frozen=True)
class Spread:
    """How much qubits of one device differ (ours; relative standard deviations unless named).

    Attributes
    ----------
    t1, noise, pulls
        Lognormal spread of lifetime, noise and pulls.
    offset
        Standard deviation of the offset per quadrature, in units of the field.
    phase
        Whether every qubit has a random phase.
    """

    t1: float = 0.2
    noise: float = 0.08
    pulls: float = 0.05
    offset: float = 0.3
    phase: bool = True


@dataclass(frozen=True)
class Drift:
    """Change of the readout between calibration and run.

    Attributes
    ----------
    rotation_degrees
        Rotation of all signals around zero signal.
    gain
        Factor on the signal.
    offset
        Added to the signal, in units of the integrated noise.
    pull_mhz
        Shift of the resonator frequency.
    """

    rotation_degrees: float = 0.0
    gain: float = 1.0
    offset: complex = 0j
    pull_mhz: float = 0.0

    def apply(self, qubit: ReadoutQubit) -> ReadoutQubit:
        """Return the drifted qubit."""
        turn = self.gain * np.exp(1j * np.deg2rad(self.rotation_degrees))
        shift = self.offset * qubit.integrated_noise * qubit.gain
        return replace(
            qubit,
            drive_mhz=qubit.drive_mhz + self.pull_mhz,
            gain=qubit.gain * self.gain,
            phase_degrees=qubit.phase_degrees + self.rotation_degrees,
            offset=complex(turn * qubit.offset + shift),
        )


def make_device(
    reference: ReadoutQubit, names: Sequence[str], spread: Spread, rng: np.random.Generator
) -> dict[str, ReadoutQubit]:
    """Return one readout per qubit name, scattered around a reference."""
    device = {}
    _, one, two = reference.pulls_mhz
    for name in names:
        t1, noise, pulls = np.exp(
            rng.standard_normal(3) * np.array([spread.t1, spread.noise, spread.pulls])
        )
        offset = spread.offset * rng.standard_normal(2)
        phase = rng.uniform(-180, 180)
        device[name] = replace(
            reference,
            t1_us=reference.t1_us * float(t1),
            noise=reference.noise * float(noise),
            pulls_mhz=(0.0, float(pulls) * one, float(pulls) * two),
            phase_degrees=float(phase) if spread.phase else reference.phase_degrees,
            offset=complex(*offset),
        )
    return device
