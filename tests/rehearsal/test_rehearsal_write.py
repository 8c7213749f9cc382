"""Written rehearsals: the contract, the truth beside them, keeping and replacing."""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from scipy.stats import norm

from leakpipe.codes.files import layout_from_file
from leakpipe.codes.repetition import repetition
from leakpipe.codes.rotated import rotated_surface
from leakpipe.recordings.opening import chunks, describe_memory, open_calibration
from leakpipe.rehearsal.counterfactual import Outcome, fit_per_round
from leakpipe.rehearsal.scenario import Scenario
from leakpipe.rehearsal.season import epochs
from leakpipe.rehearsal.truth import detection_rise
from leakpipe.rehearsal.write import rehearse, up_to_date, write_layout

FALSE_ALARM = 1e-4
QUICK: dict[str, Any] = {
    "device": "invented",
    "seed": 3,
    "rounds": (1, 4, 6),
    "shots": 700,
    "noise": {"injection": 2e-3, "seepage": 0.2},
    "readout": {"calibration_shots": 200, "reference": "good"},
    "truth": {"shots": 2000, "readout_shots": 2000},
}

NO_TRUTH = {"shots": 0, "readout_shots": 1000}


def scenario(**more: Any) -> Scenario:
    """Return the quick scenario with changes."""
    return Scenario.model_validate(QUICK | more, strict=False)


def written(folder: Path, **more: Any) -> tuple[Path, dict[str, Any]]:
    """Write a scenario; return the folder and its truth."""
    rehearse(scenario(**more), folder)
    return folder, json.loads((folder / "truth.json").read_text())


def memories(folder: Path) -> list[Path]:
    """Return the memory recordings of a folder."""
    return sorted(path for path in folder.glob("*.nc") if "calibration" not in path.name)


@pytest.mark.parametrize("kind", ["iq", "trace", "state"])
@pytest.mark.parametrize("verdict", [True, False])
def test_recordings_keep_the_contract(tmp_path: Path, kind: str, verdict: bool) -> None:
    """Every kind of recording opens under the data contract with all its shots."""
    folder, truth = written(tmp_path / "out", kind=kind, verdict=verdict, rounds=(1, 4), shots=300)
    layout = rotated_surface(3)
    for path in memories(folder):
        described = describe_memory(path, lambda _: layout)
        assert (described.kind, described.closing_kind) == (kind, kind)
        assert described.has_verdict == verdict
        parts = list(chunks(described, 100))
        assert sum(part.shots for part in parts) == 300
        clock = np.concatenate([part.started_at for part in parts])
        assert (np.diff(clock) > 0).all()
    calibration = open_calibration(folder / "cal-001-calibration.nc")
    assert set(calibration.data_vars) == ({"trace"} if kind == "trace" else {"iq"})
    assert calibration.sizes["qubit"] == 17
    assert calibration.sizes["prepared"] == 3
    assert set(truth["files"]) == {path.name for path in folder.glob("*.nc")}


def test_truth_has_every_quantity_of_a_summary(tmp_path: Path) -> None:
    """The truth names what results name, with a value or a reason, and holds its own definition."""
    _, truth = written(tmp_path)
    patch = truth["epochs"][0]["patches"][0]
    for name in (
        "logical_error_per_round",
        "leakage_share",
        "detection_rise",
        "settling_rounds",
        "kappa",
    ):
        assert set(patch[name]) >= {"value", "error"}
        assert name in truth["definitions"]
    for name in ("steady_leakage", "injection", "seepage"):
        assert set(patch[name]) == {"data", "measure"}
        by_role = [q[name]["value"] for q in patch["qubits"] if q["role"] == "data"]
        assert patch[name]["data"]["value"] == pytest.approx(np.mean(by_role))
    assert len(patch["qubits"]) == 17
    assert "synthetic" in truth["invented"]


