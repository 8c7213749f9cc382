"""Foreign files through a mapping give the recordings that the contract's files give."""

from __future__ import annotations

import copy
import pickle
from pathlib import Path
from typing import Any

import netCDF4
import numpy as np
import pytest
import xarray as xr
import yaml
from recordings.recordings_examples import (
    FIELDS,
    LAYOUT,
    calibration_dataset,
    described,
    memory_dataset,
)

from leakpipe.config.loading import load
from leakpipe.config.models import Config
from leakpipe.errors import ConfigError, RecordingError
from leakpipe.recordings.finding import find, usable
from leakpipe.recordings.opening import chunks, open_calibration

CALIBRATION = {
    "files": "cal_*",
    "arrays": {"iq": {"array": "blobs", "axes": ["prepared", "quadrature", "shot", "qubit"]}},
    "coordinates": {"qubit": {"array": "names"}, "prepared": [0, 1, 2]},
    "attributes": {
        "calibration_id": "cal-1",
        "acquired_at": "2026-11-20T01:00:00+00:00",
        "device": "bench",
    },
}
MEMORY = {
    "files": "run_*",
    "arrays": {
        "iq": {"array": "stab/iq", "axes": ["quadrature", "measure", "round", "shot"]},
        "final_iq": {"array": "end/iq", "axes": ["data", "shot", "quadrature"]},
        "prepared": {"array": "init", "axes": ["data", "shot"]},
        "verdict": {"array": "failed", "axes": ["shot"]},
        "started_at": {"array": "clock", "axes": ["shot"]},
    },
    "coordinates": {"measure": ["M0", "M1"], "data": ["D0", "D1", "D2"]},
    "attributes": {
        **CALIBRATION["attributes"],  # type: ignore[dict-item]
        "patch": "north",
        "basis": "Z",
        "reset": "each round",
    },
}
ROLES = {name: one["array"] for name, one in MEMORY["arrays"].items()}  # type: ignore[attr-defined]


def foreign_arrays() -> tuple[dict[str, Any], dict[str, Any]]:
    """Arrays of a calibration and of a memory recording, renamed and with other axis orders."""
    calibration, memory = calibration_dataset(), memory_dataset()
    memory.iq[4, 1, 0, :] = np.nan
    first = {
        "blobs": calibration.iq.transpose("prepared", "quadrature", "shot", "qubit").values,
        "names": calibration.qubit.values.astype(str),
    }
    second = {
        "stab/iq": memory.iq.transpose("quadrature", "measure", "round", "shot").values,
        "end/iq": memory.final_iq.transpose("data", "shot", "quadrature").values,
        "init": memory.prepared.transpose("data", "shot").values,
        "failed": memory.verdict.values,
        "clock": memory.started_at.values,
    }
    return first, second


def write_npz(folder: Path) -> None:
    first, second = foreign_arrays()
    np.savez(folder / "cal_1.npz", **first)
    np.savez_compressed(folder / "run_1.npz", **second)


def write_hdf(folder: Path) -> None:
    """Write HDF5 files in groups, with dimension names that mean nothing."""
    for name, arrays in zip(("cal_1.h5", "run_1.h5"), foreign_arrays(), strict=True):
        with netCDF4.Dataset(folder / name, "w") as dataset:
            for path, values in arrays.items():
                dims = [f"x{path.replace('/', '_')}{i}" for i in range(values.ndim)]
                for dim, size in zip(dims, values.shape, strict=True):
                    dataset.createDimension(dim, size)
                kind = str if values.dtype.kind == "U" else values.dtype
                variable = dataset.createVariable(path, kind, dims)
                variable[:] = values.astype(object) if kind is str else values


def write_zarr(folder: Path) -> None:
    zarr = pytest.importorskip("zarr")
    for name, arrays in zip(("cal_1.zarr", "run_1.zarr"), foreign_arrays(), strict=True):
        group = zarr.open_group(folder / name, mode="w", zarr_format=2)
        for path, values in arrays.items():
            group.create_array(path, data=values, chunks=values.shape)


def config_of(folder: Path, changes: dict[str, Any] | None = None) -> Config:
    content = {
        "recordings": {
            "folder": "shots",
            "mapping": {"calibration": CALIBRATION, "memory": {**MEMORY, **(changes or {})}},
        },
        "code": {"family": "repetition", "distance": 3},
    }
    path = folder / "config.yaml"
    # A copy without shared parts: YAML would write those as anchors.
    path.write_text(yaml.safe_dump(copy.deepcopy(content)))
    return load(path)


