"""Readout physics of the rehearsal: fields, jumps, separations, assignment, drift, traces."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.integrate import solve_ivp
from scipy.special import erfc
from scipy.stats import chi2, norm

from leakpipe.rehearsal.device import (
    LADDER,
    REFERENCE,
    Drift,
    ReadoutQubit,
    Spread,
    make_device,
)
from leakpipe.rehearsal.labels import assignment, misread
from leakpipe.rehearsal.readout import (
    MAX_JUMPS,
    TRACE_COUNTS,
    draw_jumps,
    jump_probability,
    nearest_states,
    points,
    prepare,
    traces,
)
from leakpipe.rehearsal.resonator import follow

FALSE_ALARM = 1e-4
AVERAGE = REFERENCE["average"]
QUIET = replace(AVERAGE, t1_us=1e9, up_per_us=(0.0, 0.0))


@pytest.mark.parametrize(
    ("name", "separations", "assigned", "jumps"),
    [
        ("good", (6.2, 6.2, 9.95), 0.9961, (0.0050, 0.0090, 0.00009)),
        ("average", (4.8, 4.8, 7.85), 0.982, (0.014, 0.025, 0.0005)),
        ("poor", (5.0, 3.9, 7.9), 0.959, (0.039, 0.069, 0.0035)),
    ],
)
def test_reference_devices_are_those_of_the_study(
    name: str, separations: tuple, assigned: float, jumps: tuple
) -> None:
    """Separations, true-start assignment and jump probabilities are the study's printed figures.

    The study prints separations to about one percent, assignments to about 1e-3 and jump
    probabilities to a tenth.
    """
    qubit = REFERENCE[name]
    np.testing.assert_allclose(qubit.separations, separations, rtol=0.01)
    window = qubit.window_ns / 1000
    rates = qubit.jump_rates
    single = -np.expm1(-np.array([rates[1, 0], rates[2, 1], rates[1, 2]]) * window)
    np.testing.assert_allclose(single, jumps, rtol=0.1)
    rng = np.random.default_rng(1)
    starts = rng.integers(0, 3, 200_000).astype(np.uint8)
    labels = nearest_states(qubit, points(qubit, starts, rng), prior_leaked=1 / 3)
    seen = (labels == starts).mean()
    assert abs(seen - assigned) < 1e-3 + 4 * np.sqrt(assigned * (1 - assigned) / len(starts))


@settings(deadline=None, max_examples=25)
@given(seed=st.integers(0, 2**32 - 1), name=st.sampled_from(sorted(REFERENCE)))
def test_compiled_field_equals_its_plain_twin(seed: int, name: str) -> None:
    """The compiled trajectory equals a piecewise closed form written without loops over steps."""
    qubit = REFERENCE[name]
    rng = np.random.default_rng(seed)
    window = qubit.window_ns / 1000
    starts = rng.integers(0, 3, 5)
    times = np.sort(rng.uniform(0, 1.3 * window, (5, MAX_JUMPS)), axis=1)
    times[times > window] = np.inf
    visited = rng.integers(0, 3, (5, MAX_JUMPS))
    ours = np.empty((5, qubit.samples), dtype=complex)
    rates, steady = qubit.decay_rates, qubit.steady_fields
    follow(starts, times, visited, rates, steady, qubit.step_us, ours)
    middle = (np.arange(qubit.samples) + 0.5) * qubit.step_us
    for shot in range(5):
        begin, field, state = 0.0, 0j, starts[shot]
        twin = np.zeros(qubit.samples, dtype=complex)
        ends = [*times[shot], np.inf]
        for end, after in zip(ends, [*visited[shot], 0], strict=True):
            here = (middle >= begin) & (middle < end)
            decay = np.exp(-rates[state] * (middle[here] - begin))
            twin[here] = steady[state] + (field - steady[state]) * decay
            if not np.isfinite(end):
                break
            field = steady[state] + (field - steady[state]) * np.exp(-rates[state] * (end - begin))
            begin, state = end, after
        np.testing.assert_allclose(ours[shot], twin, atol=1e-12)


def test_field_solves_its_equation() -> None:
    """The closed form between jumps solves da/dt = kappa / 2 - r a, as a numerical solver says."""
    for state in range(3):
        rate, steady = AVERAGE.decay_rates[state], AVERAGE.steady_fields[state]
        middle = (np.arange(AVERAGE.samples) + 0.5) * AVERAGE.step_us
        solved = solve_ivp(
            lambda _, a, r=rate, s=steady: r * (s - a),
            (0, middle[-1]),
            np.zeros(1, dtype=complex),
            t_eval=middle,
            rtol=1e-10,
            atol=1e-12,
        )
        np.testing.assert_allclose(AVERAGE.fields[state], solved.y[0], atol=1e-8)
        drive = rate * steady
        assert drive == pytest.approx(np.pi * AVERAGE.kappa_mhz)


@pytest.mark.parametrize(("snr", "error"), [(2.748, 0.003), (2.326, 0.010), (2.054, 0.020)])
def test_separation_error_is_the_closed_form(snr: float, error: float) -> None:
    """Two clouds without jumps are confused by 0.5 erfc(SNR / sqrt 2), SNR = distance / 2 sigma."""
    assert 0.5 * erfc(snr / np.sqrt(2)) == pytest.approx(error, rel=0.01)
    qubit = replace(QUIET, noise=QUIET.noise * QUIET.separations[0] / (2 * snr))
    rng = np.random.default_rng(2)
    shots = 400_000
    starts = rng.integers(0, 2, shots).astype(np.uint8)
    readings = points(qubit, starts, rng)
    mean = qubit.to_signal(qubit.fields @ qubit.weights)
    axis = mean[1] - mean[0]
    along = (readings[:, 0] - mean.real[:2].mean()) * axis.real
    along += (readings[:, 1] - mean.imag[:2].mean()) * axis.imag
    wrong = ((along > 0) != (starts == 1)).mean()
    expected = 0.5 * erfc(snr / np.sqrt(2))
    assert abs(wrong - expected) < norm.isf(FALSE_ALARM / 2) * np.sqrt(expected / shots)


def test_relaxation_error_is_half_a_window_over_t1() -> None:
    """A boxcar over a fast resonator misreads state 1 with T / (2 T1) when noise is no issue.

    Gambetta et al., Phys. Rev. A 76, 012325 (2007). The mean of a boxcar lies nearer to 0 when the
    decay comes in the first half of what is integrated.
    """
    fast = replace(
        AVERAGE,
        kappa_mhz=400.0,
        pulls_mhz=(0.0, -200.0, -340.0),
        drive_mhz=100.0,
        noise=1e-3,
        t1_us=70.0,
        up_per_us=(0.0, 0.0),
    )
    rng = np.random.default_rng(3)
    shots = 400_000
    labels = nearest_states(fast, points(fast, np.ones(shots, dtype=np.uint8), rng), 1 / 3)
    window = fast.window_ns / 1000
    skipped = (fast.weights == 0).sum() * fast.step_us
    # Half of the integrated part and the whole skipped part decide against state 1.
    expected = -np.expm1(-(skipped + (window - skipped) / 2) / fast.t1_us)
    seen = (labels != 1).mean()
    one_sample = fast.step_us / fast.t1_us
    limit = norm.isf(FALSE_ALARM / 2) * np.sqrt(expected / shots) + one_sample
    assert abs(seen - expected) < limit


def test_jump_times_and_targets() -> None:
    """First jumps follow the truncated exponential, targets the ratio of rates, in order."""
    qubit = replace(REFERENCE["poor"], up_per_us=(0.05, 0.03))
    rng = np.random.default_rng(4)
    shots = 100_000
    times, visited = draw_jumps(qubit, np.ones(shots, dtype=np.int64), rng)
    window = qubit.window_ns / 1000
    assert (times[:, 0] < window).all()
    total = qubit.jump_rates[1].sum()
    edges = np.linspace(0, window, 21)
    expected = np.diff(-np.expm1(-total * edges)) / -np.expm1(-total * window) * shots
    seen, _ = np.histogram(times[:, 0], edges)
    assert ((seen - expected) ** 2 / expected).sum() < chi2.isf(FALSE_ALARM, 19)
    up = (visited[:, 0] == 2).mean()
    share = 0.03 / total
    assert abs(up - share) < norm.isf(FALSE_ALARM / 2) * np.sqrt(share * (1 - share) / shots)
    second = np.isfinite(times[:, 1])
    assert second.any()
    assert (times[second, 1] > times[second, 0]).all()
    assert (np.abs(np.diff(visited[second][:, :2], axis=1)) == 1).all()


def test_decay_of_state_two_is_faster() -> None:
    """State 2 falls at 1.8 / T1, state 1 at 1 / T1."""
    rates = AVERAGE.jump_rates
    assert rates[2, 1] == pytest.approx(LADDER * rates[1, 0])
    assert rates[1, 0] == pytest.approx(1 / AVERAGE.t1_us)
    assert rates[2, 0] == rates[0, 2] == 0


def moments(readings: np.ndarray) -> np.ndarray:
    """Return mean and second moments of points (shot, 2)."""
    x, y = readings.astype(float).T
    return np.stack([x, y, x * x, y * y, x * y], axis=1)


@pytest.mark.parametrize("correlation", [0.0, 0.6])
@pytest.mark.parametrize("state", [0, 1, 2])
def test_points_drawn_directly_equal_integrated_traces(state: int, correlation: float) -> None:
    """Points and integrated traces have the same distribution: moments and far tail."""
    qubit = replace(REFERENCE["poor"], noise_correlation=correlation, gain=1.3, phase_degrees=40)
    rng = np.random.default_rng(5)
    shots = 30_000
    starts = np.full(shots, state, dtype=np.uint8)
    direct = points(qubit, starts, rng)
    counts = traces(qubit, starts, rng)
    assert counts.dtype == np.int16
    summed = np.einsum("nsq,s->nq", counts / TRACE_COUNTS, qubit.weights)
    first, second = moments(direct), moments(summed)
    error = np.sqrt((first.var(axis=0) + second.var(axis=0)) / shots)
    z = (first.mean(axis=0) - second.mean(axis=0)) / error
    assert np.abs(z).max() < norm.isf(FALSE_ALARM / 2 / 5)
    labels = [(nearest_states(qubit, one, 1 / 3) != state).mean() for one in (direct, summed)]
    pooled = np.mean(labels)
    assert abs(labels[0] - labels[1]) < norm.isf(FALSE_ALARM / 2) * np.sqrt(2 * pooled / shots)


def test_rail_clips_traces() -> None:
    """A digitiser with a rail never shows more, and reaches it."""
    counts = traces(AVERAGE, np.ones(100, dtype=np.uint8), np.random.default_rng(6), rail=1.0)
    assert np.abs(counts).max() == TRACE_COUNTS


def test_preparation_errors_come_out_as_given() -> None:
    """The true start states of a preparation follow the device's table."""
    shots = 200_000
    for prepared, row in enumerate(AVERAGE.preparation):
        starts = prepare(AVERAGE, prepared, shots, np.random.default_rng(7))
        seen = np.bincount(starts, minlength=3)
        expected = np.array(row) * shots
        assert ((seen - expected) ** 2 / expected).sum() < chi2.isf(FALSE_ALARM, 2)


