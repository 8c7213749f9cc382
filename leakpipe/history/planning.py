"""The planner of a refit for recordings that keep the data contract."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace
from datetime import UTC
from pathlib import Path

from leakpipe.config.mapping import MappingSettings
from leakpipe.config.models import Config
from leakpipe.errors import RecordingError
from leakpipe.history.jobs import Job, Plan
from leakpipe.history.results import Key
from leakpipe.recordings.finding import CalibrationFile, Epoch, find_among
from leakpipe.recordings.source import opened


def plan_recordings(config: Config, complete: Sequence[Path], waiting: Sequence[Path]) -> Plan:
    """Sort recordings into one job per calibration and patch.

    The payload of a job is the epoch, with the memory recordings of the patch and the
    calibrations that give a readout model alone.

    Raises
    ------
    ConfigError, LayoutError
        The code layout is not given or cannot be used.
    """
    if not complete:
        return Plan((), _keys_of(waiting, config.recordings.mapping))
    found = find_among(config, complete)
    jobs = []
    for epoch in found.epochs:
        for patch in dict.fromkeys(one.patch for one in epoch.memories):
            mine = tuple(one for one in epoch.memories if one.patch == patch)
            layout = mine[0].frame.layout
            needed = _contributing(epoch.calibrations, {*layout.data, *layout.measure})
            payload = replace(epoch, calibrations=needed, memories=mine)
            jobs.append(_job(payload, patch))
    problems = {
        path: sentence
        for path in complete
        for sentence in found.problems
        if sentence.startswith(f"{path}  ")
    }
    return Plan(tuple(jobs), _keys_of(waiting, config.recordings.mapping), problems)


def _job(epoch: Epoch, patch: str) -> Job:
    return Job(
        key=(epoch.device, epoch.calibration_id, patch),
        acquired_at=epoch.acquired_at.astimezone(UTC).isoformat(timespec="microseconds"),
        inputs=(
            *(one.path for one in epoch.calibrations),
            *(one.path for one in epoch.memories),
        ),
        payload=epoch,
    )


def _contributing(
    calibrations: Sequence[CalibrationFile], qubits: set[str]
) -> tuple[CalibrationFile, ...]:
    """Return the newest calibration and the older ones that readout models are carried from.

    A qubit comes from the newest calibration that has it. Leaving out the rest keeps a result
    fresh when old calibrations are archived.
    """
    missing = set(qubits)
    used: list[CalibrationFile] = []
    for calibration in reversed(calibrations):
        with opened(calibration.path, calibration.mapping) as source:
            has = {str(name) for name in source.outline().coordinates["qubit"]}
        if not used or has & missing:
            used.append(calibration)
        missing -= has
        if not missing:
            break
    return tuple(reversed(used))


def _keys_of(waiting: Sequence[Path], mapping: MappingSettings | None) -> frozenset[Key]:
    """Return the results that recordings still being written say they belong to."""
    keys = set()
    for path in waiting:
        try:
            with opened(path, mapping) as source:
                attributes = source.outline().attributes
        except RecordingError:
            continue
        names = tuple(str(attributes.get(name, "")) for name in ("device", "calibration_id"))
        if attributes.get("recording") == "memory" and all(names) and attributes.get("patch"):
            keys.add((names[0], names[1], str(attributes["patch"])))
    return frozenset(keys)
