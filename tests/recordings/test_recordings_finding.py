"""Finding recordings: which epoch they belong to, which calibrations stand behind it."""

from __future__ import annotations

from pathlib import Path

import pytest
import xarray as xr
from recordings.recordings_examples import calibration_dataset, memory_dataset

from leakpipe.config.models import Config
from leakpipe.errors import ConfigError, RecordingError
from leakpipe.recordings.finding import find, usable


def place(folder: Path, name: str, data: xr.Dataset, **attributes: str) -> Path:
    path = folder / name
    path.parent.mkdir(parents=True, exist_ok=True)
    data.assign_attrs(attributes).to_netcdf(path)
    return path


def calibration(folder: Path, name: str, hour: int, device: str = "bench") -> Path:
    at = f"2026-11-20T{hour:02d}:00:00+00:00"
    data = calibration_dataset()
    return place(
        folder, f"{device}-{name}-{hour}.nc", data, calibration_id=name, acquired_at=at,
        device=device,
    )  # fmt: skip


def memory(folder: Path, file: str, name: str, **attributes: str) -> Path:
    return place(folder, file, memory_dataset(), calibration_id=name, **attributes)


def config_of(folder: Path, **changes: object) -> Config:
    content = {
        "recordings": {"folder": str(folder)},
        "code": {"family": "repetition", "distance": 3},
        **changes,
    }
    return Config.model_validate(content, strict=False)


def test_memories_go_to_the_calibration_they_name(tmp_path: Path) -> None:
    """Epochs are ordered by the time of their calibration, wherever the files lie."""
    calibration(tmp_path, "late", 5)
    calibration(tmp_path / "deep" / "er", "early", 1)
    memory(tmp_path, "a.nc", "late")
    memory(tmp_path / "deep", "b.nc", "early")
    memory(tmp_path, "c.nc", "late")
    found = find(config_of(tmp_path))
    assert found.problems == ()
    assert [one.calibration_id for one in found.epochs] == ["early", "late"]
    assert [[m.path.name for m in one.memories] for one in found.epochs] == [
        ["b.nc"],
        ["a.nc", "c.nc"],
    ]


def test_older_calibrations_stand_behind_an_epoch(tmp_path: Path) -> None:
    """An epoch carries its calibration last and the device's older ones before it, no newer one."""
    for hour, name in ((3, "c"), (1, "a"), (2, "b"), (4, "d")):
        calibration(tmp_path, name, hour)
    calibration(tmp_path, "z", 0, device="other")
    memory(tmp_path, "memory.nc", "c")
    (epoch,) = find(config_of(tmp_path)).epochs
    assert [one.calibration_id for one in epoch.calibrations] == ["a", "b", "c"]
    assert epoch.acquired_at.hour == 3


def test_time_zones_are_compared_as_moments(tmp_path: Path) -> None:
    """A calibration written in another zone is ordered by when it was taken."""
    calibration(tmp_path, "utc", 5)
    east = "2026-11-20T06:00:00+09:00"
    place(tmp_path, "e.nc", calibration_dataset(), calibration_id="east", acquired_at=east)
    memory(tmp_path, "memory.nc", "utc")
    (epoch,) = find(config_of(tmp_path)).epochs
    assert [one.calibration_id for one in epoch.calibrations] == ["east", "utc"]


def test_a_calibration_taken_again_under_its_name(tmp_path: Path) -> None:
    """Of two calibrations of one name the newest makes the epoch; memories are not run twice."""
    calibration(tmp_path, "same", 1)
    calibration(tmp_path, "same", 2)
    memory(tmp_path, "memory.nc", "same")
    (epoch,) = find(config_of(tmp_path)).epochs
    assert [one.acquired_at.hour for one in epoch.calibrations] == [1, 2]


def test_a_calibration_without_memories_makes_no_epoch(tmp_path: Path) -> None:
    """There is nothing to run on a calibration alone, and nothing wrong with it."""
    calibration(tmp_path, "a", 1)
    found = find(config_of(tmp_path))
    assert (found.epochs, found.problems) == ((), ())


