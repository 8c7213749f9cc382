"""Reuse: kept models and sums give the same numbers to the bit, and only what is new is made."""

from __future__ import annotations

import json
import shutil
from pathlib import Path

import pytest
import xarray as xr

import leakpipe.reuse
from leakpipe.config.models import Config
from leakpipe.history.packing import packed
from leakpipe.progress import Silent
from leakpipe.recordings.finding import find
from leakpipe.reduction import Reduced
from leakpipe.rehearsal.scenario import Scenario
from leakpipe.rehearsal.write import rehearse
from leakpipe.reuse import calibrated, reduce_kept

SCENARIO = {
    "device": "invented",
    "patch": "north",
    "seed": 4,
    "code": {"family": "repetition", "distance": 3},
    "rounds": (1, 3, 6, 10),
    "shots": 300,
    "kind": "iq",
    "noise": {"injection": 2e-3, "seepage": 0.2},
    "readout": {"calibration_shots": 300, "reference": "good"},
    "truth": {"shots": 0, "readout_shots": 1000},
}


class Counting:
    """Counts the calls of a function that it lets through."""

    def __init__(self, function: object) -> None:
        self.function, self.calls = function, []

    def __call__(self, *arguments: object) -> object:
        self.calls.append(arguments)
        return self.function(*arguments)


@pytest.fixture(scope="module")
def recorded(tmp_path_factory: pytest.TempPathFactory) -> Path:
    folder = tmp_path_factory.mktemp("recorded")
    rehearse(Scenario.model_validate(SCENARIO, strict=False), folder)
    return folder


@pytest.fixture
def recordings(recorded: Path, tmp_path: Path) -> Path:
    return Path(shutil.copytree(recorded, tmp_path / "recordings"))


def settings(recordings: Path, results: Path, **more: object) -> Config:
    content = {
        "recordings": {"folder": str(recordings)},
        "code": SCENARIO["code"],
        "results": str(results),
        "readout": {"replicas": 2},
        **more,
    }
    return Config.model_validate_json(json.dumps(content))


def numbers(config: Config) -> tuple[xr.Dataset, list[Reduced]]:
    """Return the readout model and the sums of the one epoch, from the cache where it has them."""
    (epoch,) = find(config).epochs
    model, key = calibrated([one.path for one in epoch.calibrations], config)
    with Silent().step("") as step:
        return model, reduce_kept(epoch.memories, model, key, config, step)


@pytest.fixture
def watched(monkeypatch: pytest.MonkeyPatch) -> tuple[Counting, Counting]:
    models, sums = Counting(leakpipe.reuse.calibrate), Counting(leakpipe.reuse.reduce_each)
    monkeypatch.setattr(leakpipe.reuse, "calibrate", models)
    monkeypatch.setattr(leakpipe.reuse, "reduce_each", sums)
    return models, sums


def test_a_second_run_reads_nothing_and_says_the_same(
    recordings: Path, tmp_path: Path, watched: tuple[Counting, Counting]
) -> None:
    """From the cache model and sums are the same to the bit; a change reads only itself."""
    models, sums = watched
    config = settings(recordings, tmp_path / "results")
    (model, reduced), (model_again, reduced_again) = numbers(config), numbers(config)
    xr.testing.assert_identical(model, model_again)
    for name in model.variables:
        left, right = model[name].values, model_again[name].values
        assert left.dtype.kind in "UO" or left.tobytes() == right.tobytes(), name
    for one, other in zip(reduced, reduced_again, strict=True):
        assert one.frame.name == other.frame.name
        (arrays, structure), (others, other_structure) = (
            packed((each.tuned, each.readout, each.detection, each.logical, each.exposures))
            for each in (one, other)
        )
        assert structure == other_structure
        for name, values in arrays.items():
            assert values.dtype == others[name].dtype
            assert values.tobytes() == others[name].tobytes()
    assert len(models.calls) == 1
    assert [len(recordings) for recordings, *_ in sums.calls] == [4, 0]

    # One recording changes, here by its attributes: the others and the model are reused.
    import netCDF4

    path = sorted(recordings.glob("*R06.nc"))[0]
    with netCDF4.Dataset(path, "a") as opened:
        opened.comment = "written again"
    numbers(config)
    assert len(models.calls) == 1
    assert [len(recordings) for recordings, *_ in sums.calls] == [4, 0, 1]

    # A setting of a late stage reads no shot; one of the readout makes everything again.
    numbers(settings(recordings, tmp_path / "results", seed=1, run_log=str(tmp_path / "log")))
    assert [len(recordings) for recordings, *_ in sums.calls] == [4, 0, 1, 0]
    numbers(settings(recordings, tmp_path / "results", readout={"replicas": 3}))
    assert len(models.calls) == 2
    assert [len(recordings) for recordings, *_ in sums.calls] == [4, 0, 1, 0, 4]


def test_a_damaged_cache_only_costs_time(
    recordings: Path, tmp_path: Path, watched: tuple[Counting, Counting]
) -> None:
    """Cut entries are made again."""
    models, sums = watched
    config = settings(recordings, tmp_path / "results")
    numbers(config)
    for path in (tmp_path / "results" / leakpipe.reuse.FOLDER_NAME).iterdir():
        path.write_bytes(path.read_bytes()[:1000])
    numbers(config)
    assert len(models.calls) == 2
    assert [len(recordings) for recordings, *_ in sums.calls] == [4, 4]
