"""What a refit works with: jobs, plans, the tools that make them, and what a pass tells."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import TYPE_CHECKING, Any, Protocol

from leakpipe.history.results import Key

if TYPE_CHECKING:
    from leakpipe.config.models import Config
    from leakpipe.findings import Finding
    from leakpipe.progress import Reporter


@dataclass(frozen=True)
class Job:
    """One result to be made: a patch under one calibration.

    Attributes
    ----------
    key
        Device, calibration_id and patch.
    acquired_at
        When the calibration was taken, ISO 8601 in UTC; jobs are done oldest first.
    inputs
        Every recording the result rests on: memory recordings of the patch, the calibration, and
        the older calibrations that readout models are carried from.
    payload
        What the runner needs besides.
    """

    key: Key
    acquired_at: str
    inputs: tuple[Path, ...]
    payload: Any = None


@dataclass(frozen=True)
class Plan:
    """What the recordings amount to.

    Attributes
    ----------
    jobs
        In any order.
    waiting
        Results that a recording still being written belongs to.
    problems
        Recording to a sentence, for every one that cannot be used.
    """

    jobs: tuple[Job, ...]
    waiting: frozenset[Key] = frozenset()
    problems: Mapping[Path, str] = field(default_factory=dict)


class Planner(Protocol):
    """Sorts recordings into jobs."""

    def __call__(self, config: Config, complete: Sequence[Path], waiting: Sequence[Path]) -> Plan:
        """Return the plan.

        An unreadable header is a problem of a complete recording; of one still being written it
        is only expected.
        """


class Runner(Protocol):
    """Makes one result."""

    def __call__(
        self,
        job: Job,
        folder: Path,
        config: Config,
        findings: Sequence[Finding],
        reporter: Reporter,
    ) -> None:
        """Fill the empty folder, `summary.json` included; the findings belong into the summary.

        Raises
        ------
        RecordingError
            A recording turned out damaged; its path stands in the message.
        """


@dataclass(frozen=True)
class Tools:
    """What a refit calls; each imports what it needs when it is called.

    Attributes
    ----------
    plan, run
        Sort recordings into jobs, and make one result.
    closing
        Called at the end of a pass that was not idle, such as to write the page over all epochs.
    """

    plan: Planner
    run: Runner
    closing: Callable[[Config], None] | None = None


@dataclass
class Pass:
    """What one pass did.

    Attributes
    ----------
    made
        Result folders made, in order.
    fresh
        Number of results that were up to date.
    waiting
        Names of recordings and results left for the next pass.
    problems
        Sentences about recordings that cannot be used.
    failures
        Sentences about results that could not be made.
    busy
        True if another refit holds the lock: nothing was done.
    stopped
        True if the pass was asked to stop before it was through.
    said_before
        Problems and failures that the pass before told already.
    """

    made: list[Path] = field(default_factory=list)
    fresh: int = 0
    waiting: list[str] = field(default_factory=list)
    problems: list[str] = field(default_factory=list)
    failures: list[str] = field(default_factory=list)
    busy: bool = False
    stopped: bool = False
    said_before: tuple[str, ...] = ()

    @property
    def exit_code(self) -> int:
        """1 if a result could not be made, else 0: a damaged recording alone needs no hand."""
        return 1 if self.failures else 0

    def to_json(self) -> dict[str, Any]:
        """Return the pass for machines."""
        return {
            "made": [str(folder) for folder in self.made],
            "fresh": self.fresh,
            "waiting": self.waiting,
            "problems": self.problems,
            "failures": self.failures,
            "busy": self.busy,
            "stopped": self.stopped,
        }

    def news(self) -> str:
        """Return what a timer's mail should say: results made, and problems not said before."""
        lines = [f"made     {folder}" for folder in self.made]
        lines += [f"problem  {text}" for text in self.problems if text not in self.said_before]
        lines += [f"failed   {text}" for text in self.failures if text not in self.said_before]
        return "\n".join(lines)

    def text(self) -> str:
        """Return the pass for people: one line, and one more for each thing to know."""
        if self.busy:
            return "another refit of these results is running; nothing was done"
        head = f"{len(self.made)} made, {self.fresh} up to date"
        if self.waiting:
            head += f", {len(self.waiting)} waiting"
        lines = [head + (", stopped early" if self.stopped else "")]
        lines += [f"waiting  {name}: still being written" for name in self.waiting]
        lines += [f"problem  {text}" for text in self.problems]
        lines += [f"failed   {text}" for text in self.failures]
        return "\n".join(lines)
