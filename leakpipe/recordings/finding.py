"""Finding recordings in a folder and grouping them into epochs."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from datetime import datetime
from pathlib import Path

from leakpipe.codes.files import layout_for
from leakpipe.codes.layout import Layout
from leakpipe.config.mapping import MappingSettings
from leakpipe.config.models import Config
from leakpipe.errors import RecordingError, numbered
from leakpipe.recordings.contract import calibration_problems, parse_time
from leakpipe.recordings.opening import MemoryRecording, describe_memory
from leakpipe.recordings.source import opened

LAYOUT_NAMES = ("layout.yaml", "layout.yml")


@dataclass(frozen=True)
class CalibrationFile:
    """A calibration recording on disk, not read yet."""

    path: Path
    calibration_id: str
    acquired_at: datetime
    device: str
    mapping: MappingSettings | None = None


@dataclass(frozen=True)
class Epoch:
    """One calibration and the memory recordings taken under it.

    Attributes
    ----------
    calibration_id
        Name of the epoch.
    device
        Device name.
    calibrations
        This calibration last, older ones of the device before it, oldest first.
    memories
        Memory recordings, sorted by patch, basis, rounds and name.
    """

    calibration_id: str
    device: str
    calibrations: tuple[CalibrationFile, ...]
    memories: tuple[MemoryRecording, ...]

    @property
    def acquired_at(self) -> datetime:
        """When the calibration was taken."""
        return self.calibrations[-1].acquired_at


@dataclass(frozen=True)
class Found:
    """What a folder of recordings holds.

    Attributes
    ----------
    epochs
        Oldest first.
    problems
        One message per file or epoch that cannot be used.
    """

    epochs: tuple[Epoch, ...]
    problems: tuple[str, ...]


def find(config: Config) -> Found:
    """Find and check the recordings that a config names.

    Raises
    ------
    ConfigError, LayoutError
        The code layout is not given or cannot be used.
    RecordingError
        The folder does not exist or holds no recording at all.
    """
    folder = config.recordings.folder
    if not folder.is_dir():
        raise RecordingError(f"{folder}  is not a folder of recordings")
    return find_among(config, recording_paths(config))


def find_among(config: Config, paths: Sequence[Path]) -> Found:
    """Check the given recordings of a config's folder and group them into epochs.

    Raises
    ------
    ConfigError, LayoutError
        The code layout is not given or cannot be used.
    RecordingError
        There is no recording at all.
    """
    folder = config.recordings.folder
    layout = layout_of(config)
    calibrations, memories, problems = _sort(paths, layout, config.recordings.mapping)
    if config.device is not None:
        calibrations = [one for one in calibrations if one.device == config.device]
        memories = [one for one in memories if one.device == config.device]
    if not calibrations and not memories and not problems:
        raise RecordingError(f"{folder}  holds no recordings")
    epochs, unmatched = _epochs(calibrations, memories)
    return Found(epochs, (*problems, *unmatched))


def usable(found: Found) -> tuple[Epoch, ...]:
    """Return the epochs, or raise if anything is wrong with any recording.

    Raises
    ------
    RecordingError
        Some recordings cannot be used; all of them are listed.
    """
    if found.problems:
        raise RecordingError(numbered(_flat(found.problems), "nothing was run"))
    return found.epochs


def _flat(problems: Sequence[str]) -> list[str]:
    """Take the lines of several lists of problems as one list, without their closing lines."""
    return [
        line
        for problem in problems
        for line in problem.splitlines()
        if not line.endswith("the recording was refused.")
    ]


def recording_paths(config: Config) -> list[Path]:
    """Return the files and stores that match the config's patterns, sorted."""
    folder = config.recordings.folder
    paths = {path for pattern in config.recordings.patterns for path in folder.rglob(pattern)}
    return sorted(path for path in paths if not path.name.startswith("."))


def layout_of(config: Config) -> Layout:
    """Return the layout that a config names, or the one found beside its recordings.

    Raises
    ------
    ConfigError, LayoutError
        The layout is not given or cannot be used.
    """
    return layout_for(config.code, _layout_file(config.recordings.folder))


def _layout_file(folder: Path) -> Path | None:
    return next((folder / name for name in LAYOUT_NAMES if (folder / name).is_file()), None)


def _sort(
    paths: Sequence[Path], layout: Layout, mapping: MappingSettings | None
) -> tuple[list[CalibrationFile], list[MemoryRecording], list[str]]:
    calibrations, memories, problems = [], [], []
    for path in paths:
        try:
            with opened(path, mapping) as source:
                attributes = source.outline().attributes
            if attributes.get("recording") == "calibration":
                calibrations.append(_calibration_file(path, mapping))
            else:
                memories.append(describe_memory(path, lambda _patch: layout, mapping))
        except RecordingError as error:
            problems.append(str(error))
    return calibrations, memories, problems


def _calibration_file(path: Path, mapping: MappingSettings | None) -> CalibrationFile:
    with opened(path, mapping) as source:
        outline = source.outline()
    problems = calibration_problems(outline)
    if problems:
        raise RecordingError("\n".join(f"{path}  {problem}" for problem in problems))
    acquired = parse_time(outline.attributes["acquired_at"])
    assert acquired is not None
    return CalibrationFile(
        path=path,
        calibration_id=str(outline.attributes["calibration_id"]),
        acquired_at=acquired,
        device=str(outline.attributes["device"]),
        mapping=mapping,
    )


def _epochs(
    calibrations: list[CalibrationFile], memories: list[MemoryRecording]
) -> tuple[tuple[Epoch, ...], list[str]]:
    ordered = sorted(calibrations, key=lambda one: (one.acquired_at, one.path.name))
    problems = [
        f'{one.path}  names calibration "{one.calibration_id}" of device "{one.device}", '
        "which is not among the recordings"
        for one in memories
        if one.kind != "state"
        and not any(
            (c.calibration_id, c.device) == (one.calibration_id, one.device) for c in ordered
        )
    ]
    epochs = []
    for position, calibration in enumerate(ordered):
        under = [
            one
            for one in memories
            if (one.calibration_id, one.device) == (calibration.calibration_id, calibration.device)
        ]
        if any(
            later.calibration_id == calibration.calibration_id
            and later.device == calibration.device
            for later in ordered[position + 1 :]
        ):
            continue
        if under:
            older = tuple(one for one in ordered[:position] if one.device == calibration.device)
            epochs.append(
                Epoch(
                    calibration.calibration_id,
                    calibration.device,
                    (*older, calibration),
                    tuple(sorted(under, key=_order)),
                )
            )
    return tuple(epochs), problems


def _order(one: MemoryRecording) -> tuple[str, str, int, str]:
    return one.patch, one.frame.basis, one.frame.rounds, one.frame.name
