"""Shot-level regression of the logical outcome on leak exposures.

E[1 - 2 failed] = exp(a_R + c x) prod_k (1 - 2 kappa_F(R) v_k): a free intercept per number of
rounds, x the posterior number of leaked measure-qubit rounds of the shot, v_k the posterior of data
qubit k to be leaked at the end, kappa_F from the episode kernel. Maximum likelihood of the binary
outcome by Newton steps; errors from the sandwich over contiguous batches (White, Econometrica 50, 1
(1982)). Posteriors at the right prior make the regression unbiased where labels would not
(Berkson errors).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.optimize import minimize

from leakpipe.share.episodes import closing_cost

FloatArray = NDArray[np.float64]

QUIET = 0.05
"""Below this posterior a product over qubits equals its exponential sum to 1e-3 relative."""
LEAST = 1e-4
"""Smallest failure probability that the likelihood is evaluated at."""
LARGEST_COST = 0.5
"""A full randomisation of the logical value."""
FULL_PRIOR, MEMORY_PRIOR = (0.3, 0.2), (0.6, 0.3)
"""Weak normal priors of kappa_inf and rho (mean, deviation): few leaked closing readings tell their
product only. Our choice, wide enough to cover every rehearsed device."""
STEP = 1e-4


@dataclass(frozen=True)
class Shots:
    """Shots of all recordings in the regression.

    Attributes
    ----------
    group
        (shot,) index into `rounds`.
    rounds
        (group,) numbers of rounds.
    failed
        (shot,) 0 or 1.
    measure
        (shot,) posterior number of leaked measure-qubit rounds.
    quiet
        (shot,) sum of the closing posteriors below QUIET.
    loud
        (shot, slots) closing posteriors of QUIET or more, padded with 0.
    cluster
        (shot,) batch of each shot, counted through all recordings.
    """

    group: NDArray[np.int64]
    rounds: NDArray[np.int64]
    failed: FloatArray
    measure: FloatArray
    quiet: FloatArray
    loud: FloatArray
    cluster: NDArray[np.int64]


@dataclass(frozen=True)
class Regression:
    """Fitted costs.

    Attributes
    ----------
    measure_cost
        kappa_A, cost of a leaked measure-qubit round, (1 - exp(c)) / 2.
    full, memory
        kappa_inf and rho of the cost of a data episode.
    covariance
        (3, 3) of (c, kappa_inf, rho).
    log_measure
        c.
    at_bound
        True if both the full cost and its memory ended on the edge of their ranges.
    """

    measure_cost: float
    full: float
    memory: float
    covariance: FloatArray
    log_measure: float
    at_bound: bool


def split_closing(closing: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Return the sum of quiet posteriors and the loud ones, packed to the left.

    Parameters
    ----------
    closing
        (shot, data) posteriors.
    """
    loud = np.where(closing >= QUIET, closing, 0.0)
    quiet = closing.sum(axis=1) - loud.sum(axis=1)
    slots = int((loud > 0).sum(axis=1).max(initial=0))
    packed = -np.sort(-loud, axis=1)[:, : max(slots, 1)]
    return quiet, packed


def fit(shots: Shots, ending: float) -> Regression:
    """Fit intercepts and costs.

    Parameters
    ----------
    shots
        Exposures and outcomes.
    ending
        g, probability per round that an episode ends.
    """
    groups = len(shots.rounds)
    fidelity = np.array([1 - 2 * shots.failed[shots.group == g].mean() for g in range(groups)])
    begin = np.concatenate([np.log(np.maximum(fidelity, 0.02)), [-0.1, 0.25, 0.5]])
    bounds = [(None, 1e-3)] * groups + [(-3.0, 1.0), (-LARGEST_COST, LARGEST_COST), (0.0, 0.98)]

    def loss(theta: FloatArray) -> tuple[float, FloatArray]:
        one = _evaluate(shots, theta, ending)
        gradient = np.concatenate(
            [
                np.bincount(shots.group, one.slope, minlength=groups),
                [
                    one.slope @ shots.measure,
                    (one.slope * one.by_cost) @ one.by_full[shots.group],
                    (one.slope * one.by_cost) @ one.by_memory[shots.group],
                ],
            ]
        )
        pull, slope = _prior(theta[groups + 1], theta[groups + 2])
        gradient[groups + 1 :] += slope
        size = len(shots.failed)
        return -(one.value + pull) / size, -gradient / size

    found = minimize(
        loss, begin, jac=True, method="L-BFGS-B", bounds=bounds, options={"maxiter": 500}
    )
    theta = found.x
    covariance = _sandwich(shots, theta, ending, groups)
    c, full, memory = theta[groups:]
    at_bound = abs(full) > LARGEST_COST - 1e-4 and memory > 0.97
    return Regression(
        measure_cost=float((1 - np.exp(c)) / 2),
        full=float(full),
        memory=float(memory),
        covariance=covariance,
        log_measure=float(c),
        at_bound=bool(at_bound),
    )


