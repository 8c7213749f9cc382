"""The logical error per round: closed form, recovery, coverage, refusals."""

from __future__ import annotations

import numpy as np
import pytest

from leakpipe.logical.per_round import after_rounds, fit_per_round

ROUNDS = np.array([3.0, 5, 9, 13, 17, 21, 25])


def test_closed_form() -> None:
    """1 - 2 P = (1 - 2 eps)^n: eps .02914, n 25 gives P .3885667 (closed form)."""
    assert after_rounds(0.02914, 25) == pytest.approx(0.3885667, abs=5e-8)


def test_exact_data_give_exact_parameters() -> None:
    """Without noise the fit returns eps and A to the precision of its stopping rule."""
    fidelity = 0.97 * (1 - 2 * 0.021) ** ROUNDS
    fit = fit_per_round(ROUNDS, fidelity, np.full(len(ROUNDS), 1e-6))
    assert fit is not None
    assert fit.error_per_round == pytest.approx(0.021, rel=1e-9)
    assert fit.amplitude == pytest.approx(0.97, rel=1e-9)
    assert fit.scatter == 0.0


def _draw(rng: np.random.Generator, shots: int, scatter: float) -> tuple[np.ndarray, np.ndarray]:
    fidelity = 0.97 * (1 - 2 * 0.02) ** ROUNDS * np.exp(rng.normal(0, scatter, len(ROUNDS)))
    p = rng.binomial(shots, (1 - fidelity) / 2) / shots
    return 1 - 2 * p, 4 * p * (1 - p) / shots


@pytest.mark.parametrize(("scatter", "least"), [(0.0, 0.90), (0.03, 0.85)])
def test_intervals_cover(scatter: float, least: float) -> None:
    """95 % intervals (Student t with scatter) cover the truth, also with drift between recordings.

    400 trials: three binomial errors are .033; with scatter from seven recordings the estimated
    scatter itself is uncertain, hence the lower mark.
    """
    from scipy.stats import norm, t

    rng = np.random.default_rng(2)
    hits, trials = 0, 400
    for _ in range(trials):
        fit = fit_per_round(ROUNDS, *_draw(rng, 4000, scatter))
        assert fit is not None
        width = t.ppf(0.975, fit.freedom) if fit.scatter > 0 else norm.ppf(0.975)
        hits += abs(fit.error_per_round - 0.02) < width * fit.error
    assert least <= hits / trials <= 0.99


def test_scatter_is_found() -> None:
    """Recordings that scatter by 3 % more than their shots allow are seen to do so."""
    rng = np.random.default_rng(3)
    found = [fit_per_round(ROUNDS, *_draw(rng, 100_000, 0.03)) for _ in range(100)]
    values = np.array([fit.scatter for fit in found if fit is not None])
    # A standard deviation from 5 degrees of freedom scatters by 1 / sqrt(10); mean of 100.
    assert np.sqrt(np.mean(values**2)) == pytest.approx(0.03, rel=5 / np.sqrt(10 * 100))


@pytest.mark.parametrize(
    ("rounds", "fidelity"),
    [
        (np.array([5.0]), np.array([0.8])),
        (np.array([5.0, 5.0]), np.array([0.8, 0.79])),
        (np.array([40.0, 60.0]), np.array([0.004, -0.003])),
    ],
    ids=["one recording", "one number of rounds", "nothing above noise"],
)
def test_undetermined_is_none(rounds: np.ndarray, fidelity: np.ndarray) -> None:
    """Where the data do not determine eps there is no fit, not a made-up number."""
    assert fit_per_round(rounds, fidelity, np.full(len(rounds), 1e-4)) is None


def test_negative_fidelity_by_chance_is_used() -> None:
    """A recording that fell below zero by chance counts like any other (no logarithm of it)."""
    rounds, eps = np.array([3.0, 10.0, 60.0]), 0.03
    fidelity = 0.97 * (1 - 2 * eps) ** rounds
    # The last one is .024; -.01 is 1.1 standard errors below it.
    fidelity[2] = -0.01
    fit = fit_per_round(rounds, fidelity, np.array([0.01, 0.01, 0.03]) ** 2)
    assert fit is not None
    assert abs(fit.error_per_round - eps) < 3 * fit.error
