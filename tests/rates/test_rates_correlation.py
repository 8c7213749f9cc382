"""Correlations two and more rounds apart, on rehearsed memories with known leakage."""

from __future__ import annotations

import numpy as np
import pytest
import xarray as xr

from leakpipe.codes.layout import Layout
from leakpipe.codes.rotated import rotated_surface
from leakpipe.config.detection import DetectionSettings
from leakpipe.detection import stage as detection_stage
from leakpipe.rates.correlation import covariances
from leakpipe.rates.curves import fit_correlations, fit_mean, interior, memory_of_code
from leakpipe.recordings.shots import Frame, Readings
from leakpipe.rehearsal.memory import simulate
from leakpipe.rehearsal.noise import MemoryNoise

LAYOUT = rotated_surface(3)
ROUNDS, SHOTS = 20, 60_000


def detected(
    noise: MemoryNoise, seed: int, scale: np.ndarray | None = None, layout: Layout = LAYOUT
) -> xr.Dataset:
    """Detection dataset of one rehearsed recording, states known exactly."""
    rng = np.random.default_rng(seed)
    frame = Frame("one", layout, "Z", ROUNDS, SHOTS)
    one = simulate(layout, "Z", ROUNDS, SHOTS, noise, rng, error_scale=scale)
    readings = Readings(
        0,
        one.states,
        (one.states == 2).astype(np.float32),
        one.final_states,
        (one.final_states == 2).astype(np.float32),
        one.prepared,
    )
    sums = detection_stage.partial(readings, frame)
    return detection_stage.detection([(frame, sums)], DetectionSettings())


@pytest.mark.parametrize("seepage", [0.1, 0.2, 0.4])
def test_memory_is_that_of_the_leakage(seepage: float) -> None:
    """lam of rise and covariances is 1 - G - S of the device within 2 of its standard errors.

    Statistics alone would be ten times sharper here; the stated model error dominates.
    """
    data = detected(MemoryNoise(measurement=0.01, injection=6e-4, seepage=seepage), 1)
    rise = fit_mean(interior(data, 1))
    found = memory_of_code(rise, *fit_correlations(data, rise))
    assert found is not None
    memory, variance, _ = found
    # G per round is two to four gates of 6e-4: below .0024.
    assert abs(memory - (1 - seepage - 0.0017)) < 2 * np.sqrt(variance) + 0.0008
    assert np.sqrt(variance) < 0.03


def test_no_correlation_without_leakage() -> None:
    """Ordinary errors span two rounds at most: covariances at lags 2 to 8 are noise (|z| < 4)."""
    data = detected(MemoryNoise(measurement=0.01, two_qubit=0.01), 2)
    same, pairs = fit_correlations(data, fit_mean(interior(data, 1)))
    for fit in (same, pairs):
        assert fit is not None
        assert abs(fit.significance) < 4
        # 7 lags: chi-square of independent lags below 7 + 4 sqrt(14).
        assert np.sum((fit.covariance / fit.error) ** 2) < 7 + 4 * np.sqrt(14)


def test_heating_rises_without_correlation() -> None:
    """Error rates that grow over rounds give a rise, but no covariance at lags of 2 and more."""
    scale = 1 + 0.4 * (1 - np.exp(-np.arange(ROUNDS) / 5))
    data = detected(MemoryNoise(measurement=0.01), 3, scale)
    rise = fit_mean(interior(data, 1))
    assert rise.ratio_flat > 8.9
    assert rise.amplitude > 0
    same, _ = fit_correlations(data, rise)
    assert same is not None
    assert abs(same.significance) < 4


def test_slow_drift_does_not_look_like_leakage() -> None:
    """Local means over 50 shots remove a drift of the error rate within a recording.

    The same products about the global mean, as a control, show it.
    """
    rng = np.random.default_rng(4)
    blocks, block, rounds = 400, 50, 10
    rate = 0.1 + 0.05 * np.sin(np.arange(blocks) / 40)
    events = rng.random((blocks, block, rounds)) < rate[:, None, None]
    flat = events.reshape(-1, rounds).astype(float)
    products = np.zeros((1, rounds + 1, 9))
    block_products = np.zeros_like(products)
    totals = events.sum(axis=1).astype(float)
    for lag in range(9):
        for r in range(1, rounds - lag):
            products[0, r, lag] = np.sum(flat[:, r - 1] * flat[:, r - 1 + lag])
            block_products[0, r, lag] = np.sum(totals[:, r - 1] * totals[:, r - 1 + lag])
    counts = np.full(rounds + 1, float(blocks))
    local, _ = covariances(products, block_products, counts)
    local_mean = np.nanmean(local[0, 1:7, 2:4])
    plain = flat - flat.mean(axis=0)
    control = np.mean([np.mean(plain[:, r] * plain[:, r + 2]) for r in range(6)])
    # Variance of a product of two independent events, averaged over 12 (round, lag) cells.
    noise = 0.1 * 0.9 / np.sqrt(blocks * block * 12)
    assert abs(local_mean) < 4 * noise
    # The drift's own variance, .05^2 / 2 = 1.25e-3, is seven standard errors.
    assert control > 4 * noise
