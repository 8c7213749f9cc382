"""What a run would do, said without doing it."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path
from typing import Any

from leakpipe.config.models import Config
from leakpipe.recordings.finding import find, usable
from leakpipe.result import folder_name

READINGS_PER_SECOND = 4e6
"""Readings that are read, classified, decoded and counted per second and core (measured on a
distance-3 recording of points; an order of magnitude, for the estimate of the time only)."""
CALIBRATION_SECONDS = 0.4
"""Seconds to calibrate a qubit and draw its figures (measured)."""
FIXED_SECONDS = 12.0
"""Seconds for the stages, the twin and the report (measured)."""


@dataclass(frozen=True)
class PatchPlan:
    """One epoch and patch that would run."""

    calibration_id: str
    device: str
    patch: str
    bases: tuple[str, ...]
    rounds: tuple[int, ...]
    shots: int
    recordings: int
    qubits: int
    verdicts: int
    injected: int
    seconds: float
    place: Path

    def text(self) -> str:
        """Return the plan for people."""
        decoder = (
            "the recordings' verdicts"
            if self.verdicts == self.recordings
            else f"our matching decoder for {self.recordings - self.verdicts} of the recordings"
        )
        extra = f", {self.injected} with an injected leak" if self.injected else ""
        return (
            f"{self.calibration_id} {self.patch} ({self.device}), basis {', '.join(self.bases)}: "
            f"{self.qubits} qubits\n"
            f"  recordings  {self.recordings}{extra}, R = {', '.join(map(str, self.rounds))}, "
            f"{self.shots:,} shots\n"
            f"  outcomes    {decoder}\n"
            f"  time        about {self.seconds:.0f} s\n"
            f"  result      {self.place}"
        )


@dataclass(frozen=True)
class Preview:
    """Everything that would run."""

    patches: tuple[PatchPlan, ...]

    def text(self) -> str:
        """Return the preview for people."""
        total = sum(one.seconds for one in self.patches)
        count = len(self.patches)
        closing = (
            f"{count} result{'' if count == 1 else 's'}, about {total:.0f} s; nothing was run."
        )
        return "\n".join([*(one.text() for one in self.patches), closing])

    def to_json(self) -> dict[str, Any]:
        """Return the preview for programs."""
        return {
            "patches": [{**vars(one), "place": str(one.place)} for one in self.patches],
            "seconds": sum(one.seconds for one in self.patches),
        }


def preview(config: Config) -> Preview:
    """Open the recordings and say what would run.

    Raises
    ------
    ConfigError, LayoutError, RecordingError
        As a run would.
    """
    plans = []
    for epoch in usable(find(config)):
        for patch in sorted({one.patch for one in epoch.memories}):
            mine = [one for one in epoch.memories if one.patch == patch]
            layout = mine[0].frame.layout
            qubits = len(layout.data) + len(layout.measure)
            readings = sum(
                one.frame.shots * (one.frame.rounds * len(layout.measure) + len(layout.data))
                for one in mine
            )
            seconds = FIXED_SECONDS + CALIBRATION_SECONDS * qubits
            seconds += readings / READINGS_PER_SECOND / config.compute.processes
            plans.append(
                PatchPlan(
                    calibration_id=epoch.calibration_id,
                    device=epoch.device,
                    patch=patch,
                    bases=tuple(sorted({one.frame.basis for one in mine})),
                    rounds=tuple(sorted({one.frame.rounds for one in mine})),
                    shots=sum(one.frame.shots for one in mine),
                    recordings=len(mine),
                    qubits=qubits,
                    verdicts=sum(one.has_verdict for one in mine),
                    injected=sum(one.frame.injected is not None for one in mine),
                    seconds=round(seconds, 1),
                    place=config.results / folder_name(epoch.calibration_id, patch),
                )
            )
    return Preview(tuple(plans))
