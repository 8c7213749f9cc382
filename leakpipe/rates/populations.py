"""Steady level and memory of every qubit of a role from its leaked populations.

A qubit's leaked population after r rounds is p_k (1 - lam_k^r) + p0_k lam_k^r. The lam_k of a
role's qubits are drawn together: lam_k ~ N(mu, s^2), with mu and s estimated from all and, for
mu, from other data such as correlations (empirical Bayes; the spread by expectation maximisation,
DerSimonian and Laird, Control. Clin. Trials 7, 177 (1986), for the moment form). A qubit whose own
data say little then leans on the others; how much is part of its interval.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.optimize import least_squares

FloatArray = NDArray[np.float64]

SPREAD_START = 0.1
SPREAD_LEAST = 0.02
"""Least spread of lam between qubits: the same lam for all is never assumed exactly."""
SPREAD_MOST = 0.1
"""Largest spread of lam: beyond it a noisy qubit's steady level and memory run away together. Our
choice; at a settling time of 5 rounds it is a spread from 3 to 10."""
MEMORY_BELIEF = (0.6, 0.3)
"""Weak normal prior of mu (mean, deviation), ours: data that tell lam to .03 move it by 1 % of
their error, data that tell nothing do not send the steady level to infinity."""
SPREAD_STEPS = 25
START_DEVIATION = 0.1
"""Prior deviation of the common p0 / p_ss around a cold start: a few percent are ordinary
(imperfect preparation), and what p0 may be belongs into the settling time's error. Our choice."""
EXCITATION_SHARE = 0.42
"""Part of an excitation 1 to 2 during the readout that the estimator takes for leakage (measured in
the prototype study, times the population of state 1)."""
UPPER_POPULATION = 0.5
"""Population of state 1 among the readings of a memory (random starting bits and syndromes)."""
LARGEST_MEMORY = 0.995
"""lam beyond which the data of tens of rounds cannot tell it from 1."""


@dataclass(frozen=True)
class Series:
    """Leaked populations of one role, one entry per observation.

    Attributes
    ----------
    qubit
        (n,) index of the qubit.
    rounds
        (n,) rounds gone by.
    value, variance
        (n,) leaked population and its shot variance.
    cluster_scores
        (cluster, n) what each cluster of shots contributed to `value` beyond its expectation.
    replicas
        (replica, n) the same values under bootstrapped calibrations.
    """

    qubit: NDArray[np.int64]
    rounds: FloatArray
    value: FloatArray
    variance: FloatArray
    cluster_scores: FloatArray
    replicas: FloatArray


@dataclass(frozen=True)
class RoleFit:
    """Fitted populations of one role.

    Attributes
    ----------
    level, memory
        (qubit,) p_k and lam_k.
    start
        Common p0 / p_ss at round 0.
    mean_memory, spread
        mu and s.
    covariance
        Of (p_1.., lam_1.., mu, start), shots, calibration and spread included.
    own_weight
        (qubit,) part of lam_k's information that comes from the qubit's own data.
    chi_square, freedom
        Goodness of fit.
    at_bound
        (qubit,) True where lam_k ended on the edge of its range.
    """

    level: FloatArray
    memory: FloatArray
    start: float
    mean_memory: float
    spread: float
    covariance: FloatArray
    own_weight: FloatArray
    chi_square: float
    freedom: int
    at_bound: NDArray[np.bool_]

    def draws(self, count: int, rng: np.random.Generator) -> tuple[FloatArray, FloatArray]:
        """Return random levels and memories, each (draw, qubit), memories kept in [0, 1)."""
        n = len(self.level)
        mean = np.concatenate([self.level, self.memory])
        block = self.covariance[: 2 * n, : 2 * n]
        sample = rng.multivariate_normal(mean, block, size=count, method="eigh")
        return sample[:, :n], np.clip(sample[:, n:], 0.0, LARGEST_MEMORY)


