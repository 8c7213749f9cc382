"""One pass over a recording's shots: chunk -> readings -> sums of every stage.

`reduce_recording` is a pure function of a recording and a readout model, so that one process, a
process pool and a cluster give the same sums. netCDF is not thread-safe: parallel work runs in
processes with one thread each.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING

import xarray as xr

from leakpipe.detection import stage as detection_stage
from leakpipe.logical import stage as logical_stage
from leakpipe.readout import stage as readout_stage
from leakpipe.recordings.opening import chunks
from leakpipe.recordings.shots import BLOCK, Frame
from leakpipe.share import stage as share_stage

if TYPE_CHECKING:
    from leakpipe.config.models import Config
    from leakpipe.detection.stage import DetectionSums
    from leakpipe.logical.stage import LogicalSums
    from leakpipe.progress import Step
    from leakpipe.readout.stage import ReadoutSums, Tuned
    from leakpipe.recordings.opening import MemoryRecording
    from leakpipe.share.stage import ExposureSums

CHUNK_READINGS = 2_000_000
"""Readings of measure qubits in one chunk: about 50 MB of points, states and posteriors."""

PILOT_SHOTS = 10_000
"""Shots at the start of a recording that the run check and the priors are taken from."""


@dataclass(frozen=True)
class Reduced:
    """What one pass over a memory recording leaves behind."""

    frame: Frame
    tuned: Tuned
    readout: ReadoutSums
    detection: DetectionSums
    logical: LogicalSums
    exposures: ExposureSums


def chunk_shots(frame: Frame) -> int:
    """Return the shots per chunk that keep its memory bounded, a multiple of BLOCK."""
    readings = frame.rounds * len(frame.layout.measure) + len(frame.layout.data)
    return max(CHUNK_READINGS // readings // BLOCK, 1) * BLOCK


def reduce_recording(recording: MemoryRecording, model: xr.Dataset, config: Config) -> Reduced:
    """Read, classify, decode and count every shot of a recording once.

    Raises
    ------
    RecordingError
        The file turned out damaged while it was read.
    """
    frame = recording.frame
    size = chunk_shots(frame)
    pilot = next(iter(chunks(recording, min(size, PILOT_SHOTS))))
    tuned = readout_stage.tune(model, pilot, frame, config.readout)
    pilot_readings, _ = readout_stage.partial(tuned, pilot, frame)
    decoder = logical_stage.prepare(pilot_readings, frame, config.logical)
    parts: Reduced | None = None
    for chunk in chunks(recording, size):
        readings, readout_sums = readout_stage.partial(tuned, chunk, frame)
        part = Reduced(
            frame=frame,
            tuned=tuned,
            readout=readout_sums,
            detection=detection_stage.partial(readings, frame),
            logical=logical_stage.partial(readings, frame, decoder),
            exposures=share_stage.partial(readings, frame),
        )
        parts = part if parts is None else merge(parts, part)
    assert parts is not None, "a recording without shots was refused when it was opened"
    return parts


def merge(a: Reduced, b: Reduced) -> Reduced:
    """Join the sums of two runs of consecutive shots, `a` before `b`."""
    return Reduced(
        frame=a.frame,
        tuned=a.tuned,
        readout=readout_stage.merge(a.readout, b.readout),
        detection=detection_stage.merge(a.detection, b.detection),
        logical=logical_stage.merge(a.logical, b.logical),
        exposures=share_stage.merge(a.exposures, b.exposures),
    )


def reduce_all(
    recordings: Sequence[MemoryRecording], model: xr.Dataset, config: Config, step: Step
) -> list[Reduced]:
    """Reduce recordings here, in a process pool or on a cluster, in the order given."""
    reduced = []
    for one in reduce_each(recordings, model, config):
        step.advance()
        reduced.append(one)
    return reduced


def reduce_each(
    recordings: Sequence[MemoryRecording], model: xr.Dataset, config: Config
) -> Iterator[Reduced]:
    """Yield the reduced recordings in the order given, each as soon as it is there."""
    if config.compute.scheduler is not None:
        from distributed import Client

        with Client(config.compute.scheduler) as client:
            waiting = [client.submit(reduce_recording, one, model, config) for one in recordings]
            for future in waiting:
                yield future.result()
    elif config.compute.processes > 1 and len(recordings) > 1:
        from concurrent.futures import ProcessPoolExecutor
        from multiprocessing import get_context

        count = len(recordings)
        with ProcessPoolExecutor(config.compute.processes, get_context("spawn")) as pool:
            yield from pool.map(reduce_recording, recordings, [model] * count, [config] * count)
    else:
        for one in recordings:
            yield reduce_recording(one, model, config)
