"""Which leaked qubit shows in which check, and how.

Two pictures. In the *circuit* picture a leaked data qubit makes the outcomes of its checks random
(gates with it do nothing but strike the partner); a leaked measure qubit reads the same value all
the time, so its own check hardly fires, but its gates flip its data qubits in every round, and that
makes the detection events of the checks that see those flips random. In the *own check* picture
every leaked qubit, data or measure, flips the checks it touches with probability v per round.
(Derived for leakpipe from the circuit; held against the rehearsal by simulation in studies.)
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from leakpipe.codes.layout import Layout

Picture = Literal["circuit", "own check"]
FloatArray = NDArray[np.float64]

CIRCUIT_SHARE = 0.375
"""Part of a round's injection that a gate sees on average: 0, 1, 2 or 3 of four gates came before
it. A qubit that leaks later in the round shows in the next one."""


@dataclass(frozen=True)
class Visibility:
    """What a leaked qubit does to each check.

    Attributes
    ----------
    strength
        (check, qubit) 2 v: 1 where the check is fully randomised, 0 where it is not touched. Data
        qubits first, then measure qubits.
    by_outcome
        (check, qubit) True where the check's outcome is randomised (two events follow), False where
        the detection event itself is.
    share
        Part of a round's injection that the checks of that round see.
    gap
        Rounds between the outcomes that a detection event compares: 1 with reset, 2 without.
    """

    strength: FloatArray
    by_outcome: NDArray[np.bool_]
    share: float
    gap: int = 1

    def of(self, qubits: NDArray[np.bool_]) -> Visibility:
        """Return the same for some of the qubits, (qubit,) True for those kept."""
        return replace(
            self, strength=self.strength[:, qubits], by_outcome=self.by_outcome[:, qubits]
        )


def visibility(
    layout: Layout,
    picture: Picture,
    *,
    outcome: bool,
    strength: float = 1.0,
    depolarise: float = 0.0,
    reset: bool = True,
) -> Visibility:
    """Return who shows where.

    Parameters
    ----------
    layout
        Code.
    picture
        See the module's head.
    outcome
        Whether a leaked data qubit randomises outcomes or detection events.
    strength
        2 v of every qubit that shows.
    depolarise
        Circuit picture: part of the strikes of a leaked qubit that depolarise its partner fully; the
        others flip it only in the way that the other kind of check notices.
    reset
        Whether measure qubits are reset each round.
    """
    touched = layout.adjacency.astype(float)
    checks, gap = len(layout.measure), 1 if reset else 2
    if picture == "own check":
        table = np.hstack([touched, np.eye(checks)])
        return Visibility(strength * table, np.full(table.shape, outcome), 1.0, gap)
    # A leaked measure qubit of a Z check flips phases of its data, which X checks see, and vice
    # versa; where it depolarises them, checks of its own type see flips too.
    kind = np.array(layout.checks)
    meets = (touched @ touched.T) > 0
    opposite = kind[:, None] != kind[None, :]
    struck = (meets & opposite) + depolarise * (meets & ~opposite & ~np.eye(checks, dtype=bool))
    table = np.hstack([np.maximum(touched, depolarise * _hooks(layout)), struck])
    by_outcome = np.hstack([(touched > 0) & outcome, np.zeros((checks, checks), dtype=bool)])
    return Visibility(strength * table, by_outcome, CIRCUIT_SHARE, gap)


def _hooks(layout: Layout) -> FloatArray:
    """Return (check, data) 1 where a leaked data qubit's strike reaches a check through a third.

    A depolarised measure qubit carries the flip into the data qubits of its later gates; checks of
    the opposite type see it where they hold an odd number of those.
    """
    out = np.zeros(layout.adjacency.shape)
    for check, qubits in enumerate(layout.touches):
        order = np.argsort(layout.slots[check])
        for place, leaked in enumerate(order):
            later = [qubits[i] for i in order[place + 1 :]]
            odd = layout.adjacency[:, later].sum(axis=1) % 2 == 1
            other = np.array([kind != layout.checks[check] for kind in layout.checks])
            out[odd & other, qubits[leaked]] = 1.0
    return out


def pair_design(shown: Visibility, early: NDArray[np.int64], late: NDArray[np.int64]) -> FloatArray:
    """Return (pair, qubit): how much of p_q lam^k a pair's covariance holds, to first order."""
    return np.asarray(shown.strength[early] * shown.strength[late])
