"""Made-up summaries of a season for the tests of the history and of refits: plain dictionaries."""

from __future__ import annotations

from collections.abc import Mapping
from datetime import UTC, datetime, timedelta
from typing import Any

import numpy as np

START = datetime(2026, 3, 1, 1, 0, tzinfo=UTC)
ERROR = 0.085
"""Relative standard error of a qubit's steady leakage (rates study: everything, shared tau)."""


def estimate(value: float | None, relative: float = ERROR, reason: str = "") -> dict[str, Any]:
    """Return an estimate with a log-symmetric interval, or an unknown one."""
    if value is None:
        return {
            "value": None,
            "low": None,
            "high": None,
            "level": 0.95,
            "identifiable": False,
            "basis": reason or "too few shots",
        }
    factor = float(np.exp(1.959964 * relative))
    return {
        "value": float(value),
        "low": float(value / factor),
        "high": float(value * factor),
        "level": 0.95,
        "identifiable": True,
        "basis": reason or "everything",
    }


def one_patch(
    leakage: Mapping[str, float | None],
    basis: str = "Z",
    *,
    share: float | None = 0.12,
    logical: float | None = 0.012,
    settling: float | None = 5.0,
    patch: str = "west",
) -> dict[str, Any]:
    """Return one patch and basis of a summary; names with D are data, others measure qubits."""
    roles = {name: "data" if name.startswith("D") else "measure" for name in leakage}

    def mean(role: str) -> dict[str, Any]:
        known = [v for name, v in leakage.items() if roles[name] == role and v is not None]
        return estimate(float(np.mean(known)) if known else None, 0.03)

    return {
        "patch": patch,
        "family": "rotated surface",
        "distance": 3,
        "basis": basis,
        "shots": 60000,
        "rounds": [1, 5, 15, 25],
        "logical_error_per_round": estimate(logical, 0.03),
        "leakage_share": estimate(share, 0.08),
        "share_routes": {"K": estimate(share, 0.08)},
        "detection_rise": estimate(0.12, 0.05),
        "settling_rounds": estimate(settling, 0.1),
        "kappa": estimate(1.0, 0.1),
        "steady_leakage": {"data": mean("data"), "measure": mean("measure")},
        "injection": {"data": estimate(0.001), "measure": estimate(0.001)},
        "seepage": {"data": estimate(0.09), "measure": estimate(0.09)},
        "qubits": [
            {
                "qubit": name,
                "role": roles[name],
                "steady_leakage": estimate(value),
                "injection": estimate(None if value is None else value * 0.1),
                "seepage": estimate(0.09),
                "settling_rounds": estimate(5.0, 0.1),
                "assignment": estimate(0.98, 0.001),
            }
            for name, value in leakage.items()
        ],
    }


def summary(
    epoch: int, patches: list[dict[str, Any]], *, device: str = "chip", made: int = 0
) -> dict[str, Any]:
    """Return the summary of the night numbered `epoch`."""
    at = START + timedelta(days=epoch)
    return {
        "contract": "1",
        "device": device,
        "calibration_id": f"cal-{epoch:03d}",
        "acquired_at": at.isoformat(),
        "made_at": (at + timedelta(hours=1, minutes=made)).isoformat(),
        "patches": patches,
        "findings": [],
    }


QUBITS = tuple(f"D{i}" for i in range(9)) + tuple(f"M{i}" for i in range(8))


def season(
    epochs: int,
    generator: np.random.Generator,
    *,
    between: float = 0.05,
    moved: Mapping[str, tuple[int, float]] | None = None,
    together: Mapping[int, float] | None = None,
    bases: tuple[str, ...] = ("Z",),
) -> list[dict[str, Any]]:
    """Return the summaries of a season.

    Parameters
    ----------
    epochs
        Number of epochs.
    generator
        Randomness.
    between
        Relative spread of a qubit's true leakage from epoch to epoch.
    moved
        Qubit to (first epoch, factor) of a lasting change.
    together
        Epoch to the factor that a wrong calibration gives all qubits in it.
    bases
        Each gives its own measurement of the same true leakage.
    """
    base = {name: 0.01 * float(np.exp(0.3 * generator.normal())) for name in QUBITS}
    found = []
    for epoch in range(epochs):
        true = {name: v * np.exp(between * generator.normal()) for name, v in base.items()}
        for name, (first, factor) in (moved or {}).items():
            if epoch >= first:
                true[name] *= factor
        scale = (together or {}).get(epoch, 1.0)
        patches = [
            one_patch(
                {n: float(v * scale * np.exp(ERROR * generator.normal())) for n, v in true.items()},
                basis,
                share=float(0.12 * np.exp(0.08 * generator.normal())),
                logical=float(0.012 * np.exp(0.03 * generator.normal())),
                settling=float(5.0 * np.exp(0.1 * generator.normal())),
            )
            for basis in bases
        ]
        found.append(summary(epoch, patches))
    return found
