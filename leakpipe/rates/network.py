"""Leaked population and settling time of every qubit from correlations and means of checks.

Pairs of checks share few qubits, so covariances two and more rounds apart tell which qubit leaks,
although data qubits are never read in mid-circuit. The means add the size of the rise of every
check; what they hold beyond leakage is one common factor. Weighted nonlinear least squares with
exact laws (`network_model`), sandwich errors over batches of shots.

Levels may come out negative by chance: a bound at 0 would bias everything tied to it. Settling
times are shrunk to their common mean (`shrinkage`).
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from leakpipe.rates.damped import minimise
from leakpipe.rates.moments import PairMoments
from leakpipe.rates.network_model import (
    Network,
    network,
    predicted_covariances,
    predicted_signs,
)
from leakpipe.rates.shrinkage import Shrunk, shrink
from leakpipe.rates.visibility import Visibility

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

LOG_TAU_RANGE = (float(np.log(0.3)), float(np.log(300.0)))
"""Settling times searched (prototype study of the rates)."""
LEVEL_RANGE = (-0.3, 0.6)
"""Levels searched: far beyond what chance and leakage give."""
LOOSE = 1.0
"""Deviation of ln tau between qubits before it is known: a factor of e (ours)."""
LEAST_SPREAD = 0.1
"""Of ln tau between qubits: the same settling time for all is never assumed exactly (ours)."""
COMMON_DEVIATION = 1.5
"""Weak prior of the common ln tau: data that tell it to .2 move by 2 % of their error (ours)."""


@dataclass(frozen=True)
class Means:
    """Signs of every check's detection events over interior layers.

    Attributes
    ----------
    rounds
        (round,) layers, from 1.
    value, variance
        (round, check) ln(1 - 2 d) and its binomial variance.
    scores
        (batch, round, check) what each batch contributes to `value` beyond its part.
    """

    rounds: FloatArray
    value: FloatArray
    variance: FloatArray
    scores: FloatArray


@dataclass(frozen=True)
class NetworkFit:
    """Fit of a network.

    Attributes
    ----------
    level, log_tau
        (qubit,) steady level and ln tau, the latter shrunk.
    covariance
        (2 qubit, 2 qubit) of both, sandwich over batches.
    factor, factor_error
        Rise of the means over the rise that leakage of these levels makes.
    own
        (qubit,) part of ln tau that comes from the qubit's own data.
    spread
        (group,) of ln tau between qubits as fitted.
    common, common_error
        (group,) mean ln tau and its error.
    chi_square, freedom
        Of the covariances against independent events.
    ended
        False if the search ran out of steps.
    """

    level: FloatArray
    log_tau: FloatArray
    covariance: FloatArray
    factor: float
    factor_error: float
    own: FloatArray
    spread: FloatArray
    common: FloatArray
    common_error: FloatArray
    chi_square: float
    freedom: int
    ended: bool


@dataclass(frozen=True)
class _Problem:
    laid: Network
    means: Means | None
    factor_prior: tuple[float, float]
    start: float
    spread: FloatArray
    group: IntArray

    @property
    def groups(self) -> int:
        """Number of groups of qubits with a common ln tau."""
        return int(self.group.max()) + 1

    @property
    def common(self) -> slice:
        """Place of the common ln tau among the parameters."""
        return slice(2 * self.laid.qubits, self.factor)

    @property
    def factor(self) -> int:
        """Place of the factor of the means; the checks' quiet signs follow."""
        return 2 * self.laid.qubits + self.groups


