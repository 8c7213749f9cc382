"""Noise of a rehearsed memory: error probabilities and leakage, per qubit where wanted."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field, fields, replace
from typing import Any, Literal

import numpy as np
from numpy.typing import NDArray

from leakpipe.codes.layout import Layout
from leakpipe.errors import ConfigError, numbered

Rate = float | NDArray[np.float64]
"""One number for every qubit, or one per qubit: (D + M,), data qubits first."""

Granularity = Literal["per gate", "once per round"]


@dataclass(frozen=True)
class MemoryNoise:
    """What goes wrong in a memory; every field is a probability.

    The defaults of the three gate and readout errors are the trade's usual levels (common practice,
    no source), everything else is off.

    Attributes
    ----------
    single_qubit
        Depolarising error after a single-qubit gate.
    two_qubit
        Depolarising error after a two-qubit gate; of two different numbers the mean counts.
    idle
        Depolarising error of a data qubit per round, while the measure qubits are read.
    reset
        Bit flip after a reset or preparation.
    measurement
        Reported bit of an unleaked reading differs from the state.
    injection
        An unleaked qubit leaks, per two-qubit gate it takes part in.
    injection_round
        An unleaked qubit leaks, once per round before the gates.
    seepage
        A leaked qubit returns (fully mixed), once per round before the gates.
    reset_removes
        A reset brings a leaked measure qubit back. 0 leaves leaked measure qubits leaked.
    transport
        Leakage changes place in a gate between a leaked and an unleaked qubit.
    initial
        Leaked at the start of the shot.
    strength
        A gate with a leaked partner strikes the unleaked qubit at all; 1 randomises it fully. In a
        surface code the checks of a leaked data qubit are random anyway (two checks that both miss
        the qubit no longer commute), in a repetition code they flip with half the strength.
    depolarise
        Part of those strikes that depolarise the unleaked qubit fully; the rest are a phase-type
        flip with probability 1/2.
    """

    single_qubit: Rate = 1e-3
    two_qubit: Rate = 6e-3
    idle: Rate = 0.0
    reset: Rate = 0.0
    measurement: Rate = 0.0
    injection: Rate = 0.0
    injection_round: Rate = 0.0
    seepage: Rate = 0.0
    reset_removes: Rate = 0.0
    transport: float = 0.0
    initial: Rate = 0.0
    strength: float = 1.0
    depolarise: float = 0.0

    def per_qubit(self, name: str, layout: Layout) -> NDArray[np.float64]:
        """Return one field as an array over data then measure qubits.

        Raises
        ------
        ConfigError
            The field has a wrong length or is not a probability.
        """
        qubits = len(layout.data) + len(layout.measure)
        value = np.asarray(getattr(self, name), dtype=float)
        if value.shape not in ((), (qubits,)):
            raise ConfigError(
                f"noise {name} must be one number or {qubits} (data then measure qubits), "
                f"got shape {value.shape}"
            )
        if not np.all((value >= 0) & (value <= 1)):
            raise ConfigError(f"noise {name} must lie between 0 and 1, got {value}")
        return np.broadcast_to(value, (qubits,)).astype(float)

    def checked(self, layout: Layout) -> MemoryNoise:
        """Return the noise with every rate as an array over the qubits of the layout.

        Raises
        ------
        ConfigError
            Some fields do not fit; every one is listed.
        """
        problems: list[str] = []
        arrays: dict[str, Any] = {}
        for one in fields(self):
            try:
                arrays[one.name] = self.per_qubit(one.name, layout)
            except ConfigError as error:
                problems.append(str(error))
        if problems:
            raise ConfigError(numbered(problems, "nothing was simulated"))
        for scalar in ("transport", "strength", "depolarise"):
            del arrays[scalar]
        return replace(self, **arrays)

    def without_injection(self) -> MemoryNoise:
        """Return the same noise with no way to leak: the counterfactual of the share's truth."""
        return replace(self, injection=0.0, injection_round=0.0, initial=0.0)

    def at_granularity(self, granularity: Granularity, layout: Layout) -> MemoryNoise:
        """Return noise that injects as much per round, but at other moments.

        Parameters
        ----------
        granularity
            ``"per gate"`` spreads the injection of a round evenly over the two-qubit gates,
            ``"once per round"`` puts all of it before the gates.
        layout
            Gives the number of gates of each qubit.
        """
        gates = gates_per_round(layout)
        per_gate = self.per_qubit("injection", layout)
        per_round = self.per_qubit("injection_round", layout)
        stays = (1 - per_round) * (1 - per_gate) ** gates
        if granularity == "once per round":
            return replace(self, injection=0.0, injection_round=1 - stays)
        return replace(self, injection=1 - stays ** (1 / gates), injection_round=0.0)


def gates_per_round(layout: Layout) -> NDArray[np.int64]:
    """Return the number of two-qubit gates of each qubit in a round, (D + M,)."""
    table = layout.adjacency
    return np.concatenate([table.sum(axis=0), table.sum(axis=1)]).astype(np.int64)


@dataclass(frozen=True)
class Injected:
    """A leak made on purpose.

    Attributes
    ----------
    qubit
        Name of the qubit.
    round
        Before the gates of this round; 1 is the start.
    probability
        Of the preparation to succeed.
    """

    qubit: str
    round: int = 1
    probability: float = 1.0


@dataclass(frozen=True)
class QubitOverrides:
    """Rates of single qubits by name, on top of a noise that is the same for all.

    Attributes
    ----------
    factor
        Per field name and qubit name, the factor on the field's value.
    """

    factor: Mapping[str, Mapping[str, float]] = field(default_factory=dict)

    def apply(self, noise: MemoryNoise, layout: Layout) -> MemoryNoise:
        """Return the noise with the named qubits' rates multiplied.

        Raises
        ------
        ConfigError
            A name is not in the layout, or a field does not exist.
        """
        names = [*layout.data, *layout.measure]
        known = {one.name for one in fields(noise)}
        problems: list[str] = []
        arrays: dict[str, Any] = {}
        for name, factors in self.factor.items():
            if name not in known:
                problems.append(f"noise has no field {name!r}")
                continue
            values = noise.per_qubit(name, layout)
            for qubit, factor in factors.items():
                if qubit in names:
                    values[names.index(qubit)] *= factor
                else:
                    problems.append(f"{name}: no qubit {qubit!r} in the layout")
            arrays[name] = values
        if problems:
            raise ConfigError(numbered(problems, "nothing was simulated"))
        return replace(noise, **arrays)