@dataclass(frozen=True)
class _Evaluation:
    """Log-likelihood, its slope with each shot's log-mean, and the slopes of the log-means."""

    value: float
    slope: FloatArray
    by_cost: FloatArray
    by_full: FloatArray
    by_memory: FloatArray


def _evaluate(shots: Shots, theta: FloatArray, ending: float) -> _Evaluation:
    groups = len(shots.rounds)
    a, c, full, memory = theta[:groups], theta[groups], theta[groups + 1], theta[groups + 2]

    def kernel(f: float, m: float) -> FloatArray:
        return np.array([closing_cost(int(r), ending, f, m) for r in shots.rounds])

    # kappa is linear in full; its slope with memory is a central difference.
    high, low = min(memory + STEP, 0.999), max(memory - STEP, 0.0)
    here = kernel(full, memory)[shots.group]
    factor = np.maximum(1 - 2 * here[:, None] * shots.loud, 1e-9)
    log_mean = a[shots.group] + c * shots.measure - 2 * here * shots.quiet
    log_mean += np.log(factor).sum(axis=1)
    mean = np.exp(np.minimum(log_mean, 0.0))
    probability = np.clip((1 - mean) / 2, LEAST, 1 - LEAST)
    value = np.sum(
        shots.failed * np.log(probability) + (1 - shots.failed) * np.log(1 - probability)
    )
    return _Evaluation(
        value=float(value),
        slope=(shots.failed - probability) / (probability * (1 - probability)) * (-mean / 2),
        by_cost=-2 * shots.quiet - (2 * shots.loud / factor).sum(axis=1),
        by_full=kernel(1.0, memory),
        by_memory=(kernel(full, high) - kernel(full, low)) / (high - low),
    )


def _prior(full: float, memory: float) -> tuple[float, FloatArray]:
    """Return the log prior of (kappa_inf, rho) and its slope."""
    gap = np.array(
        [(full - FULL_PRIOR[0]) / FULL_PRIOR[1], (memory - MEMORY_PRIOR[0]) / MEMORY_PRIOR[1]]
    )
    return float(-0.5 * gap @ gap), -gap / np.array([FULL_PRIOR[1], MEMORY_PRIOR[1]])


def _sandwich(shots: Shots, theta: FloatArray, ending: float, groups: int) -> FloatArray:
    """Return the covariance of (c, kappa_inf, rho): H^-1 (sum of cluster score products) H^-1."""
    one = _evaluate(shots, theta, ending)
    count = int(shots.cluster.max()) + 1
    columns = [one.slope, one.slope * shots.measure, one.slope * one.by_cost]
    sums = np.stack([np.bincount(shots.cluster, x, minlength=count) for x in columns], axis=1)
    products = np.array(
        [[np.bincount(shots.group, x * y, minlength=groups) for y in columns] for x in columns]
    )
    home = np.zeros(count, dtype=np.int64)
    home[shots.cluster] = shots.group
    expand = np.zeros((groups, 3, groups + 3))
    for g in range(groups):
        expand[g, 0, g] = 1.0
        expand[g, 1, groups] = 1.0
        expand[g, 2, groups + 1] = one.by_full[g]
        expand[g, 2, groups + 2] = one.by_memory[g]
    scores = np.einsum("ca,cap->cp", sums, expand[home])
    information = np.einsum("abg,gap,gbq->pq", products, expand, expand)
    prior = np.zeros_like(information)
    prior[groups + 1, groups + 1] = FULL_PRIOR[1] ** -2
    prior[groups + 2, groups + 2] = MEMORY_PRIOR[1] ** -2
    bread = np.linalg.inv(information + prior + 1e-12 * np.eye(groups + 3))
    return np.asarray((bread @ (scores.T @ scores + prior) @ bread)[groups:, groups:])