@pytest.fixture
def shots(tmp_path: Path) -> Path:
    folder = tmp_path / "shots"
    folder.mkdir()
    return folder


@pytest.mark.parametrize("write", [write_npz, write_hdf, write_zarr])
@pytest.mark.parametrize("size", [50, 10**6])
def test_foreign_files_equal_files_of_the_contract(
    tmp_path: Path, shots: Path, write: Any, size: int
) -> None:
    """Renamed, transposed arrays give, chunk by chunk, what the contract's own file gives."""
    write(shots)
    config = config_of(tmp_path)
    (epoch,) = usable(find(config))
    (memory,) = pickle.loads(pickle.dumps(epoch.memories))
    data = memory_dataset()
    data.iq[4, 1, 0, :] = np.nan
    data.to_netcdf(tmp_path / "straight.nc")
    straight = described(tmp_path / "straight.nc")
    assert (memory.frame.shots, memory.frame.rounds) == (120, 2)
    for one, other in zip(chunks(memory, size), chunks(straight, size), strict=True):
        for name in FIELDS:
            np.testing.assert_array_equal(getattr(one, name), getattr(other, name), name)
    opened = open_calibration(epoch.calibrations[-1].path, config.recordings.mapping)
    calibration_dataset().to_netcdf(tmp_path / "calibration.nc")
    xr.testing.assert_equal(opened, open_calibration(tmp_path / "calibration.nc"))


def test_complex_points_need_no_quadrature_axis(tmp_path: Path, shots: Path) -> None:
    """An array of complex numbers is I + iQ."""
    first, second = foreign_arrays()
    np.savez(shots / "cal_1.npz", **first)
    second["stab/iq"] = second["stab/iq"][0] + 1j * second["stab/iq"][1]
    np.savez(shots / "run_1.npz", **second)
    axes = ["measure", "round", "shot"]
    arrays = {**MEMORY["arrays"], "iq": {"array": "stab/iq", "axes": axes}}  # type: ignore[dict-item]
    (epoch,) = usable(find(config_of(tmp_path, {"arrays": arrays})))
    (chunk,) = chunks(epoch.memories[0], 10**6)
    expected = memory_dataset().iq.values
    expected[4, 1, 0] = np.nan
    np.testing.assert_array_equal(chunk.iq, expected)


def test_attributes_out_of_the_file(tmp_path: Path, shots: Path) -> None:
    """An attribute may be a constant, an attribute of the file or a one-value array of it."""
    write_hdf(shots)
    with netCDF4.Dataset(shots / "run_1.h5", "a") as dataset:
        dataset.patch_name = "south"
        dataset.createVariable("inj_round", "i4", ())[...] = 2
    attributes = {
        **MEMORY["attributes"],  # type: ignore[dict-item]
        "patch": {"attribute": "patch_name"},
        "injected_qubit": "D1",
        "injected_round": {"array": "inj_round"},
        "injected_probability": 0.75,
    }
    (epoch,) = usable(find(config_of(tmp_path, {"attributes": attributes})))
    assert epoch.memories[0].patch == "south"
    assert epoch.memories[0].frame.injected == ("D1", 2, 0.75)


def test_packed_foreign_points_are_unpacked(tmp_path: Path, shots: Path) -> None:
    """The packing attributes of an HDF5 array count as they do in the contract's files."""
    write_hdf(shots)
    with netCDF4.Dataset(shots / "run_1.h5", "a") as dataset:
        dataset["stab"].variables["iq"].scale_factor = 0.5
    (epoch,) = usable(find(config_of(tmp_path)))
    (chunk,) = chunks(epoch.memories[0], 10**6)
    np.testing.assert_array_equal(chunk.iq[5:], 0.5 * memory_dataset().iq.values[5:])  # type: ignore[index]


@pytest.mark.parametrize(
    ("changes", "sentence"),
    [
        (
            {"prepared": {"array": "start", "axes": ["data", "shot"]}},
            "mapping of prepared: the file has no array 'start'",
        ),
        (
            {"prepared": {"array": "init", "axes": ["shot"]}},
            "mapping of prepared: array 'init' has 2 axes, the mapping names 1: shot",
        ),
        (
            {"prepared": {"array": "init", "axes": ["shot", "data"]}},
            "mapping of prepared: axis shot of array 'init' has length 3, of array 'end/iq' 120",
        ),
        (
            {"verdict": {"array": "init", "axes": ["data", "shot"]}},
            "variable verdict: found (data, shot), expected (shot)",
        ),
        (
            {"iq": {"array": "end/iq", "axes": ["round", "shot", "quadrature"]}},
            "variable iq: found (round, shot, quadrature), expected "
            "(shot, round, measure, quadrature)",
        ),
    ],
)
def test_mappings_that_do_not_fit_the_file(
    tmp_path: Path, shots: Path, changes: dict[str, Any], sentence: str
) -> None:
    """What the mapping names and the file does not have is said, array by array."""
    write_npz(shots)
    config = config_of(tmp_path, {"arrays": {**MEMORY["arrays"], **changes}})  # type: ignore[dict-item]
    found = find(config)
    assert f"{shots}/run_1.npz  {sentence}" in "\n".join(found.problems).splitlines()


