"""Driven readout resonator with a state-dependent pull, exact between jumps of the qubit.

The field obeys da/dt = kappa / 2 - r_s a with the rate r_s = kappa / 2 + i delta_s, in units of
the field that the same drive makes on resonance (Gambetta et al., Phys. Rev. A 76, 012325 (2007),
for two states; a third adds one more pull). It starts empty. Between jumps of the qubit
a(t) = a_s + (a(0) - a_s) exp(-r_s t) with the steady field a_s = kappa / (2 r_s); a jump changes s
and leaves a where it is.

Everything the kernel calls stands in this file: numba's cache does not notice changes elsewhere.
"""

from __future__ import annotations

import numpy as np
from numba import njit
from numpy.typing import NDArray

Complex = NDArray[np.complex128]


@njit(cache=True, nogil=True)
def follow(
    starts: NDArray[np.int64],
    times: NDArray[np.float64],
    visited: NDArray[np.int64],
    rates: Complex,
    steady: Complex,
    step: float,
    out: Complex,
) -> None:
    """Write the field at the middle of every sample, for shots with their jumps.

    Parameters
    ----------
    starts
        (shot,) state at the start of the window.
    times
        (shot, jump) times of the jumps in increasing order, microseconds; infinite where none.
    visited
        (shot, jump) state after each jump.
    rates, steady
        (3,) rate r_s per microsecond and steady field of each state.
    step
        Sample period in microseconds.
    out
        (shot, sample) field, written.
    """
    half = np.exp(-rates * (step / 2))
    full = half * half
    for shot in range(len(starts)):
        state = starts[shot]
        field = 0j
        jump = 0
        for sample in range(out.shape[1]):
            target = (sample + 0.5) * step
            decay = half[state] if sample == 0 else full[state]
            if jump < times.shape[1] and times[shot, jump] <= target:
                clock = max(target - step, 0.0)
                while jump < times.shape[1] and times[shot, jump] <= target:
                    decay = np.exp(-rates[state] * (times[shot, jump] - clock))
                    field = steady[state] + (field - steady[state]) * decay
                    clock = times[shot, jump]
                    state = visited[shot, jump]
                    jump += 1
                decay = np.exp(-rates[state] * (target - clock))
            field = steady[state] + (field - steady[state]) * decay
            out[shot, sample] = field


def field_without_jumps(rates: Complex, steady: Complex, step: float, samples: int) -> Complex:
    """Return the field of each state at the middle of every sample, (3, sample)."""
    middle = (np.arange(samples) + 0.5) * step
    return np.asarray(steady[:, None] * (1 - np.exp(-rates[:, None] * middle)))
