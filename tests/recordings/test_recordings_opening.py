"""Reading recordings: chunks, order of names, preparations, states, traces, Zarr stores."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
import xarray as xr
from recordings.recordings_examples import (
    FIELDS,
    ROUNDS,
    SHOTS,
    calibration_dataset,
    described,
    joined,
    memory_dataset,
    whole,
)

from leakpipe.recordings.opening import chunks, content_hash, open_calibration
from leakpipe.recordings.shots import BLOCK

PACKING = {"dtype": "int16", "scale_factor": 1e-3, "_FillValue": -32768}


def memory_file(tmp_path: Path, data: xr.Dataset, **encoding: object) -> Path:
    path = tmp_path / "memory.nc"
    data.to_netcdf(path, encoding=encoding or None)
    return path


@pytest.mark.parametrize("size", [1, 50, 70, 100, 119, 120, 10**9])
def test_chunks_equal_the_whole(tmp_path: Path, size: int) -> None:
    """Whatever the chunk size, the chunks begin at blocks and hold the same shots to the bit."""
    recording = described(memory_file(tmp_path, memory_dataset()))
    parts, (all_at_once,) = list(chunks(recording, size)), whole(recording)
    assert all(part.first % BLOCK == 0 for part in parts)
    assert sum(part.shots for part in parts) == SHOTS
    for name in FIELDS:
        np.testing.assert_array_equal(joined(parts, name), getattr(all_at_once, name))


def test_a_range_of_shots(tmp_path: Path) -> None:
    """A range that starts at a block gives those shots only, cut at the recording's end."""
    recording = described(memory_file(tmp_path, memory_dataset()))
    (all_at_once,) = whole(recording)
    parts = list(chunks(recording, 50, first=50, last=10**6))
    np.testing.assert_array_equal(joined(parts, "iq"), all_at_once.iq[50:])  # type: ignore[index]
    assert [part.first for part in parts] == [50, 100]


def test_names_come_out_in_the_order_of_the_layout(tmp_path: Path) -> None:
    """A file with its qubits in another order gives the arrays of a file in the layout's order."""
    data = memory_dataset()
    (tmp_path / "other").mkdir()
    straight = described(memory_file(tmp_path, data))
    mixed = described(memory_file(tmp_path / "other", data.isel(measure=[1, 0], data=[2, 0, 1])))
    assert mixed.measure_order == (1, 0)
    for one, other in zip(whole(straight), whole(mixed), strict=True):
        for name in FIELDS:
            np.testing.assert_array_equal(getattr(one, name), getattr(other, name))


def test_one_preparation_for_all_shots(tmp_path: Path) -> None:
    """`prepared` of dims (data,) stands for every shot, in the layout's order."""
    data = memory_dataset()
    data["prepared"] = ("data", np.array([1, 0, 0], np.uint8))
    recording = described(memory_file(tmp_path, data.isel(data=[1, 2, 0])))
    parts = list(chunks(recording, 50))
    assert joined(parts, "prepared").shape == (SHOTS, 3)
    assert (joined(parts, "prepared") == [1, 0, 0]).all()


@pytest.mark.parametrize("kind", ["uint8", "int64", "float32"])
def test_state_recordings(tmp_path: Path, kind: str) -> None:
    """States come as 0, 1, 2; anything higher is leaked, the fill value, 255 and NaN missing."""
    data = memory_dataset().drop_vars(["iq", "final_iq", "quadrature"])
    rng = np.random.default_rng(2)
    states = rng.integers(0, 3, (SHOTS, ROUNDS, 2)).astype(kind)
    closing = rng.integers(0, 3, (SHOTS, 3)).astype(kind)
    missing = np.nan if kind == "float32" else 255
    states[0, 0, 0], states[1, 0, 1], closing[3, 2] = missing, 3, missing
    data["state"] = (("shot", "round", "measure"), states)
    data["final_state"] = (("shot", "data"), closing)
    recording = described(memory_file(tmp_path, data))
    assert (recording.kind, recording.closing_kind) == ("state", "state")
    (chunk,) = whole(recording)
    assert chunk.states is not None
    assert chunk.final_states is not None
    assert chunk.states.dtype == np.uint8
    expected = np.where(states == 3, 2, np.where(np.isnan(states), 255, states))
    np.testing.assert_array_equal(chunk.states, expected)
    assert chunk.final_states[3, 2] == 255
    assert chunk.iq is None