@pytest.mark.parametrize("device", ["bench", "other"])
def test_unmatched_calibrations_are_said(tmp_path: Path, device: str) -> None:
    """A memory that names a calibration not there, or of another device, is a problem."""
    calibration(tmp_path, "a", 1, device="bench")
    name = "b" if device == "bench" else "a"
    path = memory(tmp_path, "memory.nc", name, device=device)
    found = find(config_of(tmp_path))
    assert found.problems == (
        f'{path}  names calibration "{name}" of device "{device}", which is not among the '
        "recordings",
    )
    with pytest.raises(RecordingError, match="1 problem, nothing was run"):
        usable(found)


def test_memories_are_sorted_by_patch_basis_rounds_and_name(tmp_path: Path) -> None:
    """The order of an epoch's memories does not depend on the order of their files."""
    calibration(tmp_path, "a", 1)
    memory(tmp_path, "1.nc", "a", patch="south")
    place(tmp_path, "2.nc", memory_dataset(), calibration_id="a")
    place(tmp_path, "3.nc", memory_dataset().isel(round=[0]), calibration_id="a")
    memory(tmp_path, "0.nc", "a")
    (epoch,) = find(config_of(tmp_path)).epochs
    assert [one.path.name for one in epoch.memories] == ["3.nc", "0.nc", "2.nc", "1.nc"]


def test_only_the_device_of_the_config(tmp_path: Path) -> None:
    """With a device in the config, recordings of others are left alone."""
    calibration(tmp_path, "a", 1, device="bench")
    calibration(tmp_path, "a", 1, device="other")
    memory(tmp_path, "one.nc", "a", device="bench")
    memory(tmp_path, "two.nc", "a", device="other")
    assert len(find(config_of(tmp_path)).epochs) == 2
    (epoch,) = find(config_of(tmp_path, device="other")).epochs
    assert [one.path.name for one in epoch.memories] == ["two.nc"]


def test_one_bad_file_does_not_hide_the_others(tmp_path: Path) -> None:
    """Everything wrong with every file is listed at once; good files still make epochs."""
    calibration(tmp_path, "a", 1)
    memory(tmp_path, "good.nc", "a")
    memory(tmp_path, "basis.nc", "a", basis="Y", reset="maybe")
    (tmp_path / "empty.nc").write_bytes(b"")
    found = find(config_of(tmp_path))
    assert [one.path.name for one in found.epochs[0].memories] == ["good.nc"]
    with pytest.raises(RecordingError) as caught:
        usable(found)
    assert str(caught.value).splitlines() == [
        f'{tmp_path}/basis.nc  attribute basis: found "Y", expected "Z" or "X"',
        f'{tmp_path}/basis.nc  attribute reset: found "maybe", expected "each round" or "none"',
        f"{tmp_path}/empty.nc  is empty (truncated, or not netCDF-4)",
        "3 problems, nothing was run.",
    ]


def test_hidden_and_unfinished_files_are_not_recordings(tmp_path: Path) -> None:
    """Files that begin with a dot, such as those being written, are left alone."""
    calibration(tmp_path, "a", 1)
    memory(tmp_path, "good.nc", "a")
    (tmp_path / ".memory.nc").write_bytes(b"")
    (tmp_path / ".good.nc.part").write_bytes(b"")
    assert find(config_of(tmp_path)).problems == ()


def test_folders_without_recordings_say_so(tmp_path: Path) -> None:
    """A missing folder and an empty one are different sentences."""
    with pytest.raises(RecordingError, match="holds no recordings"):
        find(config_of(tmp_path))
    with pytest.raises(RecordingError, match="is not a folder of recordings"):
        find(config_of(tmp_path / "missing"))


def test_a_layout_is_needed(tmp_path: Path) -> None:
    """Without a family or a layout file the config is asked for one."""
    calibration(tmp_path, "a", 1)
    with pytest.raises(ConfigError, match="no layout: name a family and a distance"):
        find(config_of(tmp_path, code={"family": "layout file"}))
