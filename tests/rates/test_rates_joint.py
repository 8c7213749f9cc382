"""The joint model that lmfit carries, and our own verdict on it."""

from __future__ import annotations

import numpy as np
import pytest

from leakpipe.rates.joint import Curve, fit_joint, model

TRUTH = {
    "injection_data": 1.5e-3,
    "seepage_data": 0.18,
    "injection_measure": 1.1e-3,
    "seepage_measure": 0.25,
    "detection_start": 0.1,
    "detection_response": 1.8,
}
ROUNDS = {
    "data": np.array([1.0, 3, 5, 8, 12, 18, 25]),
    "measure": np.arange(1.0, 26),
    "detection": np.arange(2.0, 26),
}
ERRORS = {"data": 2e-4, "measure": 1.5e-4, "detection": 3e-4}


def curves(rng: np.random.Generator | None = None) -> dict[str, Curve]:
    """Curves of the truth, with normal noise where a generator is given."""
    out = {}
    for name, rounds in ROUNDS.items():
        value = model(rounds, TRUTH, name)
        error = np.full(len(rounds), ERRORS[name])
        if rng is not None:
            value = value + rng.normal(size=len(rounds)) * error
        out[name] = Curve(rounds, value, error)
    return out


def test_exact_curves_give_exact_parameters() -> None:
    """Without noise the fit returns the truth to six digits (numeric derivatives)."""
    found = fit_joint(curves(), {})
    assert found.verdict == "good"
    for name, value in TRUTH.items():
        assert found.values[name] == pytest.approx(value, rel=1e-6)


def test_absolute_errors_cover() -> None:
    """95 % intervals from unscaled errors cover in .92 to .98 of 200 draws x 6 parameters.

    1200 intervals, correlated within a draw: three errors of 200 independent ones are .046.
    """
    rng = np.random.default_rng(1)
    hits = {name: 0 for name in TRUTH}
    for _ in range(200):
        found = fit_joint(curves(rng), {})
        for name, value in TRUTH.items():
            hits[name] += abs(found.values[name] - value) < 1.96 * found.errors[name]
    for name, count in hits.items():
        assert 0.95 - 0.046 <= count / 200 <= 1.0, name


def test_steady_level_error_follows_the_covariance() -> None:
    """The delta-method error of p_ss equals the spread over draws within 20 % (100 draws)."""
    rng = np.random.default_rng(2)
    found = [fit_joint(curves(rng), {}).steady("data") for _ in range(100)]
    values, errors = np.array(found).T
    assert values.std(ddof=1) == pytest.approx(errors.mean(), rel=0.2)
    assert values.mean() == pytest.approx(1.5e-3 / 0.1815, rel=4 * errors.mean() / 8e-3 / 10)


def test_config_can_hold_bound_and_tie() -> None:
    """Held parameters stay, tied ones follow, and neither gets an error of its own."""
    held = fit_joint(curves(), {"seepage_data": {"value": 0.2, "vary": False}})
    assert held.values["seepage_data"] == 0.2
    assert "seepage_data" not in held.varied
    tied = fit_joint(curves(), {"seepage_measure": {"expr": "seepage_data"}})
    assert tied.values["seepage_measure"] == tied.values["seepage_data"]


def test_parameter_on_its_bound_is_no_success() -> None:
    """The fitter reports success with a seepage pinned at its bound; our verdict does not."""
    pinned = fit_joint(curves(), {"seepage_data": {"value": 0.3, "min": 0.25}})
    assert "seepage_data ended on its bound" in pinned.verdict


def test_unknown_parameter_is_refused() -> None:
    """A parameter that the model does not have is named."""
    with pytest.raises(KeyError, match="leak_speed"):
        fit_joint(curves(), {"leak_speed": {"value": 1.0}})


def test_missing_role_leaves_the_other() -> None:
    """Without measure readings the data qubits are fitted all the same."""
    only = {name: curve for name, curve in curves().items() if name == "data"}
    found = fit_joint(only, {})
    assert found.verdict == "good"
    assert found.values["injection_data"] == pytest.approx(TRUTH["injection_data"], rel=1e-5)
