"""Correlations of detection events two and more rounds apart.

Error mechanisms span at most two rounds, so events k >= 2 rounds apart are correlated by leakage
only (or by drift, which local means over 50 consecutive shots remove). For a leaked neighbour that
randomises a check's detector,

    C(r, r+k) = (P_r P_s / 4) [prod_q (1 + 4 v^2 p_r (1 - p_r) lam^k / (w_r w_s)) - 1]

with s = r + k, P = 1 - 2 d, w = 1 - 2 v p; to first order v^2 P_r P_s sum_q p_r lam^k. If it
randomises the check's outcome, the covariance is 1 / lam times as large and the rise (1 + S) times.
(Derived for leakpipe; verified by simulation in studies.)
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.optimize import minimize_scalar

FloatArray = NDArray[np.float64]

FIRST_LAG = 2
BLOCK = 50
MEMORY_GRID = np.linspace(0.02, 0.99, 98)


@dataclass(frozen=True)
class LagFit:
    """Leakage law fitted to covariances against lag.

    Attributes
    ----------
    lags
        (lag,) from 2 on.
    covariance, error
        (lag,) mean covariance of the pairs, steady-weighted, and its sandwich error.
    amplitude
        a of a lam^k.
    memory, memory_error
        lam and its sandwich error; NaN where the covariance is not significant.
    significance
        z of the summed covariance.
    batch_covariance
        (batch, lag).
    """

    lags: NDArray[np.int64]
    covariance: FloatArray
    error: FloatArray
    amplitude: float
    memory: float
    memory_error: float
    significance: float
    batch_covariance: FloatArray


def covariances(
    products: FloatArray, block_products: FloatArray, blocks: FloatArray
) -> tuple[FloatArray, FloatArray]:
    """Return local-mean covariances and the blocks behind them.

    Parameters
    ----------
    products, block_products
        (..., pair, round, lag) sums; `round` counts layers from 1.
    blocks
        (..., round) complete blocks of the recordings in which a layer is interior.

    Returns
    -------
    covariance
        Same shape as `products`, Bessel-corrected for the local mean of 50 shots; NaN where no
        block has both layers.
    weight
        (..., round, lag) blocks behind each.
    """
    rounds, lags = products.shape[-2:]
    weight = np.zeros((*blocks.shape[:-1], rounds, lags))
    for lag in range(lags):
        stop = rounds - lag
        if stop > 0:
            weight[..., :stop, lag] = blocks[..., lag:]
    weight[..., 0, :] = 0.0
    with np.errstate(divide="ignore", invalid="ignore"):
        covariance = (products - block_products / BLOCK) / ((BLOCK - 1) * weight[..., None, :, :])
    return covariance, weight


def fit_lags(
    products: FloatArray,
    block_products: FloatArray,
    blocks: FloatArray,
    growth: FloatArray,
    visible: FloatArray,
    first_lag: int = FIRST_LAG,
) -> LagFit | None:
    """Fit a lam^k to the covariance of a set of pairs, summed over them.

    Parameters
    ----------
    products, block_products
        (batch, pair, round, lag).
    blocks
        (batch, round).
    growth
        (round,) expected leaked population relative to steady, the weight of each early round; 0
        leaves a round out.
    visible
        (round,) 1 - 2 d of a round over that of round 0: what ordinary errors and leakage leave to
        be seen of a flip. It falls while the detection probability rises, and lam would come out
        too small without it.
    first_lag
        Smallest lag that ordinary errors do not reach: 2 with reset, 3 without.
    """
    p, b = products.sum(axis=1), block_products.sum(axis=1)
    rounds, lags = p.shape[-2:]
    lag_axis = np.arange(first_lag, min(lags, rounds - 1))
    if len(lag_axis) < 3 or products.shape[1] == 0:
        return None
    weight = covariances(products[:, :1], block_products[:, :1], blocks)[1]
    # Cov(r, k) = a w(r, k) lam^k with w = growth(r) visible(r) visible(r + k) and noise about equal
    # in every round: least squares over r is sum w * product / sum w^2.
    later = np.zeros((rounds, lags))
    for lag in range(lags):
        later[: rounds - lag, lag] = visible[lag:]
    g = (growth * visible)[None, :, None] * later[None]
    numerator = (g * (p - b / BLOCK) / (BLOCK - 1)).sum(axis=1)[:, lag_axis]
    denominator = (g**2 * weight).sum(axis=1)[:, lag_axis]
    total = denominator.sum(axis=0)
    if np.any(total <= 0):
        lag_axis, numerator = lag_axis[total > 0], numerator[:, total > 0]
        denominator, total = denominator[:, total > 0], total[total > 0]
    if len(lag_axis) < 3:
        return None
    mean = numerator.sum(axis=0) / total
    deviation = (numerator - denominator * mean) / total
    batches = len(deviation)
    spread = deviation.T @ deviation * batches / (batches - 1)
    error = np.sqrt(np.diag(spread))
    if not np.all(error > 0):
        return None
    significance = float(mean.sum() / np.sqrt(spread.sum()))
    precision = np.diag(1 / error**2)

    def solve(lam: float) -> tuple[float, float]:
        shape = lam**lag_axis
        amplitude = float(shape @ precision @ mean / (shape @ precision @ shape))
        residual = mean - amplitude * shape
        return amplitude, float(residual @ precision @ residual)

    at = int(np.argmin([solve(lam)[1] for lam in MEMORY_GRID]))
    bounds = (MEMORY_GRID[max(at - 1, 0)], MEMORY_GRID[min(at + 1, len(MEMORY_GRID) - 1)])
    lam = float(minimize_scalar(lambda x: solve(x)[1], bounds=bounds, method="bounded").x)
    amplitude = solve(lam)[0]
    jacobian = np.column_stack([lam**lag_axis, amplitude * lag_axis * lam ** (lag_axis - 1)])
    inverse = np.linalg.pinv(jacobian.T @ precision @ jacobian)
    covariance = inverse @ jacobian.T @ precision @ spread @ precision @ jacobian @ inverse
    return LagFit(
        lags=lag_axis,
        covariance=mean,
        error=error,
        amplitude=amplitude,
        memory=lam,
        memory_error=float(np.sqrt(covariance[1, 1])),
        significance=significance,
        batch_covariance=numerator / np.maximum(denominator, 1e-300),
    )


def kappa(
    same: LagFit, rise: float, rise_error: float, start: float, memory: float, *, outcome: bool
) -> tuple[float, float]:
    """Return kappa, correlation strength over rise strength, and its error.

    2 v for leakage (1 where a leaked neighbour randomises fully), 0 for heating or a boundary
    transient, which rise without correlation.

    Parameters
    ----------
    same
        Covariance of checks with themselves, summed over checks.
    rise, rise_error
        Amplitude B summed over checks.
    start
        Detection probability at round 0.
    memory
        lam.
    outcome
        True for the outcome-random observation model.
    """
    near = same.lags <= 4
    shape = memory ** same.lags[near]
    weight = shape / same.error[near] ** 2
    strength = float(weight @ same.covariance[near] / (weight @ shape))
    strength_error = float(1 / np.sqrt(weight @ shape))
    scale = 2 / (1 - 2 * start)
    if outcome:
        # The rise is (1 + S) times and the covariance 1 / lam times what the detector-random
        # model gives; with p_ss << 1, S = 1 - lam.
        scale *= memory * (2 - memory)
    value = scale * strength / rise
    relative = np.hypot(strength_error / max(abs(strength), 1e-300), rise_error / abs(rise))
    return value, float(abs(value) * relative)
