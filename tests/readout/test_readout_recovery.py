"""The readout stage against devices of known truth (the rehearsal's physics, no shared code)."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from scipy.special import erfc

from leakpipe.readout.adaptation import Change, check_run, find_change
from leakpipe.readout.calibration import QubitModel, model_qubit
from leakpipe.readout.population import discriminant, posteriors, unfold
from leakpipe.rehearsal.device import REFERENCE
from leakpipe.rehearsal.readout import points

SHOTS = 10_000
WRONG = {0: (0.98, 0.02, 0.0), 1: (0.02, 0.977, 0.003), 2: (0.01, 0.03, 0.96)}
"""Preparation errors of the test calibrations (invented)."""


def calibration(reference: str, rng: np.random.Generator, shots: int = SHOTS) -> list[np.ndarray]:
    """Points of three imperfect preparations."""
    qubit = replace(REFERENCE[reference], phase_degrees=37.0, offset=0.3 + 0.1j)
    return [
        points(qubit, rng.choice(3, shots, p=WRONG[state]), rng).astype(float) for state in range(3)
    ]


def run(reference: str, rng: np.random.Generator, leaked: float, shots: int) -> np.ndarray:
    """Points of a run with a known leaked population."""
    qubit = replace(REFERENCE[reference], phase_degrees=37.0, offset=0.3 + 0.1j)
    states = rng.choice(3, shots, p=(0.5 - leaked / 2, 0.5 - leaked / 2, leaked))
    return points(qubit, states, rng).astype(float)


def population(model: QubitModel, x: np.ndarray) -> tuple[float, float]:
    """Leaked population and its shot error."""
    mixture = model.mixture
    rule = discriminant(mixture.means, mixture.covariance, mixture.box_volume)
    soft = posteriors(x, rule)
    score = soft @ np.linalg.inv(model.response)[:, 2]
    return float(score.mean()), float(score.std() / np.sqrt(len(x)))


@pytest.fixture(scope="module")
def models() -> dict[str, list[QubitModel]]:
    """Several calibrations of the good and the average device."""
    rng = np.random.default_rng(1)
    return {
        name: [
            model_qubit(calibration(name, rng), [0, 1, 2], rng, replicas=6, decay=True)
            for _ in range(4)
        ]
        for name in ("good", "average")
    }


@pytest.mark.parametrize(("name", "systematic"), [("good", 2e-5), ("average", 5e-5)])
@pytest.mark.parametrize("leaked", [0.0, 1e-3])
def test_population_is_unbiased(
    models: dict[str, list[QubitModel]], name: str, systematic: float, leaked: float
) -> None:
    """Bias of p2 at 0 and 1e-3 is within 4 standard errors plus the study's acceptance figure.

    The excitation 1 to 2 during the readout is the stated systematic: .42 x p1 x its probability.
    """
    rng = np.random.default_rng(2)
    found = [population(model, run(name, rng, leaked, 100_000)) for model in models[name]]
    values, errors = np.array(found).T
    copies = [
        (np.linalg.inv(model.replicas)[:, :, 2] - np.linalg.inv(model.response)[:, 2])
        @ np.array([0.5, 0.5, 0.0, 0.0])
        for model in models[name]
    ]
    calibration_error = np.sqrt(np.mean([copy.var(ddof=1) for copy in copies]) / len(values))
    error = np.hypot(np.sqrt(np.sum(errors**2)) / len(values), calibration_error)
    qubit = REFERENCE[name]
    excitation = 0.42 * 0.5 * qubit.up_per_us[1] * qubit.window_ns / 1000
    assert abs(values.mean() - leaked) < 4 * error + systematic + excitation


def test_labels_with_the_as_prepared_matrix_fail_the_same_test(
    models: dict[str, list[QubitModel]],
) -> None:
    """Negative control: counted labels, and their inverse by the as-prepared matrix, are biased
    by far more than the linear estimator is allowed."""
    rng = np.random.default_rng(3)
    counted, inverted = [], []
    for model in models["average"]:
        x = run("average", rng, 1e-3, 100_000)
        mixture = model.mixture
        rule = discriminant(mixture.means, mixture.covariance, mixture.box_volume)
        hard = np.eye(3)[posteriors(x, rule)[:, :3].argmax(axis=1)].mean(axis=0)
        counted.append(hard[2])
        inverted.append((hard @ np.linalg.inv(model.as_prepared))[2])
    assert abs(np.mean(inverted) - 1e-3) > 3e-4
    assert abs(np.mean(counted) - 1e-3) > 3e-4


def test_mixture_recovers_preparation_errors(models: dict[str, list[QubitModel]]) -> None:
    """Free weights come back as the preparation errors that the labels hide.

    Binomial error of a weight of .02 from 10 000 shots is .0014; classes 4.8 sigma apart add
    little. The tails trade off with weights between neighbours: .003 is allowed for it.
    """
    for model in models["average"]:
        truth = np.array([WRONG[state] for state in range(3)])
        error = np.sqrt(truth * (1 - truth) / SHOTS)
        assert np.all(abs(model.mixture.weights - truth) < 4 * error + 0.003)


def test_bootstrap_error_matches_the_spread_between_calibrations() -> None:
    """The calibration error from replicas is within a factor 2 of the true spread (12 fits).

    A standard deviation from 12 values is itself known to 21 %; 3 of those are 63 %.
    """
    rng = np.random.default_rng(4)
    x = run("average", rng, 1e-3, 100_000)
    values, stated = [], []
    for _ in range(12):
        model = model_qubit(
            calibration("average", rng, 3000), [0, 1, 2], rng, replicas=8, decay=True
        )
        mixture = model.mixture
        rule = discriminant(mixture.means, mixture.covariance, mixture.box_volume)
        mean = posteriors(x, rule).mean(axis=0)
        values.append(unfold(mean, model.response)[2])
        stated.append(np.std([unfold(mean, copy)[2] for copy in model.replicas], ddof=1))
    ratio = np.std(values, ddof=1) / np.sqrt(np.mean(np.square(stated)))
    assert 0.4 < ratio < 2.0


def test_rotation_of_everything_changes_nothing() -> None:
    """Turning all clouds and the run by one angle moves p2 by 1e-6 at most (study figure)."""
    rng = np.random.default_rng(5)
    clouds, x = calibration("average", rng, 3000), run("average", rng, 1e-3, 20_000)
    turn = Change(rotation=np.deg2rad(71)).matrix().T
    found = []
    for matrix in (np.eye(2), turn):
        model = model_qubit(
            [cloud @ matrix for cloud in clouds],
            [0, 1, 2],
            np.random.default_rng(6),
            replicas=2,
            decay=True,
        )
        found.append(population(model, x @ matrix)[0])
    # EM pools points in cells that do not turn along; its last steps use the points themselves.
    assert abs(found[0] - found[1]) < 2e-5


def test_drift_is_found_and_mended(models: dict[str, list[QubitModel]]) -> None:
    """A turn of 5 degrees and 2 % of gain are seen by the check, and undone without bias."""
    rng = np.random.default_rng(7)
    model = models["average"][0]
    x = run("average", rng, 1e-3, 100_000)
    drift = Change(np.deg2rad(5), 1.02, (0.02, -0.01))
    moved = x @ drift.matrix().T + np.array(drift.offset)
    before = check_run(moved[:20_000], model.mixture)
    assert before.phi > 1e-2
    assert before.p_value < 1e-4
    found = find_change(moved[:20_000], model.mixture)
    mended = found.backward(moved)
    assert check_run(mended[:20_000], model.mixture).phi < 3e-3
    biased, _ = population(model, moved)
    value, error = population(model, mended)
    still, _ = population(model, x)
    assert abs(biased - 1e-3) > 10 * error
    assert abs(value - still) < 2e-4


@pytest.mark.parametrize("degrees", [-150.0, -60.0, 45.0, 120.0, 175.0])
def test_any_rotation_is_found_without_slipping_labels(
    models: dict[str, list[QubitModel]], degrees: float
) -> None:
    """Whatever the rotation, the mend ends at it and not at a relabelling of the clouds."""
    rng = np.random.default_rng(8)
    moved = run("average", rng, 5e-3, 20_000) @ Change(np.deg2rad(degrees)).matrix().T
    found = find_change(moved, models["average"][0].mixture)
    gap = (np.rad2deg(found.rotation) - degrees + 180) % 360 - 180
    assert abs(gap) < 1.0


def test_separation_error_closed_form() -> None:
    """0.5 erfc(SNR / sqrt 2) at SNR = 2.748, 2.326, 2.054 gives .3, 1, 2 % (closed form), and the
    label rule of two Gaussian classes that far apart errs as often (4 binomial errors)."""
    rng = np.random.default_rng(9)
    for snr, expected in ((2.748, 0.003), (2.326, 0.01), (2.054, 0.02)):
        assert 0.5 * erfc(snr / np.sqrt(2)) == pytest.approx(expected, rel=2e-3)
        means = np.array([[0.0, 0.0], [2 * snr, 0.0], [0.0, 90.0]])
        rule = discriminant(means, np.eye(2), 1e4, (0.4999, 0.4999, 1e-4, 1e-4))
        x = rng.standard_normal((200_000, 2))
        wrong = (posteriors(x, rule)[:, :2].argmax(axis=1) == 1).mean()
        assert abs(wrong - expected) < 4 * np.sqrt(expected / 200_000) + 3e-5


def test_no_leaked_preparation_is_not_identifiable() -> None:
    """Without state 2 and without enough far points the model says so and never calls leaked."""
    rng = np.random.default_rng(10)
    clouds = calibration("average", rng, 3000)[:1]
    qubit = replace(REFERENCE["average"], phase_degrees=37.0, offset=0.3 + 0.1j)
    clouds.append(points(qubit, rng.choice(2, 3000, p=(0.02, 0.98)), rng).astype(float))
    model = model_qubit(clouds, [0, 1], rng, replicas=2, decay=True)
    assert not model.usable
    assert "was not prepared" in model.reason
    rule = discriminant(model.mixture.means, model.mixture.covariance, model.mixture.box_volume)
    assert posteriors(np.concatenate(clouds), rule)[:, 2].max() < 1e-6


def test_missing_shots_are_left_out_and_counted() -> None:
    """NaN points change neither means nor weights beyond their absence, and are counted."""
    rng = np.random.default_rng(11)
    clouds = calibration("good", rng, 2000)
    holed = [cloud.copy() for cloud in clouds]
    holed[1][::10] = np.nan
    model = model_qubit(holed, [0, 1, 2], rng, replicas=2, decay=True)
    assert model.missing == pytest.approx(200 / 6000)
    assert model.shots.tolist() == [2000, 1800, 2000]
