"""What each shot was exposed to: leaked readings of measure qubits, leaked closing readings."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from leakpipe.recordings.shots import Frame, Readings

CLOSING_STEPS = 255
"""Closing posteriors are kept as whole 255ths: an error of 0.2 % of a leaked shot at most."""
MEASURE_STEPS = 1000
"""Summed measure-qubit posteriors are kept as whole thousandths of a leaked round."""


@dataclass(frozen=True)
class ExposureSums:
    """Exposures of every shot of one recording, in order, as small integers.

    Attributes
    ----------
    measure
        (shot,) uint32: posterior number of leaked rounds, summed over measure qubits, in 1/1000.
    closing
        (shot, data) uint8: posterior of each data qubit to be leaked at the end, in 1/255.
    """

    measure: NDArray[np.uint32]
    closing: NDArray[np.uint8]


def partial(readings: Readings, frame: Frame) -> ExposureSums:
    """Return the exposures of some shots."""
    total = readings.leak.sum(axis=(1, 2), dtype=np.float64)
    return ExposureSums(
        np.rint(total * MEASURE_STEPS).astype(np.uint32),
        np.rint(readings.final_leak * CLOSING_STEPS).astype(np.uint8),
    )


def merge(a: ExposureSums, b: ExposureSums) -> ExposureSums:
    """Join two runs of consecutive shots, `a` before `b`."""
    return ExposureSums(
        np.concatenate([a.measure, b.measure]), np.concatenate([a.closing, b.closing])
    )