def test_labelled_recordings_hold_the_true_population(tmp_path: Path) -> None:
    """Closing labels of a well separated device show the closed-form population, misreads added."""
    shots = 30_000
    folder, truth = written(
        tmp_path,
        kind="state",
        rounds=(6, 8),
        shots=shots,
        noise={"injection": 8e-3, "seepage": 0.2},
        truth={"shots": 0, "readout_shots": 100_000},
    )
    described = describe_memory(folder / "cal-001-Z-R08.nc", lambda _: rotated_surface(3))
    labels = np.concatenate([part.final_states for part in chunks(described, 10_000)])
    seen = (labels == 2).mean(axis=0)
    patch = truth["epochs"][0]["patches"][0]
    bits = np.concatenate([part.final_states for part in chunks(described, 10_000)])
    for index, qubit in enumerate(patch["qubits"][:9]):
        leaked = qubit["leaked_at_last_round"]
        table = np.array(qubit["assignment_matrix"])
        ones = (bits[:, index] == 1).mean()
        # The few states 1 read as 2 need only the rough share of ones.
        expected = leaked * table[2, 2] + (1 - leaked) * (
            ones * table[1, 2] + (1 - ones) * table[0, 2]
        )
        spread = np.sqrt(expected * (1 - expected) * (1 / shots + 1 / 100_000))
        assert abs(seen[index] - expected) < norm.isf(FALSE_ALARM / 18) * spread


def test_counterfactual_needs_leakage(tmp_path: Path) -> None:
    """A device that cannot leak has a share of exactly zero; a leaky one has more."""
    more = {"rounds": (2, 5, 8), "truth": {"shots": 20_000, "readout_shots": 2000}, "shots": 10}
    _, quiet = written(tmp_path / "quiet", noise={}, **more)
    _, leaky = written(tmp_path / "leaky", noise={"injection": 3e-3, "seepage": 0.2}, **more)
    quiet_share, leaky_share = (
        one["epochs"][0]["patches"][0]["leakage_share"] for one in (quiet, leaky)
    )
    assert quiet_share == {"value": 0.0, "error": 0.0}
    assert leaky_share["value"] > norm.isf(FALSE_ALARM) * leaky_share["error"]
    settling = quiet["epochs"][0]["patches"][0]["settling_rounds"]
    assert settling["value"] is None


def test_rehearsal_is_reproducible_and_kept(tmp_path: Path) -> None:
    """The same scenario gives the same recordings, is recognised, and replaces another one."""
    folder, _ = written(tmp_path / "a")
    other, _ = written(tmp_path / "b")
    for path in memories(folder):
        first, second = (
            np.concatenate(
                [c.iq for c in chunks(describe_memory(p, lambda _: rotated_surface(3)), 500)]
            )
            for p in (path, other / path.name)
        )
        np.testing.assert_array_equal(first, second)
    assert up_to_date(scenario(), folder)
    assert not up_to_date(scenario(seed=4), folder)
    path = memories(folder)[0]
    path.write_bytes(path.read_bytes()[:-1])
    assert not up_to_date(scenario(), folder)
    (folder / "notes.txt").write_text("mine")
    rehearse(scenario(rounds=(2, 5), seed=4), folder)
    assert {one.name for one in folder.glob("*.nc")} == {
        "cal-001-calibration.nc",
        "cal-001-Z-R02.nc",
        "cal-001-Z-R05.nc",
    }
    assert (folder / "notes.txt").read_text() == "mine"
    assert not up_to_date(scenario(), tmp_path / "nowhere")


