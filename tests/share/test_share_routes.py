"""Routes to the share: the regression, the hazards, the twin, and how they are combined."""

from __future__ import annotations

import numpy as np
import pytest

from leakpipe.codes.rotated import rotated_surface
from leakpipe.rehearsal.memory import simulate
from leakpipe.rehearsal.noise import MemoryNoise
from leakpipe.rehearsal.populations import leakage_rates
from leakpipe.share.episodes import Episodes, closing_cost, cost, hazard
from leakpipe.share.regression import Shots, fit, split_closing
from leakpipe.share.routes import MODEL_ERROR, Route, combine
from leakpipe.share.twin import Observed, run_twin

RHO, FULL, MEASURE = 0.6, 0.35, 0.05
ENDING = 0.2


def drawn_shots(rng: np.random.Generator, shots: int, full: float, measure: float) -> Shots:
    """Shots drawn from the regression's own model, with imperfect posteriors."""
    rounds = np.array([3, 8, 15, 25])
    group = np.repeat(np.arange(4), shots)
    leaked = rng.random((len(group), 9)) < 0.02
    # A calibrated posterior: drawn first, the state then drawn from it (a Berkson error).
    posterior = np.where(leaked, rng.beta(8, 2, leaked.shape), rng.beta(0.05, 5, leaked.shape))
    state = rng.random(leaked.shape) < posterior
    exposure = rng.poisson(0.3, len(group)).astype(float)
    kappa = np.array([closing_cost(int(r), ENDING, full, RHO) for r in rounds])
    base = 0.96 * (1 - 2 * 0.015) ** rounds
    mean = base[group] * (1 - 2 * measure) ** exposure
    mean = mean * np.prod(1 - 2 * kappa[group][:, None] * state, axis=1)
    failed = (rng.random(len(group)) < (1 - mean) / 2).astype(float)
    quiet, loud = split_closing(posterior)
    cluster = group * 50 + np.tile(np.arange(shots) * 50 // shots, 4)
    return Shots(group, rounds, failed, exposure, quiet, loud, cluster)


def test_regression_recovers_the_costs_it_was_drawn_from() -> None:
    """Costs of measure and data leakage come back within 3 of their own standard errors."""
    shots = drawn_shots(np.random.default_rng(1), 60_000, FULL, MEASURE)
    found = fit(shots, ENDING)
    errors = np.sqrt(np.diag(found.covariance))
    log_cost = np.log(1 - 2 * MEASURE)
    assert abs(found.log_measure - log_cost) < 3 * errors[0]
    # kappa_inf and rho are told apart poorly; the cost at the closing readout is not.
    for rounds in (3, 25):
        truth = closing_cost(rounds, ENDING, FULL, RHO)
        value = closing_cost(rounds, ENDING, found.full, found.memory)
        step = 1e-4
        slope = np.array(
            [
                0.0,
                closing_cost(rounds, ENDING, 1.0, found.memory),
                (closing_cost(rounds, ENDING, found.full, found.memory + step) - value) / step,
            ]
        )
        assert abs(value - truth) < 3 * np.sqrt(slope @ found.covariance @ slope)
    assert errors[0] < 0.01


def test_regression_finds_no_cost_where_there_is_none() -> None:
    """Exposures without consequence get costs compatible with zero."""
    shots = drawn_shots(np.random.default_rng(2), 60_000, 0.0, 0.0)
    found = fit(shots, ENDING)
    errors = np.sqrt(np.diag(found.covariance))
    assert abs(found.log_measure) < 3 * errors[0]
    value = closing_cost(25, ENDING, found.full, found.memory)
    # The weak prior pulls kappa_inf by far less than its own standard error here.
    assert abs(value) < 3 * errors[1]


def test_hazard_equals_episodes_played_out_one_by_one() -> None:
    """Lambda(R) equals the mean summed cost of simulated episodes (Monte Carlo, 4 sigma).

    Every round first ends each episode with probability g, then idle qubits start one, then all
    age by a round.
    """
    rng = np.random.default_rng(3)
    injection, seepage, rounds, qubits, shots = 0.004, 0.2, 12, 9, 200_000
    episodes = Episodes(np.full(qubits, injection), np.full(qubits, seepage), 0.05)
    g = episodes.ending
    begin = episodes.starts / qubits
    age = np.zeros((shots, qubits), dtype=int)
    total = np.zeros(shots)
    for _ in range(rounds):
        ends = (age > 0) & (rng.random(age.shape) < g)
        total += np.where(ends, cost(age, FULL, RHO), 0.0).sum(axis=1)
        age = np.where(ends, 0, age)
        age = np.where((age > 0) | (rng.random(age.shape) < begin), age + 1, 0)
    total += np.where(age > 0, cost(age, FULL, RHO), 0.0).sum(axis=1)
    expected = 2 * total.mean() + 2 * MEASURE * 0.05 * rounds
    error = 2 * total.std() / np.sqrt(shots)
    found = hazard(rounds, episodes, MEASURE, FULL, RHO)
    # Starts are per round, here per idle qubit: a relative difference of the leaked population.
    leaked = injection / (injection + seepage)
    assert abs(found - expected) < 4 * error + leaked * expected


def test_twin_agrees_with_the_device_it_was_fitted_to() -> None:
    """Given true rates and events, the twin's share is within twice its reported error."""
    layout, shots, rounds = rotated_surface(3), 40_000, [3, 8, 15, 25]
    noise = MemoryNoise(idle=0.012, reset=0.004, measurement=0.015, injection=4e-4, seepage=0.18)
    rates = leakage_rates(layout, noise)
    injection, seepage = rates if isinstance(rates, tuple) else (rates.injection, rates.seepage)
    from leakpipe.share import twin as module

    rng = np.random.default_rng(5)
    seen = simulate(layout, "Z", 12, 30_000, noise, rng)
    observed = module._observe(module._events(seen, layout, "Z", True)[:, 1:12])
    truth = []
    for one in (noise, noise.without_injection()):
        stream = np.random.default_rng(9)
        p = np.array(
            [module._logical_error(layout, "Z", r, shots, one, stream, True) for r in rounds]
        )
        fitted = module.fit_per_round(np.array(rounds, float), 1 - 2 * p, 4 * p * (1 - p) / shots)
        assert fitted is not None
        truth.append(fitted.error_per_round)
    share = 1 - truth[1] / truth[0]
    found = run_twin(layout, "Z", rounds, injection, seepage, observed, shots, rng)
    assert found is not None
    model = np.hypot(MODEL_ERROR["twin"] * found.share, found.spread)
    assert abs(found.share - share) < 2 * np.hypot(model, found.statistical)
    # An error as large as the share itself would make this test idle.
    assert model < 0.3 * share
    assert found.detection[0] == pytest.approx(found.detection[1], rel=0.03)


def test_reading_error_of_independent_causes() -> None:
    """Observed.reading returns q of a check whose events come from wrong readings and one more.

    With readings wrong at q and the value itself flipping at f per round, 1 - 2 d = (1-2q)^2 (1-2f)
    and the exclusive or of two successive events has (1-2q)^2 (1-2f)^2 (closed form).
    """
    q, f = 0.03, 0.05
    d = (1 - (1 - 2 * q) ** 2 * (1 - 2 * f)) / 2
    either = (1 - (1 - 2 * q) ** 2 * (1 - 2 * f) ** 2) / 2
    both = d - either / 2
    observed = Observed(np.array([d]), np.array([both - d**2]))
    assert observed.reading[0] == pytest.approx(q, abs=1e-12)


def _route(name: str, share: float, statistical: float = 0.01) -> Route:
    return Route(name, share, statistical, 0.08 * share, f"the {name} route")


def test_preferred_route_is_reported_with_both_errors() -> None:
    """The readings route comes before the twin; its interval holds both errors in quadrature."""
    total, findings = combine([_route("twin", 0.21), _route("readings", 0.20)], transport=None)
    assert total.value == 0.20
    assert total.high is not None
    assert total.high - 0.20 == pytest.approx(1.96 * np.hypot(0.01, 0.016), rel=1e-3)
    assert findings == []


def test_disagreement_is_a_finding() -> None:
    """Routes further apart than twice their joint error are said to disagree."""
    _, findings = combine([_route("twin", 0.40), _route("readings", 0.20)], transport=None)
    assert [finding.code for finding in findings] == ["routes-disagree"]


def test_compatible_with_zero_is_an_upper_limit() -> None:
    """A share below two standard errors is reported as a limit, never as a number."""
    total, _ = combine([_route("readings", 0.015, 0.01)], transport=None)
    assert total.value is None
    assert not total.identifiable
    assert total.high is not None
    assert 0.015 < total.high < 0.06


def test_transport_turns_the_number_into_a_range() -> None:
    """Where leakage moves, the number becomes a range that reaches down by the over-count."""
    total, _ = combine([_route("readings", 0.30)], transport=0.5)
    assert total.value is None
    assert total.low is not None
    assert total.high is not None
    assert total.low < 0.2 < 0.3 < total.high


def test_no_route_is_unknown_with_a_reason() -> None:
    """Without any route the share is unknown and says so."""
    total, _ = combine([], transport=None)
    assert total.value is None
    assert total.basis
