"""Write the recordings of a scenario, and the truth beside them."""

from __future__ import annotations

import json
import os
from datetime import timedelta
from functools import partial
from pathlib import Path
from typing import Any

import numpy as np
import yaml
from numpy.typing import NDArray

from leakpipe import __version__
from leakpipe.codes.layout import Basis, Layout
from leakpipe.codes.matching import matching_decoder
from leakpipe.progress import Reporter, Silent
from leakpipe.recordings.shots import BLOCK, Chunk
from leakpipe.recordings.writing import MemoryWriter, write_calibration
from leakpipe.rehearsal.counterfactual import Decode, Setting, failed
from leakpipe.rehearsal.memory import MemoryShots, simulate
from leakpipe.rehearsal.reading import read
from leakpipe.rehearsal.readout import points, prepare, traces
from leakpipe.rehearsal.runs import SUFFIX, Run, calibration_name, file_names, shuffled
from leakpipe.rehearsal.scenario import Scenario
from leakpipe.rehearsal.season import CALIBRATION, MEMORY, Epoch, epochs, layouts, stream
from leakpipe.rehearsal.truth import DEFINITIONS, patch_truth

TRUTH_FILE = "truth.json"
LAYOUT_FILE = "layout.yaml"

STARTED_FILE = ".rehearsal-started.json"
"""Names what an unfinished rehearsal was going to write, so that the next one can clear it."""

TRUTH_CONTRACT = "1"

CHUNK_READINGS = 1 << 22
"""Readings simulated at a time: bounds memory whatever the number of shots."""

ROUND_US = 1.0
"""Length of a round in microseconds (invented, ordinary size)."""

IDLE_US = 200.0
"""Pause between shots in microseconds (invented, ordinary size)."""

PAUSE_SECONDS = 20.0
"""Pause between recordings in seconds (invented)."""


def fingerprint(scenario: Scenario) -> str:
    """Return what identifies a rehearsal: the scenario's content and the program's version."""
    return f"{__version__}:{scenario.fingerprint}"


def up_to_date(scenario: Scenario, out: Path) -> bool:
    """Return whether a folder already holds exactly this scenario, every file of its full size."""
    try:
        truth = json.loads((out / TRUTH_FILE).read_text(encoding="utf-8"))
        sizes = dict(truth["files"])
        return truth["fingerprint"] == fingerprint(scenario) and all(
            (out / name).stat().st_size == size for name, size in sizes.items()
        )
    except (OSError, ValueError, KeyError, TypeError):
        return False


def rehearse(scenario: Scenario, out: Path, reporter: Reporter | None = None) -> None:
    """Make the recordings of a scenario and `truth.json`.

    The truth is written last: a folder with a truth file is complete. Recordings of an earlier
    rehearsal in the same folder are removed first, other files are left alone.

    Parameters
    ----------
    scenario
        What to make.
    out
        Folder, created where needed. A single epoch is written into it, the epochs of a season
        share it too: their names begin with the calibration's.
    reporter
        Progress.

    Raises
    ------
    ConfigError
        The scenario contradicts its code.
    OSError
        The folder cannot be written.
    """
    reporter = reporter or Silent()
    plan = epochs(scenario)
    named = bool(scenario.code.data or scenario.code.measure)
    names = [*([LAYOUT_FILE] if named else []), *file_names(scenario, plan)]
    out.mkdir(parents=True, exist_ok=True)
    _remove_earlier(out)
    _write_json(out / STARTED_FILE, {"files": names})
    if named:
        write_layout(next(iter(layouts(scenario).values())), out / LAYOUT_FILE)
    told = []
    for epoch in plan:
        made = shuffled(scenario, epoch)
        with reporter.step(f"rehearsing {epoch.calibration_id}", 1 + len(made)) as step:
            _calibration(scenario, epoch, out / calibration_name(epoch))
            step.advance()
            clock = PAUSE_SECONDS
            for run in made:
                clock = PAUSE_SECONDS + _memory(scenario, epoch, run, out, clock)
                step.advance()
        with reporter.step(f"truth of {epoch.calibration_id}") as step:
            told.append(_epoch_truth(scenario, epoch))
            step.advance()
    truth = {
        "contract": TRUTH_CONTRACT,
        "invented": "synthetic device, made by the rehearsal; no hardware was involved",
        "fingerprint": fingerprint(scenario),
        "device": scenario.device,
        "definitions": DEFINITIONS,
        "epochs": told,
        "files": {name: (out / name).stat().st_size for name in names},
    }
    _write_json(out / TRUTH_FILE, truth)
    (out / STARTED_FILE).unlink()


def _write_json(path: Path, content: dict[str, Any]) -> None:
    """Write beside the final place and rename, so that a reader never sees half a file."""
    beside = path.with_name(f".{path.name}.part")
    beside.write_text(json.dumps(content, indent=1, allow_nan=False) + "\n", encoding="utf-8")
    os.replace(beside, path)


def _remove_earlier(out: Path) -> None:
    """Remove what an earlier rehearsal made, finished or not; other files are left alone."""
    for record in (TRUTH_FILE, STARTED_FILE):
        try:
            names = json.loads((out / record).read_text(encoding="utf-8"))["files"]
        except (OSError, ValueError, KeyError):
            continue
        # The record of what to remove goes last: a kill in between leaves it for the next time.
        for name in names:
            (out / Path(name).name).unlink(missing_ok=True)
        (out / record).unlink()


