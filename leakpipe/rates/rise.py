"""The rise of a detection probability over rounds: d[r] = A - B exp(-r / tau).

For a fixed tau the model is linear (`varpro`), so tau is searched on a grid and refined: no
starting values. Errors are sandwich errors over contiguous batches; intervals of tau and of the
amplitude are profiles whose threshold is scaled by sandwich over binomial variance (coverage of
both: prototype study of the rates, and studies/rise.py).
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any, Literal

import numpy as np
from numpy.typing import NDArray
from scipy.stats import norm, t

from leakpipe.rates.critical import CriticalValues, critical_values, line_sums, search_grid
from leakpipe.rates.profiles import Profile
from leakpipe.rates.sandwich import Sandwich, error_along, limited_ratio
from leakpipe.rates.varpro import fit_curves

FloatArray = NDArray[np.float64]
Status = Literal["no rise", "falling", "short", "long", "settled", "no data"]

SHORT_TAU, SHORT_END = 1.0, 0.5
"""A tau below the first, or an interval that reaches below the second, is open below (study)."""
LONG_FACTOR = 3.0
"""A tau whose upper end exceeds this many times the longest run is open above (study)."""
LONGEST_QUOTED = 0.5
"""A tau above this share of the longest run is never quoted: fits selected to be there have poor
coverage (study)."""
SHORTEST_LIMITED = 2.0
"""Upper limits of an amplitude hold for settling times from this many rounds on: shorter rises are
over before the first fitted round (ours)."""
FEWEST_ROUNDS = 4
"""Three parameters and one degree of freedom."""
ILL_CONDITIONED = 50.0
"""Condition of the scaled Jacobian above which a fit is flagged (study)."""
FREEDOM = 49
"""Degrees of freedom of the critical values: variance ratios from 50 batches."""


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
    amplitude_low, amplitude_high
        95 % interval of B by the scaled profile; infinite where tau is open.
    amplitude_limit
        One-sided 95 % upper limit of B over settling times of 2 rounds to half the longest run:
        what a curve without a significant rise tells.
    relative_low, relative_high
        95 % interval of B / (A - B) by the scaled profile.
    tau, tau_low, tau_high
        Settling time in rounds and its 95 % interval by the scaled profile; 0 or inf where the
        interval is open.
    log_tau_error
        Sandwich error of ln tau.
    slope, slope_error
        Rise per round at the first fitted round and its sandwich error: what a "long" rise tells.
    ratio_flat, ratio_line
        Likelihood ratios against flat and straight line, each divided by the variance ratio of its
        direction.
    variance_ratio
        Sandwich over binomial variance of ln tau.
    condition
        Condition number of the Jacobian with columns scaled to length 1; above 50 the parameters
        can hardly be told apart.
    covariance
        (3, 3) sandwich covariance of A, B, ln tau.
    """

    status: Status
    start: float
    level: float
    amplitude: float
    amplitude_error: float
    amplitude_low: float
    amplitude_high: float
    amplitude_limit: float
    relative_low: float
    relative_high: float
    tau: float
    tau_low: float
    tau_high: float
    log_tau_error: float
    slope: float
    slope_error: float
    ratio_flat: float
    ratio_line: float
    variance_ratio: float
    condition: float
    covariance: FloatArray

    @property
    def relative(self) -> float:
        """B / (A - B); NaN where nothing ever fires at round 0."""
        return self.amplitude / self.start if self.start else float("nan")

    @property
    def relative_error(self) -> float:
        """Standard error of the relative rise, from the covariance of (A, B)."""
        return float(error_along(relative_slopes(self.level, self.amplitude), self.covariance))

    @property
    def ill_conditioned(self) -> bool:
        """Whether the condition exceeds the limit of the study."""
        return bool(self.condition > ILL_CONDITIONED)

    def curve(self, rounds: FloatArray) -> FloatArray:
        """Return the fitted detection probability."""
        return np.asarray(self.level - self.amplitude * np.exp(-rounds / self.tau), dtype=float)

    def curve_error(self, rounds: FloatArray) -> FloatArray:
        """Return the standard error of the fitted curve."""
        jacobian = jacobian_of(rounds, self.amplitude, float(np.log(self.tau)))
        return error_along(jacobian, self.covariance)


_EMPTY: dict[str, Any] = {
    name: float("nan") for name in RiseFit.__annotations__ if name not in ("status", "covariance")
}
NO_DATA = RiseFit(status="no data", covariance=np.full((3, 3), np.nan), **_EMPTY)