def test_drift_moves_the_points() -> None:
    """Rotation, gain and offset move the signal as named; a pull shift changes its shape."""
    qubit = replace(AVERAGE, offset=0.2 + 0.1j, phase_degrees=30.0)
    field = qubit.fields @ qubit.weights
    before = qubit.to_signal(field)
    drifted = Drift(rotation_degrees=5.0, gain=1.02, offset=0.5 - 0.25j).apply(qubit)
    turned = before * 1.02 * np.exp(1j * np.deg2rad(5.0))
    shift = (0.5 - 0.25j) * qubit.integrated_noise
    np.testing.assert_allclose(drifted.to_signal(field), turned + shift)
    pulled = Drift(pull_mhz=0.3).apply(qubit)
    assert np.abs(pulled.fields - qubit.fields).max() > 0.01


def test_devices_are_reproducible_and_differ_by_qubit() -> None:
    """One seed gives one device; its qubits are scattered as asked, or not at all."""
    names = [f"Q{k}" for k in range(400)]
    first, again = (make_device(AVERAGE, names, Spread(), np.random.default_rng(8)) for _ in "ab")
    assert first == again
    spread = np.log([qubit.t1_us for qubit in first.values()])
    # standard deviation of 400 numbers is known to 1 / sqrt(800)
    assert spread.std() == pytest.approx(Spread().t1, rel=5 / np.sqrt(800))
    same = make_device(
        AVERAGE, names[:3], Spread(0, 0, 0, 0, phase=False), np.random.default_rng(9)
    )
    assert len(set(same.values())) == 1
    assert isinstance(same["Q0"], ReadoutQubit)


def test_misread_states_follow_the_assignment() -> None:
    """Labels drawn from the table have the table's frequencies, per qubit and state."""
    table = np.stack(
        [
            assignment(REFERENCE[name], 20_000, np.random.default_rng(10))
            for name in ("average", "poor")
        ]
    )
    np.testing.assert_allclose(table.sum(axis=2), 1)
    rng = np.random.default_rng(11)
    states = rng.integers(0, 3, (200_000, 2)).astype(np.uint8)
    labels = misread(states, table, rng)
    for qubit in range(2):
        for state in range(3):
            seen = np.bincount(labels[states[:, qubit] == state, qubit], minlength=3)
            expected = table[qubit, state] * seen.sum()
            kept = expected > 5
            excess = ((seen - expected)[kept] ** 2 / expected[kept]).sum()
            assert excess < chi2.isf(FALSE_ALARM, kept.sum())


def test_jump_probability_is_the_closed_form() -> None:
    """The chance of any jump is 1 - exp(-rate times window)."""
    rates = AVERAGE.jump_rates.sum(axis=1) * 0.7
    np.testing.assert_allclose(jump_probability(AVERAGE), 1 - np.exp(-rates))