def fit_role(
    series: Series,
    qubits: int,
    *,
    memory_prior: tuple[float, float] | None = None,
    free_start: bool,
    excitation: float = 0.0,
) -> RoleFit:
    """Fit levels and memories of a role's qubits.

    Parameters
    ----------
    series
        Observations.
    qubits
        Number of qubits.
    memory_prior
        Value and variance of mu from other data.
    free_start
        Whether the population at round 0 is fitted freely (as a common fraction of the steady
        level); otherwise it is held near 0 by its prior.
    excitation
        Standard deviation of the unknown probability to go from 1 to 2 during the readout, which
        looks like leakage common to all rounds and is invisible to every fit test.
    """
    belief = _believed(memory_prior)
    spread = SPREAD_START
    theta = _start(series, qubits)
    for _ in range(SPREAD_STEPS):
        theta, normal = _solve(series, qubits, theta, spread, belief, free_start)
        inverse = np.linalg.pinv(normal, hermitian=True)
        lam, mu = theta[qubits : 2 * qubits], theta[2 * qubits]
        index = np.arange(qubits, 2 * qubits)
        gap = inverse[index, index] + inverse[-2, -2] - 2 * inverse[index, -2]
        new = float(np.sqrt(np.mean((lam - mu) ** 2 + np.maximum(gap, 0.0))))
        new = float(np.clip(new, SPREAD_LEAST, SPREAD_MOST))
        if abs(new - spread) < 1e-4:
            break
        spread = new
    return _finish(series, qubits, theta, spread, belief, free_start, excitation)


def _believed(memory_prior: tuple[float, float] | None) -> tuple[float, float]:
    """Return what is known of mu together with the weak prior, value and variance."""
    value, deviation = MEMORY_BELIEF
    if memory_prior is None:
        return value, deviation**2
    known, variance = memory_prior
    weight, own = 1 / variance, 1 / deviation**2
    return (known * weight + value * own) / (weight + own), 1 / (weight + own)


def _start(series: Series, qubits: int) -> FloatArray:
    level = np.zeros(qubits)
    late = series.rounds >= np.median(series.rounds)
    for k in range(qubits):
        mine = (series.qubit == k) & late
        mine = mine if mine.any() else series.qubit == k
        weight = 1 / series.variance[mine]
        level[k] = np.sum(weight * series.value[mine]) / weight.sum()
    return np.concatenate([level, np.full(qubits, 0.7), [0.7, 0.0]])


