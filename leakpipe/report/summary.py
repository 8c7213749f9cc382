"""The summary of one epoch: what other programs, the run log and the page are made from."""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import Any

from leakpipe.findings import Finding, most_severe_first
from leakpipe.report.assignment import assignment
from leakpipe.report.contract import CONTRACT, validated
from leakpipe.report.inputs import PatchReport

ROLES = ("data", "measure")
PER_ROLE = ("steady_leakage", "injection", "seepage")
PER_QUBIT = (*PER_ROLE, "settling_rounds")


def summary(patches: Sequence[PatchReport], changes: Sequence[Finding] = ()) -> dict[str, Any]:
    """Return the content of `summary.json`, contract "1".

    A stage or quantity that is missing becomes an estimate that is not identifiable and says why.

    Parameters
    ----------
    patches
        Patches and bases of one epoch, one or more, of one device and calibration.
    changes
        Findings about what moved since earlier epochs.

    Raises
    ------
    ValueError
        There is no patch, or the patches belong to different epochs.
    """
    if not patches:
        raise ValueError("a summary needs at least one patch")
    epochs = {(patch.device, patch.calibration_id) for patch in patches}
    if len(epochs) > 1:
        raise ValueError(f"patches of {len(epochs)} different epochs cannot share a summary")
    return validated(
        {
            "contract": CONTRACT,
            "device": patches[0].device,
            "calibration_id": patches[0].calibration_id,
            "acquired_at": min(patch.acquired_at for patch in patches),
            "made_at": max(patch.made_at for patch in patches),
            "patches": [_patch(patch) for patch in patches],
            "findings": [_finding(finding) for finding in gathered(patches, changes)],
        }
    )


def gathered(patches: Sequence[PatchReport], changes: Sequence[Finding] = ()) -> list[Finding]:
    """Return all findings, most severe first, each once.

    Patches of one epoch share the readout models, so the same finding may come several times. A
    finding that not every patch has is marked with its patch and basis.
    """
    per_patch = [patch.all_findings() for patch in patches]
    found: list[Finding] = [*changes]
    for patch, findings in zip(patches, per_patch, strict=True):
        for finding in findings:
            everywhere = all(_stands_in(finding, others) for others in per_patch)
            where = finding.where if everywhere else f"{patch.label}: {finding.where}"
            placed = Finding(
                finding.code, finding.severity, where, finding.sentence, dict(finding.numbers)
            )
            if not _stands_in(placed, found):
                found.append(placed)
    return most_severe_first(found)


def _stands_in(finding: Finding, findings: Sequence[Finding]) -> bool:
    def key(one: Finding) -> tuple[str, str, str, str]:
        return one.code, one.severity, one.where, one.sentence

    return any(key(finding) == key(other) for other in findings)


def _finding(finding: Finding) -> dict[str, object]:
    """Return a finding for JSON; numbers that are not finite become null, never NaN."""
    return {**finding.to_json(), "numbers": {k: _plain(v) for k, v in finding.numbers.items()}}


def _plain(value: Any) -> float | int | str | None:
    if value is None or isinstance(value, str):
        return value
    # numpy scalars are not JSON; .item() makes plain numbers of them.
    value = value.item() if hasattr(value, "item") else value
    if isinstance(value, bool | int):
        return int(value)
    return float(value) if math.isfinite(value) else None


def _patch(patch: PatchReport) -> dict[str, Any]:
    def rates(name: str) -> dict[str, Any]:
        return patch.estimate("rates", name).to_json()

    routes = patch.labels("share", "route")
    return {
        "patch": patch.patch,
        "family": patch.family,
        "distance": int(patch.distance),
        "basis": patch.basis,
        "shots": int(patch.shots),
        "rounds": [int(count) for count in patch.rounds],
        "logical_error_per_round": patch.estimate("logical", "logical_error_per_round").to_json(),
        "leakage_share": patch.estimate("share", "leakage_share").to_json(),
        "share_routes": {
            str(name): patch.estimate("share", "share_route", {"route": name}).to_json()
            for name in routes
        },
        "detection_rise": rates("detection_rise"),
        "settling_rounds": rates("settling_rounds"),
        "kappa": rates("kappa"),
        **{name: _by_role(patch, name) for name in PER_ROLE},
        "qubits": [
            _qubit(patch, qubit, role)
            for role, names in zip(ROLES, (patch.layout.data, patch.layout.measure), strict=True)
            for qubit in names
        ],
    }


def _by_role(patch: PatchReport, name: str) -> dict[str, Any]:
    return {role: patch.by_role("rates", name, role).to_json() for role in ROLES}


def _qubit(patch: PatchReport, qubit: str, role: str) -> dict[str, Any]:
    right = assignment(patch, qubit)
    return {
        "qubit": qubit,
        "role": role,
        **{
            name: patch.estimate("rates", f"qubit_{name}", {"qubit": qubit}).to_json()
            for name in PER_QUBIT
        },
        "assignment": right.to_json() if right.identifiable else None,
    }
