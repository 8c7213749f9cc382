"""Files that break the contract: each is refused with the exact sentence, all at once."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
import pytest
import xarray as xr
from recordings.recordings_examples import (
    LAYOUT,
    Change,
    calibration_dataset,
    described,
    memory_dataset,
    whole,
)

from leakpipe.codes.repetition import repetition
from leakpipe.errors import RecordingError
from leakpipe.recordings.opening import open_calibration


def with_attributes(**changes: Any) -> Change:
    """Change attributes; None takes one away."""

    def change(data: xr.Dataset) -> xr.Dataset:
        kept = {**data.attrs, **changes}
        return data.assign_attrs({}).pipe(_replace, kept)

    return change


def _replace(data: xr.Dataset, attributes: dict[str, Any]) -> xr.Dataset:
    data = data.copy()
    data.attrs = {name: value for name, value in attributes.items() if value is not None}
    return data


ZONE = "an ISO 8601 time with a zone, such as 2026-11-20T01:00:00+00:00"
MEMORY_DIMS = "(shot, round, measure, quadrature)"

BAD_MEMORIES: dict[str, tuple[Change, str]] = {
    "no contract": (
        with_attributes(contract=None),
        'attribute contract: found nothing, expected "1"',
    ),
    "another contract": (
        with_attributes(contract="2"),
        'attribute contract: found "2", expected "1"',
    ),
    "another recording": (
        with_attributes(recording="memry"),
        'attribute recording: found "memry", expected "memory"',
    ),
    "no calibration id": (
        with_attributes(calibration_id=None),
        "attribute calibration_id: not found, expected text",
    ),
    "empty device": (with_attributes(device=""), "attribute device: not found, expected text"),
    "no patch": (
        with_attributes(patch=None),
        "attribute patch: not found, expected the name of the patch",
    ),
    "no zone": (
        with_attributes(acquired_at="2026-11-20T01:00:00"),
        f'attribute acquired_at: found "2026-11-20T01:00:00", expected {ZONE}',
    ),
    "no time": (
        with_attributes(acquired_at="last night"),
        f'attribute acquired_at: found "last night", expected {ZONE}',
    ),
    "basis": (with_attributes(basis="Y"), 'attribute basis: found "Y", expected "Z" or "X"'),
    "basis of another code": (
        with_attributes(basis="X"),
        "attribute basis: the layout has no logical X operator",
    ),
    "reset": (
        with_attributes(reset="yes"),
        'attribute reset: found "yes", expected "each round" or "none"',
    ),
    "axis order": (
        lambda data: data.assign(iq=data.iq.transpose("round", "shot", "measure", "quadrature")),
        f"variable iq: found (round, shot, measure, quadrature), expected {MEMORY_DIMS}",
    ),
    "missing axis": (
        lambda data: data.assign(iq=data.iq.isel(quadrature=0, drop=True)),
        f"variable iq: found (shot, round, measure), expected {MEMORY_DIMS}",
    ),
    "no readout": (
        lambda data: data.drop_vars("iq"),
        "variable iq, trace, state: found none of them",
    ),
    "no closing readout": (
        lambda data: data.drop_vars("final_iq"),
        "variable final_iq, final_trace, final_state: found none of them",
    ),
    "no prepared": (
        lambda data: data.drop_vars("prepared"),
        "variable prepared: found nothing, expected (shot, data) or (data)",
    ),
    "prepared per shot": (
        lambda data: data.assign(prepared=data.prepared.isel(data=0, drop=True)),
        "variable prepared: found (shot), expected (shot, data) or (data)",
    ),
    "verdict per qubit": (
        lambda data: data.assign(verdict=data.prepared),
        "variable verdict: found (shot, data), expected (shot)",
    ),
    "quadratures swapped": (
        lambda data: data.assign_coords(quadrature=["Q", "I"]),
        "coordinate quadrature: found ['Q', 'I'], expected [\"I\", \"Q\"]",
    ),
    "rounds from 0": (
        lambda data: data.assign_coords(round=[0, 1]),
        "coordinate round: found [0, 1], expected 1 to 2",
    ),
    "no names": (
        lambda data: data.drop_vars("measure"),
        "coordinate measure: not found, expected the names of the qubits",
    ),
    "name twice": (
        lambda data: data.assign_coords(measure=["M0", "M0"]),
        'coordinate measure: "M0" stands more than once',
    ),
    "other names": (
        lambda data: data.assign_coords(measure=["M0", "M01"]),
        'measure qubit "M01": not in the layout; the nearest is "M1"',
    ),
    "name not recorded": (
        lambda data: data.isel(measure=[0]),
        'measure qubit "M1": in the layout but not in the recording',
    ),
    "half an injection": (
        with_attributes(injected_qubit="D0"),
        "attributes injected_qubit and injected_round: only one of the two is there",
    ),
    "injection elsewhere": (
        with_attributes(injected_qubit="D9", injected_round=1),
        'attribute injected_qubit: found "D9", expected a qubit of the recording',
    ),
    "injection after the end": (
        with_attributes(injected_qubit="D0", injected_round=3),
        'attribute injected_round: found "3", expected a round from 1 to 2',
    ),
    "injection in words": (
        with_attributes(injected_qubit="D0", injected_round="first"),
        'attribute injected_round: found "first", expected a round from 1 to 2',
    ),
    "injection above one": (
        with_attributes(injected_qubit="D0", injected_round=1, injected_probability=1.5),
        'attribute injected_probability: found "1.5", expected a fraction from 0 to 1',
    ),
    "no shots": (
        lambda data: data.isel(shot=slice(0, 0)),
        "dimension shot: found length 0, expected 1 or more",
    ),
    "points as text": (
        lambda data: data.assign(iq=data.iq.astype(str)),
        "variable iq: found values of type text, expected numbers",
    ),
    "samples of nowhere": (
        lambda data: data.rename(iq="trace"),
        "variable trace: found (shot, round, measure, quadrature), expected "
        "(shot, round, measure, sample, quadrature)",
    ),
}

BAD_CALIBRATIONS: dict[str, tuple[Change, str]] = {
    "contract": (with_attributes(contract="0"), 'attribute contract: found "0", expected "1"'),
    "no signal": (lambda data: data.drop_vars("iq"), "variable iq or trace: found neither"),
    "states": (
        lambda data: data.rename(iq="state"),
        "variable iq or trace: found neither",
    ),
    "axis order": (
        lambda data: data.assign(iq=data.iq.transpose("prepared", "qubit", "shot", "quadrature")),
        "variable iq: found (prepared, qubit, shot, quadrature), expected "
        "(qubit, prepared, shot, quadrature)",
    ),
    "no qubits": (
        lambda data: data.drop_vars("qubit"),
        "coordinate qubit: not found, expected the names of the qubits",
    ),
    "qubit twice": (
        lambda data: data.assign_coords(qubit=["D0", "D0", "D1", "D2", "M0"]),
        'coordinate qubit: "D0" stands more than once',
    ),
    "no preparations": (
        lambda data: data.drop_vars("prepared"),
        "coordinate prepared: not found, expected 0, 1 and, where there is one, 2",
    ),
    "prepared 0 and 2": (
        lambda data: data.isel(prepared=[0, 2]),
        "coordinate prepared: found [0, 2], expected 0, 1 and perhaps 2",
    ),
    "prepared twice": (
        lambda data: data.assign_coords(prepared=[0, 1, 1]),
        "coordinate prepared: found [0, 1, 1], expected 0, 1 and perhaps 2",
    ),
    "prepared in words": (
        lambda data: data.assign_coords(prepared=["g", "e", "f"]),
        "coordinate prepared: found ['g', 'e', 'f'], expected 0, 1 and perhaps 2",
    ),
    "no shots": (
        lambda data: data.isel(shot=slice(0, 0)),
        "dimension shot: found length 0, expected 1 or more",
    ),
    "all missing": (
        lambda data: data.assign(iq=data.iq * np.nan),
        "variable iq: every value is missing",
    ),
}


@pytest.mark.parametrize("case", BAD_MEMORIES)
def test_bad_memory_recordings(tmp_path: Path, case: str) -> None:
    """A broken memory recording is refused with one sentence that says where and what."""
    change, sentence = BAD_MEMORIES[case]
    path = tmp_path / "memory.nc"
    change(memory_dataset()).to_netcdf(path)
    with pytest.raises(RecordingError) as caught:
        described(path)
    lines = str(caught.value).splitlines()
    assert f"{path}  {sentence}" in lines
    assert lines[-1].endswith("the recording was refused.")


@pytest.mark.parametrize("case", BAD_CALIBRATIONS)
def test_bad_calibrations(tmp_path: Path, case: str) -> None:
    """A broken calibration is refused with one sentence that says where and what."""
    change, sentence = BAD_CALIBRATIONS[case]
    path = tmp_path / "calibration.nc"
    change(calibration_dataset()).to_netcdf(path)
    with pytest.raises(RecordingError) as caught:
        open_calibration(path)
    assert f"{path}  {sentence}" in str(caught.value).splitlines()


def test_everything_wrong_is_said_at_once(tmp_path: Path) -> None:
    """Four mistakes in one file are four lines and a count."""
    data = with_attributes(contract="2", basis="Y", patch=None)(memory_dataset())
    path = tmp_path / "memory.nc"
    data.drop_vars("final_iq").to_netcdf(path)
    with pytest.raises(RecordingError) as caught:
        described(path)
    assert str(caught.value).splitlines() == [
        f'{path}  attribute contract: found "2", expected "1"',
        f'{path}  attribute basis: found "Y", expected "Z" or "X"',
        f"{path}  attribute patch: not found, expected the name of the patch",
        f"{path}  variable final_iq, final_trace, final_state: found none of them",
        "4 problems, the recording was refused.",
    ]
    assert caught.value.exit_code == 3


def test_the_examples_themselves_are_good(tmp_path: Path) -> None:
    """The files that the table breaks are accepted unbroken, so each refusal is for its change."""
    memory_dataset().to_netcdf(tmp_path / "memory.nc")
    calibration_dataset().to_netcdf(tmp_path / "calibration.nc")
    assert described(tmp_path / "memory.nc").frame.shots == 120
    assert open_calibration(tmp_path / "calibration.nc").sizes["qubit"] == 5


@pytest.mark.parametrize(
    ("content", "sentence"),
    [
        (None, "does not exist"),
        (b"", "is empty (truncated, or not netCDF-4)"),
        (b"not a recording at all", "cannot be opened"),
    ],
    ids=["missing", "empty", "text"],
)
def test_files_that_cannot_be_opened(tmp_path: Path, content: bytes | None, sentence: str) -> None:
    """A file that is missing, empty or something else says so."""
    path = tmp_path / "memory.nc"
    if content is not None:
        path.write_bytes(content)
    with pytest.raises(RecordingError) as caught:
        described(path)
    assert str(caught.value).startswith(f"{path}  {sentence}")


@pytest.mark.parametrize("part", [0.2, 0.5, 0.8, 0.98])
def test_truncated_files_are_refused(tmp_path: Path, part: float) -> None:
    """A file cut anywhere is refused when opened or, at the latest, when its shots are read."""
    path = tmp_path / "memory.nc"
    memory_dataset().to_netcdf(path)
    content = path.read_bytes()
    path.write_bytes(content[: int(len(content) * part)])
    with pytest.raises(RecordingError, match=r"truncated|damaged"):
        whole(described(path))


def test_names_of_another_layout_are_listed_and_never_guessed(tmp_path: Path) -> None:
    """Every name that the layout and the recording do not share is listed."""
    path = tmp_path / "memory.nc"
    memory_dataset().to_netcdf(path)
    with pytest.raises(RecordingError) as caught:
        described(path, repetition(4))
    assert f'{path}  measure qubit "M2": in the layout but not in the recording' in str(
        caught.value
    )
    assert f'{path}  data qubit "D3": in the layout but not in the recording' in str(caught.value)
    assert LAYOUT.measure == ("M0", "M1")