def _model(series: Series, qubits: int, theta: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Return predicted populations and their slopes, (n,) and (n, parameter)."""
    p, lam = theta[:qubits][series.qubit], theta[qubits : 2 * qubits][series.qubit]
    start = theta[-1]
    power = lam**series.rounds
    value = p * (1 - (1 - start) * power)
    slopes = np.zeros((len(value), 2 * qubits + 2))
    rows = np.arange(len(value))
    slopes[rows, series.qubit] = 1 - (1 - start) * power
    by_power = -p * (1 - start)
    slopes[rows, qubits + series.qubit] = by_power * series.rounds * lam ** (series.rounds - 1)
    slopes[:, -1] = p * power
    return value, slopes


def _prior_rows(
    qubits: int,
    theta: FloatArray,
    spread: float,
    memory_prior: tuple[float, float],
    free_start: bool,
) -> tuple[FloatArray, FloatArray]:
    """Return residuals and slopes of lam_k ~ N(mu, s^2), of what is known of mu, and of p0."""
    size = 2 * qubits + 2
    rows = qubits + 2
    residual, slopes = np.zeros(rows), np.zeros((rows, size))
    residual[:qubits] = (theta[qubits : 2 * qubits] - theta[2 * qubits]) / spread
    slopes[np.arange(qubits), qubits + np.arange(qubits)] = 1 / spread
    slopes[:qubits, 2 * qubits] = -1 / spread
    if not free_start:
        residual[qubits] = theta[-1] / START_DEVIATION
        slopes[qubits, -1] = 1 / START_DEVIATION
    value, variance = memory_prior
    residual[-1] = (theta[2 * qubits] - value) / np.sqrt(variance)
    slopes[-1, 2 * qubits] = 1 / np.sqrt(variance)
    return residual, slopes


def _solve(
    series: Series,
    qubits: int,
    theta: FloatArray,
    spread: float,
    memory_prior: tuple[float, float],
    free_start: bool,
) -> tuple[FloatArray, FloatArray]:
    sigma = np.sqrt(series.variance)

    def residual(x: FloatArray) -> FloatArray:
        value, _ = _model(series, qubits, x)
        prior, _ = _prior_rows(qubits, x, spread, memory_prior, free_start)
        return np.concatenate([(value - series.value) / sigma, prior])

    def slopes(x: FloatArray) -> FloatArray:
        _, jacobian = _model(series, qubits, x)
        _, prior = _prior_rows(qubits, x, spread, memory_prior, free_start)
        return np.vstack([jacobian / sigma[:, None], prior])

    # p0 may come out slightly negative by chance: a bound there would bias everything tied to it.
    low = np.concatenate([np.full(qubits, -1.0), np.zeros(qubits), [0.0, -1.0]])
    high = np.concatenate(
        [np.full(qubits, 1.0), np.full(qubits, LARGEST_MEMORY), [LARGEST_MEMORY, 3.0]]
    )
    begin = np.clip(theta, low + 1e-6, high - 1e-6)
    found = least_squares(residual, begin, slopes, bounds=(low, high), x_scale="jac")
    theta = np.asarray(found.x)
    return theta, _normal(series, qubits, theta, spread, memory_prior, free_start)


def _normal(
    series: Series,
    qubits: int,
    theta: FloatArray,
    spread: float,
    memory_prior: tuple[float, float],
    free_start: bool,
) -> FloatArray:
    _, jacobian = _model(series, qubits, theta)
    _, prior = _prior_rows(qubits, theta, spread, memory_prior, free_start)
    normal = (jacobian / series.variance[:, None]).T @ jacobian + prior.T @ prior
    return np.asarray(normal)


def _finish(
    series: Series,
    qubits: int,
    theta: FloatArray,
    spread: float,
    memory_prior: tuple[float, float],
    free_start: bool,
    excitation: float,
) -> RoleFit:
    normal = _normal(series, qubits, theta, spread, memory_prior, free_start)
    inverse = np.linalg.pinv(normal, hermitian=True)
    value, jacobian = _model(series, qubits, theta)
    _, prior = _prior_rows(qubits, theta, spread, memory_prior, free_start)
    weighted = jacobian / series.variance[:, None]
    # Shots: sandwich over clusters. Prior rows keep their own (model) covariance.
    scores = series.cluster_scores @ weighted
    clusters = len(scores)
    meat = scores.T @ scores * clusters / max(clusters - 1, 1) + prior.T @ prior
    covariance = inverse @ meat @ inverse
    # Calibration: one linear step per bootstrapped calibration, common to all observations.
    moved = (series.replicas - series.value) @ weighted @ inverse
    covariance = covariance + np.cov(moved, rowvar=False)
    # Excitation during the readout shifts every level of the role alike.
    covariance[:qubits, :qubits] += (EXCITATION_SHARE * UPPER_POPULATION * excitation) ** 2
    own = (jacobian**2 / series.variance[:, None]).sum(axis=0)[qubits : 2 * qubits]
    lam = theta[qubits : 2 * qubits]
    return RoleFit(
        level=theta[:qubits],
        memory=lam,
        start=float(theta[-1]),
        mean_memory=float(theta[2 * qubits]),
        spread=spread,
        covariance=covariance,
        own_weight=own / (own + 1 / spread**2),
        chi_square=float(np.sum((value - series.value) ** 2 / series.variance)),
        freedom=max(len(series.value) - 2 * qubits, 1),
        at_bound=(lam < 1e-4) | (lam > LARGEST_MEMORY - 1e-4),
    )
