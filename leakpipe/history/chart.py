"""The chart that tells a change from noise, epoch by epoch.

A self-starting, winsorised, one-sided cumulative sum in either direction: every epoch is compared
with what was known before it, so no reference period has to be named. Cumulative sums: E. S. Page,
Biometrika 41, 100 (1954); self-starting form: D. M. Hawkins, The Statistician 36, 299 (1987);
between-epoch variance: R. DerSimonian and N. Laird, Controlled Clinical Trials 7, 177 (1986)
(all three recalled from memory). The constants were tuned in the rates study (fresh seeds: 0.6-0.8
false alarms per 1000 epochs of a qubit).
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

WARM_UP = 10
"""Epochs of a series before its sums start (rates study)."""
WINSOR = 2.5
"""Standardised deviations are cut off here, so that no single epoch raises an alarm."""
VARIANCE_WINSOR = 3.5
"""Cut for the between-epoch variance. At WINSOR, and without frozen epochs, it came out 36 % too
small and the false alarms doubled (measured with `studies.season`)."""
REFERENCE = 1.0
"""k: a deviation counts only as far as it exceeds this many standard deviations."""
THRESHOLD = 2.7
"""h: the sum that raises an alarm (rates study)."""
FREEZE = 0.5
"""The baseline learns nothing while a sum is above this part of h."""

SHARED_SERIES = 5
"""Fewest series with a value for a shift in common to be told from single ones (our choice)."""
SHARED_SIDE = 0.8
"""Part of the series that must lie on the side of a shift in common (our choice)."""
SHARED_SIGMA = 4.0
"""Median shift over its error that counts as shared (our choice: one or two series that move
alone cannot bring the median there)."""
MEDIAN_EFFICIENCY = np.sqrt(np.pi / 2)
"""Error of a median over the error of a mean, normal distribution (closed form)."""

CORRELATION_PAIRS = 60
"""Fewest pairs of successive epochs for an autocorrelation (its error is then 0.13)."""
CORRELATION_SIGMA = 2.0
"""Errors that an autocorrelation must lie above zero before it changes anything (our choice)."""

Floats = NDArray[np.float64]


@dataclass(frozen=True)
class Chart:
    """What the chart says, all arrays (epoch, series) unless said otherwise.

    Attributes
    ----------
    deviation
        Standardised deviation from the baseline before the epoch, not cut off; NaN where there is
        no value or no baseline yet.
    up, down
        The two sums after the epoch (before the restart where there is an alarm).
    alarm
        +1, -1 or 0: the direction of an alarm raised in the epoch.
    since
        Epoch at which the sum that raised the alarm left zero; -1 without an alarm.
    baseline, baseline_error
        Weighted mean of the epochs learned before, and its standard error.
    learned
        Number of epochs in the baseline.
    between
        Between-epoch standard deviation before each epoch, (epoch,).
    shared, shared_error
        Median shift of all series in the epoch and its error, (epoch,); NaN where unknown.
    is_shared
        Whether the shift in common is beyond noise, (epoch,); it was then taken off every series.
    correlation, between_correlation
        Autocorrelation from one epoch to the next known before each epoch, of the values and of
        their between-epoch part alone, (epoch,); NaN before CORRELATION_PAIRS pairs.
    is_correlated
        Whether it is beyond noise, (epoch,).
    threshold
        h used in each epoch, (epoch,).
    """

    deviation: Floats
    up: Floats
    down: Floats
    alarm: NDArray[np.int8]
    since: NDArray[np.int64]
    baseline: Floats
    baseline_error: Floats
    learned: NDArray[np.int64]
    between: Floats
    shared: Floats
    shared_error: Floats
    is_shared: NDArray[np.bool_]
    correlation: Floats
    between_correlation: Floats
    is_correlated: NDArray[np.bool_]
    threshold: Floats


def chart(
    values: Floats,
    errors: Floats,
    *,
    in_common: bool = False,
    shift: Floats | None = None,
    threshold: float = THRESHOLD,
    raised: Callable[[float, float], float] | None = None,
) -> Chart:
    """Run the chart over the epochs of several series of one quantity.

    Parameters
    ----------
    values, errors
        Values on a scale with symmetric errors, and their standard errors, (epoch, series); NaN
        where an epoch has no value. A missing epoch changes nothing.
    in_common
        Whether a shift that all series share in an epoch is found and taken off.
    shift
        A known shift to take off every series, (epoch,).
    threshold
        h, the sum that raises an alarm.
    raised
        Gives h for the autocorrelation of the values and of their between-epoch part, used where
        it is beyond noise.
    """
    epochs, series = values.shape
    out = _empty(epochs, series)
    values = values if shift is None else values - shift[:, np.newaxis]
    # What the baseline has learned: winsorised values, zero weight where nothing was learned.
    learned = np.full((epochs, series), np.nan)
    seen = np.full((epochs, series), np.nan)
    up, down = np.zeros(series), np.zeros(series)
    up_from, down_from = np.zeros(series, dtype=np.int64), np.zeros(series, dtype=np.int64)
    start = np.zeros(series, dtype=np.int64)
    for now in range(epochs):
        inside = np.arange(now)[:, np.newaxis] >= start
        known = np.where(inside, learned[:now], np.nan)
        past = np.where(inside, seen[:now], np.nan)
        variance = between_variance(past, errors[:now])
        mean, mean_variance, count = _baseline(known, errors[:now], variance)
        spread = np.sqrt(errors[now] ** 2 + variance + mean_variance)
        step = values[now] - mean
        ready = (count >= WARM_UP) & np.isfinite(step)
        if in_common:
            shared, shared_error, is_shared = _shared(step, spread, count >= 2)
            out.shared[now], out.shared_error[now] = shared, shared_error
            out.is_shared[now] = is_shared
            step = step - shared if is_shared else step
        z = step / spread
        rho, phi, beyond = _correlation(past, errors[:now], variance)
        limit = raised(rho, phi) if raised is not None and beyond else threshold
        cut = np.clip(z, -WINSOR, WINSOR)
        up_from = np.where(ready & (up <= 0), now, up_from)
        down_from = np.where(ready & (down <= 0), now, down_from)
        up = np.where(ready, np.maximum(up + cut - REFERENCE, 0.0), up)
        down = np.where(ready, np.maximum(down - cut - REFERENCE, 0.0), down)
        alarm = np.where(up > limit, 1, np.where(down > limit, -1, 0))
        out.up[now], out.down[now], out.alarm[now] = up, down, alarm
        out.since[now] = np.where(alarm > 0, up_from, np.where(alarm < 0, down_from, -1))
        out.deviation[now] = np.where(count >= 2, z, np.nan)
        out.baseline[now], out.baseline_error[now] = mean, np.sqrt(mean_variance)
        out.learned[now], out.between[now] = count, np.sqrt(variance)
        out.correlation[now], out.between_correlation[now] = rho, phi
        out.is_correlated[now], out.threshold[now] = beyond, limit
        frozen = np.maximum(up, down) > FREEZE * limit
        begins = count == 0
        taken = np.where(begins, values[now], mean + cut * spread)
        learned[now] = np.where(frozen, np.nan, taken)
        wide = np.clip(z, -VARIANCE_WINSOR, VARIANCE_WINSOR)
        seen[now] = np.where(begins, values[now], mean + wide * spread)
        restart = alarm != 0
        start = np.where(restart, now + 1, start)
        up, down = np.where(restart, 0.0, up), np.where(restart, 0.0, down)
    return out


def between_variance(values: Floats, errors: Floats) -> float:
    """Return the between-epoch variance that several series share (moment estimate, >= 0).

    With weights w = 1 / s^2 and Q = sum w (y - ybar)^2 per series: the sum over the series of
    Q - (n - 1), over the sum of sum w - sum w^2 / sum w (DerSimonian and Laird, pooled).

    Parameters
    ----------
    values, errors
        (epoch, series), NaN where there is no value.
    """
    good = np.isfinite(values) & np.isfinite(errors)
    weights = np.where(good, 1.0 / np.where(good, errors, 1.0) ** 2, 0.0)
    count = good.sum(axis=0)
    use = count >= 2
    if not use.any():
        return 0.0
    weights, clean = weights[:, use], np.where(good, values, 0.0)[:, use]
    total = weights.sum(axis=0)
    mean = (weights * clean).sum(axis=0) / total
    excess = (weights * (clean - mean) ** 2).sum(axis=0) - (count[use] - 1)
    scale = total - (weights**2).sum(axis=0) / total
    return max(float(excess.sum() / scale.sum()), 0.0)


def _baseline(
    known: Floats, errors: Floats, variance: float
) -> tuple[Floats, Floats, NDArray[np.int64]]:
    good = np.isfinite(known)
    weights = np.where(good, 1.0 / (np.where(good, errors, 1.0) ** 2 + variance), 0.0)
    total = weights.sum(axis=0)
    with np.errstate(divide="ignore", invalid="ignore"):
        mean = (weights * np.where(good, known, 0.0)).sum(axis=0) / total
        return mean, 1.0 / total, good.sum(axis=0)


def _shared(step: Floats, spread: Floats, known: NDArray[np.bool_]) -> tuple[float, float, bool]:
    """Return the median step of all series, its error and whether it is beyond noise."""
    use = known & np.isfinite(step)
    count = int(use.sum())
    if count < SHARED_SERIES:
        return np.nan, np.nan, False
    middle = float(np.median(step[use]))
    error = float(MEDIAN_EFFICIENCY * np.median(spread[use]) / np.sqrt(count))
    side = np.mean(np.sign(step[use]) == np.sign(middle))
    return middle, error, bool(abs(middle) > SHARED_SIGMA * error and side >= SHARED_SIDE)


def _correlation(values: Floats, errors: Floats, variance: float) -> tuple[float, float, bool]:
    """Return the lag-one autocorrelation of the epochs over all series.

    Per series, from residuals r about its mean in units of sqrt(s^2 + between-epoch variance):
    sum r_t r_{t+1} / sum r_t^2 + 1/n, where 1/n undoes what taking off the mean of n epochs costs.
    Over the series the mean of the middle half: a few that really changed are autocorrelated too,
    and must not make the chart deaf to others.

    Returns
    -------
    rho
        Autocorrelation of the measured values; NaN with fewer than CORRELATION_PAIRS pairs.
    phi
        Autocorrelation of the between-epoch part alone, at most 1; NaN where that part is zero.
    beyond
        Whether rho is beyond noise (error 1 / sqrt(pairs)).
    """
    total = errors**2 + variance
    good = np.isfinite(values) & np.isfinite(total)
    use = (good[1:] & good[:-1]).sum(axis=0) >= 2
    good = good[:, use]
    pairs = (good[1:] & good[:-1]).sum(axis=0)
    if pairs.sum() < CORRELATION_PAIRS:
        return np.nan, np.nan, False
    clean = np.where(good, values[:, use], 0.0)
    total = np.where(good, total[:, use], 1.0)
    count = good.sum(axis=0)
    scaled = np.where(good, (clean - clean.sum(axis=0) / count) / np.sqrt(total), 0.0)
    square = (scaled**2).sum(axis=0) / count
    product = (scaled[1:] * scaled[:-1]).sum(axis=0) / pairs
    with np.errstate(divide="ignore", invalid="ignore"):
        single = np.where(square > 0, product / square, 0.0) + 1.0 / count
    skipped = len(single) // 4
    rho = float(np.sort(single)[skipped : len(single) - skipped].mean())
    between = variance / float(total[good].mean())
    phi = min(rho / between, 1.0) if between > 0 else np.nan
    return rho, phi, bool(rho * np.sqrt(pairs.sum()) > CORRELATION_SIGMA)


def _empty(epochs: int, series: int) -> Chart:
    def table() -> Floats:
        return np.full((epochs, series), np.nan)

    def column() -> Floats:
        return np.full(epochs, np.nan)

    return Chart(
        deviation=table(),
        up=np.zeros((epochs, series)),
        down=np.zeros((epochs, series)),
        alarm=np.zeros((epochs, series), dtype=np.int8),
        since=np.full((epochs, series), -1, dtype=np.int64),
        baseline=table(),
        baseline_error=table(),
        learned=np.zeros((epochs, series), dtype=np.int64),
        between=column(),
        shared=column(),
        shared_error=column(),
        is_shared=np.zeros(epochs, dtype=bool),
        correlation=column(),
        between_correlation=column(),
        is_correlated=np.zeros(epochs, dtype=bool),
        threshold=np.full(epochs, THRESHOLD),
    )
