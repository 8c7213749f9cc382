"""From a scenario to its epochs: when, with which noise, with which readout."""

from __future__ import annotations

from dataclasses import dataclass, replace
from datetime import datetime, timedelta

import numpy as np

from leakpipe.codes.layout import Basis, Layout
from leakpipe.errors import ConfigError, numbered
from leakpipe.rehearsal.device import (
    REFERENCE,
    Drift,
    ReadoutQubit,
    Spread,
    make_device,
)
from leakpipe.rehearsal.noise import MemoryNoise, QubitOverrides
from leakpipe.rehearsal.scenario import DriftScenario, Factors, Scenario

DEVICE, NOISE, CALIBRATION, MEMORY, TRUTH, ORDER = range(6)
"""Purposes of random streams; with an epoch and a recording they name one stream each."""

Readout = dict[str, ReadoutQubit]


@dataclass(frozen=True)
class Epoch:
    """One calibration and the runs taken under it.

    Attributes
    ----------
    number
        From 1; silent nights keep their number.
    calibration_id, acquired_at
        Name and time of the calibration.
    noise
        Errors and leakage of the runs.
    calibrated
        Readout when the calibration was taken, of the qubits that it holds.
    running
        Readout of every qubit during the runs.
    """

    number: int
    calibration_id: str
    acquired_at: datetime
    noise: MemoryNoise
    calibrated: Readout
    running: Readout


def stream(scenario: Scenario, purpose: int, *which: int) -> np.random.Generator:
    """Return the random stream of one purpose: the same whatever else is made."""
    return np.random.default_rng([scenario.seed, purpose, *which])


def layouts(scenario: Scenario) -> dict[Basis, Layout]:
    """Return the layout per basis."""
    return {basis: scenario.code.layout(basis) for basis in scenario.bases}


def epochs(scenario: Scenario) -> list[Epoch]:
    """Return the epochs of a scenario that have data.

    Raises
    ------
    ConfigError
        The scenario names qubits that its code does not have, or epochs that never come.
    """
    layout = next(iter(layouts(scenario).values()))
    _check_names(scenario, layout)
    rng = stream(scenario, DEVICE)
    readout = _device(scenario, layout, rng)
    factors: list[Factors] = [scenario.noise.factors]
    start = datetime.fromisoformat(scenario.season.started_at)
    plan = []
    for number in range(1, scenario.season.epochs + 1):
        drifts, names, silent = [scenario.readout.drift], list(readout), False
        for change in scenario.season.changes:
            if change.epoch != number:
                continue
            factors.append(change.factors)
            silent = silent or change.silent
            if change.drift is not None:
                drifts.append(change.drift)
            if change.recalibrated is not None:
                names = list(change.recalibrated)
                readout = _retuned(readout, names, stream(scenario, DEVICE, number))
        if silent:
            continue
        noise = _noise(scenario, layout, factors, number)
        running = dict(readout)
        for drift in drifts:
            running = {name: _drift(drift).apply(qubit) for name, qubit in running.items()}
        plan.append(
            Epoch(
                number=number,
                calibration_id=f"cal-{number:03d}",
                acquired_at=start + timedelta(hours=scenario.season.hours_between) * (number - 1),
                noise=noise,
                calibrated={name: readout[name] for name in names},
                running=running,
            )
        )
    return plan


def _device(scenario: Scenario, layout: Layout, rng: np.random.Generator) -> Readout:
    usual = Spread()
    part = scenario.readout.spread
    reference = replace(
        REFERENCE[scenario.readout.reference],
        noise_correlation=scenario.readout.noise_correlation,
    )
    spread = replace(usual, t1=usual.t1 * part, noise=usual.noise * part, pulls=usual.pulls * part)
    return make_device(reference, [*layout.data, *layout.measure], spread, rng)


def _retuned(readout: Readout, names: list[str], rng: np.random.Generator) -> Readout:
    """Return the readout after a recalibration that turned the named qubits' signals."""
    return readout | {
        name: replace(readout[name], phase_degrees=float(rng.uniform(-180, 180))) for name in names
    }


def _drift(drift: DriftScenario) -> Drift:
    return Drift(drift.rotation_degrees, drift.gain, complex(*drift.offset), drift.pull_mhz)


def _noise(scenario: Scenario, layout: Layout, factors: list[Factors], number: int) -> MemoryNoise:
    """Return the noise of an epoch: spread, then every factor so far, then the night's scatter."""
    given = scenario.noise.model_dump(exclude={"qubit_spread", "factors"})
    noise = MemoryNoise(**given)
    qubits = len(layout.data) + len(layout.measure)
    spread = np.exp(scenario.noise.qubit_spread * stream(scenario, NOISE).standard_normal(qubits))
    scatter = np.exp(
        scenario.season.scatter * stream(scenario, NOISE, number).standard_normal(qubits)
    )
    noise = replace(
        noise,
        injection=noise.per_qubit("injection", layout) * spread * scatter,
        injection_round=noise.per_qubit("injection_round", layout) * spread * scatter,
    )
    for one in factors:
        noise = QubitOverrides(one).apply(noise, layout)
    return noise.checked(layout)


def _check_names(scenario: Scenario, layout: Layout) -> None:
    known = {*layout.data, *layout.measure}
    used = [("injected.qubits", name) for name in (scenario.injected or _Nobody).qubits]
    problems = []
    for change in scenario.season.changes:
        if change.epoch > scenario.season.epochs:
            problems.append(
                f"season.changes: epoch {change.epoch} never comes, there are "
                f"{scenario.season.epochs}"
            )
        used += [("season.changes.recalibrated", name) for name in change.recalibrated or ()]
    problems += [
        f"{where}: no qubit {name!r} in the code" for where, name in used if name not in known
    ]
    if problems:
        raise ConfigError(numbered(problems, "nothing was simulated"))


class _Nobody:
    qubits: tuple[str, ...] = ()
