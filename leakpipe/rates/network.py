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
from scipy.optimize import least_squares

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
        Of ln tau between qubits as fitted.
    common, common_error
        Mean ln tau and its error.
    chi_square, freedom
        Of the covariances against independent events.
    """

    level: FloatArray
    log_tau: FloatArray
    covariance: FloatArray
    factor: float
    factor_error: float
    own: FloatArray
    spread: float
    common: float
    common_error: float
    chi_square: float
    freedom: int


@dataclass(frozen=True)
class _Problem:
    laid: Network
    means: Means | None
    factor_prior: tuple[float, float]
    start: float
    spread: float


def fit_network(
    moments: PairMoments,
    means: Means | None,
    detection: FloatArray,
    shown: Visibility,
    *,
    start: float = float(np.log(5.0)),
    factor_prior: tuple[float, float] = (1.0, 0.2),
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
    problem = _Problem(laid, means, factor_prior, start, LOOSE)
    # A first fit with a loose spread says how much settling times differ; then that spread holds.
    theta = _solve(problem, _first(problem))
    shrunk = _shrunk(problem, theta)
    problem = replace(problem, spread=max(shrunk.spread, LEAST_SPREAD))
    return _finish(problem, _solve(problem, theta))


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
    return np.concatenate([np.clip(level, low / 2, high / 2), np.full(n + 1, problem.start), tail])


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
        factor, quiet = theta[2 * n + 1], theta[2 * n + 2 :]
        logs, by_level, by_tau = predicted_signs(laid, level, log_tau)
        slopes = np.zeros((*logs.shape, len(theta)))
        slopes[:, laid.check, laid.by_check] = factor * by_level.T
        slopes[:, laid.check, n + laid.by_check] = factor * by_tau.T
        slopes[:, :, 2 * n + 1] = logs
        checks = np.arange(logs.shape[1])
        slopes[:, checks, 2 * n + 2 + checks] = 1.0
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
    n = problem.laid.qubits
    rows = n + 1 + (problem.means is not None)
    residual, slopes = np.zeros(rows), np.zeros((rows, len(theta)))
    residual[:n] = (theta[n : 2 * n] - theta[2 * n]) / problem.spread
    slopes[np.arange(n), n + np.arange(n)] = 1 / problem.spread
    slopes[:n, 2 * n] = -1 / problem.spread
    residual[n] = (theta[2 * n] - problem.start) / COMMON_DEVIATION
    slopes[n, 2 * n] = 1 / COMMON_DEVIATION
    if problem.means is not None:
        centre, deviation = problem.factor_prior
        residual[n + 1] = (theta[2 * n + 1] - centre) / deviation
        slopes[n + 1, 2 * n + 1] = 1 / deviation
    return residual, slopes


def _solve(problem: _Problem, theta: FloatArray) -> FloatArray:
    n = problem.laid.qubits
    observed, variance, _ = _observed(problem)
    root = np.sqrt(variance)
    rest = len(theta) - 2 * n - 1

    def residual(x: FloatArray) -> FloatArray:
        return np.concatenate(
            [(_predicted(problem, x)[0] - observed) / root, _prior(problem, x)[0]]
        )

    def slopes(x: FloatArray) -> FloatArray:
        return np.vstack([_predicted(problem, x)[1] / root[:, None], _prior(problem, x)[1]])

    low = np.concatenate(
        [np.full(n, LEVEL_RANGE[0]), np.full(n + 1, LOG_TAU_RANGE[0]), np.full(rest, -np.inf)]
    )
    high = np.concatenate(
        [np.full(n, LEVEL_RANGE[1]), np.full(n + 1, LOG_TAU_RANGE[1]), np.full(rest, np.inf)]
    )
    begin = np.clip(theta, low + 1e-6, high - 1e-6)
    found = least_squares(residual, begin, slopes, bounds=(low, high), x_scale="jac")
    return np.asarray(found.x)


def _normal(problem: _Problem, theta: FloatArray) -> FloatArray:
    _, variance, _ = _observed(problem)
    _, slopes = _predicted(problem, theta)
    _, prior = _prior(problem, theta)
    return np.asarray((slopes / variance[:, None]).T @ slopes + prior.T @ prior)


def _shrunk(problem: _Problem, theta: FloatArray) -> Shrunk:
    """Return the spread of ln tau between qubits, their prior taken out again."""
    n = problem.laid.qubits
    inverse = np.linalg.pinv(_normal(problem, theta), hermitian=True)
    log_tau, common = theta[n : 2 * n], theta[2 * n]
    held = 1 / problem.spread**2
    information = np.maximum(1 / np.diag(inverse)[n : 2 * n] - held, 1e-3 * held)
    raw = (log_tau * (information + held) - common * held) / information
    return shrink(raw, 1 / np.sqrt(information))


def _finish(problem: _Problem, theta: FloatArray) -> NetworkFit:
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
    own = np.clip(1 - np.diag(inverse)[n : 2 * n] / problem.spread**2, 0.0, 1.0)
    with_means = problem.means is not None
    at = 2 * n + 1
    residual = (value - observed)[:moments] ** 2 / variance[:moments]
    return NetworkFit(
        level=theta[:n],
        log_tau=theta[n : 2 * n],
        covariance=covariance[: 2 * n, : 2 * n],
        factor=float(theta[at]) if with_means else float("nan"),
        factor_error=float(np.sqrt(covariance[at, at])) if with_means else float("nan"),
        own=own,
        spread=problem.spread,
        common=float(theta[2 * n]),
        common_error=float(np.sqrt(covariance[2 * n, 2 * n])),
        chi_square=float(residual.sum()),
        freedom=max(moments - 2 * n, 1),
    )
