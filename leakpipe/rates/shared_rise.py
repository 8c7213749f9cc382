"""One settling time for several checks, and refits of many checks to bootstrap samples.

The checks of a code see the same leakage, so they share tau while each keeps its level A and
amplitude B. Shots are common to all checks: the batches' deviations are filled in jointly, since
errors taken per check are too small (coverage .90 instead of .95; prototype study of the rates).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.optimize import minimize_scalar
from scipy.stats import t

from leakpipe.rates.critical import critical_values, search_grid
from leakpipe.rates.profiles import threshold_ends
from leakpipe.rates.rise import FEWEST_ROUNDS, FREEDOM, RiseFit, Status, fit_rise, status_of
from leakpipe.rates.sandwich import limited_ratio
from leakpipe.rates.varpro import fit_curves, profile_sums

FloatArray = NDArray[np.float64]

TOLERANCE = 1e-7
"""Of ln tau: the residual sum is flat below the root of a double's precision."""


@dataclass(frozen=True)
class SharedRise:
    """Fit of several curves with one tau.

    Attributes
    ----------
    status
        As in `RiseFit`; the tests against flat and line are those of the mean curve.
    tau, tau_low, tau_high
        Settling time in rounds and its 95 % interval by the scaled profile; 0 or inf where open.
    log_tau_error
        Sandwich error of ln tau.
    variance_ratio
        Sandwich over binomial variance of ln tau.
    level, amplitude
        (check,) A and B.
    level_error, amplitude_error
        (check,) their sandwich errors, that of tau included.
    mean
        Fit of the mean curve.
    """

    status: Status
    tau: float
    tau_low: float
    tau_high: float
    log_tau_error: float
    variance_ratio: float
    level: FloatArray
    amplitude: FloatArray
    level_error: FloatArray
    amplitude_error: FloatArray
    mean: RiseFit


def fit_shared_rise(
    rounds: FloatArray, probability: FloatArray, variance: FloatArray, deviations: FloatArray
) -> SharedRise | None:
    """Fit curves that share tau; None where there are too few rounds.

    Parameters
    ----------
    rounds
        (n,) interior rounds, ascending.
    probability, variance
        (check, n) detection probabilities and their binomial variances.
    deviations
        (batch, check, n) the batches' contributions less their expected part.
    """
    if len(rounds) < FEWEST_ROUNDS or not np.all(np.isfinite(probability)):
        return None
    checks, longest = len(probability), float(rounds.max())
    weight, grid = 1 / variance, search_grid(longest)

    def sums(log_taus: FloatArray) -> FloatArray:
        curves = zip(probability, weight, strict=True)
        each = [profile_sums(rounds, p[None], w, log_taus)[0] for p, w in curves]
        return np.asarray(np.sum(each, axis=0), dtype=float)

    profile = sums(grid)
    at = int(np.argmin(profile))
    bounds = (grid[max(at - 1, 0)], grid[min(at + 1, len(grid) - 1)])
    found = minimize_scalar(
        lambda x: float(sums(np.array([x]))[0]),
        bounds=bounds,
        method="bounded",
        options={"xatol": TOLERANCE},
    )
    u, lowest = float(found.x), float(found.fun)
    linear = [_linear(rounds, p, w, u) for p, w in zip(probability, weight, strict=True)]
    level, amplitude = (np.array([one[k] for one in linear]) for k in (0, 1))
    joint = _joint_errors(rounds, amplitude, u, weight, deviations)
    if joint is None:
        return None
    ratio = limited_ratio(joint.tau_variance, joint.tau_binomial)
    threshold = float(t.ppf(0.975, joint.freedom)) ** 2 * ratio
    low, high = threshold_ends(lambda x: sums(x) - lowest, grid, u, threshold)
    mean = fit_rise(
        rounds, probability.mean(axis=0), variance.sum(axis=0) / checks**2, deviations.mean(axis=1)
    )
    tau = float(np.exp(u))
    ratios = (mean.ratio_flat, mean.ratio_line)
    critical = critical_values(rounds, FREEDOM)
    return SharedRise(
        status=status_of(tau, (low, high), float(amplitude.mean()), ratios, longest, critical),
        tau=tau,
        tau_low=low,
        tau_high=high,
        log_tau_error=float(np.sqrt(joint.tau_variance)),
        variance_ratio=ratio,
        level=level,
        amplitude=amplitude,
        level_error=joint.linear_errors[:, 0],
        amplitude_error=joint.linear_errors[:, 1],
        mean=mean,
    )


