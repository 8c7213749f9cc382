"""Which qubits stand out, from the summary alone: what to look at first."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from statistics import median
from typing import Any

from leakpipe.estimates import Estimate

STANDS_OUT = 1.5
"""A qubit stands out when the low end of its interval is above this many times the median of its
role. Our choice: natural spread between qubits is about 30 % (rates study), so this is beyond it
even before the qubit's own error is counted."""


@dataclass(frozen=True)
class Outlier:
    """A qubit whose steady leakage stands out from its kind.

    Attributes
    ----------
    qubit, role
        Its name and "data" or "measure".
    patch, basis
        Where.
    leakage
        Its steady leakage.
    ratio
        Value over the median of the qubits of its role.
    """

    qubit: str
    role: str
    patch: str
    basis: str
    leakage: Estimate
    ratio: float


def outliers(patch: Mapping[str, Any]) -> list[Outlier]:
    """Return the qubits of one patch of a summary that stand out, worst first."""
    found = []
    for role in ("data", "measure"):
        known = {
            qubit["qubit"]: Estimate(**qubit["steady_leakage"])
            for qubit in patch["qubits"]
            if qubit["role"] == role and qubit["steady_leakage"]["value"] is not None
        }
        values = [leakage.value for leakage in known.values() if leakage.value is not None]
        middle = median(values) if values else 0.0
        if middle <= 0:
            continue
        for name, leakage in known.items():
            if leakage.value is None or leakage.low is None:
                continue
            if leakage.low > STANDS_OUT * middle:
                ratio = leakage.value / middle
                found.append(Outlier(name, role, patch["patch"], patch["basis"], leakage, ratio))
    return sorted(found, key=lambda one: -one.ratio)


def joined(summary: Mapping[str, Any]) -> list[tuple[Outlier, list[str]]]:
    """Return the outliers of all patches, each qubit once with the bases that show it.

    The entry kept is the one with the larger ratio; the list says in which bases it stood out.
    """
    best: dict[tuple[str, str], Outlier] = {}
    bases: dict[tuple[str, str], list[str]] = {}
    for patch in summary["patches"]:
        for one in outliers(patch):
            key = (one.patch, one.qubit)
            bases.setdefault(key, []).append(one.basis)
            if key not in best or one.ratio > best[key].ratio:
                best[key] = one
    ordered = sorted(best, key=lambda key: -best[key].ratio)
    return [(best[key], bases[key]) for key in ordered]


@dataclass(frozen=True)
class Unknown:
    """Something the data could not tell: what, in which patch and basis, and why."""

    quantity: str
    place: str
    reason: str


def unknowns(summary: Mapping[str, Any]) -> list[Unknown]:
    """Return everything the data could not tell.

    Qubits that share a quantity and a reason are said in one entry.
    """
    entries: dict[tuple[str, str, str], list[str]] = {}
    for patch in summary["patches"]:
        place = f"{patch['patch']} {patch['basis']}"
        for name, estimate in _estimates(patch):
            if not estimate["identifiable"]:
                entries.setdefault((place, name, estimate["basis"]), [])
        for qubit in patch["qubits"]:
            for name in ("steady_leakage", "injection", "seepage", "settling_rounds"):
                if not qubit[name]["identifiable"]:
                    key = (place, f"{name} of", qubit[name]["basis"])
                    entries.setdefault(key, []).append(qubit["qubit"])
    return [
        Unknown(f"{name.replace('_', ' ')} {', '.join(qubits)}".rstrip(), place, reason)
        for (place, name, reason), qubits in entries.items()
    ]


def _estimates(patch: Mapping[str, Any]) -> list[tuple[str, Mapping[str, Any]]]:
    scalars = [
        (name, patch[name])
        for name in (
            "logical_error_per_round",
            "leakage_share",
            "detection_rise",
            "settling_rounds",
            "kappa",
        )
    ]
    roles = [
        (f"{name} ({role} qubits)", patch[name][role])
        for name in ("steady_leakage", "injection", "seepage")
        for role in ("data", "measure")
    ]
    routes = [(f"share by {name}", estimate) for name, estimate in patch["share_routes"].items()]
    return [*scalars, *roles, *routes]
