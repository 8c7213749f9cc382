"""The rise of a detection probability over rounds: d[r] = A - B exp(-r / tau).

For a fixed tau the model is linear (variable projection, Golub and Pereyra, SIAM J. Numer. Anal.
10, 413 (1973)), so tau is searched on a grid and refined: no starting values. Errors are sandwich
errors over contiguous batches; the ends of the interval of ln tau are roots of the profile, its
threshold scaled by sandwich over binomial variance. Thresholds of the status words were tabulated
by simulation at 25 rounds (the parameter tau is unidentified under a flat curve, so chi-square
tables do not apply).
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

import numpy as np
from numpy.typing import NDArray
from scipy.optimize import brentq, minimize_scalar
from scipy.stats import norm, t

FloatArray = NDArray[np.float64]
Status = Literal["no rise", "falling", "short", "long", "settled", "no data"]

GRID = np.linspace(np.log(0.3), np.log(300.0), 60)
"""Grid of ln tau; profile ends are root-found, a grid step alone cost 3 to 5 % of coverage."""
RISE_FOUND = 8.9
"""Likelihood ratio of an exponential of either sign against flat, 99 % (tabulated)."""
CURVED = 2.9
"""Likelihood ratio of an exponential against a straight line, 95 % (tabulated)."""
SHORT_TAU, SHORT_END = 1.0, 0.5
LONG_FACTOR = 3.0
"""A tau whose upper end exceeds this many times the longest run is called long."""
FEWEST_ROUNDS = 4


@dataclass(frozen=True)
class RiseFit:
    """Fit of one curve.

    Attributes
    ----------
    status
        "settled", "short" (tau open below), "long" (open above), "falling", "no rise", "no data".
    start, level
        A - B (round 0) and A.
    amplitude, amplitude_error
        B and its sandwich error.
    tau, tau_low, tau_high
        Settling time in rounds and its 95 % interval; 0 or inf where the interval is open.
    log_tau_error
        Sandwich error of ln tau.
    ratio_flat, ratio_line
        Likelihood ratios (variance-scaled) against flat and straight line.
    variance_ratio
        Sandwich over binomial variance.
    """

    status: Status
    start: float
    level: float
    amplitude: float
    amplitude_error: float
    tau: float
    tau_low: float
    tau_high: float
    log_tau_error: float
    ratio_flat: float
    ratio_line: float
    variance_ratio: float
    covariance: FloatArray

    @property
    def relative(self) -> float:
        """B / (A - B)."""
        return self.amplitude / self.start

    @property
    def relative_error(self) -> float:
        """Standard error of the relative rise, from the covariance of (A, B)."""
        a, b = self.level, self.amplitude
        slope = np.array([-b, a]) / (a - b) ** 2
        return float(np.sqrt(slope @ self.covariance[:2, :2] @ slope))

    def curve(self, rounds: FloatArray) -> FloatArray:
        """Return the fitted detection probability."""
        return np.asarray(self.level - self.amplitude * np.exp(-rounds / self.tau))

    def curve_error(self, rounds: FloatArray) -> FloatArray:
        """Return the standard error of the fitted curve."""
        jacobian = _jacobian(rounds, self.amplitude, np.log(self.tau))
        return np.sqrt(np.maximum(np.einsum("ra,ab,rb->r", jacobian, self.covariance, jacobian), 0))


NO_DATA = RiseFit("no data", *([float("nan")] * 11), np.full((3, 3), np.nan))


def fit_rise(
    rounds: FloatArray,
    probability: FloatArray,
    variance: FloatArray,
    deviations: FloatArray,
) -> RiseFit:
    """Fit one rise.

    Parameters
    ----------
    rounds
        (n,) interior rounds.
    probability
        (n,) detection probability of each.
    variance
        (n,) its binomial variance.
    deviations
        (batch, n) contribution of each batch to `probability` minus its expected part; sums to 0
        over batches. Their outer products are the sandwich's filling.
    """
    if len(rounds) < FEWEST_ROUNDS or not np.all(np.isfinite(probability)):
        return NO_DATA
    weight = 1 / variance

    def solve(u: float) -> tuple[FloatArray, float]:
        basis = np.column_stack([np.ones_like(rounds), -np.exp(-rounds * np.exp(-u))])
        normal = (basis * weight[:, None]).T @ basis
        coefficients = np.linalg.lstsq(
            normal, (basis * weight[:, None]).T @ probability, rcond=None
        )[0]
        residual = probability - basis @ coefficients
        return coefficients, float(residual @ (weight * residual))

    profile = np.array([solve(u)[1] for u in GRID])
    at = int(np.argmin(profile))
    left, right = GRID[max(at - 1, 0)], GRID[min(at + 1, len(GRID) - 1)]
    u = float(
        minimize_scalar(
            lambda x: solve(x)[1], bounds=(left, right), method="bounded", options={"xatol": 1e-10}
        ).x
    )
    (level, amplitude), lowest = solve(u)
    flat = np.sum(weight * probability) / np.sum(weight)
    flat_square = float(np.sum(weight * (probability - flat) ** 2))
    line = np.polynomial.Polynomial.fit(rounds, probability, 1, w=np.sqrt(weight))
    line_square = float(np.sum(weight * (probability - line(rounds)) ** 2))
    jacobian = _jacobian(rounds, amplitude, u)
    normal = (jacobian * weight[:, None]).T @ jacobian
    inverse = np.linalg.pinv(normal)
    scores = deviations @ (weight[:, None] * jacobian)
    batches = len(deviations)
    meat = scores.T @ scores * batches / max(batches - 1, 1)
    covariance = inverse @ meat @ inverse
    ratio = (
        float(np.clip(covariance[2, 2] / inverse[2, 2], 0.5, 10.0)) if inverse[2, 2] > 0 else 1.0
    )
    threshold = float(t.ppf(0.975, max(batches - 1, 1))) ** 2 * ratio
    low, high = _ends(solve, u, lowest, threshold, profile)
    flat_ratio, line_ratio = (flat_square - lowest) / ratio, (line_square - lowest) / ratio
    tau = float(np.exp(u))
    return RiseFit(
        status=_status(tau, low, high, amplitude, flat_ratio, line_ratio, float(rounds.max())),
        start=float(level - amplitude),
        level=float(level),
        amplitude=float(amplitude),
        amplitude_error=float(np.sqrt(covariance[1, 1])),
        tau=tau,
        tau_low=low,
        tau_high=high,
        log_tau_error=float(np.sqrt(covariance[2, 2])),
        ratio_flat=flat_ratio,
        ratio_line=line_ratio,
        variance_ratio=ratio,
        covariance=covariance,
    )


def _jacobian(rounds: FloatArray, amplitude: float, u: float) -> FloatArray:
    """Return the slopes of A - B exp(-r / tau) with A, B and ln tau, (n, 3)."""
    decay = np.exp(-rounds * np.exp(-u))
    return np.column_stack([np.ones_like(rounds), -decay, -amplitude * decay * rounds * np.exp(-u)])


def _ends(
    solve: object, u: float, lowest: float, threshold: float, profile: FloatArray
) -> tuple[float, float]:
    def above(x: float) -> float:
        return solve(x)[1] - lowest - threshold  # type: ignore[operator]

    low, high = 0.0, np.inf
    below = [
        x for x, value in zip(GRID, profile, strict=True) if x < u and value - lowest > threshold
    ]
    if below:
        low = float(np.exp(brentq(above, below[-1], u)))
    beyond = [
        x for x, value in zip(GRID, profile, strict=True) if x > u and value - lowest > threshold
    ]
    if beyond:
        high = float(np.exp(brentq(above, u, beyond[0])))
    return low, high


def _status(
    tau: float, low: float, high: float, amplitude: float, flat: float, line: float, longest: float
) -> Status:
    if flat < RISE_FOUND:
        return "no rise"
    if amplitude < 0:
        return "falling"
    if tau < SHORT_TAU or low < SHORT_END:
        return "short"
    if high > LONG_FACTOR * longest or line < CURVED or tau > longest / 2:
        return "long"
    return "settled"


def amplitude_limit(fit: RiseFit) -> float:
    """Return the one-sided 95 % upper limit of the amplitude of a rise that was not found."""
    return max(fit.amplitude, 0.0) + float(norm.ppf(0.95)) * fit.amplitude_error
