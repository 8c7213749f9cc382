"""The truth written beside rehearsed recordings, under the names that results use.

Every quantity is a value with the error with which the rehearsal itself knows it: 0 for closed
forms, a standard error for what was simulated, None with a reason where it has no truth.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import partial
from typing import Any

import numpy as np
from numpy.typing import NDArray

from leakpipe.codes.events import defined_layers
from leakpipe.codes.layout import Basis, Layout
from leakpipe.rehearsal.counterfactual import DecoderFor, Outcome, Setting, Share, share_truth
from leakpipe.rehearsal.labels import assignments
from leakpipe.rehearsal.populations import (
    SETTLING_ROUNDS,
    LeakageRates,
    code_settling,
    expected_leaked,
    leakage_rates,
    settled_leaked,
)
from leakpipe.rehearsal.readout import jump_probability
from leakpipe.rehearsal.scenario import Scenario
from leakpipe.rehearsal.season import TRUTH, Epoch, stream

DEFINITIONS = {
    "leaked": "population outside 0 and 1 at the end of a round, when the qubit is read",
    "injection": "G of p[r+1] = p[r] + G (1 - p[r]) - S p[r], per round; of a role: mean of qubits",
    "seepage": "S of the same recurrence; of a role: mean of its qubits",
    "steady_leakage": "population after many rounds, G / (G + S) without transport; of a role: "
    "mean of its qubits",
    "settling_rounds": "-1 / ln(1 - G - S); of the code: the time at which the leaked data and "
    "measure population together has covered 1 - 1/e of its way from round 1 to the steady level",
    "detection_rise": "steady level over start minus one of the mean over checks; start: the "
    "settling law continued to round 0; from_layer_2: start at layer 2",
    "logical_error_per_round": "1 - 2 P(R) = A (1 - 2 eps)^R over the recordings' R, R = 1 left "
    "out; hard labels of the device, matching decoder",
    "leakage_share": "(eps with - eps without) / eps with, same decoder, injection set to zero",
    "assignment": "mean probability that a qubit prepared in 0 is read 0 and one prepared in 1 is "
    "read 1, preparation errors included; assignment_matrix: label given true start state",
    "kappa": "2 v, v the probability that a leaked qubit flips the outcome of its check",
}

COUPLED = "transport couples the qubits: steady levels by mean field, rates without their partners"

KAPPA_ERROR = 0.05
KAPPA_REASON = (
    "limit of leakage that starts and ends between rounds; with injection per gate 400 000 shots "
    "of distance 3 gave 1.02 to 1.04 (outcome random) and 1.06 to 1.08 (detector random)"
)

FIRST_INTERIOR = {True: 2, False: 3}
"""First layer in which every check compares two rounds, with and without reset. Without reset an
event compares a bit with the one two rounds before, and the bit before round 1 is sure."""


@dataclass(frozen=True)
class Known:
    """A true value and the error with which the rehearsal knows it."""

    value: float | None
    error: float | None = 0.0
    reason: str = ""

    def to_json(self) -> dict[str, Any]:
        """Return the value as `truth.json` writes it."""
        finite = self.value is not None and np.isfinite(self.value)
        entry: dict[str, Any] = {
            "value": float(self.value) if finite and self.value is not None else None,
            "error": None if self.error is None or not finite else float(self.error),
        }
        return entry | ({"reason": self.reason} if self.reason else {})


def detection_rise(
    outcome: Outcome,
    layout: Layout,
    basis: Basis,
    settling: float,
    start_layer: int = 0,
    *,
    reset: bool = True,
) -> Known:
    """Return the relative rise of the mean detection probability over interior layers up to R.

    A linear fit of d[r] = A - B lam^(r - start) with the known settling time: B / (A - B).
    The error takes the layers' means as independent binomials, checks and layers alike.
    """
    rounds, first = outcome.rounds, FIRST_INTERIOR[reset]
    if rounds < first + 2 or not np.isfinite(settling) or settling <= 0:
        return Known(None, None, "needs more rounds and a settling time")
    inside = slice(first - 1, rounds)
    probability = outcome.detection[inside]
    assert defined_layers(layout, basis, rounds)[inside].all()
    mean = probability.mean(axis=1)
    spread = np.sqrt((probability * (1 - probability)).sum(axis=1) / outcome.shots)
    spread /= probability.shape[1]
    turns = np.arange(first, rounds + 1)
    keep = np.exp((start_layer - turns) / settling)
    design = np.stack([np.ones(len(turns)), -keep], axis=1)
    scaled = design / spread[:, None]
    covariance = np.linalg.inv(scaled.T @ scaled)
    level, size = covariance @ scaled.T @ (mean / spread)
    start = level - size
    # d(size / start) = d size / start - size (d level - d size) / start^2
    slope = np.array([-size / start**2, 1 / start + size / start**2])
    return Known(float(size / start), float(np.sqrt(slope @ covariance @ slope)))


def patch_truth(
    scenario: Scenario, epoch: Epoch, layout: Layout, basis: Basis, decoder_for: DecoderFor | None
) -> dict[str, Any]:
    """Return the truth of one epoch and basis, in the shape of a patch of `summary.json`."""
    reset = scenario.reset == "each round"
    rng = stream(scenario, TRUTH, epoch.number, 0 if basis == "Z" else 1)
    names = [*layout.data, *layout.measure]
    rates = leakage_rates(layout, epoch.noise, reset=reset)
    table = assignments([epoch.running[name] for name in names], scenario.truth.readout_shots, rng)
    setting = Setting(layout, basis, epoch.noise, table, reset)
    path = expected_leaked(layout, epoch.noise, max(scenario.rounds), reset=reset)
    steady = settled_leaked(layout, epoch.noise, reset=reset)
    data = len(layout.data)
    roles = {"data": slice(0, data), "measure": slice(data, None)}
    long = expected_leaked(layout, epoch.noise, SETTLING_ROUNDS, reset=reset)
    settling = code_settling(long, steady)
    reason = COUPLED if epoch.noise.transport > 0 else ""

    def mean_of(values: NDArray[np.float64]) -> dict[str, Any]:
        return {
            role: Known(float(values[part].mean()), 0.0, reason).to_json()
            for role, part in roles.items()
        }

    entry: dict[str, Any] = {
        "patch": scenario.patch,
        "family": layout.family,
        "distance": layout.distance,
        "basis": basis,
        "rounds": sorted(scenario.rounds),
        "settling_rounds": Known(settling, 0.0, reason).to_json(),
        "kappa": _kappa(layout, epoch).to_json(),
        "steady_leakage": mean_of(steady),
        "injection": mean_of(rates.injection),
        "seepage": mean_of(rates.seepage),
        "qubits": [
            _qubit(
                epoch, names, index, data, rates, steady, table, path, scenario.truth.readout_shots
            )
            for index in range(len(names))
        ],
        "leaked_by_round": {
            role: path[:, part].mean(axis=1).tolist() for role, part in roles.items()
        },
    }
    share = None
    if decoder_for is not None and scenario.truth.shots and len(set(scenario.rounds) - {1}) > 1:
        share = share_truth(
            setting, sorted(set(scenario.rounds)), scenario.truth.shots, decoder_for, rng
        )
    return entry | _logical(share, setting, settling)


def _kappa(layout: Layout, epoch: Epoch) -> Known:
    """Surface checks of a leaked qubit are fair coins, repetition checks flip with strength / 2."""
    value = 1.0 if layout.family == "rotated surface" else epoch.noise.strength
    return Known(value, KAPPA_ERROR, KAPPA_REASON)


def _qubit(
    epoch: Epoch,
    names: list[str],
    index: int,
    data: int,
    rates: LeakageRates,
    steady: NDArray[np.float64],
    table: NDArray[np.float64],
    path: NDArray[np.float64],
    shots: int,
) -> dict[str, Any]:
    readout = epoch.running[names[index]]
    shown = {
        name: Known(float(values[index])).to_json()
        for name, values in (
            ("steady_leakage", steady),
            ("injection", rates.injection),
            ("seepage", rates.seepage),
            ("settling_rounds", rates.settling_rounds),
        )
    }
    # As prepared: what a calibration shows, its preparation errors counted as wrong readings.
    prepared = np.array(readout.preparation) @ table[index]
    right = float((prepared[0, 0] + prepared[1, 1]) / 2)
    error = float(np.sqrt(right * (1 - right) / 2 / shots))
    return {
        "qubit": names[index],
        "role": "data" if index < data else "measure",
        **shown,
        "leaked_at_last_round": float(path[-1, index]),
        "assignment": Known(right, error).to_json(),
        "assignment_matrix": table[index].tolist(),
        "separations": readout.separations.tolist(),
        "jump_probability": jump_probability(readout).tolist(),
        "t1_us": readout.t1_us,
    }


def _logical(share: Share | None, setting: Setting, settling: float) -> dict[str, Any]:
    if share is None:
        missing = Known(None, None, "not simulated").to_json()
        names = ("logical_error_per_round", "leakage_share", "detection_rise")
        return dict.fromkeys(names, missing)
    longest = max(share.outcomes, key=lambda one: one.rounds)
    fits = share.with_leakage, share.without
    rise_from = partial(
        detection_rise,
        longest,
        setting.layout,
        setting.basis,
        settling,
        reset=setting.reset,
    )
    return {
        "logical_error_per_round": Known(fits[0].value, fits[0].error).to_json(),
        "logical_error_per_round_without": Known(fits[1].value, fits[1].error).to_json(),
        "leakage_share": Known(share.value, share.error).to_json(),
        "detection_rise": rise_from(0).to_json(),
        "detection_rise_from_layer_2": rise_from(2).to_json(),
        "logical_fit": [
            {"chi_square": fit.chi_square, "freedom": fit.freedom, "amplitude": fit.amplitude}
            for fit in fits
        ],
        "logical_error": {
            name: [
                {"rounds": one.rounds, "shots": one.shots, "failures": one.failures}
                for one in outcomes
            ]
            for name, outcomes in (
                ("with", share.outcomes),
                ("without", share.outcomes_without),
            )
        },
        "mean_detection_by_layer": longest.detection.mean(axis=1).tolist(),
    }