def test_trace_recordings_stay_as_digitised(tmp_path: Path) -> None:
    """Plain int16 traces keep their type: converting them would double the memory."""
    data = memory_dataset()
    rng = np.random.default_rng(3)
    traces = rng.integers(-99, 99, (SHOTS, ROUNDS, 2, 4, 2)).astype(np.int16)
    closing = rng.integers(-99, 99, (SHOTS, 3, 4, 2)).astype(np.int16)
    data = data.drop_vars(["iq", "final_iq"]).assign(
        trace=(("shot", "round", "measure", "sample", "quadrature"), traces),
        final_trace=(("shot", "data", "sample", "quadrature"), closing),
    )
    recording = described(memory_file(tmp_path, data.assign_coords(sample=[0.0, 4.0, 8.0, 12.0])))
    parts = list(chunks(recording, 50))
    assert joined(parts, "trace").dtype == np.int16
    np.testing.assert_array_equal(joined(parts, "trace"), traces)
    np.testing.assert_array_equal(joined(parts, "final_trace"), closing)


def test_rounds_and_closing_readout_may_be_of_different_kinds(tmp_path: Path) -> None:
    """Points of the rounds go with a closing readout that is classified already."""
    data = memory_dataset()
    states = np.random.default_rng(4).integers(0, 3, (SHOTS, 3)).astype(np.uint8)
    data = data.drop_vars("final_iq").assign(final_state=(("shot", "data"), states))
    recording = described(memory_file(tmp_path, data))
    assert (recording.kind, recording.closing_kind) == ("iq", "state")
    np.testing.assert_array_equal(joined(whole(recording), "final_states"), states)


def test_packed_points_of_another_writer(tmp_path: Path) -> None:
    """Points packed by xarray come back within half a step, missing ones as NaN.

    Half a step of 1e-3, plus one float32 rounding of values below 8: 2^-21.
    """
    data = memory_dataset()
    data.iq[5, 1, 0, :] = np.nan
    path = memory_file(tmp_path, data, iq=PACKING, final_iq={**PACKING, "add_offset": 0.25})
    (chunk,) = whole(described(path))
    tolerance = 0.5e-3 + 2**-21
    np.testing.assert_allclose(chunk.iq, data.iq.values, rtol=0, atol=tolerance)
    np.testing.assert_allclose(chunk.final_iq, data.final_iq.values, rtol=0, atol=tolerance)
    assert np.isnan(chunk.iq[5, 1, 0]).all()  # type: ignore[index]


@pytest.mark.parametrize("version", [2, 3])
@pytest.mark.parametrize("packed", [False, True])
def test_zarr_stores_open_the_same(tmp_path: Path, version: int, packed: bool) -> None:
    """A Zarr store of the same contents gives the chunks that the netCDF file gives."""
    pytest.importorskip("zarr")
    data = memory_dataset()
    data.iq[5, 1, 0, :] = np.nan
    encoding = {"iq": PACKING, "final_iq": PACKING} if packed else {}
    path, store = memory_file(tmp_path, data, **encoding), tmp_path / "memory.zarr"
    data.to_zarr(store, encoding=encoding, zarr_format=version, consolidated=version == 2)
    one, other = described(path), described(store)
    assert vars(one.frame).keys() == vars(other.frame).keys()
    assert one.calibration_id == other.calibration_id
    for first, second in zip(chunks(one, 50), chunks(other, 50), strict=True):
        for name in FIELDS:
            np.testing.assert_array_equal(getattr(first, name), getattr(second, name), name)


def test_a_zarr_calibration_opens_the_same(tmp_path: Path) -> None:
    """A calibration in a Zarr store is the calibration of the netCDF file."""
    pytest.importorskip("zarr")
    data = calibration_dataset()
    data.to_netcdf(tmp_path / "calibration.nc")
    data.to_zarr(tmp_path / "calibration.zarr")
    one = open_calibration(tmp_path / "calibration.nc")
    xr.testing.assert_equal(one, open_calibration(tmp_path / "calibration.zarr"))
    np.testing.assert_array_equal(one.iq, data.iq)


def test_content_hash_tells_contents_apart(tmp_path: Path) -> None:
    """The hash is that of the bytes: equal for a copy, other for one changed byte or name."""
    first, second = tmp_path / "a.nc", tmp_path / "b.nc"
    first.write_bytes(b"shots")
    second.write_bytes(b"shots")
    assert content_hash(first) == content_hash(second)
    second.write_bytes(b"shott")
    assert content_hash(first) != content_hash(second)
    for name in ("one.zarr/x", "two.zarr/y"):
        (tmp_path / name).parent.mkdir()
        (tmp_path / name).write_bytes(b"shots")
    assert content_hash(tmp_path / "one.zarr") != content_hash(tmp_path / "two.zarr")
