"""The configuration as frozen models: one section a part of the pipeline."""

from __future__ import annotations

import os
from pathlib import Path
from typing import Annotated, Literal

from pydantic import Field, model_validator

from leakpipe.config.base import Section
from leakpipe.config.detection import DetectionSettings
from leakpipe.config.history import HistorySettings
from leakpipe.config.logical import LogicalSettings
from leakpipe.config.mapping import MappingSettings
from leakpipe.config.rates import RatesSettings
from leakpipe.config.readout import ReadoutSettings
from leakpipe.config.report import ReportSettings
from leakpipe.config.share import ShareSettings


class CodeSettings(Section):
    """Which code the recordings are of."""

    family: Literal["rotated surface", "repetition", "layout file"] = "layout file"
    """A built-in family, or "layout file" (found in the folder of recordings, or named here)."""
    distance: Annotated[int, Field(ge=2)] | None = None
    """Distance of a built-in family."""
    layout: Path | None = None
    """Layout file; by default `layout.yaml` in the folder of recordings."""

    @model_validator(mode="after")
    def _complete(self) -> CodeSettings:
        if self.family != "layout file" and self.distance is None:
            raise ValueError(f'a "{self.family}" code needs a distance')
        if self.family != "layout file" and self.layout is not None:
            raise ValueError('a layout goes with family "layout file" only')
        return self


class RecordingsSettings(Section):
    """Where recordings are."""

    folder: Path = Path("recordings")
    """Folder with calibration and memory recordings, searched with all its subfolders."""
    patterns: tuple[str, ...] = ("*.nc", "*.zarr")
    """File name patterns of recordings; those of a mapping are added."""
    mapping: MappingSettings | None = None
    """How files that do not keep the data contract are read."""

    @model_validator(mode="after")
    def _with_mapped_files(self) -> RecordingsSettings:
        if self.mapping is not None:
            ways = (self.mapping.calibration, self.mapping.memory)
            wanted = (*self.patterns, *(way.files for way in ways if way is not None))
            # The section is frozen; this is part of making it.
            object.__setattr__(self, "patterns", tuple(dict.fromkeys(wanted)))
        return self


class ComputeSettings(Section):
    """How the shots are reduced."""

    processes: Annotated[int, Field(ge=1)] = 1
    """Processes on this machine, each with one thread."""
    scheduler: str | None = None
    """Address of a Dask scheduler; takes the place of the processes."""


class Config(Section):
    """The whole configuration."""

    device: str | None = None
    """Only recordings of this device; by default all."""
    seed: int = 1
    """Seed of every bootstrap and simulation."""
    recordings: RecordingsSettings = RecordingsSettings()
    code: CodeSettings = CodeSettings()
    readout: ReadoutSettings = ReadoutSettings()
    detection: DetectionSettings = DetectionSettings()
    rates: RatesSettings = RatesSettings()
    logical: LogicalSettings = LogicalSettings()
    share: ShareSettings = ShareSettings()
    report: ReportSettings = ReportSettings()
    history: HistorySettings = HistorySettings()
    compute: ComputeSettings = ComputeSettings()
    results: Path = Path("results")
    """Folder of the result folders."""
    run_log: Path | None = None
    """File to which one JSON line per epoch and patch is appended."""
    metrics: Path | None = None
    """OpenMetrics text file, rewritten after every epoch."""

    def relative_to(self, folder: Path) -> Config:
        """Return the config with every relative path made absolute from `folder`."""

        def absolute(path: Path | None) -> Path | None:
            return None if path is None else Path(os.path.normpath(folder / path.expanduser()))

        return self.model_copy(
            update={
                "recordings": self.recordings.model_copy(
                    update={"folder": absolute(self.recordings.folder)}
                ),
                "code": self.code.model_copy(update={"layout": absolute(self.code.layout)}),
                "results": absolute(self.results),
                "run_log": absolute(self.run_log),
                "metrics": absolute(self.metrics),
            }
        )
