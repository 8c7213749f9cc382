"""Classification of points in one pass: states, leak posteriors and posterior sums.

`classify_numpy` is the clear twin of the compiled `classify`; a property test holds them equal.
"""

from __future__ import annotations

from typing import Any

import numpy as np
from numba import njit
from numpy.typing import NDArray

from leakpipe.codes.events import MISSING
from leakpipe.readout.population import CLASSES, Discriminant, posteriors

STATE_ODDS = (0.5, 0.5, 0.01)
"""Prior of the labels that become parity bits: even between 0 and 1, so that bits are unbiased."""

RULE_LENGTH = 13


def packed_rule(rule: Discriminant, leak_prior: float, working_leak: float) -> NDArray[np.float32]:
    """Return a rule for two features as the flat numbers that the kernel reads.

    Two linear log-odds (3 numbers each), the quadratic log-odds of background against class 0
    (6 numbers: aa, ab, bb, a, b, constant), and the factor on the odds of being leaked that takes
    the working prior to `leak_prior`.
    """
    precision, centre = rule.precision, rule.centre
    quadratic = [
        0.5 * precision[0, 0],
        precision[0, 1],
        0.5 * precision[1, 1],
        *(-precision @ centre),
        0.5 * centre @ precision @ centre + rule.background - rule.constant,
    ]
    factor = (leak_prior / (1 - leak_prior)) / (working_leak / (1 - working_leak))
    return np.array([*rule.linear.ravel(), *quadratic, factor], dtype=np.float32)


def label_shift(prior: tuple[float, ...]) -> tuple[float, float]:
    """Return what to add to the log-odds of classes 1 and 2 for the labels' prior."""
    return (
        float(np.log(STATE_ODDS[1] / STATE_ODDS[0]) - np.log(prior[1] / prior[0])),
        float(np.log(STATE_ODDS[2] / STATE_ODDS[0]) - np.log(prior[2] / prior[0])),
    )


@njit(cache=True, nogil=True, fastmath={"contract", "arcp", "reassoc"})
def classify(points, rules, priors, batch, shift, states, leak, sums, squares):  # type: ignore[no-untyped-def]
    """Classify points; see `classify_numpy` for the meaning of the arguments."""
    shots, columns = points.shape[0], points.shape[1]
    row = np.zeros(CLASSES, dtype=np.float64)
    for i in range(shots):
        home = batch[i]
        for c in range(columns):
            x, y = points[i, c, 0], points[i, c, 1]
            if not (np.isfinite(x) and np.isfinite(y)):
                states[i, c] = MISSING
                leak[i, c] = priors[c]
                continue
            rule = rules[c]
            one = rule[0] * x + rule[1] * y + rule[2]
            two = rule[3] * x + rule[4] * y + rule[5]
            out = (
                rule[6] * x * x
                + rule[7] * x * y
                + rule[8] * y * y
                + rule[9] * x
                + rule[10] * y
                + rule[11]
            )
            top = max(np.float32(0.0), one, two, out)
            e0 = np.exp(-top)
            e1 = np.exp(one - top)
            e2 = np.exp(two - top)
            e3 = np.exp(out - top)
            scale = 1.0 / (e0 + e1 + e2 + e3)
            row[0] = e0 * scale
            row[1] = e1 * scale
            row[2] = e2 * scale
            row[3] = e3 * scale
            best, state = np.float32(0.0), 0
            if one + shift[0] > best:
                best, state = one + shift[0], 1
            if two + shift[1] > best:
                state = 2
            states[i, c] = state
            odds = e2 * rule[12]
            leak[i, c] = odds / (odds + e0 + e1 + e3)
            sums[home, c, CLASSES] += 1.0
            for a in range(CLASSES):
                sums[home, c, a] += row[a]
                for b in range(a + 1):
                    squares[c, a, b] += row[a] * row[b]


def classify_numpy(
    points: NDArray[np.float32],
    rules: list[Discriminant],
    leak_priors: NDArray[np.float64],
    batch: NDArray[np.int64],
    prior: tuple[float, ...],
    batches: int,
) -> tuple[NDArray[np.uint8], NDArray[np.float32], NDArray[np.float64], NDArray[np.float64]]:
    """Classify points, the clear way.

    Parameters
    ----------
    points
        (shot, column, 2); NaN marks a missing reading.
    rules
        One rule per column.
    leak_priors
        (column,) prior of being leaked for the leak posterior.
    batch
        (shot,) batch of each shot.
    prior
        Working prior of the rules.
    batches
        Number of batches.

    Returns
    -------
    states, leak
        (shot, column) label and posterior of being leaked.
    sums
        (batch, column, 5): sums of the four posteriors, and the number of readings.
    squares
        (column, 4, 4): sums of products of posteriors, lower triangle.
    """
    shots, columns, _ = points.shape
    states = np.full((shots, columns), MISSING, dtype=np.uint8)
    leak = np.broadcast_to(leak_priors.astype(np.float32), (shots, columns)).copy()
    sums = np.zeros((batches, columns, CLASSES + 1))
    squares = np.zeros((columns, CLASSES, CLASSES))
    shift = label_shift(prior)
    for c in range(columns):
        valid = np.isfinite(points[:, c]).all(axis=1)
        soft = posteriors(points[valid, c].astype(np.float64), rules[c])
        with np.errstate(divide="ignore"):
            logs = np.log(soft[:, :3]) + np.array([0.0, *shift])
        states[valid, c] = np.argmax(logs, axis=1)
        working = prior[2]
        factor = (leak_priors[c] / (1 - leak_priors[c])) / (working / (1 - working))
        leak[valid, c] = soft[:, 2] * factor / (soft[:, 2] * factor + 1 - soft[:, 2])
        np.add.at(sums[:, c, :CLASSES], batch[valid], soft)
        np.add.at(sums[:, c, CLASSES], batch[valid], 1.0)
        squares[c] = np.tril(soft.T @ soft)
    return states, leak, sums, squares


def kernel_arrays(
    shots: int, columns: int, batches: int
) -> tuple[NDArray[Any], NDArray[Any], NDArray[Any], NDArray[Any]]:
    """Return empty outputs for `classify`: states, leak, sums, squares."""
    return (
        np.empty((shots, columns), dtype=np.uint8),
        np.empty((shots, columns), dtype=np.float32),
        np.zeros((batches, columns, CLASSES + 1)),
        np.zeros((columns, CLASSES, CLASSES)),
    )