def test_one_chunk_or_many(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """Recordings written in many chunks hold all their shots, with the clock running on."""
    monkeypatch.setattr("leakpipe.rehearsal.write.CHUNK_READINGS", 2000)
    folder, _ = written(tmp_path, rounds=(4,), truth=NO_TRUTH)
    described = describe_memory(memories(folder)[0], lambda _: rotated_surface(3))
    parts = list(chunks(described, 50))
    iq = np.concatenate([part.iq for part in parts])
    assert iq.shape == (700, 4, 8, 2)
    assert np.isfinite(iq).all()
    assert len(np.unique(iq[:, 0, 0, 0])) > 600


def test_injected_runs_start_leaked(tmp_path: Path) -> None:
    """Injected recordings say what was done, and the qubit is leaked in them."""
    folder, _ = written(
        tmp_path,
        kind="state",
        noise={"seepage": 0.2},
        injected={"qubits": ("D4",), "rounds": (1, 3), "shots": 4000, "probability": 0.9},
        truth=NO_TRUTH,
    )
    expected = 0.9
    described = describe_memory(folder / "cal-001-Z-R01-D4-leaked.nc", lambda _: rotated_surface(3))
    assert described.frame.injected == ("D4", 1, 0.9)
    labels = np.concatenate([part.final_states for part in chunks(described, 1000)])
    # Misreads of a good device stay below two percent.
    spread = 4 * np.sqrt(expected * (1 - expected) / 4000)
    assert abs((labels[:, 4] == 2).mean() - expected) < spread + 0.02


def test_two_state_calibration_and_both_bases(tmp_path: Path) -> None:
    """A calibration without |2> holds two preparations; every basis gets its recordings."""
    folder, truth = written(
        tmp_path,
        bases=("Z", "X"),
        rounds=(1, 3),
        reset="none",
        readout={"calibration_shots": 50, "prepared": (0, 1)},
    )
    assert open_calibration(folder / "cal-001-calibration.nc").sizes["prepared"] == 2
    found = {describe_memory(p, lambda _: rotated_surface(3)).frame.basis for p in memories(folder)}
    assert found == {"Z", "X"}
    assert [patch["basis"] for patch in truth["epochs"][0]["patches"]] == ["Z", "X"]
    assert not describe_memory(memories(folder)[0], lambda _: rotated_surface(3)).frame.reset


def test_season_in_one_folder(tmp_path: Path) -> None:
    """Epochs share a folder; a partial recalibration writes only its qubits."""
    season = {"epochs": 3, "changes": ({"epoch": 2, "recalibrated": ("D1", "M3")},)}
    folder, truth = written(tmp_path, season=season, rounds=(2, 3), shots=50, truth=NO_TRUTH)
    assert [one["calibration_id"] for one in truth["epochs"]] == ["cal-001", "cal-002", "cal-003"]
    second = open_calibration(folder / "cal-002-calibration.nc")
    assert set(second.qubit.values) == {"D1", "M3"}
    ids = {
        describe_memory(p, lambda _: rotated_surface(3)).calibration_id for p in memories(folder)
    }
    assert ids == {"cal-001", "cal-002", "cal-003"}
    reason = truth["epochs"][0]["patches"][0]["leakage_share"]["reason"]
    assert reason == "not simulated"


@pytest.mark.parametrize("layout", [rotated_surface(3), rotated_surface(5), repetition(4)])
def test_layout_files_come_back(tmp_path: Path, layout: Any) -> None:
    """A written layout file reads back as the layout, time slots included."""
    back = layout_from_file(write_layout(layout, tmp_path / "layout.yaml"))
    assert (back.data, back.measure, back.checks) == (layout.data, layout.measure, layout.checks)
    assert back.touches == layout.touches
    assert back.slots == layout.slots
    assert back.logical == layout.logical


def test_own_names_bring_a_layout_file(tmp_path: Path) -> None:
    """A scenario with names of its own writes the layout file that goes with them."""
    names = {
        "data": tuple(f"Q{k}" for k in range(9)),
        "measure": tuple(f"A{k}" for k in range(8)),
    }
    folder, truth = written(tmp_path, code=names, rounds=(2, 3), truth=NO_TRUTH)
    layout = layout_from_file(folder / "layout.yaml")
    assert describe_memory(memories(folder)[0], lambda _: layout).frame.layout.data[0] == "Q0"
    assert "layout.yaml" in truth["files"]


def test_points_survive_the_file(tmp_path: Path) -> None:
    """Points in the calibration lie around the fields of the device that the season names."""
    one = scenario(readout={"calibration_shots": 4000, "reference": "good"}, truth=NO_TRUTH)
    rehearse(one, tmp_path)
    iq = open_calibration(tmp_path / "cal-001-calibration.nc")["iq"]
    for name, qubit in epochs(one)[0].calibrated.items():
        mean = qubit.to_signal(qubit.fields @ qubit.weights)
        for state in (0, 1, 2):
            # The median shrugs off preparation errors and jumps of up to a few percent, which move
            # it by less than a tenth of the noise.
            seen = np.median(iq.sel(qubit=name, prepared=state).values, axis=0)
            width = qubit.integrated_noise * qubit.gain
            assert abs(complex(*seen) - mean[state]) < 0.2 * width


def test_rise_of_a_known_curve() -> None:
    """A noise-free curve A - B lam^r gives back its rise from round 0 and from layer 2."""
    layout = rotated_surface(3)
    layers = np.arange(1, 27)
    curve = 0.12 - 0.02 * np.exp(-layers / 5.0)
    outcome = Outcome(25, 1000, 10, np.tile(curve[:, None], 8), np.zeros((25, 17)))
    rise = detection_rise(outcome, layout, "Z", 5.0)
    assert rise.value == pytest.approx(0.02 / 0.10)
    start = 0.02 * np.exp(-2 / 5.0)
    later = detection_rise(outcome, layout, "Z", 5.0, 2)
    assert later.value == pytest.approx(start / (0.12 - start))
    assert detection_rise(outcome, layout, "Z", float("inf")).value is None


def failures(eps: float, shots: int, rng: np.random.Generator | None) -> list[Outcome]:
    """Return outcomes at the closed form, exact or drawn."""
    found = []
    for rounds in (1, 3, 9, 25):
        chance = (1 - (1 - 2 * eps) ** rounds) / 2
        count = round(shots * chance) if rng is None else rng.binomial(shots, chance)
        found.append(Outcome(rounds, shots, int(count), np.zeros(1), np.zeros(1)))
    return found


def test_fit_per_round_recovers_the_closed_form() -> None:
    """eps .02914 gives P .3885667 at 25 rounds, and the fit of such counts gives eps back."""
    eps = 0.02914
    assert (1 - (1 - 2 * eps) ** 25) / 2 == pytest.approx(0.3885667, abs=5e-8)
    exact = fit_per_round(failures(eps, 10**9, None))
    # Counts are rounded to 1e-9 of the shots.
    assert exact.value == pytest.approx(eps, abs=1e-8)
    assert exact.amplitude == pytest.approx(1, abs=1e-7)
    rng = np.random.default_rng(1)
    fits = [fit_per_round(failures(eps, 5000, rng)) for _ in range(400)]
    pulls = np.array([(fit.value - eps) / fit.error for fit in fits])
    # Mean and standard deviation of 400 standard normal numbers.
    assert abs(pulls.mean()) < 4 / np.sqrt(400)
    assert abs(pulls.std() - 1) < 4 / np.sqrt(800)
    with pytest.raises(ValueError, match="two numbers of rounds"):
        fit_per_round(failures(eps, 5000, rng)[:2])


def test_stopped_rehearsal_leaves_nothing_for_the_next(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """A rehearsal stopped half-way is not up to date, and the next one clears its files."""

    class Stopped(Exception):
        pass

    def stop(*_: Any) -> None:
        raise Stopped

    with monkeypatch.context() as patch:
        patch.setattr("leakpipe.rehearsal.write._epoch_truth", stop)
        with pytest.raises(Stopped):
            rehearse(scenario(truth=NO_TRUTH), tmp_path)
    assert len(memories(tmp_path)) == 3
    assert not up_to_date(scenario(truth=NO_TRUTH), tmp_path)
    rehearse(scenario(truth=NO_TRUTH, rounds=(2, 3)), tmp_path)
    assert {path.name for path in tmp_path.iterdir()} == {
        "cal-001-calibration.nc",
        "cal-001-Z-R02.nc",
        "cal-001-Z-R03.nc",
        "truth.json",
    }