def write_layout(layout: Layout, path: Path) -> Path:
    """Write a layout file: positions, checks with their data qubits in gate order, logical."""
    data = {
        "data": {
            name: spot.tolist() for name, spot in zip(layout.data, layout.data_at, strict=True)
        },
        "measure": {
            name: {
                "at": layout.measure_at[index].tolist(),
                "check": layout.checks[index],
                "of": [layout.data[qubit] for qubit in layout.touches[index]],
            }
            for index, name in enumerate(layout.measure)
        },
        "logical": {
            basis: [layout.data[qubit] for qubit in support]
            for basis, support in layout.logical.items()
        },
    }
    path.write_text(yaml.safe_dump(data, sort_keys=False), encoding="utf-8")
    return path


def _calibration(scenario: Scenario, epoch: Epoch, path: Path) -> None:
    shots = scenario.readout.calibration_shots
    rng = stream(scenario, CALIBRATION, epoch.number)
    signal: NDArray[Any] | None = None
    for index, qubit in enumerate(epoch.calibrated.values()):
        starts = np.stack(
            [prepare(qubit, state, shots, rng) for state in scenario.readout.prepared]
        )
        drawn = (traces if scenario.kind == "trace" else points)(qubit, starts, rng)
        if signal is None:
            signal = np.empty((len(epoch.calibrated), *drawn.shape), dtype=drawn.dtype)
        signal[index] = drawn
    assert signal is not None
    write_calibration(
        path,
        signal,
        prepared=scenario.readout.prepared,
        qubits=tuple(epoch.calibrated),
        calibration_id=epoch.calibration_id,
        acquired_at=epoch.acquired_at.isoformat(),
        device=scenario.device,
        sample_ns=_sample_times(scenario, epoch),
    )


def _sample_times(scenario: Scenario, epoch: Epoch) -> list[float]:
    """Return the middle of every sample in nanoseconds, for traces."""
    if scenario.kind != "trace":
        return []
    qubit = next(iter(epoch.running.values()))
    return [(index + 0.5) * qubit.sample_ns for index in range(qubit.samples)]


def _memory(scenario: Scenario, epoch: Epoch, run: Run, out: Path, clock: float) -> float:
    """Write one memory recording and return the time of its end in seconds."""
    rng = stream(scenario, MEMORY, epoch.number, run.number)
    frame = run.frame(scenario, epoch)
    layout = frame.layout
    per_shot = frame.rounds * len(layout.measure) + len(layout.data)
    if scenario.kind == "trace":
        per_shot *= 2 * next(iter(epoch.running.values())).samples
    size = max(CHUNK_READINGS // per_shot // BLOCK, 1) * BLOCK
    decode = decoder_for(layout, frame.basis, frame.rounds) if scenario.verdict else None
    setting = Setting(layout, frame.basis, epoch.noise, None, frame.reset)
    period = (frame.rounds * ROUND_US + IDLE_US) * 1e-6
    with MemoryWriter(
        out / f"{frame.name}{SUFFIX}",
        frame,
        {
            "calibration_id": epoch.calibration_id,
            "acquired_at": (epoch.acquired_at + timedelta(seconds=clock)).isoformat(),
            "device": scenario.device,
            "patch": scenario.patch,
        },
        kind=scenario.kind,
        sample_ns=_sample_times(scenario, epoch),
        verdict=scenario.verdict,
        started_at=True,
    ) as writer:
        for first in range(0, frame.shots, size):
            count = min(size, frame.shots - first)
            memory = simulate(
                layout,
                frame.basis,
                frame.rounds,
                count,
                epoch.noise,
                rng,
                run.injected,
                reset=frame.reset,
            )
            started = np.asarray(clock + period * (first + np.arange(count)), dtype=float)
            writer.append(_chunk(scenario, epoch, setting, memory, first, started, decode, rng))
    return clock + period * frame.shots


def _chunk(
    scenario: Scenario,
    epoch: Epoch,
    setting: Setting,
    memory: MemoryShots,
    first: int,
    started: NDArray[np.float64],
    decode: Decode | None,
    rng: np.random.Generator,
) -> Chunk:
    layout = setting.layout
    running = [epoch.running[name] for name in (*layout.data, *layout.measure)]
    data, measure = running[: len(layout.data)], running[len(layout.data) :]
    kind, wanted = scenario.kind, decode is not None
    inside = read(kind, measure, memory.states, rng, labels=wanted)
    closing = read(kind, data, memory.final_states, rng, labels=wanted)
    verdict = None
    if decode is not None and inside.labels is not None and closing.labels is not None:
        verdict, _ = failed(setting, inside.labels, closing.labels, memory.prepared, decode)
    name = {"iq": "iq", "trace": "trace", "state": "states"}[kind]
    return Chunk(
        first=first,
        prepared=memory.prepared,
        verdict=verdict,
        started_at=started,
        **{name: inside.values, f"final_{name}": closing.values},
    )


def decoder_for(layout: Layout, basis: Basis, rounds: int) -> Decode:
    """Return the ordinary matching decoder of a recording."""
    decode: Decode = matching_decoder(layout, basis, rounds).decode
    return decode


def _epoch_truth(scenario: Scenario, epoch: Epoch) -> dict[str, Any]:
    return {
        "number": epoch.number,
        "calibration_id": epoch.calibration_id,
        "acquired_at": epoch.acquired_at.isoformat(),
        "patches": [
            patch_truth(scenario, epoch, layout, basis, partial(decoder_for, layout, basis))
            for basis, layout in layouts(scenario).items()
        ],
    }
