"""Predicted covariances and means of a network of leaking qubits, with derivatives.

Each (pair of checks, qubit) incidence depends on that qubit's level and ln tau alone, so two
complex steps give the derivatives of all of them.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from leakpipe.rates.leak_law import Array, Chain, chain, mean_sign, sign_covariance
from leakpipe.rates.moments import PairMoments
from leakpipe.rates.visibility import Visibility

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

STEP = 1e-30
"""Complex step: far below the rounding of any value, so derivatives are exact."""


@dataclass(frozen=True)
class Network:
    """Who shows where, flattened into incidences, with the observed weights.

    Attributes
    ----------
    shown
        Which qubit shows in which check.
    moments
        Observed covariances of pairs.
    pair, qubit
        (incidence,) of the covariances.
    check, by_check
        (touch,) check and qubit of the means.
    signs
        (n, order, round, lag) weights of the moments times P_r P_(r+k) / 4.
    mean_rounds
        (round,) layers of the means.
    """

    shown: Visibility
    moments: PairMoments
    pair: IntArray
    qubit: IntArray
    check: IntArray
    by_check: IntArray
    signs: FloatArray
    mean_rounds: FloatArray

    @property
    def qubits(self) -> int:
        """Number of qubits."""
        return int(self.shown.strength.shape[1])


def network(
    shown: Visibility, moments: PairMoments, detection: FloatArray, mean_rounds: FloatArray
) -> Network:
    """Lay out a network.

    Parameters
    ----------
    shown, moments, mean_rounds
        As in `Network`.
    detection
        (round, check) detection probability at the rounds of the moments.
    """
    pair, qubit = np.nonzero(shown.strength[moments.first] * shown.strength[moments.second])
    check, by_check = np.nonzero(shown.strength)
    sign = 1 - 2 * detection
    after = _after(moments)
    sides = ((moments.first, moments.second), (moments.second, moments.first))
    signs = np.stack(
        [
            moments.weight[:, way]
            * sign[:, a].T[:, :, None]
            * sign[after][:, :, b].transpose(2, 0, 1)
            / 4
            for way, (a, b) in enumerate(sides)
        ],
        axis=1,
    )
    return Network(shown, moments, pair, qubit, check, by_check, signs, mean_rounds)


def _after(moments: PairMoments) -> IntArray:
    """Return the index of round r + k, (round, lag); beyond the last round nothing is weighed."""
    rounds = len(moments.rounds)
    return np.minimum(np.arange(rounds)[:, None] + moments.lags, rounds - 1)


def predicted_covariances(
    of: Network, level: FloatArray, log_tau: FloatArray
) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Return averaged covariances and their slopes.

    Returns
    -------
    value
        (n, lag).
    by_level, by_log_tau
        (incidence, lag) slope of the pair's value with its qubit's parameter.
    """
    ratio = _ratios(of, level + STEP * 1j, log_tau + 0j)
    by_tau = _ratios(of, level + 0j, log_tau + STEP * 1j).imag / STEP
    by_level = ratio.imag / STEP
    plain = ratio.real
    product = np.ones(of.signs.shape)
    np.multiply.at(product, of.pair, 1 + plain)
    value = ((product - 1) * of.signs).sum(axis=(1, 2))
    others = (product * of.signs)[of.pair] / (1 + plain)
    return value, (others * by_level).sum(axis=(1, 2)), (others * by_tau).sum(axis=(1, 2))


def _ratios(of: Network, level: Array, log_tau: Array) -> Array:
    """Return Cov(x, x') / (E x E x') of each incidence, (incidence, order, round, lag)."""
    moments, shown = of.moments, of.shown
    chains = _picked(chain(level, log_tau, moments.rounds, shown.share, shown.gap), of.qubit)
    sides = []
    for checks in (moments.first, moments.second):
        at = (checks[of.pair], of.qubit)
        sides.append((shown.strength[at], shown.by_outcome[at]))
    after = _after(moments)
    out = []
    for early, late in (sides, sides[::-1]):
        covariance = sign_covariance(chains, early, late, moments.lags)
        first, second = mean_sign(chains, *early), mean_sign(chains, *late)
        out.append(covariance / (first[:, :, None] * second[:, after]))
    return np.stack(out, axis=1)


def predicted_signs(
    of: Network, level: FloatArray, log_tau: FloatArray
) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Return sum over qubits of ln E x, (round, check), and slopes per touch, (touch, round)."""
    logs = _log_signs(of, level + STEP * 1j, log_tau + 0j)
    by_tau = _log_signs(of, level + 0j, log_tau + STEP * 1j).imag / STEP
    value = np.zeros((len(of.mean_rounds), of.shown.strength.shape[0]))
    np.add.at(value.T, of.check, logs.real)
    return value, logs.imag / STEP, by_tau


def _log_signs(of: Network, level: Array, log_tau: Array) -> Array:
    chains = _picked(
        chain(level, log_tau, of.mean_rounds, of.shown.share, of.shown.gap), of.by_check
    )
    at = (of.check, of.by_check)
    sign = mean_sign(chains, of.shown.strength[at], of.shown.by_outcome[at])
    return np.asarray(np.log(sign))


def _picked(of: Chain, index: IntArray) -> Chain:
    return Chain(
        of.now[index],
        of.before[index],
        of.injection[index],
        of.seepage[index],
        of.memory[index],
        of.gap,
    )
