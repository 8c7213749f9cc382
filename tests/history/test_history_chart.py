"""The chart: against a plain twin, its between-epoch variance, its false alarms and its speed."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.stats import binom, poisson

from leakpipe.history.chart import (
    REFERENCE,
    SHARED_SERIES,
    THRESHOLD,
    WARM_UP,
    WINSOR,
    between_variance,
    chart,
)
from leakpipe.history.thresholds import FALSE_ALARMS, false_alarms, threshold_for

STUDY_RATE = 0.81e-3
"""Upper end of the false alarms per epoch and series measured in the rates study."""
CHANCE = 1e-4
"""Chance that a right chart fails one of these tests by its own statistics."""


def made(
    generator: np.random.Generator,
    epochs: int = 70,
    series: int = 17,
    *,
    error: float = 0.085,
    between: float = 0.05,
) -> tuple[np.ndarray, np.ndarray]:
    base = generator.normal(-4.6, 0.3, series)
    values = base + np.hypot(error, between) * generator.normal(size=(epochs, series))
    return values, np.full_like(values, error)


def plain_sums(values: np.ndarray, error: float, between: float) -> list[tuple[float, float]]:
    """Sums of one series by the words of the study, with the between-epoch spread given."""
    learned: list[float] = []
    up = down = 0.0
    told = []
    for value in values:
        variance = error**2 + between**2
        if len(learned) >= WARM_UP:
            spread = np.sqrt(variance + variance / len(learned))
            z = max(min((value - np.mean(learned)) / spread, WINSOR), -WINSOR)
            up, down = max(up + z - REFERENCE, 0), max(down - z - REFERENCE, 0)
        elif learned:
            spread = np.sqrt(variance + variance / len(learned))
            z = max(min((value - np.mean(learned)) / spread, WINSOR), -WINSOR)
        told.append((up, down))
        if max(up, down) > THRESHOLD:
            up = down = 0.0
            learned = []
        elif max(up, down) <= THRESHOLD / 2:
            learned.append(np.mean(learned) + z * spread if learned else value)
    return told


def test_the_sums_agree_with_a_plain_loop_in_words_of_the_study() -> None:
    """One noiseless-variance series, written again without arrays, gives the same sums."""
    generator = np.random.default_rng(1)
    for _ in range(20):
        values = generator.normal(0, 0.02, (40, 1))
        values[25:] += generator.choice([0.0, 0.3, -0.4])
        # A stated error above the true spread: the between-epoch variance is then zero.
        run = chart(values, np.full_like(values, 0.08))
        if run.between.max() > 0:
            continue
        told = np.array(plain_sums(values[:, 0], 0.08, 0.0))
        np.testing.assert_allclose(run.up[:, 0], told[:, 0], atol=1e-12)
        np.testing.assert_allclose(run.down[:, 0], told[:, 1], atol=1e-12)


def test_between_epoch_variance_agrees_with_the_published_moment_estimate() -> None:
    """For one series it is the estimate of statsmodels; pooled, it recovers a known truth."""
    from statsmodels.stats.meta_analysis import combine_effects

    generator = np.random.default_rng(2)
    errors = generator.uniform(0.05, 0.2, 12)
    values = generator.normal(0, np.hypot(errors, 0.15))
    theirs = combine_effects(values, errors**2, method_re="dl").tau2
    ours = between_variance(values[:, np.newaxis], errors[:, np.newaxis])
    assert ours == pytest.approx(max(theirs, 0.0), rel=1e-9)

    values, errors = made(generator, 40, 400, between=0.1)
    # Error of a pooled variance: total variance times sqrt(2 / freedom), four of them.
    freedom = 400 * 39
    allowed = 4 * (0.085**2 + 0.1**2) * np.sqrt(2 / freedom)
    assert between_variance(values, errors) == pytest.approx(0.1**2, abs=allowed)


def test_between_epoch_variance_ignores_gaps_and_single_values() -> None:
    """Missing values carry no weight; series with one value say nothing about spread."""
    values, errors = made(np.random.default_rng(3), 12, 5)
    holes = values.copy()
    holes[3, :] = np.nan
    kept = np.delete(np.arange(12), 3)
    assert between_variance(holes, errors) == pytest.approx(
        between_variance(values[kept], errors[kept])
    )
    assert between_variance(values[:1], errors[:1]) == 0.0
    assert between_variance(values[:0], errors[:0]) == 0.0


@pytest.mark.parametrize("between", [0.0, 0.05, 0.1])
def test_false_alarms_stay_at_the_rate_of_the_study(between: float) -> None:
    """Alarms in quiet seasons, both directions, are no more than the study's rate allows."""
    generator = np.random.default_rng(100 + int(1000 * between))
    alarms = trials = 0
    for _ in range(25):
        run = chart(*made(generator, between=between))
        alarms += int((run.alarm != 0).sum())
        trials += int((run.learned >= WARM_UP).sum())
    # Two directions; alarms of different series are independent, so their number is Poisson.
    assert alarms <= poisson.ppf(1 - CHANCE, 2 * STUDY_RATE * trials)
    assert alarms >= poisson.ppf(CHANCE, STUDY_RATE / 2 * trials)