def fit_network(
    moments: PairMoments,
    means: Means | None,
    detection: FloatArray,
    shown: Visibility,
    *,
    start: float = float(np.log(5.0)),
    factor_prior: tuple[float, float] = (1.0, 3.0),
    group: IntArray | None = None,
) -> NetworkFit:
    """Fit all qubits that show in the checks.

    Parameters
    ----------
    moments
        Covariances of pairs.
    means
        Signs of the checks' events; None leaves them out.
    detection
        (round, check) detection probability at the rounds of `moments`.
    shown
        Which qubit shows where; its columns are the qubits to fit.
    start
        Where the common ln tau starts.
    factor_prior
        Mean and deviation of the rise of the means over that of leakage.
    group
        (qubit,) group 0, 1, .. of each qubit; settling times are shrunk to that of the group. One
        group if None.

    Raises
    ------
    ValueError
        A qubit shows in no pair: `directions` tells beforehand.
    """
    both = shown.strength[moments.first] * shown.strength[moments.second]
    if np.any(both.sum(axis=0) == 0):
        raise ValueError("a qubit shows in no pair of checks")
    mean_rounds = np.zeros(0) if means is None else means.rounds
    laid = network(shown, moments, detection, mean_rounds)
    group = np.zeros(laid.qubits, dtype=np.int64) if group is None else group
    spread = np.full(int(group.max()) + 1, LOOSE)
    problem = _Problem(laid, means, factor_prior, start, spread, group)
    # A first fit with a loose spread says how much settling times differ; then that spread holds.
    theta, _ = _solve(problem, _first(problem))
    spread = np.array([max(one.spread, LEAST_SPREAD) for one in _shrunk(problem, theta)])
    problem = replace(problem, spread=spread)
    theta, ended = _solve(problem, theta)
    return _finish(problem, theta, ended)


def _first(problem: _Problem) -> FloatArray:
    """Return start values: levels by linear least squares at the starting settling time."""
    laid, n = problem.laid, problem.laid.qubits
    moments = laid.moments
    _, unit, _ = predicted_covariances(laid, np.full(n, 1e-6), np.full(n, problem.start))
    rows = np.zeros((*moments.value.shape, n))
    rows[laid.pair, :, laid.qubit] = unit
    root = np.sqrt(moments.variance)
    scaled = (rows / root[..., None]).reshape(-1, n)
    level = np.linalg.lstsq(scaled, (moments.value / root).ravel(), rcond=None)[0]
    low, high = LEVEL_RANGE
    tail = [] if problem.means is None else [problem.factor_prior[0], *problem.means.value[0]]
    return np.concatenate(
        [np.clip(level, low / 2, high / 2), np.full(n + problem.groups, problem.start), tail]
    )


