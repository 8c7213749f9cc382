"""Leaked populations of a role: recovery, coverage, shared calibration errors, limits."""

from __future__ import annotations

import numpy as np
import pytest

from leakpipe.rates.populations import START_DEVIATION, RoleFit, Series, fit_role
from leakpipe.rates.recurrence import accumulated, rates_of

QUBITS = 8
DURATIONS = np.array([1.0, 3, 5, 8, 12, 18, 25])
SHOTS = 6000
REPLICAS = 10


def drawn(
    rng: np.random.Generator, level: np.ndarray, memory: np.ndarray, start: float = 0.0
) -> Series:
    """Closing readouts of all qubits after all durations, perfect readout, 50 batches each."""
    qubit = np.tile(np.arange(QUBITS), len(DURATIONS))
    rounds = np.repeat(DURATIONS, QUBITS)
    injection, seepage = rates_of(level, memory)
    truth = accumulated(injection[qubit], seepage[qubit], rounds, start * level[qubit])
    batches = rng.binomial(SHOTS // 50, truth, size=(50, len(truth))) / (SHOTS // 50)
    value = batches.mean(axis=0)
    scores = np.zeros((50 * len(DURATIONS), len(truth)))
    for index in range(len(DURATIONS)):
        here = slice(index * QUBITS, (index + 1) * QUBITS)
        scores[index * 50 : (index + 1) * 50, here] = (batches - value)[:, here] / 50
    # The variance of a rare count must not follow its own fluctuation: pool over durations.
    pooled = value.reshape(-1, QUBITS).mean(axis=0)[qubit]
    variance = np.maximum(pooled * (1 - pooled), 1 / SHOTS) / SHOTS
    return Series(qubit, rounds, value, variance, scores, np.tile(value, (REPLICAS, 1)))


def test_recovers_levels_and_memories_with_coverage() -> None:
    """95 % intervals of p_k, lam_k and their means cover in .90 to .99 of 60 devices.

    480 qubit intervals: three binomial errors at .95 are .03.
    """
    rng = np.random.default_rng(4)
    hits = {"level": 0, "memory": 0, "mean level": 0}
    devices = 60
    for _ in range(devices):
        level = 0.01 * np.exp(rng.normal(0, 0.4, QUBITS))
        memory = np.clip(rng.normal(0.82, 0.03, QUBITS), 0.6, 0.95)
        fit = fit_role(drawn(rng, level, memory), QUBITS, free_start=False)
        errors = np.sqrt(np.diag(fit.covariance))
        hits["level"] += int(np.sum(abs(fit.level - level) < 1.96 * errors[:QUBITS]))
        gap = abs(fit.memory - memory)
        hits["memory"] += int(np.sum(gap < 1.96 * errors[QUBITS : 2 * QUBITS]))
        block = fit.covariance[:QUBITS, :QUBITS]
        mean_error = np.sqrt(block.sum()) / QUBITS
        hits["mean level"] += int(abs(fit.level.mean() - level.mean()) < 1.96 * mean_error)
    assert 0.90 <= hits["level"] / (devices * QUBITS) <= 0.99
    assert 0.90 <= hits["memory"] / (devices * QUBITS) <= 1.0
    assert hits["mean level"] / devices >= 0.95 - 3 * np.sqrt(0.95 * 0.05 / devices)


def test_population_that_settles_at_once_has_no_memory() -> None:
    """Qubits that a reset cleans every round: lam near 0, seepage near 1, no false precision."""
    rng = np.random.default_rng(5)
    fit = fit_role(
        drawn(rng, np.full(QUBITS, 0.004), np.full(QUBITS, 0.0)), QUBITS, free_start=False
    )
    error = np.sqrt(fit.covariance[2 * QUBITS, 2 * QUBITS])
    assert fit.mean_memory < 3 * error + 0.05
    assert error > 0.01
    assert fit.level.mean() == pytest.approx(0.004, abs=4 * np.sqrt(0.004 / SHOTS / 56))


def test_calibration_error_does_not_average_out() -> None:
    """A shift common to all rounds of a bootstrap copy ends up in the level's error, undivided."""
    rng = np.random.default_rng(6)
    series = drawn(rng, np.full(QUBITS, 0.01), np.full(QUBITS, 0.8))
    shift = 5e-3 * rng.standard_normal((REPLICAS, 1))
    moved = Series(
        series.qubit,
        series.rounds,
        series.value,
        series.variance,
        series.cluster_scores,
        series.value + shift,
    )
    before = _level_errors(fit_role(series, QUBITS, free_start=False))
    after = _level_errors(fit_role(moved, QUBITS, free_start=False))
    expected = np.sqrt(before**2 + shift.std(ddof=1) ** 2)
    # A shift of every value moves the level by nearly as much; some goes into the memory.
    np.testing.assert_allclose(after, expected, rtol=0.25)


def _level_errors(fit: RoleFit) -> np.ndarray:
    return np.sqrt(np.diag(fit.covariance)[:QUBITS])


def test_excitation_widens_all_levels_alike() -> None:
    """The unknown 1 to 2 excitation adds .42 x .5 of itself to every level's error, in common."""
    rng = np.random.default_rng(7)
    series = drawn(rng, np.full(QUBITS, 0.01), np.full(QUBITS, 0.8))
    plain = fit_role(series, QUBITS, free_start=False)
    wide = fit_role(series, QUBITS, free_start=False, excitation=1e-2)
    extra = (wide.covariance - plain.covariance)[:QUBITS, :QUBITS]
    np.testing.assert_allclose(extra, (0.42 * 0.5 * 1e-2) ** 2, rtol=1e-6)


def test_warm_start_is_found_when_it_is_there() -> None:
    """A device that starts at .6 of its steady level is fitted far better with a free start.

    At a level of .2 the seven durations tell; at 1 % they would not, and the cold start stays.
    """
    rng = np.random.default_rng(8)
    series = drawn(rng, np.full(QUBITS, 0.2), np.full(QUBITS, 0.8), start=0.6)
    cold = fit_role(series, QUBITS, free_start=False)
    warm = fit_role(series, QUBITS, free_start=True)
    assert cold.chi_square + (cold.start / START_DEVIATION) ** 2 - warm.chi_square > 9
    error = np.sqrt(warm.covariance[-1, -1])
    assert abs(warm.start - 0.6) < 3 * error


def test_memory_prior_counts_by_its_variance() -> None:
    """A sharp prior of lam from correlations takes the role's mean along; a vague one does not."""
    rng = np.random.default_rng(9)
    series = drawn(rng, np.full(QUBITS, 0.01), np.full(QUBITS, 0.8))
    free = fit_role(series, QUBITS, free_start=False)
    sharp = fit_role(series, QUBITS, free_start=False, memory_prior=(0.88, 1e-8))
    vague = fit_role(series, QUBITS, free_start=False, memory_prior=(0.88, 1e4))
    assert sharp.mean_memory == pytest.approx(0.88, abs=1e-3)
    assert vague.mean_memory == pytest.approx(free.mean_memory, abs=1e-3)