@pytest.mark.parametrize(("factor", "within"), [(1.3, 4), (1.5, 2)])
def test_a_change_is_found_as_fast_as_in_the_study(factor: float, within: int) -> None:
    """Half of the series that rise by 30 % (50 %) are flagged within 4 (2) epochs."""
    generator = np.random.default_rng(5)
    found = tried = 0
    for _ in range(40):
        values, errors = made(generator, 50)
        values[40:, :3] += np.log(factor)
        run = chart(values, errors)
        found += int((run.alarm[40 : 40 + within, :3] > 0).any(axis=0).sum())
        tried += 3
    # A median within the bound means at least half; allow what 120 coins allow.
    assert found >= binom.ppf(CHANCE, tried, 0.5)


def test_a_fall_is_found_like_a_rise() -> None:
    """Mirrored values give mirrored sums."""
    values, errors = made(np.random.default_rng(6))
    up, down = chart(values, errors), chart(-values, errors)
    np.testing.assert_allclose(up.up, down.down, atol=1e-9)
    np.testing.assert_array_equal(up.alarm, -down.alarm)


def test_one_wild_epoch_raises_no_alarm() -> None:
    """A single value ten times off never flags anything, however far it is off."""
    generator = np.random.default_rng(7)
    for _ in range(10):
        values, errors = made(generator, 30, 8, between=0.0)
        values[20, 0] += np.log(10)
        run = chart(values, errors)
        assert run.alarm[20, 0] == 0
        assert run.up[20, 0] <= run.up[19, 0] + WINSOR - REFERENCE + 1e-12


def test_missing_epochs_change_nothing() -> None:
    """A season with nights without data says the same about the other nights."""
    values, errors = made(np.random.default_rng(8), 40)
    gaps = np.insert(values, [15, 30], np.nan, axis=0)
    with_gaps = chart(gaps, np.insert(errors, [15, 30], np.nan, axis=0))
    kept = np.delete(np.arange(42), [15, 31])
    plain = chart(values, errors)
    np.testing.assert_allclose(with_gaps.up[kept], plain.up, atol=1e-9)
    np.testing.assert_allclose(with_gaps.up[[15, 31]], with_gaps.up[[14, 30]])


def test_the_past_is_judged_without_the_future() -> None:
    """What the chart says of an epoch does not change when later epochs come."""
    values, errors = made(np.random.default_rng(9), 60)
    values[30:, 2] += 0.6
    whole = chart(values, errors, in_common=True, raised=threshold_for)
    part = chart(values[:35], errors[:35], in_common=True, raised=threshold_for)
    np.testing.assert_array_equal(whole.alarm[:35], part.alarm)
    np.testing.assert_allclose(whole.up[:35], part.up)


def test_a_shift_in_common_is_taken_off_and_a_single_one_is_not() -> None:
    """A wrong calibration moves all; one bad qubit does not look like one."""
    generator = np.random.default_rng(10)
    shared = lonely = 0
    for _ in range(20):
        values, errors = made(generator, 40)
        single = values.copy()
        values[25] += 0.4
        single[25:, 0] += 1.1
        run = chart(values, errors, in_common=True)
        shared += int(run.is_shared[25])
        assert run.shared[25] == pytest.approx(0.4, abs=5 * run.shared_error[25])
        lonely += int(chart(single, errors, in_common=True).is_shared[25:].sum())
    assert shared == 20
    # 300 epochs, 4 sigma and a side condition: one by chance happens in 1 % of runs.
    assert lonely <= 1


def test_a_shift_in_common_needs_enough_series() -> None:
    """With few qubits a common move cannot be told from single ones, and is not taken off."""
    values, errors = made(np.random.default_rng(11), 30, SHARED_SERIES - 1)
    values[20] += 2.0
    assert not chart(values, errors, in_common=True).is_shared.any()


def test_a_raised_threshold_holds_the_false_alarms_of_drifting_epochs() -> None:
    """With phi = .6 the study's threshold gives many times the false alarms, the raised one not."""
    rho, phi = 0.35, 0.6
    raised = threshold_for(rho, phi)
    assert raised > THRESHOLD
    assert false_alarms(rho, phi, THRESHOLD) > 4 * FALSE_ALARMS
    assert false_alarms(rho, phi, raised) <= FALSE_ALARMS
    assert threshold_for(0.1, 0.15) == THRESHOLD
    assert threshold_for(np.nan, np.nan) == THRESHOLD


def test_autocorrelation_is_seen_where_it_is_and_not_where_it_is_not() -> None:
    """Drifting epochs are called so, independent ones are not."""
    generator = np.random.default_rng(12)
    quiet = drifting = 0
    for _ in range(20):
        values, errors = made(generator, 50, between=0.1)
        quiet += int(chart(values, errors).is_correlated[-1])
        noise = generator.normal(size=values.shape)
        process = np.zeros_like(values)
        for epoch in range(1, 50):
            process[epoch] = 0.6 * process[epoch - 1] + 0.8 * noise[epoch]
        drift = 0.085 * generator.normal(size=values.shape) + 0.1 * process
        run = chart(drift, errors)
        drifting += int(run.is_correlated[-1] and run.between_correlation[-1] > 0.2)
    assert drifting == 20
    # Two errors above zero: 2.3 % each, so of 20 at most this many by chance.
    assert quiet <= binom.ppf(1 - CHANCE, 20, 0.023)
