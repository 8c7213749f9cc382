"""Scenarios: strict reading, epochs of a season, noise per epoch."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

from leakpipe.errors import ConfigError
from leakpipe.rehearsal.populations import leakage_rates
from leakpipe.rehearsal.scenario import Scenario, load_scenario
from leakpipe.rehearsal.season import epochs, layouts

SMALL = """
device: invented
seed: 7
rounds: [1, 3]
shots: 100
noise: {injection: 1.0e-3, seepage: 0.2}
"""


def scenario(tmp_path: Path, more: str = "", base: str = SMALL) -> Scenario:
    """Return the small scenario with more lines."""
    path = tmp_path / "scenario.yaml"
    path.write_text(base + more)
    return load_scenario(path)


def test_demo_scenario_is_valid() -> None:
    """The scenario of `make demo` loads, and says that it is invented."""
    path = Path(__file__).parents[2] / "shared" / "demo" / "scenario.yaml"
    assert "invented data" in path.read_text()
    demo = load_scenario(path)
    assert len(epochs(demo)) == 1
    rates = leakage_rates(layouts(demo)["Z"], epochs(demo)[0].noise)
    assert 0.002 < np.median(rates.steady_leakage) < 0.015
    assert rates.steady_leakage.argmax() == 5


@pytest.mark.parametrize(
    ("more", "words"),
    [
        ("shot: 4\n", "shot  unknown key"),
        ("bases: [Y]\n", "must be 'Z' or 'X'"),
        ("kind: iqs\n", "must be"),
        ("season: {started_at: '2026-01-01T00:00:00'}\n", "ISO 8601 with a zone"),
        ("season: {started_at: yesterday}\n", "ISO 8601 with a zone"),
        ("readout: {prepared: [0, 2]}\n", r"prepared must be \[0, 1\]"),
        ("code: {distance: 1}\n", "distance"),
        ("truth: {shots: -1}\n", "truth.shots  must be >= 0"),
        ("bases: [Z, Z]\n", "bases must hold one or more different"),
        ("injected: {qubits: [D1], rounds: [2], shots: 9, round: 3}\n", "none before its round"),
        ("season: {changes: [{epoch: 1, recalibrated: []}]}\n", "recalibrated"),
    ],
)
def test_mistakes_are_named_with_their_place(tmp_path: Path, more: str, words: str) -> None:
    """A wrong key or value ends in a message with file, line and path."""
    with pytest.raises(ConfigError, match=words) as error:
        scenario(tmp_path, more)
    assert "scenario.yaml:" in str(error.value)


@pytest.mark.parametrize(
    ("more", "words"),
    [
        ("noise: {factors: {injection: {D99: 2.0}}}\n", "no qubit 'D99'"),
        ("season: {epochs: 2, changes: [{epoch: 3}]}\n", "epoch 3 never comes"),
        ("season: {changes: [{epoch: 1, recalibrated: [Q1]}]}\n", "no qubit 'Q1'"),
        ("injected: {qubits: [Q1], rounds: [3], shots: 10}\n", "no qubit 'Q1'"),
        ("code: {data: [a, b]}\n", "needs 9 names, got 2"),
        ("season: {changes: [{epoch: 1, factors: {injction: {D1: 2.0}}}]}\n", "no field"),
    ],
)
def test_contradictions_with_the_code_are_refused(tmp_path: Path, more: str, words: str) -> None:
    """Names and epochs that do not exist are refused before anything is simulated."""
    base = SMALL.replace("noise: {injection: 1.0e-3, seepage: 0.2}\n", "")
    with pytest.raises(ConfigError, match=words):
        epochs(scenario(tmp_path, more, base))


def test_fingerprint_is_about_content(tmp_path: Path) -> None:
    """Comments and order do not change the fingerprint, any value does."""
    first = scenario(tmp_path).fingerprint
    assert scenario(tmp_path, "# a remark\n").fingerprint == first
    assert scenario(tmp_path, "patch: patch\n").fingerprint == first
    assert scenario(tmp_path, "patch: north\n").fingerprint != first


SEASON = """
season:
  epochs: 5
  hours_between: 12
  changes:
    - {epoch: 2, recalibrated: [D1, M3]}
    - {epoch: 3, factors: {injection: {D4: 3.0}}}
    - {epoch: 4, silent: true}
    - {epoch: 5, drift: {rotation_degrees: 4.0}}
"""


def test_season_does_what_it_says(tmp_path: Path) -> None:
    """Recalibration, a leakier qubit, a silent night and a drift come when they should."""
    plan = epochs(scenario(tmp_path, SEASON))
    assert [one.number for one in plan] == [1, 2, 3, 5]
    assert [one.calibration_id for one in plan][-1] == "cal-005"
    assert (plan[1].acquired_at - plan[0].acquired_at).total_seconds() == 12 * 3600
    assert set(plan[1].calibrated) == {"D1", "M3"}
    changed = [n for n in plan[0].running if plan[0].running[n] != plan[1].running[n]]
    assert set(changed) == {"D1", "M3"}
    assert plan[2].running == plan[1].running
    before, after = (one.noise.injection for one in plan[1:3])
    np.testing.assert_allclose(
        np.array(after) / np.array(before), np.where(np.arange(17) == 4, 3, 1)
    )
    np.testing.assert_array_equal(plan[3].noise.injection, after)
    turned = plan[3].running["D0"].phase_degrees - plan[3].calibrated["D0"].phase_degrees
    assert turned == pytest.approx(4.0)
    assert plan[2].running == plan[2].calibrated


def test_scatter_differs_from_night_to_night(tmp_path: Path) -> None:
    """Injection scatters from epoch to epoch by the stated width, reproducibly."""
    more = "season: {epochs: 40, scatter: 0.1}\n"
    plans = [epochs(scenario(tmp_path, more)) for _ in range(2)]
    values = np.log([one.noise.injection for one in plans[0]])
    np.testing.assert_array_equal(values, np.log([one.noise.injection for one in plans[1]]))
    count = values.size
    # standard deviation of `count` numbers is known to 1 / sqrt(2 count)
    assert (values - np.log(1e-3)).std() == pytest.approx(0.1, rel=5 / np.sqrt(2 * count))
