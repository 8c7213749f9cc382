"""Variable projection: least squares where some parameters enter linearly.

For fixed nonlinear parameters the linear ones have a closed form, so only the few nonlinear ones
are searched: on a grid first, without starting values, then to the end (Golub and Pereyra, SIAM J.
Numer. Anal. 10, 413 (1973)). `fit_separable` serves any model of that kind; `fit_curves` fits
d[r] = A - B exp(-r / tau) to thousands of curves at once.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]

STEPS = 200
"""Most Gauss-Newton steps; a good start needs about ten (ours)."""
SETTLED_STEP = 1e-13
"""Step of the logarithms that ends the search, about the rounding of a double."""
ROUNDING = 1e-12
"""Relative rise of the residual sum that counts as rounding: near the minimum the sum no longer
tells steps below 1e-8 apart, the steps themselves do."""
STARTS = 5
"""Grid points that are followed to their minimum, best first, where minima can be several."""


@dataclass(frozen=True)
class SeparableFit:
    """A weighted least-squares fit.

    Attributes
    ----------
    coefficients
        (k,) linear parameters.
    nonlinear
        (m,) nonlinear parameters.
    residual_sum
        Weighted sum of squared residuals.
    inverse
        (k + m, k + m) inverse of J^T W J, linear parameters first: their covariance if the weights
        are inverse variances.
    converged
        Whether the last step was below rounding.
    """

    coefficients: FloatArray
    nonlinear: FloatArray
    residual_sum: float
    inverse: FloatArray
    converged: bool


def fit_separable(
    basis: Callable[[FloatArray], FloatArray],
    slope: Callable[[FloatArray, FloatArray], FloatArray],
    candidates: FloatArray,
    values: FloatArray,
    weight: FloatArray | None = None,
) -> SeparableFit:
    """Fit values = basis(nonlinear) @ coefficients.

    Parameters
    ----------
    basis
        Nonlinear parameters (m,) -> basis functions (n, k).
    slope
        Nonlinear and linear parameters -> slopes of the model with the nonlinear ones, (n, m).
    candidates
        (g, m) grid of nonlinear parameters.
    values
        (n,) data.
    weight
        (n,) inverse variances; 1 if None.
    """
    root = np.ones_like(values) if weight is None else np.sqrt(weight)

    def solve(at: FloatArray) -> tuple[FloatArray, FloatArray]:
        phi = basis(at) * root[:, None]
        coefficients = np.asarray(np.linalg.lstsq(phi, values * root, rcond=None)[0], dtype=float)
        return coefficients, values * root - phi @ coefficients

    sums = np.array([np.sum(solve(at)[1] ** 2) for at in candidates])
    best: SeparableFit | None = None
    for start in np.argsort(sums)[:STARTS]:
        fit = _descend(basis, slope, candidates[start], solve, root)
        if best is None or fit.residual_sum < best.residual_sum:
            best = fit
    assert best is not None, "an empty grid of candidates"
    return best


def _descend(
    basis: Callable[[FloatArray], FloatArray],
    slope: Callable[[FloatArray, FloatArray], FloatArray],
    at: FloatArray,
    solve: Callable[[FloatArray], tuple[FloatArray, FloatArray]],
    root: FloatArray,
) -> SeparableFit:
    """Follow Gauss-Newton steps of the nonlinear parameters, halved until the sum falls."""
    coefficients, residual = solve(at)
    converged = False
    for _ in range(STEPS):
        jacobian = np.hstack([basis(at), slope(at, coefficients)]) * root[:, None]
        step = np.linalg.lstsq(jacobian, residual, rcond=None)[0][len(coefficients) :]
        factor, lowest = 1.0, float(residual @ residual)
        while True:
            trial = at + factor * step
            new_coefficients, new_residual = solve(trial)
            if new_residual @ new_residual <= lowest * (1 + ROUNDING) or factor < SETTLED_STEP:
                break
            factor /= 2
        moved = float(np.max(np.abs(trial - at)))
        if not np.isfinite(moved):
            break
        at, coefficients, residual = trial, new_coefficients, new_residual
        if moved < SETTLED_STEP * max(1.0, float(np.max(np.abs(at)))):
            converged = True
            break
    jacobian = np.hstack([basis(at), slope(at, coefficients)]) * root[:, None]
    upper = np.linalg.qr(jacobian, mode="r")
    inverse_root = np.linalg.pinv(upper)
    return SeparableFit(
        coefficients, at, float(residual @ residual), inverse_root @ inverse_root.T, converged
    )


@dataclass(frozen=True)
class CurveFits:
    """Exponentials A - B exp(-r / tau) fitted to m curves.

    Attributes
    ----------
    level, amplitude, log_tau
        (m,) A, B and ln tau.
    residual_sum
        (m,) weighted sum of squared residuals.
    flat_sum
        (m,) the same for the best constant.
    inside
        (m,) False where the minimum lies at an end of the grid.
    """

    level: FloatArray
    amplitude: FloatArray
    log_tau: FloatArray
    residual_sum: FloatArray
    flat_sum: FloatArray
    inside: NDArray[np.bool_]


REFINEMENTS = 40
"""Most safeguarded Newton steps inside a grid cell; halving alone ends below 1e-12 by then."""
REFINED_STEP = 1e-9
"""Last Newton step of ln tau; the step after it would be about its square."""


def profile_sums(
    rounds: FloatArray, values: FloatArray, weight: FloatArray, log_taus: FloatArray
) -> FloatArray:
    """Return the residual sums of m curves at g fixed values of ln tau, (m, g).

    Parameters
    ----------
    rounds
        (n,).
    values
        (m, n).
    weight
        (n,) inverse variances, common to the curves.
    log_taus
        (g,).
    """
    centred = values - ((values @ weight) / weight.sum())[:, None]
    decay = np.exp(-np.exp(-log_taus)[:, None] * rounds)
    decay -= ((decay @ weight) / weight.sum())[:, None]
    along = (centred * weight) @ decay.T
    return np.asarray(
        (weight * centred**2).sum(axis=1)[:, None] - along**2 / (weight * decay**2).sum(axis=1)
    )


def fit_curves(
    rounds: FloatArray, values: FloatArray, weight: FloatArray, grid: FloatArray
) -> CurveFits:
    """Fit an exponential to each of m curves with common rounds and weights.

    Parameters
    ----------
    rounds
        (n,) at least 3.
    values
        (m, n).
    weight
        (n,) inverse variances.
    grid
        (g,) ascending ln tau in equal steps.
    """
    sums = profile_sums(rounds, values, weight, grid)
    at = np.argmin(sums, axis=1)
    log_tau = grid[at].copy()
    inside = (at > 0) & (at < len(grid) - 1)
    total = weight.sum()
    mean = (values @ weight) / total
    centred = values - mean[:, None]
    if inside.any():
        rows, middle = np.flatnonzero(inside), at[inside]
        left, here, right = (sums[rows, middle + side] for side in (-1, 0, 1))
        # Vertex of the parabola through the lowest point and its neighbours, grid steps equal.
        bend = np.maximum(left - 2 * here + right, np.finfo(float).tiny)
        start = grid[middle] + (grid[1] - grid[0]) * np.clip((left - right) / (2 * bend), -1, 1)
        bracket = (grid[middle - 1], grid[middle + 1])
        log_tau[inside] = _refined(rounds, centred[inside], weight, start, bracket)
    decay = np.exp(-np.exp(-log_tau)[:, None] * rounds)
    decay_mean = (decay @ weight) / total
    off = decay - decay_mean[:, None]
    amplitude = -((centred * off) @ weight) / ((off**2) @ weight)
    level = mean + amplitude * decay_mean
    residual = centred + amplitude[:, None] * off
    return CurveFits(
        level, amplitude, log_tau, (residual**2) @ weight, (centred**2) @ weight, inside
    )


def _refined(
    rounds: FloatArray,
    centred: FloatArray,
    weight: FloatArray,
    start: FloatArray,
    bracket: tuple[FloatArray, FloatArray],
) -> FloatArray:
    """Return the ln tau in a bracket where the explained sum N^2 / D is largest.

    Newton steps on the slope of its logarithm, halving the bracket where a step would leave it.
    """
    low, high = (end.copy() for end in bracket)
    u = start.copy()
    active = np.arange(len(u))
    for _ in range(REFINEMENTS):
        slope, bend = _log_slopes(rounds, centred[active], weight, u[active])
        with np.errstate(divide="ignore", invalid="ignore"):
            trial = u[active] - slope / bend
        rising = slope > 0
        low[active] = np.where(rising, u[active], low[active])
        high[active] = np.where(rising, high[active], u[active])
        usable = (bend < 0) & (trial > low[active]) & (trial < high[active])
        new = np.where(usable, trial, (low[active] + high[active]) / 2)
        moved = np.abs(new - u[active])
        u[active] = new
        active = active[moved > REFINED_STEP]
        if not len(active):
            break
    return u


def _log_slopes(
    rounds: FloatArray, centred: FloatArray, weight: FloatArray, u: FloatArray
) -> tuple[FloatArray, FloatArray]:
    """Return first and second derivative of ln(N^2 / D) with u = ln tau, (m,) each.

    N and D are the products of the decay about its mean with the curve and with itself.
    """
    rate = np.exp(-u)[:, None] * rounds
    decay = np.exp(-rate)
    first = decay * rate
    second = first * (rate - 1)
    weighted, total = centred * weight, weight.sum()
    off = decay - ((decay @ weight) / total)[:, None]
    first_off = first - ((first @ weight) / total)[:, None]
    n, n1, n2 = (np.einsum("mn,mn->m", weighted, one) for one in (decay, first, second))
    d, d1 = (off**2) @ weight, 2 * ((off * first) @ weight)
    d2 = 2 * ((first_off * first + off * second) @ weight)
    with np.errstate(divide="ignore", invalid="ignore"):
        slope = 2 * n1 / n - d1 / d
        bend = 2 * (n2 / n - (n1 / n) ** 2) - (d2 / d - (d1 / d) ** 2)
    return slope, bend
