"""The logical error per round from the logical error after R rounds.

1 - 2 P(R) = A (1 - 2 eps)^R: a round flips the logical value with probability eps, independently of
the rounds before. Recordings scatter more than their shots allow when the device drifts between
them; the excess is estimated and added (Paule and Mandel, J. Res. Natl. Bur. Stand. 87, 377
(1982)).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.optimize import brentq
from scipy.stats import chi2

FloatArray = NDArray[np.float64]

STEPS = 60
CONVERGED = 1e-12


@dataclass(frozen=True)
class PerRound:
    """Fit of the logical fidelity against the number of rounds.

    Attributes
    ----------
    error_per_round, amplitude
        eps and A.
    covariance
        (2, 2) of (eps, ln A), scatter between recordings included.
    scatter
        Standard deviation between recordings of ln(1 - 2P), beyond shot noise.
    chi_square, freedom, p_value
        Goodness of fit without the scatter.
    """

    error_per_round: float
    amplitude: float
    covariance: FloatArray
    scatter: float
    chi_square: float
    freedom: int
    p_value: float

    @property
    def error(self) -> float:
        """Standard error of the error per round."""
        return float(np.sqrt(self.covariance[0, 0]))

    def fidelity(self, rounds: FloatArray) -> FloatArray:
        """Return A (1 - 2 eps)^R."""
        return np.asarray(self.amplitude * (1 - 2 * self.error_per_round) ** rounds)


def after_rounds(error_per_round: float, rounds: int) -> float:
    """Return P(R) for a perfect start: 1 - 2 P = (1 - 2 eps)^R."""
    return float((1 - (1 - 2 * error_per_round) ** rounds) / 2)


def fit_per_round(
    rounds: FloatArray, fidelity: FloatArray, variance: FloatArray
) -> PerRound | None:
    """Fit the error per round to the logical fidelity 1 - 2P.

    Parameters
    ----------
    rounds
        (recording,) numbers of rounds.
    fidelity
        (recording,) measured 1 - 2P; may be negative by chance.
    variance
        (recording,) its variance.

    Returns
    -------
    fit
        None where fewer than two different numbers of rounds, or no fidelity above its noise,
        leave the error undetermined.
    """
    if len(set(rounds.tolist())) < 2 or np.sum(fidelity > 2 * np.sqrt(variance)) < 2:
        return None
    theta = _start(rounds, fidelity, variance)
    theta, normal, chi_square = _gauss_newton(rounds, fidelity, variance, theta)
    freedom = len(rounds) - 2
    scatter = 0.0
    if freedom > 0 and chi_square > freedom:

        def excess(value: float) -> float:
            total = variance + (value * _model(rounds, theta)) ** 2
            return _gauss_newton(rounds, fidelity, total, theta)[2] - freedom

        top = 1.0
        if excess(top) < 0:
            scatter = float(brentq(excess, 0.0, top, xtol=1e-8))
            total = variance + (scatter * _model(rounds, theta)) ** 2
            theta, normal, _ = _gauss_newton(rounds, fidelity, total, theta)
    # theta = (ln A, ln(1 - 2 eps)); eps = (1 - exp(theta1)) / 2.
    covariance = np.linalg.inv(normal)
    slope = np.array([[0.0, -np.exp(theta[1]) / 2], [1.0, 0.0]])
    return PerRound(
        error_per_round=float((1 - np.exp(theta[1])) / 2),
        amplitude=float(np.exp(theta[0])),
        covariance=slope @ covariance @ slope.T,
        scatter=scatter,
        chi_square=chi_square,
        freedom=freedom,
        p_value=float(chi2.sf(chi_square, freedom)) if freedom > 0 else float("nan"),
    )


def _model(rounds: FloatArray, theta: FloatArray) -> FloatArray:
    return np.asarray(np.exp(theta[0] + theta[1] * rounds))


def _start(rounds: FloatArray, fidelity: FloatArray, variance: FloatArray) -> FloatArray:
    """Return the weighted straight line through ln(1 - 2P) where it is above its noise."""
    keep = fidelity > 2 * np.sqrt(variance)
    weight = fidelity[keep] / np.sqrt(variance[keep])
    design = np.column_stack([np.ones(keep.sum()), rounds[keep]])
    target = np.log(fidelity[keep])
    solution = np.linalg.lstsq(design * weight[:, None], target * weight, rcond=None)[0]
    return np.asarray(solution, dtype=np.float64)


def _gauss_newton(
    rounds: FloatArray, fidelity: FloatArray, variance: FloatArray, theta: FloatArray
) -> tuple[FloatArray, FloatArray, float]:
    """Return parameters, normal matrix and chi-square of the weighted fit."""
    for _ in range(STEPS):
        value = _model(rounds, theta)
        jacobian = np.column_stack([value, value * rounds])
        normal = (jacobian / variance[:, None]).T @ jacobian
        step = np.linalg.solve(normal, (jacobian / variance[:, None]).T @ (fidelity - value))
        theta = theta + step
        if np.abs(step).max() < CONVERGED:
            break
    value = _model(rounds, theta)
    jacobian = np.column_stack([value, value * rounds])
    normal = (jacobian / variance[:, None]).T @ jacobian
    return theta, normal, float(np.sum((fidelity - value) ** 2 / variance))
