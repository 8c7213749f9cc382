"""The planner on real recordings: one job per calibration and patch, with what it rests on."""

from __future__ import annotations

import json
import shutil
from pathlib import Path

import pytest

from leakpipe.config.models import Config
from leakpipe.history.inputs import recordings_in
from leakpipe.history.jobs import Plan
from leakpipe.history.planning import plan_recordings
from leakpipe.rehearsal.scenario import Scenario
from leakpipe.rehearsal.write import rehearse

CODE = {"family": "repetition", "distance": 3}
QUICK = {
    "device": "invented",
    "patch": "north",
    "seed": 3,
    "code": CODE,
    "rounds": (1, 3),
    "shots": 100,
    "kind": "iq",
    "noise": {"injection": 2e-3, "seepage": 0.2},
    "readout": {"calibration_shots": 50, "reference": "good"},
    "truth": {"shots": 0, "readout_shots": 1000},
    "season": {
        "epochs": 3,
        "changes": [{"epoch": 3, "recalibrated": ["D0", "M0"]}],
    },
}


@pytest.fixture(scope="module")
def recorded(tmp_path_factory: pytest.TempPathFactory) -> Path:
    folder = tmp_path_factory.mktemp("recorded")
    rehearse(Scenario.model_validate(QUICK, strict=False), folder)
    return folder


@pytest.fixture
def folder(recorded: Path, tmp_path: Path) -> Path:
    shutil.copytree(recorded, tmp_path / "recordings")
    return tmp_path / "recordings"


def planned(folder: Path, waiting: tuple[Path, ...] = ()) -> Plan:
    settings = {"recordings": {"folder": str(folder)}, "code": CODE}
    config = Config.model_validate_json(json.dumps(settings))
    complete = [path for path in recordings_in(folder, ("*.nc",)) if path not in waiting]
    return plan_recordings(config, complete, waiting)


def test_one_job_per_calibration_with_its_recordings(folder: Path) -> None:
    """Keys, order of time and inputs; nothing is left over."""
    plan = planned(folder)
    assert len(plan.jobs) == 3
    assert plan.problems == {}
    assert len({job.key for job in plan.jobs}) == 3
    times = [job.acquired_at for job in plan.jobs]
    assert times == sorted(times)
    for job in plan.jobs[:2]:
        assert len(job.inputs) == 1 + len(job.payload.memories)
    everything = {path for job in plan.jobs for path in job.inputs}
    assert everything == set(recordings_in(folder, ("*.nc",)))


def test_a_recalibration_of_some_qubits_rests_on_the_one_before_too(folder: Path) -> None:
    """The third calibration has two qubits: the second gives the rest, the first nothing."""
    first, second, third = (job.payload.calibrations for job in planned(folder).jobs)
    assert [one.path for one in third] == [second[-1].path, third[-1].path]
    first[-1].path.unlink()
    without_first = planned(folder).jobs
    assert without_first[-1].inputs == planned(folder).jobs[-1].inputs
    assert len(without_first) == 2


def test_a_truncated_recording_is_a_problem_or_is_waited_for(folder: Path) -> None:
    """Complete but unreadable: said, the others go on. Still being written: not a word."""
    path = planned(folder).jobs[1].payload.memories[-1].path
    path.write_bytes(path.read_bytes()[:2000])
    plan = planned(folder)
    assert list(plan.problems) == [path]
    assert len(plan.jobs) == 3
    waited = planned(folder, (path,))
    assert waited.problems == {}
    assert waited.waiting == frozenset()


def test_a_readable_recording_still_being_written_names_its_result(folder: Path) -> None:
    """Its result waits with it."""
    job = planned(folder).jobs[1]
    plan = planned(folder, (job.payload.memories[-1].path,))
    assert plan.waiting == {job.key}


def test_no_recordings_are_no_jobs(tmp_path: Path) -> None:
    """An empty folder needs no layout."""
    assert planned(tmp_path) == Plan((), frozenset(), {})
