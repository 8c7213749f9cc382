"""The threshold of the chart where epochs are autocorrelated, by simulation."""

from __future__ import annotations

from functools import lru_cache

import numpy as np

from leakpipe.history.chart import THRESHOLD, WARM_UP, chart

WORTH_RAISING = 0.2
"""Between-epoch autocorrelation above which h is raised and a finding warns (rates study)."""
FALSE_ALARMS = 0.8e-3
"""False alarms per epoch and series, one direction, that the threshold holds (rates study)."""
SERIES = 1000
EPOCHS = 60
"""Size of the simulation: 50 000 epochs past the warm-up, 40 alarms expected at the target."""
STEP = 0.25
HIGHEST = 12.0
"""Thresholds tried: a change of three standard deviations still reaches the highest in 8 epochs."""
SEED = 20261201
ROUNDING = 10
"""Autocorrelations are rounded to one part in this, so that few simulations are run."""


def threshold_for(correlation: float, between_correlation: float) -> float:
    """Return h for autocorrelated epochs: the lowest one tried that holds FALSE_ALARMS.

    Parameters
    ----------
    correlation
        Lag-one autocorrelation of the measured values.
    between_correlation
        Of their between-epoch part alone, an autoregressive process of order one.
    """
    if not (np.isfinite(between_correlation) and between_correlation > WORTH_RAISING):
        return THRESHOLD
    phi = min(max(round(between_correlation * ROUNDING), 1), ROUNDING - 1) / ROUNDING
    rho = min(max(round(2 * correlation * ROUNDING), 1) / (2 * ROUNDING), phi)
    return _simulated(rho, phi)


@lru_cache(maxsize=256)
def _simulated(rho: float, phi: float) -> float:
    steps = round((HIGHEST - THRESHOLD) / STEP)
    low, high = 0, steps
    while low < high:
        middle = (low + high) // 2
        if false_alarms(rho, phi, THRESHOLD + middle * STEP) <= FALSE_ALARMS:
            high = middle
        else:
            low = middle + 1
    return THRESHOLD + low * STEP


def false_alarms(rho: float, phi: float, threshold: float) -> float:
    """Return the simulated false alarms per epoch and series, mean of the two directions.

    Values are unit normal: a part rho / phi of the variance is autoregressive with coefficient
    phi, the rest is measurement noise of known size.
    """
    generator = np.random.default_rng(SEED)
    between = rho / phi if phi > 0 else 0.0
    noise = generator.normal(size=(EPOCHS, SERIES))
    process = np.sqrt(1 - phi**2) * generator.normal(size=(EPOCHS, SERIES))
    process[0] = generator.normal(size=SERIES)
    for epoch in range(1, EPOCHS):
        process[epoch] += phi * process[epoch - 1]
    values = np.sqrt(between) * process + np.sqrt(1 - between) * noise
    errors = np.full_like(values, np.sqrt(max(1 - between, MEASURED_LEAST)))
    run = chart(values, errors, threshold=threshold)
    trials = int((run.learned >= WARM_UP).sum())
    return float((run.alarm != 0).sum() / 2 / max(trials, 1))


MEASURED_LEAST = 1e-4
"""Smallest measured part of the variance: weights must stay finite."""
