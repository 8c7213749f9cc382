"""Findings: doubts and flags that travel with a result instead of stopping it."""

from __future__ import annotations

import json
from collections.abc import Iterable, Mapping
from dataclasses import asdict, dataclass, field
from typing import Literal

import xarray as xr

Severity = Literal["note", "watch", "act"]
SEVERITIES: tuple[Severity, ...] = ("note", "watch", "act")

_ATTRIBUTE = "findings"


@dataclass(frozen=True)
class Finding:
    """One stated doubt or flag.

    Attributes
    ----------
    code
        Short stable name, words joined by hyphens, such as ``"readout-drift"``.
    severity
        ``"note"`` (good to know), ``"watch"`` (a number rests on it), ``"act"`` (look at it first).
    where
        The qubit, check, recording or patch it is about.
    sentence
        One sentence in plain words, with its numbers and units.
    numbers
        The same numbers for machines; rates per round, fractions not percent.
    """

    code: str
    severity: Severity
    where: str
    sentence: str
    numbers: Mapping[str, float | int | str | None] = field(default_factory=dict)

    def to_json(self) -> dict[str, object]:
        """Return the finding as `summary.json` writes it."""
        return asdict(self)


def with_findings(stage: xr.Dataset, findings: Iterable[Finding]) -> xr.Dataset:
    """Return the stage's dataset with the findings added to those it carries (JSON attribute)."""
    all_findings = [*findings_of(stage), *findings]
    text = json.dumps([finding.to_json() for finding in all_findings])
    return stage.assign_attrs({_ATTRIBUTE: text})


def findings_of(stage: xr.Dataset) -> list[Finding]:
    """Return the findings that a stage's dataset carries, in the order they were made."""
    return [Finding(**entry) for entry in json.loads(stage.attrs.get(_ATTRIBUTE, "[]"))]


def most_severe_first(findings: Iterable[Finding]) -> list[Finding]:
    """Return the findings sorted by severity, keeping the order they were made in within one."""
    return sorted(findings, key=lambda finding: -SEVERITIES.index(finding.severity))