def test_names_that_do_not_fit_the_axis(tmp_path: Path, shots: Path) -> None:
    """As many names as qubits are needed."""
    write_npz(shots)
    config = config_of(tmp_path, {"coordinates": {"measure": ["M0"], "data": list(LAYOUT.data)}})
    sentence = "mapping of coordinate measure: 1 values for an axis of 2"
    assert sentence in "\n".join(find(config).problems)


def test_pickles_are_never_opened(tmp_path: Path, shots: Path) -> None:
    """An NPZ array of Python objects is refused, not unpickled."""
    write_npz(shots)

    class Trap:
        def __reduce__(self) -> tuple[Any, ...]:
            return Path.touch, (tmp_path / "sprung",)

    _, second = foreign_arrays()
    second["init"] = np.array([Trap()], dtype=object)
    np.savez(shots / "run_1.npz", **second)
    with pytest.raises(RecordingError, match="Object arrays cannot be loaded"):
        usable(find(config_of(tmp_path)))
    assert not (tmp_path / "sprung").exists()


@pytest.mark.parametrize("part", [0.0, 0.3, 0.9])
def test_truncated_archives_are_refused(tmp_path: Path, shots: Path, part: float) -> None:
    """A cut NPZ archive is a sentence about that file."""
    write_npz(shots)
    path = shots / "run_1.npz"
    content = path.read_bytes()
    path.write_bytes(content[: int(len(content) * part)])
    with pytest.raises(RecordingError) as caught:
        usable(find(config_of(tmp_path)))
    assert str(caught.value).startswith(f"{path}  cannot be read: ")


def test_contract_files_may_stand_beside_foreign_ones(tmp_path: Path, shots: Path) -> None:
    """Files that fit no pattern of the mapping are read by the contract."""
    write_npz(shots)
    memory_dataset().to_netcdf(shots / "memory.nc")
    (epoch,) = usable(find(config_of(tmp_path)))
    assert [one.path.name for one in epoch.memories] == ["memory.nc", "run_1.npz"]


@pytest.mark.parametrize(
    ("text", "sentence"),
    [
        (
            "arrays: {iq: {array: a, axes: [shot, rond]}}",
            "recordings.mapping.memory.arrays.iq.axes.1  must be 'shot', 'round', 'measure'",
        ),
        (
            "arrays: {iq: {array: a, axes: [shot, shot]}}",
            "recordings.mapping.memory.arrays.iq  each axis may stand once",
        ),
        (
            "arrays: {iq: {arry: a, axes: [shot]}}",
            'recordings.mapping.memory.arrays.iq.arry  unknown key; did you mean "array"?',
        ),
        (
            "arrays: {points: {array: a, axes: [shot]}}",
            "recordings.mapping.memory.arrays.points  must be 'iq', 'trace'",
        ),
        (
            "attributes: {patch: {}}",
            "recordings.mapping.memory.attributes.patch  name an array or an attribute, got {}",
        ),
        (
            "attributes: {basis: [1]}",
            "recordings.mapping.memory.attributes.basis  must be text, a whole number, a number "
            "or a mapping, got [1]",
        ),
        (
            "attributes: {basis: {arry: b}}",
            'recordings.mapping.memory.attributes.basis.arry  unknown key; did you mean "array"?',
        ),
    ],
)
def test_bad_mappings_are_refused_by_the_config(tmp_path: Path, text: str, sentence: str) -> None:
    """A mistake in a mapping is found before any file is opened, with its line and path."""
    path = tmp_path / "config.yaml"
    start = "recordings:\n  mapping:\n    memory:\n      files: '*.npz'\n      "
    path.write_text(start + text + "\n")
    with pytest.raises(ConfigError) as caught:
        load(path)
    lines = [line for line in str(caught.value).splitlines() if sentence in line]
    assert lines, str(caught.value)
    assert lines[0].startswith(f"{path}:5  ")
    about = sentence.split("  ")[0]
    assert sum(f"  {about}" in line for line in str(caught.value).splitlines()) == 1
