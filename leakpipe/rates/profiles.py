"""Profiles of a rise: where tau, the amplitude or the relative rise stops fitting.

For each ln tau the linear parameters have a normal profile around their best values, so the
interval of an amplitude is an envelope over ln tau in closed form, and that of the relative rise
the roots of a quadratic (Fieller, J. R. Stat. Soc. B 16, 175 (1954), for a ratio).
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.optimize import brentq

from leakpipe.rates.varpro import profile_sums

FloatArray = NDArray[np.float64]

POINTS = 400
"""Points in ln tau of an envelope; its ends are stationary there, so the step enters squared (about
1e-4 of the interval)."""


def threshold_ends(
    excess: Callable[[FloatArray], FloatArray], grid: FloatArray, best: float, threshold: float
) -> tuple[float, float]:
    """Return the tau at which a profile over ln tau crosses a threshold around its minimum.

    Parameters
    ----------
    excess
        Residual sums above the lowest at given ln tau.
    grid
        Ascending ln tau of the search.
    best
        ln tau of the minimum.
    threshold
        Excess at the ends.

    Returns
    -------
    low, high
        0 or infinite where the profile stays below the threshold up to the end of the grid.
    """
    above = excess(grid) > threshold

    def crossing(x: float) -> float:
        return float(excess(np.array([x]))[0]) - threshold

    low, high = 0.0, np.inf
    if (left := grid[above & (grid < best)]).size:
        low = float(np.exp(brentq(crossing, left[-1], best)))
    if (right := grid[above & (grid > best)]).size:
        high = float(np.exp(brentq(crossing, best, right[0])))
    return low, high


@dataclass(frozen=True)
class Profile:
    """A rise as a function of fixed ln tau.

    Attributes
    ----------
    rounds, values, weight
        (n,) the curve and its inverse variances.
    grid
        (g,) ascending ln tau of the search.
    log_tau
        Its best ln tau.
    lowest
        Residual sum there.
    """

    rounds: FloatArray
    values: FloatArray
    weight: FloatArray
    grid: FloatArray
    log_tau: float
    lowest: float

    def excess(self, log_taus: FloatArray) -> FloatArray:
        """Return the residual sums above the lowest."""
        sums = profile_sums(self.rounds, self.values[None], self.weight, log_taus)
        return np.asarray(sums[0] - self.lowest)

    def tau_ends(self, threshold: float) -> tuple[float, float]:
        """Return where the profile crosses the threshold: (0, inf) where it stays below."""
        return threshold_ends(self.excess, self.grid, self.log_tau, threshold)

    def linear(self, log_taus: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray]:
        """Return A, B (g,) and their binomial covariance (g, 2, 2) at fixed ln tau."""
        total = self.weight.sum()
        decay = np.exp(-np.exp(-log_taus)[:, None] * self.rounds)
        mean = (decay @ self.weight) / total
        off = decay - mean[:, None]
        strength = (off**2) @ self.weight
        amplitude = -(off @ (self.weight * self.values)) / strength
        level = (self.weight @ self.values) / total + amplitude * mean
        covariance = np.empty((len(log_taus), 2, 2))
        covariance[:, 1, 1] = 1 / strength
        covariance[:, 0, 1] = covariance[:, 1, 0] = mean / strength
        covariance[:, 0, 0] = 1 / total + mean**2 / strength
        return level, amplitude, covariance

    def _inside(self, threshold: float) -> tuple[FloatArray, FloatArray, tuple[bool, bool]]:
        """Return ln tau within the threshold, what is left of it there, and which ends are open."""
        low, high = self.tau_ends(threshold)
        is_open = (low == 0.0, high == np.inf)
        left = self.grid[0] if is_open[0] else np.log(low)
        right = self.grid[-1] if is_open[1] else np.log(high)
        inside = np.unique(np.append(np.linspace(left, right, POINTS), self.log_tau))
        return inside, np.maximum(threshold - self.excess(inside), 0.0), is_open

    def amplitude_ends(self, threshold: float) -> tuple[float, float]:
        """Return the ends of B; the end away from 0 is infinite where tau is open."""
        inside, left, is_open = self._inside(threshold)
        _, amplitude, covariance = self.linear(inside)
        width = np.sqrt(left * covariance[:, 1, 1])
        return _opened(float((amplitude - width).min()), float((amplitude + width).max()), is_open)

    def relative_ends(self, threshold: float) -> tuple[float, float]:
        """Return the ends of B / (A - B), as `amplitude_ends`."""
        inside, left, is_open = self._inside(threshold)
        level, amplitude, covariance = self.linear(inside)
        a, b, c = covariance[:, 0, 0], covariance[:, 1, 1], covariance[:, 0, 1]
        # (B - x (A - B))^2 = left * Var(B - x (A - B)), a quadratic in x.
        start = level - amplitude
        square = start**2 - left * (a + b - 2 * c)
        linear = -2 * amplitude * start - left * (2 * b - 2 * c)
        constant = amplitude**2 - left * b
        root = np.sqrt(np.maximum(linear**2 - 4 * square * constant, 0.0))
        if np.any(square <= 0):
            return -np.inf, np.inf
        low = float(((-linear - root) / (2 * square)).min())
        return _opened(low, float(((-linear + root) / (2 * square)).max()), is_open)

    def amplitude_limit(self, sigmas: float, ratio: float, taus: tuple[float, float]) -> float:
        """Return the largest upper end of B over settling times known to lie in a range."""
        at = np.linspace(np.log(taus[0]), np.log(taus[1]), POINTS)
        _, amplitude, covariance = self.linear(at)
        return float(
            (np.maximum(amplitude, 0) + sigmas * np.sqrt(ratio * covariance[:, 1, 1])).max()
        )


def _opened(low: float, high: float, is_open: tuple[bool, bool]) -> tuple[float, float]:
    """Open the end that grows without bound as tau leaves the search range."""
    if not any(is_open):
        return low, high
    return (-np.inf if low < 0 else low, np.inf if high > 0 else high)
