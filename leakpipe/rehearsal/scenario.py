"""What to rehearse: a strict YAML file, read into frozen models."""

from __future__ import annotations

import hashlib
import json
from dataclasses import replace
from datetime import datetime
from pathlib import Path
from typing import Annotated, Literal

from pydantic import Field, model_validator

from leakpipe.codes.layout import Basis, Layout
from leakpipe.codes.repetition import repetition
from leakpipe.codes.rotated import rotated_surface
from leakpipe.config.base import Section
from leakpipe.config.loading import read_mapping, validated
from leakpipe.errors import ConfigError

Probability = Annotated[float, Field(ge=0, le=1)]
Positive = Annotated[int, Field(ge=1)]
Factors = dict[str, dict[str, Annotated[float, Field(ge=0)]]]


class CodeScenario(Section):
    """The code and the names of its qubits."""

    family: Literal["rotated surface", "repetition"] = "rotated surface"
    """Built-in code family."""
    distance: Annotated[int, Field(ge=2)] = 3
    """Code distance."""
    data: tuple[str, ...] | None = None
    """Names of the data qubits; the family's own if left out."""
    measure: tuple[str, ...] | None = None
    """Names of the measure qubits; the family's own if left out."""

    def layout(self, basis: Basis) -> Layout:
        """Return the layout; a repetition code protects the basis it is run in.

        Raises
        ------
        LayoutError, ConfigError
            The names contradict each other or are too few or too many.
        """
        own = (
            rotated_surface(self.distance)
            if self.family == "rotated surface"
            else repetition(self.distance, basis=basis)
        )
        for given, needed in ((self.data, own.data), (self.measure, own.measure)):
            if given is not None and len(given) != len(needed):
                raise ConfigError(f"code needs {len(needed)} names, got {len(given)}")
        return replace(own, data=self.data or own.data, measure=self.measure or own.measure)


class NoiseScenario(Section):
    """Probabilities of `leakpipe.rehearsal.noise.MemoryNoise`, with factors for single qubits."""

    single_qubit: Probability = 1e-3
    """Depolarising error after a single-qubit gate."""
    two_qubit: Probability = 6e-3
    """Depolarising error after a two-qubit gate."""
    idle: Probability = 2e-3
    """Depolarising error of a data qubit per round, while the measure qubits are read."""
    reset: Probability = 1e-3
    """Bit flip after a reset."""
    measurement: Probability = 0.0
    """Flip of a reported bit, on top of what the readout does."""
    injection: Probability = 0.0
    """An unleaked qubit leaks, per two-qubit gate."""
    injection_round: Probability = 0.0
    """An unleaked qubit leaks, once per round."""
    seepage: Probability = 0.0
    """A leaked qubit returns, once per round."""
    reset_removes: Probability = 0.0
    """A reset brings a leaked measure qubit back."""
    transport: Probability = 0.0
    """Leakage changes place in a gate with an unleaked qubit."""
    initial: Probability = 0.0
    """Leaked at the start of a shot."""
    strength: Probability = 1.0
    """A gate with a leaked partner strikes the unleaked qubit."""
    depolarise: Probability = 0.0
    """Part of those strikes that depolarise fully; the rest are phase-type flips."""
    qubit_spread: Annotated[float, Field(ge=0, le=1)] = 0.0
    """Lognormal spread of the injection from qubit to qubit."""
    factors: Factors = Field(default_factory=dict)
    """Per field and qubit a factor, such as `injection: {D4: 4.0}`."""


class DriftScenario(Section):
    """Change of every qubit's readout between calibration and run."""

    rotation_degrees: float = 0.0
    """Rotation of the signals."""
    gain: Annotated[float, Field(gt=0)] = 1.0
    """Factor on the signals."""
    offset: tuple[float, float] = (0.0, 0.0)
    """Shift in I and Q, in units of the integrated noise."""
    pull_mhz: float = 0.0
    """Shift of the resonator frequency."""


class ReadoutScenario(Section):
    """How states are read."""

    reference: Literal["good", "average", "poor"] = "average"
    """Reference device."""
    calibration_shots: Positive = 10_000
    """Shots per prepared state and qubit."""
    prepared: tuple[int, ...] = (0, 1, 2)
    """Prepared states; leave out 2 for a calibration without a leaked preparation."""
    spread: Annotated[float, Field(ge=0, le=1)] = 1.0
    """Factor on the qubit-to-qubit spread of lifetimes, noise and pulls."""
    noise_correlation: Annotated[float, Field(ge=0, lt=1)] = 0.0
    """Correlation of successive samples' noise."""
    drift: DriftScenario = Field(default_factory=DriftScenario)
    """Change between calibration and run, in every epoch."""

    @model_validator(mode="after")
    def _states(self) -> ReadoutScenario:
        if set(self.prepared) not in ({0, 1}, {0, 1, 2}) or len(set(self.prepared)) != len(
            self.prepared
        ):
            raise ValueError("prepared must be [0, 1] or [0, 1, 2]")
        return self


