"""The writer and the reader are inverses, and nothing half-written is left behind."""

from __future__ import annotations

import tempfile
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from hypothesis.extra import numpy as arrays
from recordings.recordings_examples import LAYOUT, described, joined

from leakpipe.recordings.opening import chunks, open_calibration
from leakpipe.recordings.shots import Chunk, Frame
from leakpipe.recordings.writing import PACKED_RANGE, MemoryWriter, packed, write_calibration

SPAN = 4.0
STEP = SPAN / PACKED_RANGE
HALF_STEP = STEP / 2 + SPAN * 2**-23
"""Half a packing step, and two float32 roundings of a value up to the span (2^-24 each)."""
ATTRIBUTES = {
    "calibration_id": "cal-1",
    "acquired_at": "2026-11-20T01:00:00+00:00",
    "device": "bench",
    "patch": "north",
}
POINTS = st.floats(-SPAN, SPAN, width=32) | st.just(np.nan)


def points_of(*shape: int) -> st.SearchStrategy[np.ndarray]:
    return arrays.arrays(np.float32, shape, elements=POINTS)


@st.composite
def memories(draw: st.DrawFn) -> tuple[Frame, Chunk]:
    """Give a frame and all of its shots as one chunk."""
    shots = draw(st.sampled_from([1, 49, 50, 51, 120]))
    rounds = draw(st.integers(1, 3))
    injected = draw(st.none() | st.tuples(st.sampled_from(LAYOUT.data), st.just(1), st.just(0.9)))
    frame = Frame(
        "memory", LAYOUT, "Z", rounds, shots, reset=draw(st.booleans()), injected=injected
    )
    seed = np.random.default_rng(draw(st.integers(0, 2**32)))
    corner = draw(points_of(1, rounds, 2, 2))
    iq = np.concatenate([corner, seed.normal(size=(shots - 1, rounds, 2, 2))]).astype(np.float32)
    return frame, Chunk(
        first=0,
        prepared=seed.integers(0, 2, (shots, 3), np.uint8),
        iq=np.clip(iq, -SPAN, SPAN),
        final_iq=np.clip(seed.normal(size=(shots, 3, 2)), -SPAN, SPAN).astype(np.float32),
        verdict=seed.integers(0, 2, shots, np.uint8),
        started_at=seed.uniform(size=shots),
    )


def write(path: Path, frame: Frame, chunk: Chunk, size: int) -> None:
    with MemoryWriter(path, frame, ATTRIBUTES, verdict=True, started_at=True) as writer:
        for first in range(0, frame.shots, size):
            here = slice(first, first + size)
            writer.append(
                Chunk(
                    first=first,
                    prepared=chunk.prepared[here],
                    iq=chunk.iq[here],  # type: ignore[index]
                    final_iq=chunk.final_iq[here],  # type: ignore[index]
                    verdict=chunk.verdict[here],  # type: ignore[index]
                    started_at=chunk.started_at[here],  # type: ignore[index]
                )
            )


@settings(max_examples=15, deadline=None)
@given(memories(), st.sampled_from([50, 100]), st.sampled_from([50, 150]))
def test_what_is_written_is_read(memory: tuple[Frame, Chunk], write_size: int, size: int) -> None:
    """Points come back within half a packing step, missing ones missing, all else to the bit."""
    frame, chunk = memory
    with tempfile.TemporaryDirectory() as folder:
        path = Path(folder) / "memory.nc"
        write(path, frame, chunk, write_size)
        recording = described(path)
        assert recording.frame == frame
        assert (recording.has_verdict, recording.has_started_at) == (True, True)
        parts = list(chunks(recording, size))
    for name in ("iq", "final_iq"):
        np.testing.assert_allclose(
            joined(parts, name), getattr(chunk, name), rtol=0, atol=HALF_STEP, equal_nan=True
        )
    for name in ("prepared", "verdict", "started_at"):
        np.testing.assert_array_equal(joined(parts, name), getattr(chunk, name))


