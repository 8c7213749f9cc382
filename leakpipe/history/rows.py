"""Rows of the history: a summary taken apart into one quantity a row."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from datetime import UTC, datetime
from typing import Any

ROLES = ("data", "measure")
CODE_QUANTITIES = (
    "logical_error_per_round",
    "leakage_share",
    "detection_rise",
    "settling_rounds",
    "kappa",
)
ROLE_QUANTITIES = ("steady_leakage", "injection", "seepage")
QUBIT_QUANTITIES = (*ROLE_QUANTITIES, "settling_rounds", "assignment")


@dataclass(frozen=True, slots=True)
class Row:
    """One quantity of one qubit, or of the whole code, in one epoch.

    Attributes
    ----------
    device, calibration_id, patch, basis
        Which result it is from.
    acquired_at
        When the epoch was recorded, ISO 8601 in UTC, so that text order is time order.
    qubit, role
        Empty for the whole code. A quantity of all data or all measure qubits has an empty
        `qubit` and its role in front of its name, such as ``"data_steady_leakage"``.
    quantity
        Name as in `summary.json`; fractions, rates per round, times in rounds.
    value, low, high, level, identifiable, reason
        The estimate; `reason` is its basis text.
    """

    device: str
    calibration_id: str
    acquired_at: str
    patch: str
    basis: str
    qubit: str
    role: str
    quantity: str
    value: float | None
    low: float | None
    high: float | None
    level: float
    identifiable: bool
    reason: str


def in_utc(moment: str) -> str:
    """Return an ISO 8601 time with a zone in UTC, so that text order is time order.

    Raises
    ------
    ValueError
        The text is no time, or has no zone.
    """
    parsed = datetime.fromisoformat(moment)
    if parsed.tzinfo is None:
        raise ValueError(f"time {moment!r} has no zone")
    return parsed.astimezone(UTC).isoformat(timespec="microseconds")


def rows_of(summary: Mapping[str, Any]) -> Iterator[Row]:
    """Yield the rows of a summary (contract "1"), in a fixed order."""
    at = in_utc(summary["acquired_at"])
    for patch in summary["patches"]:
        for qubit, role, quantity, estimate in _quantities(patch):
            yield Row(
                device=summary["device"],
                calibration_id=summary["calibration_id"],
                acquired_at=at,
                patch=patch["patch"],
                basis=patch["basis"],
                qubit=qubit,
                role=role,
                quantity=quantity,
                value=estimate["value"],
                low=estimate["low"],
                high=estimate["high"],
                level=estimate["level"],
                identifiable=estimate["identifiable"],
                reason=estimate["basis"],
            )


def _quantities(patch: Mapping[str, Any]) -> Iterator[tuple[str, str, str, Mapping[str, Any]]]:
    for name in CODE_QUANTITIES:
        yield "", "", name, patch[name]
    for route, estimate in sorted(patch["share_routes"].items()):
        yield "", "", f"share_route_{route}", estimate
    for name in ROLE_QUANTITIES:
        for role in ROLES:
            yield "", role, f"{role}_{name}", patch[name][role]
    for qubit in patch["qubits"]:
        for name in QUBIT_QUANTITIES:
            if qubit[name] is not None:
                yield qubit["qubit"], qubit["role"], name, qubit[name]
