"""Damped least squares for problems of a hundred parameters with exact derivatives.

Levenberg and Marquardt's method (Marquardt, J. SIAM 11, 431 (1963)) on normal equations scaled to
unit diagonal: a solve costs parameters cubed, where a general fitter's singular value decomposition
costs observations times parameters squared, twenty times as much for a code of distance 5.
"""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]

FIRST_DAMPING, LARGEST_DAMPING = 1e-4, 1e8
MOST_STEPS = 100
GAIN = 1e-7
"""Relative gain of the sum of squares below which a step ends the search: of a sum of a thousand
squares, a hundredth of a standard error."""


def minimise(
    problem: Callable[[FloatArray], tuple[FloatArray, FloatArray]],
    start: FloatArray,
    low: FloatArray,
    high: FloatArray,
) -> tuple[FloatArray, bool]:
    """Minimise a sum of squares inside bounds.

    Parameters
    ----------
    problem
        Returns residuals (m,) and their slopes (m, n).
    start, low, high
        (n,) start values and bounds; steps are cut at the bounds.

    Returns
    -------
    values, ended
        (n,), and False if the search ran out of steps.
    """
    x = np.clip(start, low, high)
    residual, slopes = problem(x)
    total, damping = float(residual @ residual), FIRST_DAMPING
    normal, gradient = slopes.T @ slopes, slopes.T @ residual
    for _ in range(MOST_STEPS):
        # A parameter on its bound whose gradient points outwards does not move.
        free = ~(((x <= low) & (gradient > 0)) | ((x >= high) & (gradient < 0)))
        scale = np.sqrt(np.maximum(np.diag(normal)[free], 1e-300))
        scaled = normal[np.ix_(free, free)] / np.outer(scale, scale)
        step = np.zeros_like(x)
        step[free] = (
            -np.linalg.solve(scaled + damping * np.eye(len(scale)), gradient[free] / scale) / scale
        )
        trial = np.clip(x + step, low, high)
        residual, slopes = problem(trial)
        new = float(residual @ residual)
        if not new < total:
            if damping > LARGEST_DAMPING or total - new > -GAIN * total:
                return x, True
            damping *= 10
            continue
        gained = total - new
        x, total, damping = trial, new, damping / 5
        normal, gradient = slopes.T @ slopes, slopes.T @ residual
        if gained < GAIN * total:
            return x, True
    return x, False