@settings(deadline=None)
@given(points_of(7))
def test_packing_errs_by_half_a_step(points: np.ndarray) -> None:
    """Packing is rounding to the nearest step; NaN has its own value."""
    raw = packed(points, SPAN)
    assert ((raw == -32768) == np.isnan(points)).all()
    back = np.where(raw == -32768, np.nan, raw * STEP)
    np.testing.assert_allclose(back, points, rtol=0, atol=HALF_STEP, equal_nan=True)


def test_packing_clips_what_is_out_of_range() -> None:
    """Points beyond the span stop at the last packed value and never wrap around or go missing."""
    raw = packed(np.array([1e9, -1e9, np.inf]), SPAN)
    assert raw.tolist() == [32767, -32767, -32768]


@pytest.mark.parametrize("kind", ["state", "trace"])
def test_states_and_traces_are_written_as_they_are(tmp_path: Path, kind: str) -> None:
    """States with missing ones, and int16 traces at both ends of their range, come back exactly."""
    rng = np.random.default_rng(5)
    frame = Frame("memory", LAYOUT, "Z", 2, 60)
    if kind == "state":
        values = rng.choice(np.array([0, 1, 2, 255], np.uint8), (60, 2, 2))
        closing = rng.choice(np.array([0, 1, 2, 255], np.uint8), (60, 3))
        signals = {"states": values, "final_states": closing}
    else:
        values = rng.integers(-(2**15), 2**15, (60, 2, 2, 4, 2)).astype(np.int16)
        closing = rng.integers(-(2**15), 2**15, (60, 3, 4, 2)).astype(np.int16)
        signals = {"trace": values, "final_trace": closing}
    chunk = Chunk(first=0, prepared=np.zeros((60, 3), np.uint8), **signals)
    path = tmp_path / "memory.nc"
    with MemoryWriter(path, frame, ATTRIBUTES, kind, sample_ns=[0, 4, 8, 12]) as writer:  # type: ignore[arg-type]
        writer.append(chunk)
    parts = list(chunks(described(path), 50))
    for name, expected in signals.items():
        np.testing.assert_array_equal(joined(parts, name), expected)
    assert parts[0].verdict is None


@pytest.mark.parametrize("trace", [False, True])
def test_calibrations_are_read_as_written(tmp_path: Path, trace: bool) -> None:
    """A calibration keeps names, preparations, times of samples, and its points or traces."""
    rng = np.random.default_rng(6)
    shape = (2, 3, 30, 4, 2) if trace else (2, 3, 30, 2)
    signal = rng.normal(size=shape)
    signal = (signal * 100).astype(np.int16) if trace else np.clip(signal, -SPAN, SPAN)
    if not trace:
        signal[1, 2, 3] = np.nan
    path = tmp_path / "deep" / "calibration.nc"
    write_calibration(
        path,
        signal,
        [0, 1, 2],
        ["D0", "M0"],
        calibration_id="cal-1",
        acquired_at="2026-11-20T01:00:00+00:00",
        device="bench",
        sample_ns=[0, 4, 8, 12],
    )
    data = open_calibration(path)
    assert data.qubit.values.tolist() == ["D0", "M0"]
    assert data.prepared.values.tolist() == [0, 1, 2]
    assert data.attrs["calibration_id"] == "cal-1"
    if trace:
        np.testing.assert_array_equal(data.trace, signal)
        assert data.sample.values.tolist() == [0, 4, 8, 12]
    else:
        np.testing.assert_allclose(data.iq, signal, rtol=0, atol=HALF_STEP, equal_nan=True)


def test_an_interrupted_writer_leaves_nothing(tmp_path: Path) -> None:
    """An error while writing leaves neither the file nor a part of it; an older file stays."""
    path = tmp_path / "memory.nc"
    path.write_bytes(b"older")
    frame = Frame("memory", LAYOUT, "Z", 1, 50)

    def interrupted() -> None:
        with MemoryWriter(path, frame, ATTRIBUTES):
            raise KeyboardInterrupt

    with pytest.raises(KeyboardInterrupt):
        interrupted()
    assert [one.name for one in tmp_path.iterdir()] == ["memory.nc"]
    assert path.read_bytes() == b"older"