@dataclass(frozen=True)
class _JointErrors:
    """Variances of ln tau, sandwich and binomial; (check, 2) errors of A and B; freedom."""

    tau_variance: float
    tau_binomial: float
    linear_errors: FloatArray
    freedom: int


def _joint_errors(
    rounds: FloatArray, amplitude: FloatArray, u: float, weight: FloatArray, deviations: FloatArray
) -> _JointErrors | None:
    """Return sandwich errors with the batches of all checks together; None without a rise.

    With A and B of every check projected out, ln tau is a single parameter with an efficient score.
    """
    batches = int(np.any(deviations != 0, axis=(1, 2)).sum())
    freedom = max(batches - 1, 1)
    scores, information = np.zeros(len(deviations)), 0.0
    influences = []
    for check, w in enumerate(weight):
        basis, slope = _columns(rounds, amplitude[check], u)
        inner = np.linalg.inv((basis * w[:, None]).T @ basis)
        carried = inner @ (basis * w[:, None]).T @ slope
        off = slope - basis @ carried
        scores += deviations[:, check] @ (w * off)
        information += float(w @ off**2)
        influences.append((deviations[:, check] @ (w[:, None] * basis) @ inner, carried))
    if not information > 0:
        return None
    of_tau = scores / information
    correction = batches / freedom
    squares = [((own - of_tau[:, None] * by) ** 2).sum(axis=0) for own, by in influences]
    return _JointErrors(
        correction * float(of_tau @ of_tau),
        1 / information,
        np.sqrt(correction * np.array(squares)),
        freedom,
    )


def _columns(rounds: FloatArray, amplitude: float, u: float) -> tuple[FloatArray, FloatArray]:
    """Return the slopes with (A, B), (n, 2), and with ln tau, (n,)."""
    rate = rounds * np.exp(-u)
    decay = np.exp(-rate)
    return np.column_stack([np.ones_like(rounds), -decay]), -amplitude * decay * rate


def _linear(
    rounds: FloatArray, values: FloatArray, weight: FloatArray, u: float
) -> tuple[float, float]:
    """Return A and B at fixed ln tau."""
    decay = np.exp(-rounds * np.exp(-u))
    mean, total = float(weight @ decay), float(weight.sum())
    off = decay - mean / total
    amplitude = -float(off @ (weight * values)) / float(weight @ off**2)
    return float(weight @ values) / total + amplitude * mean / total, amplitude


@dataclass(frozen=True)
class RiseDraws:
    """Rises refitted to bootstrap samples of batches, each (draw, check)."""

    level: FloatArray
    amplitude: FloatArray
    log_tau: FloatArray


def refit_rises(
    rounds: FloatArray, events: FloatArray, trials: FloatArray, picks: NDArray[np.int64]
) -> RiseDraws:
    """Refit every check to bootstrap samples of batches.

    Parameters
    ----------
    rounds
        (n,).
    events, trials
        (batch, check, n) counts.
    picks
        (draw, batch) indices of the batches in each sample, drawn with replacement.

    Notes
    -----
    Weights stay those of the whole sample: they are nuisances, and common weights let all draws of
    a check be fitted at once.
    """
    number = np.zeros((len(picks), len(events)))
    np.add.at(number, (np.arange(len(picks))[:, None], picks), 1.0)
    grid = search_grid(float(rounds.max()))
    fits = []
    for check in range(events.shape[1]):
        total = trials[:, check].sum(axis=0)
        whole = events[:, check].sum(axis=0) / total
        variance = np.maximum(whole * (1 - whole), 1 / total) / total
        tried = number @ trials[:, check]
        # A sample without any shot of a round has no probability there: it keeps the whole's.
        sampled = np.where(tried > 0, number @ events[:, check] / np.maximum(tried, 1), whole)
        fits.append(fit_curves(rounds, sampled, 1 / variance, grid))
    return RiseDraws(
        *(
            np.stack([getattr(one, name) for one in fits], axis=1)
            for name in ("level", "amplitude", "log_tau")
        )
    )
