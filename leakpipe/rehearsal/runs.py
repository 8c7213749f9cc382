"""The recordings of a rehearsal: which there are, what they are called, in which order they run."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass

from leakpipe.codes.layout import Basis
from leakpipe.recordings.shots import Frame
from leakpipe.rehearsal.noise import Injected
from leakpipe.rehearsal.scenario import Scenario
from leakpipe.rehearsal.season import ORDER, Epoch, layouts, stream

SUFFIX = ".nc"


@dataclass(frozen=True)
class Run:
    """One memory recording to make.

    Attributes
    ----------
    number
        Place in the list of the epoch's runs; names the random stream.
    basis, rounds, shots
        What is run.
    injected
        A leak made on purpose.
    """

    number: int
    basis: Basis
    rounds: int
    shots: int
    injected: Injected | None = None

    def name(self, epoch: Epoch) -> str:
        """Return the file's stem, unique among all epochs."""
        stem = f"{epoch.calibration_id}-{self.basis}-R{self.rounds:02d}"
        return stem if self.injected is None else f"{stem}-{self.injected.qubit}-leaked"

    def frame(self, scenario: Scenario, epoch: Epoch) -> Frame:
        """Return what the recording is."""
        made = self.injected
        return Frame(
            name=self.name(epoch),
            layout=layouts(scenario)[self.basis],
            basis=self.basis,
            rounds=self.rounds,
            shots=self.shots,
            reset=scenario.reset == "each round",
            injected=None if made is None else (made.qubit, made.round, made.probability),
        )


def runs(scenario: Scenario) -> list[Run]:
    """Return the memory recordings of every epoch, not yet in their order in time."""
    made = list(_specifications(scenario))
    return [Run(number, *one) for number, one in enumerate(made)]


def _specifications(
    scenario: Scenario,
) -> Iterator[tuple[Basis, int, int, Injected | None]]:
    for basis in scenario.bases:
        for rounds in scenario.rounds:
            yield basis, rounds, scenario.shots, None
        injected = scenario.injected
        if injected is None:
            continue
        for qubit in injected.qubits:
            for rounds in injected.rounds:
                leak = Injected(qubit, injected.round, injected.probability)
                yield basis, rounds, injected.shots, leak


def shuffled(scenario: Scenario, epoch: Epoch) -> list[Run]:
    """Return the runs in their order in time.

    Shuffled, so that slow drift does not look like an effect of the number of rounds.
    """
    made = runs(scenario)
    order = stream(scenario, ORDER, epoch.number).permutation(len(made))
    return [made[index] for index in order]


def calibration_name(epoch: Epoch) -> str:
    """Return the name of an epoch's calibration file."""
    return f"{epoch.calibration_id}-calibration{SUFFIX}"


def file_names(scenario: Scenario, plan: Sequence[Epoch]) -> list[str]:
    """Return the names of all recordings that a scenario makes."""
    return [
        name
        for epoch in plan
        for name in (
            calibration_name(epoch),
            *(f"{run.name(epoch)}{SUFFIX}" for run in runs(scenario)),
        )
    ]