def _predicted(problem: _Problem, theta: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Return predictions of all observations and their slopes, (m,) and (m, parameter)."""
    laid, n = problem.laid, problem.laid.qubits
    level, log_tau = theta[:n], theta[n : 2 * n]
    value, by_level, by_tau = predicted_covariances(laid, level, log_tau)
    slopes = np.zeros((*value.shape, len(theta)))
    slopes[laid.pair, :, laid.qubit] = by_level
    slopes[laid.pair, :, n + laid.qubit] = by_tau
    values, rows = [value.ravel()], [slopes.reshape(-1, len(theta))]
    if problem.means is not None:
        at = problem.factor
        factor, quiet = theta[at], theta[at + 1 :]
        logs, by_level, by_tau = predicted_signs(laid, level, log_tau)
        slopes = np.zeros((*logs.shape, len(theta)))
        slopes[:, laid.check, laid.by_check] = factor * by_level.T
        slopes[:, laid.check, n + laid.by_check] = factor * by_tau.T
        slopes[:, :, at] = logs
        checks = np.arange(logs.shape[1])
        slopes[:, checks, at + 1 + checks] = 1.0
        values.append((quiet + factor * logs).ravel())
        rows.append(slopes.reshape(-1, len(theta)))
    return np.concatenate(values), np.vstack(rows)


def _observed(problem: _Problem) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Return value, variance (m,) and scores (batch, m) in the order of `_predicted`."""
    parts = [problem.laid.moments] + ([] if problem.means is None else [problem.means])
    batches = len(problem.laid.moments.scores)
    return (
        np.concatenate([one.value.ravel() for one in parts]),
        np.concatenate([one.variance.ravel() for one in parts]),
        np.hstack([one.scores.reshape(batches, -1) for one in parts]),
    )


def _prior(problem: _Problem, theta: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Return residuals and slopes of what is known beforehand."""
    n, groups = problem.laid.qubits, problem.groups
    rows = n + groups + (problem.means is not None)
    residual, slopes = np.zeros(rows), np.zeros((rows, len(theta)))
    spread, index = problem.spread[problem.group], np.arange(n)
    residual[:n] = (theta[n : 2 * n] - theta[2 * n + problem.group]) / spread
    slopes[index, n + index] = 1 / spread
    slopes[index, 2 * n + problem.group] = -1 / spread
    common = np.arange(groups)
    residual[n : n + groups] = (theta[problem.common] - problem.start) / COMMON_DEVIATION
    slopes[n + common, 2 * n + common] = 1 / COMMON_DEVIATION
    if problem.means is not None:
        centre, deviation = problem.factor_prior
        residual[-1] = (theta[problem.factor] - centre) / deviation
        slopes[-1, problem.factor] = 1 / deviation
    return residual, slopes


def _solve(problem: _Problem, theta: FloatArray) -> tuple[FloatArray, bool]:
    n = problem.laid.qubits
    observed, variance, _ = _observed(problem)
    root = np.sqrt(variance)
    taus = n + problem.groups
    rest = len(theta) - n - taus

    def weighed(x: FloatArray) -> tuple[FloatArray, FloatArray]:
        value, slopes = _predicted(problem, x)
        prior, prior_slopes = _prior(problem, x)
        return (
            np.concatenate([(value - observed) / root, prior]),
            np.vstack([slopes / root[:, None], prior_slopes]),
        )

    low = np.concatenate(
        [np.full(n, LEVEL_RANGE[0]), np.full(taus, LOG_TAU_RANGE[0]), np.full(rest, -np.inf)]
    )
    high = np.concatenate(
        [np.full(n, LEVEL_RANGE[1]), np.full(taus, LOG_TAU_RANGE[1]), np.full(rest, np.inf)]
    )
    return minimise(weighed, theta, low, high)


def _normal(problem: _Problem, theta: FloatArray) -> FloatArray:
    _, variance, _ = _observed(problem)
    _, slopes = _predicted(problem, theta)
    _, prior = _prior(problem, theta)
    return np.asarray((slopes / variance[:, None]).T @ slopes + prior.T @ prior)


def _shrunk(problem: _Problem, theta: FloatArray) -> list[Shrunk]:
    """Return the spread of ln tau between the qubits of each group, their prior taken out again."""
    n = problem.laid.qubits
    inverse = np.linalg.pinv(_normal(problem, theta), hermitian=True)
    log_tau, common = theta[n : 2 * n], theta[2 * n + problem.group]
    held = 1 / problem.spread[problem.group] ** 2
    information = np.maximum(1 / np.diag(inverse)[n : 2 * n] - held, 1e-3 * held)
    raw = (log_tau * (information + held) - common * held) / information
    error = 1 / np.sqrt(information)
    groups = [problem.group == one for one in range(problem.groups)]
    return [shrink(raw[mine], error[mine]) for mine in groups]


def _finish(problem: _Problem, theta: FloatArray, ended: bool) -> NetworkFit:
    n = problem.laid.qubits
    observed, variance, scores = _observed(problem)
    value, slopes = _predicted(problem, theta)
    _, prior = _prior(problem, theta)
    inverse = np.linalg.pinv(_normal(problem, theta), hermitian=True)
    weighted = slopes / variance[:, None]
    filled = scores @ weighted
    batches = int(np.any(scores != 0, axis=1).sum())
    meat = filled.T @ filled * batches / max(batches - 1, 1) + prior.T @ prior
    covariance = inverse @ meat @ inverse
    moments = problem.laid.moments.value.size
    own = 1 - np.diag(inverse)[n : 2 * n] / problem.spread[problem.group] ** 2
    with_means = problem.means is not None
    at = problem.factor
    residual = (value - observed)[:moments] ** 2 / variance[:moments]
    return NetworkFit(
        level=theta[:n],
        log_tau=theta[n : 2 * n],
        covariance=covariance[: 2 * n, : 2 * n],
        factor=float(theta[at]) if with_means else float("nan"),
        factor_error=float(np.sqrt(covariance[at, at])) if with_means else float("nan"),
        own=np.clip(own, 0.0, 1.0),
        spread=problem.spread,
        common=theta[problem.common],
        common_error=np.sqrt(np.diag(covariance)[problem.common]),
        chi_square=float(residual.sum()),
        freedom=max(moments - 2 * n, 1),
        ended=ended,
    )