class InjectedScenario(Section):
    """Additional recordings with a qubit put into |2> on purpose."""

    qubits: tuple[str, ...]
    """Names of the qubits, one set of recordings each."""
    rounds: tuple[Positive, ...]
    """Numbers of rounds."""
    shots: Positive
    """Shots per recording."""
    round: Positive = 1
    """Before the gates of this round."""
    probability: Probability = 1.0
    """Of the preparation to succeed."""
    stated: bool = True
    """Whether the recording tells the probability."""


class ChangeScenario(Section):
    """Something that happens in a season; factors last from their epoch on."""

    epoch: Positive
    """Number of the epoch, from 1."""
    factors: Factors = Field(default_factory=dict)
    """Factors on the noise of single qubits, as in `noise.factors`."""
    recalibrated: Annotated[tuple[str, ...], Field(min_length=1)] | None = None
    """Only these qubits are in this epoch's calibration; their readout phase and gain change."""
    drift: DriftScenario | None = None
    """Readout drift of this epoch alone."""
    silent: bool = False
    """A night without data: the epoch is left out."""


class SeasonScenario(Section):
    """A row of epochs."""

    epochs: Positive = 1
    """Number of calibrations with their recordings."""
    started_at: str = "2026-01-01T00:00:00+00:00"
    """Start, ISO 8601 with a zone."""
    hours_between: Annotated[float, Field(gt=0)] = 24.0
    """Time from calibration to calibration."""
    scatter: Annotated[float, Field(ge=0, le=1)] = 0.0
    """Lognormal scatter of each qubit's injection from epoch to epoch."""
    changes: tuple[ChangeScenario, ...] = ()
    """What happens on the way."""

    @model_validator(mode="after")
    def _zone(self) -> SeasonScenario:
        try:
            zone = datetime.fromisoformat(self.started_at).tzinfo
        except ValueError:
            zone = None
        if zone is None:
            raise ValueError(f"started_at must be ISO 8601 with a zone, got {self.started_at!r}")
        return self


class TruthScenario(Section):
    """How well the simulated part of the truth is known."""

    shots: Annotated[int, Field(ge=0)] = 100_000
    """Shots per number of rounds, with and without leakage; 0 leaves the logical truth out."""
    readout_shots: Annotated[int, Field(ge=1000)] = 200_000
    """Shots per qubit and state that measure the assignment of the true states."""


class Scenario(Section):
    """One rehearsal: a device, its code, its noise, and the recordings to make of it."""

    device: str
    """Name of the invented device."""
    seed: Annotated[int, Field(ge=0)]
    """Seed of everything random."""
    patch: str = "patch"
    """Name of the code instance."""
    code: CodeScenario = Field(default_factory=CodeScenario)
    """Code."""
    bases: tuple[Basis, ...] = ("Z",)
    """Bases of the memory."""
    reset: Literal["each round", "none"] = "each round"
    """Whether measure qubits are reset."""
    rounds: tuple[Positive, ...]
    """Numbers of rounds, one recording each."""
    shots: Positive
    """Shots per recording."""
    kind: Literal["iq", "trace", "state"] = "iq"
    """What the recordings hold."""
    verdict: bool = False
    """Whether the recordings hold the lab's own decoder's verdict."""
    noise: NoiseScenario = Field(default_factory=NoiseScenario)
    """Errors and leakage."""
    readout: ReadoutScenario = Field(default_factory=ReadoutScenario)
    """Readout."""
    injected: InjectedScenario | None = None
    """Runs with a leak made on purpose."""
    season: SeasonScenario = Field(default_factory=SeasonScenario)
    """Epochs."""
    truth: TruthScenario = Field(default_factory=TruthScenario)
    """How the truth is found."""

    @model_validator(mode="after")
    def _once_each(self) -> Scenario:
        for name, values in (("rounds", self.rounds), ("bases", self.bases)):
            if not values or len(set(values)) != len(values):
                raise ValueError(f"{name} must hold one or more different values")
        made = self.injected
        if made is not None and (
            not made.rounds
            or min(made.rounds) < made.round
            or len(set(made.rounds)) != len(made.rounds)
            or len(set(made.qubits)) != len(made.qubits)
        ):
            raise ValueError(
                "injected must hold different qubits and different rounds, none before its round"
            )
        return self

    @property
    def fingerprint(self) -> str:
        """SHA-256 of the scenario's content; formatting and comments of the file do not matter."""
        text = json.dumps(self.model_dump(mode="json"), sort_keys=True)
        return hashlib.sha256(text.encode()).hexdigest()


def load_scenario(path: Path) -> Scenario:
    """Read a scenario file.

    Raises
    ------
    ConfigError
        The file cannot be read or is not a scenario; every problem with its line.
    """
    node, value = read_mapping(path)
    return validated(Scenario, value, node, str(path))
