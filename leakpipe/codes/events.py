"""Check values and detection events from measured bits.

Signs (docs/conventions.md): a detection event of layer r is the change of a check's value between
rounds r - 1 and r. Layer 1 compares with the parity of the starting bits, layer R + 1 compares the
closing data readout with round R; both exist only for checks of the recording's basis.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from leakpipe.codes.layout import Basis, Layout

MISSING = 255
"""State code of a reading that was not recorded or is not finite."""


def bits_of(states: NDArray[np.uint8], leaked_reads: int = 1) -> NDArray[np.uint8]:
    """Return the bit that each state contributes to a parity.

    Parameters
    ----------
    states
        States 0, 1, 2 or `MISSING`, any shape.
    leaked_reads
        The bit of a leaked reading. A missing reading counts as 0; its fraction is a finding of the
        readout stage.
    """
    table = np.zeros(256, dtype=np.uint8)
    table[1], table[2] = 1, leaked_reads
    return table[states]


def parities(bits: NDArray[np.uint8], layout: Layout) -> NDArray[np.uint8]:
    """Return the parity of each check's data qubits: (shot, data) -> (shot, check)."""
    out = np.zeros((bits.shape[0], len(layout.measure)), dtype=np.uint8)
    for check, qubits in enumerate(layout.touches):
        for qubit in qubits:
            out[:, check] ^= bits[:, qubit]
    return out


def logical_parity(bits: NDArray[np.uint8], layout: Layout, basis: Basis) -> NDArray[np.uint8]:
    """Return the parity of the logical operator's data qubits: (shot, data) -> (shot,)."""
    support = list(layout.logical[basis])
    return np.asarray(np.bitwise_xor.reduce(bits[:, support], axis=1), dtype=np.uint8)


def detection_events(
    bits: NDArray[np.uint8],
    closing_bits: NDArray[np.uint8],
    prepared: NDArray[np.uint8],
    layout: Layout,
    basis: Basis,
    *,
    reset: bool,
) -> NDArray[np.uint8]:
    """Return the detection events of every layer.

    Parameters
    ----------
    bits
        Measured bits of the measure qubits, (shot, round, check).
    closing_bits
        Bits of the closing data readout, (shot, data).
    prepared
        Starting bits, (shot, data).
    reset
        True if measure qubits are reset each round; otherwise a check's value is the XOR of two
        successive bits (the bit before round 1 is 0).

    Returns
    -------
    events
        (shot, round + 1, check) uint8; layers 1 and R + 1 are 0 for checks of the other basis (they
        have no definite value there: `defined_layers` says which).
    """
    values = bits
    if not reset:
        values = bits.copy()
        values[:, 1:] ^= bits[:, :-1]
    shots, rounds, checks = bits.shape
    events = np.empty((shots, rounds + 1, checks), dtype=np.uint8)
    events[:, 0] = values[:, 0] ^ parities(prepared, layout)
    events[:, 1:rounds] = values[:, 1:] ^ values[:, :-1]
    events[:, rounds] = parities(closing_bits, layout) ^ values[:, -1]
    other = ~layout.of_basis(basis)
    events[:, 0, other] = 0
    events[:, rounds, other] = 0
    return events


def defined_layers(layout: Layout, basis: Basis, rounds: int) -> NDArray[np.bool_]:
    """Return which (layer, check) entries of `detection_events` have a definite expectation."""
    defined = np.ones((rounds + 1, len(layout.measure)), dtype=bool)
    other = ~layout.of_basis(basis)
    defined[0, other] = False
    defined[rounds, other] = False
    return defined