def fit_rise(
    rounds: FloatArray,
    probability: FloatArray,
    variance: FloatArray,
    deviations: FloatArray,
    critical: CriticalValues | None = None,
) -> RiseFit:
    """Fit one rise.

    Parameters
    ----------
    rounds
        (n,) interior rounds, ascending.
    probability
        (n,) detection probability of each.
    variance
        (n,) its binomial variance.
    deviations
        (batch, n) contribution of each batch to `probability` minus its expected part; sums to 0
        over batches. Their outer products are the sandwich's filling.
    critical
        Critical values of the likelihood ratios; simulated for these rounds if None.
    """
    if len(rounds) < FEWEST_ROUNDS or not np.all(np.isfinite(probability)):
        return NO_DATA
    weight, longest = 1 / variance, float(rounds.max())
    grid = search_grid(longest)
    one = fit_curves(rounds, probability[None], weight, grid)
    u, level, amplitude = float(one.log_tau[0]), float(one.level[0]), float(one.amplitude[0])
    lowest = float(one.residual_sum[0])
    profile = Profile(rounds, probability, weight, grid, u, lowest)
    spread = Sandwich(weight, deviations)
    jacobian = jacobian_of(rounds, amplitude, u)
    binomial, covariance = spread.covariance(jacobian)
    squared = float(t.ppf(0.975, spread.freedom)) ** 2

    def threshold(gradient: FloatArray) -> float:
        sandwich = float(gradient @ covariance @ gradient)
        return squared * limited_ratio(sandwich, float(gradient @ binomial @ gradient))

    of_amplitude, of_tau = np.array([0.0, 1.0, 0.0]), np.array([0.0, 0.0, 1.0])
    tau_ends = profile.tau_ends(threshold(of_tau))
    amplitude_ends = profile.amplitude_ends(threshold(of_amplitude))
    relative_ends = profile.relative_ends(threshold(relative_slopes(level, amplitude)))
    curve = level - amplitude * np.exp(-rounds * np.exp(-u))
    line = np.polynomial.Polynomial.fit(rounds, probability, 1, w=np.sqrt(weight))(rounds)
    mean = weight @ probability / weight.sum()
    flat_sum, line_sum = float(one.flat_sum[0]), line_sums(rounds, probability[None], weight)[0]
    # The best line is the limit of the exponentials beyond the grid: it is never better than them.
    ratio_flat = (flat_sum - min(lowest, line_sum)) / spread.ratio(curve - mean)
    ratio_line = max(float(line_sum) - lowest, 0.0) / spread.ratio(curve - line)
    slope, slope_gradient = _slope_at(float(rounds.min()), amplitude, u)
    lengths = np.sqrt((weight[:, None] * jacobian**2).sum(axis=0))
    scaled = np.sqrt(weight)[:, None] * jacobian / np.where(lengths > 0, lengths, 1.0)
    limited_to = (SHORTEST_LIMITED, max(LONGEST_QUOTED * longest, SHORTEST_LIMITED))
    flat_ratio = spread.ratio(curve - mean)
    return RiseFit(
        status=status_of(
            float(np.exp(u)),
            tau_ends,
            amplitude,
            (ratio_flat, ratio_line),
            longest,
            critical or critical_values(rounds, FREEDOM),
        ),
        start=level - amplitude,
        level=level,
        amplitude=amplitude,
        amplitude_error=float(np.sqrt(covariance[1, 1])),
        amplitude_low=amplitude_ends[0],
        amplitude_high=amplitude_ends[1],
        amplitude_limit=profile.amplitude_limit(float(norm.ppf(0.95)), flat_ratio, limited_to),
        relative_low=relative_ends[0],
        relative_high=relative_ends[1],
        tau=float(np.exp(u)),
        tau_low=tau_ends[0],
        tau_high=tau_ends[1],
        log_tau_error=float(np.sqrt(covariance[2, 2])),
        slope=slope,
        slope_error=float(error_along(slope_gradient, covariance)),
        ratio_flat=float(ratio_flat),
        ratio_line=ratio_line,
        variance_ratio=threshold(of_tau) / squared,
        condition=float(np.linalg.cond(scaled)),
        covariance=covariance,
    )


def jacobian_of(rounds: FloatArray, amplitude: float, log_tau: float) -> FloatArray:
    """Return the slopes of A - B exp(-r / tau) with A, B and ln tau, (n, 3)."""
    rate = rounds * np.exp(-log_tau)
    decay = np.exp(-rate)
    return np.column_stack([np.ones_like(rounds), -decay, -amplitude * decay * rate])


def relative_slopes(level: float, amplitude: float) -> FloatArray:
    """Return the slopes of B / (A - B) with A, B and ln tau; 0 where A = B."""
    if level == amplitude:
        return np.zeros(3)
    return np.array([-amplitude, level, 0.0]) / (level - amplitude) ** 2


def _slope_at(first: float, amplitude: float, log_tau: float) -> tuple[float, FloatArray]:
    """Return B exp(-r / tau) / tau at a round and its slopes with A, B and ln tau."""
    rate = np.exp(-log_tau)
    unit = float(rate * np.exp(-first * rate))
    return amplitude * unit, np.array([0.0, unit, amplitude * unit * (first * rate - 1)])


def status_of(
    tau: float,
    ends: tuple[float, float],
    amplitude: float,
    ratios: tuple[float, float],
    longest: float,
    critical: CriticalValues,
) -> Status:
    """Return the status word of a rise.

    Parameters
    ----------
    tau, ends
        Settling time and its interval.
    amplitude
        B.
    ratios
        Likelihood ratios against flat (99 % decides) and against a straight line (95 %).
    longest
        Longest run in rounds.
    critical
        Their critical values.
    """
    if ratios[0] < critical.either[1]:
        return "no rise"
    if amplitude < 0:
        return "falling"
    if tau < SHORT_TAU or ends[0] < SHORT_END:
        return "short"
    is_line = ratios[1] < critical.line[0]
    if ends[1] > LONG_FACTOR * longest or is_line or tau > LONGEST_QUOTED * longest:
        return "long"
    return "settled"


def amplitude_limit(fit: RiseFit) -> float:
    """Return the one-sided 95 % upper limit of the amplitude of a rise that was not found."""
    return fit.amplitude_limit
