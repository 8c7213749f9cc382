"""Which shape a rise has: flat, a line, one exponential or two; and whether it only looks like one.

Likelihood ratios are divided by the variance ratio of their direction and compared with simulated
critical values (`critical`). Detection probabilities alone cannot tell leakage from heating; what
they can tell is whether the rise goes on after the first rounds: a transient at the boundary does
not (prototype study of the rates).
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

import numpy as np
from numpy.typing import NDArray
from scipy.stats import t

from leakpipe.rates.critical import (
    CriticalValues,
    critical_two,
    critical_values,
    one_against_two,
    two_exponentials,
)
from leakpipe.rates.rise import FEWEST_ROUNDS, FREEDOM, RiseFit, fit_rise
from leakpipe.rates.sandwich import Sandwich

FloatArray = NDArray[np.float64]
Shape = Literal["no data", "flat", "line", "one exponential", "two exponentials"]

Course = Literal["no data", "no rise", "goes on", "over early", "unclear"]

FIRST_ROUNDS = (1, 3, 6)
"""First fitted interior layers, counted from 1, of the scan (prototype study of the rates)."""
TRANSIENT = 0.5
"""A later rise surely below this part of what the whole curve predicts is over (ours: half way
between leakage, 1, and a boundary effect, 0)."""


@dataclass(frozen=True)
class ShapeChoice:
    """The simplest shape that the data do not refuse.

    Attributes
    ----------
    shape
        "no data", "flat", "line", "one exponential" or "two exponentials".
    ratio_flat, ratio_line, ratio_two
        Scaled likelihood ratios: exponential against flat (99 % decides), exponential against line
        (95 %), two exponentials against one (99 %; NaN where not reached).
    critical
        Critical values of the first two.
    critical_two
        (95, 99 %) critical values of the third; NaN where not reached.
    """

    shape: Shape
    ratio_flat: float
    ratio_line: float
    ratio_two: float
    critical: CriticalValues
    critical_two: tuple[float, float]


def choose_shape(
    rounds: FloatArray,
    probability: FloatArray,
    variance: FloatArray,
    deviations: FloatArray,
    fit: RiseFit | None = None,
) -> ShapeChoice:
    """Choose the shape of one curve; arguments as `fit_rise`, whose result may be handed in."""
    fit = fit or fit_rise(rounds, probability, variance, deviations)
    critical = critical_values(rounds, FREEDOM)
    nothing = (float("nan"), float("nan"))
    ratios = (fit.ratio_flat, fit.ratio_line)
    if fit.status == "no data":
        return ShapeChoice("no data", *ratios, nothing[0], critical, nothing)
    if fit.ratio_flat < critical.either[1]:
        return ShapeChoice("flat", *ratios, nothing[0], critical, nothing)
    if fit.ratio_line < critical.line[0]:
        return ShapeChoice("line", *ratios, nothing[0], critical, nothing)
    weight = 1 / variance
    ratio = float(one_against_two(rounds, probability[None], weight)[0])
    ratio /= Sandwich(weight, deviations).ratio(
        _two_curve(rounds, probability, weight) - fit.curve(rounds)
    )
    limits = critical_two(rounds, FREEDOM)
    shape: Shape = "two exponentials" if ratio > limits[1] else "one exponential"
    return ShapeChoice(shape, *ratios, ratio, critical, limits)


def _two_curve(rounds: FloatArray, probability: FloatArray, weight: FloatArray) -> FloatArray:
    """Return the best constant and two exponentials, (n,)."""
    log_taus = two_exponentials(rounds, probability[None], weight)[1][0]
    decay = np.exp(-np.exp(-np.unique(log_taus)) * rounds[:, None])
    basis = np.column_stack([np.ones_like(rounds), decay])
    root = np.sqrt(weight)
    coefficients = np.linalg.lstsq(basis * root[:, None], probability * root, rcond=None)[0]
    return np.asarray(basis @ coefficients, dtype=float)


@dataclass(frozen=True)
class StartScan:
    """Fits that leave out more and more of the first rounds.

    Attributes
    ----------
    first
        (s,) first fitted round of each.
    fits
        Their rises.
    later_part, later_error
        (s - 1,) rise from the later starts on, in parts of what the whole curve predicts there, and
        its sandwich error.
    course
        "goes on": the later rounds still rise. "over early": they do not, although the whole curve
        predicts it or because it puts most of the rise before them; then detection probabilities
        alone cannot tell leakage that settles so fast from a transient of the first rounds.
        "unclear": the later rounds are too noisy. "no rise", "no data": as the whole curve.
    """

    first: FloatArray
    fits: tuple[RiseFit, ...]
    later_part: FloatArray
    later_error: FloatArray
    course: Course


def scan_starts(
    rounds: FloatArray, probability: FloatArray, variance: FloatArray, deviations: FloatArray
) -> StartScan:
    """Fit a curve from its first, third and sixth round on; arguments as `fit_rise`.

    The later rise is compared with the prediction of the whole curve.
    """
    whole = fit_rise(rounds, probability, variance, deviations)
    fits, firsts, parts = [whole], [float(rounds[0]) if len(rounds) else np.nan], []
    later_limit = np.inf
    critical = critical_values(rounds, FREEDOM) if whole.status != "no data" else None
    for number in FIRST_ROUNDS[1:]:
        later = slice(number - 1, None)
        if whole.status == "no data" or len(rounds[later]) < FEWEST_ROUNDS:
            break
        one = (rounds[later], probability[later], variance[later], deviations[:, later])
        # The critical values of all rounds: those of fewer are a few percent lower.
        fits.append(fit_rise(*one, critical))
        firsts.append(float(one[0][0]))
        parts.append(_part_of(whole.curve(one[0]), *one[1:]))
        if number == FIRST_ROUNDS[1]:
            # Counted from its own first round, the amplitude is the rise that is still to come.
            later_limit = fit_rise(one[0] - firsts[-1], *one[1:], critical).amplitude_limit
    table, first = np.array(parts).reshape(-1, 2), np.array(firsts)
    freedom = Sandwich(1 / variance, deviations).freedom
    width = float(t.ppf(0.975, freedom)) * table[:, 1]
    course = _course(fits, first, table[:, 0], width, later_limit)
    return StartScan(first, tuple(fits), table[:, 0], table[:, 1], course)


def _course(
    fits: list[RiseFit], first: FloatArray, part: FloatArray, width: FloatArray, limit: float
) -> Course:
    """Return the word for what the rise does after the first rounds."""
    whole = fits[0]
    if whole.status == "no data":
        return "no data"
    if whole.status in ("no rise", "falling"):
        return "no rise"
    if np.any(part + width < TRANSIENT):
        return "over early"
    if np.any(part - width > 0):
        return "goes on"
    # The whole curve may itself say that the rise is over by then; believed only if the later
    # rounds could have shown it.
    seen = whole.level - float(whole.curve(first[:1])[0])
    return "over early" if limit < TRANSIENT * seen else "unclear"


def _part_of(
    predicted: FloatArray, probability: FloatArray, variance: FloatArray, deviations: FloatArray
) -> tuple[float, float]:
    """Return the slope of the data with the predicted curve about their means, and its error."""
    weight = 1 / variance
    basis = np.column_stack([np.ones_like(predicted), predicted - predicted.mean()])
    _, covariance = Sandwich(weight, deviations).covariance(basis)
    normal = (basis * weight[:, None]).T @ basis
    if np.linalg.matrix_rank(normal, hermitian=True) < 2:
        return float("nan"), float("inf")
    slope = np.linalg.solve(normal, (basis * weight[:, None]).T @ probability)[1]
    return float(slope), float(np.sqrt(covariance[1, 1]))
