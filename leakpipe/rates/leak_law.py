"""What one leaking qubit does to detection events: mean and covariance over rounds, exactly.

The qubit is a two-state chain with leaked population p_r and memory lam. An event that it touches
keeps its sign with weight x_r = a^l_r (the event is randomised while leaked; l_r is 0 or 1, a = 1 -
2 v) or x_r = a^(l_r + l_(r-g)) (the outcome is; an event compares outcomes g rounds apart, 1 with
reset of the measure qubits and 2 without). The sign of the event is the product of the x of
all qubits and of ordinary errors, all independent. Every function takes complex arguments, so that
derivatives come from the complex step (Squire and Trapp, SIAM Review 40, 110 (1998)).
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

Array = NDArray[Any]


@dataclass(frozen=True)
class Chain:
    """Leaked population of qubits as their checks see it, cold at the start.

    Attributes
    ----------
    now, before
        (n, round) p_r and p_(r-g).
    injection, seepage
        (n,) probabilities to leak and to return within g rounds.
    memory
        (n,) lam, of one round.
    gap
        g, rounds between the outcomes that an event compares.
    """

    now: Array
    before: Array
    injection: Array
    seepage: Array
    memory: Array
    gap: int


def chain(level: Array, log_tau: Array, rounds: Array, share: float, gap: int) -> Chain:
    """Return the chains of n qubits.

    Parameters
    ----------
    level, log_tau
        (n,) steady level as read at the end of a round, and ln tau.
    rounds
        (round,) rounds of the detection events, from 1.
    share
        Part of a round's injection that the checks of the round see: they see
        p_(r-1) (1 - S) + share G, which settles at p_ss (1 - (1 - share) (1 - lam)).
    gap
        Rounds between the outcomes that an event compares.
    """
    memory = np.exp(-np.exp(-log_tau))
    gone = 1 - memory
    seen = level * (1 - (1 - share) * gone)
    first = 1 - share * gone / (1 - (1 - share) * gone)
    power = memory[:, None] ** (rounds - 1)
    now = seen[:, None] * (1 - first[:, None] * power)
    earlier = seen[:, None] * (1 - first[:, None] * power / memory[:, None] ** gap)
    before = np.where(rounds > gap, earlier, 0.0)
    changed = 1 - memory**gap
    return Chain(now, before, seen * changed, (1 - seen) * changed, memory, gap)


def mean_sign(of: Chain, strength: Array, by_outcome: NDArray[np.bool_]) -> Array:
    """Return E[x_r], (n, round)."""
    keep = (1 - strength)[:, None]
    stays = of.before * (1 - of.seepage[:, None])
    either = of.now + of.before - 2 * stays
    outcome = 1 - (1 - keep) * either - (1 - keep**2) * stays
    return np.where(by_outcome[:, None], outcome, 1 - (1 - keep) * of.now)


def sign_covariance(
    of: Chain,
    early: tuple[Array, NDArray[np.bool_]],
    late: tuple[Array, NDArray[np.bool_]],
    lags: Array,
) -> Array:
    """Return Cov(x_r, x'_(r+k)) of events r of one check and r + k of another, (n, round, lag).

    Parameters
    ----------
    of
        Chains of the qubits that the checks share.
    early, late
        Strength and whether the outcome is randomised, (n,) each, at the two checks.
    lags
        (lag,) k, g or more.
    """
    keep, other = (1 - early[0])[:, None], 1 - late[0]
    # What event r tells of l_r: Cov(x_r, l_r).
    told_event = -(1 - keep) * of.now * (1 - of.now)
    both = of.before * (1 - of.seepage[:, None])
    fresh = (1 - of.before) * of.injection[:, None]
    told_outcome = keep * (keep * both + fresh) - mean_sign(of, early[0], early[1]) * of.now
    told = np.where(early[1][:, None], told_outcome, told_event)
    # What l tells of event s: of l_s itself, or of l_(s-g) where the outcome is randomised.
    next_event = -(1 - other)
    next_outcome = other * ((1 - of.seepage) * other + of.seepage) - (
        (1 - of.injection) + of.injection * other
    )
    slope = np.where(late[1], next_outcome, next_event)
    steps = lags - of.gap * late[1][:, None].astype(int)
    return told[:, :, None] * (slope[:, None] * of.memory[:, None] ** steps)[:, None, :]
