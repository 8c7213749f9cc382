"""The newest numbers in the OpenMetrics text format, for whatever the lab already watches with.

Format: OpenMetrics 1.0 (IETF draft-richih-opsawg-openmetrics); the tests read it with a parser
written from its grammar.
"""

from __future__ import annotations

import math
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass
from datetime import datetime
from typing import Any

from leakpipe.history.rows import rows_of

PREFIX = "leakpipe"
END = "# EOF\n"


@dataclass(frozen=True)
class Family:
    """One metric family: all are gauges.

    Attributes
    ----------
    name
        Full name; ends with its unit.
    unit
        Unit, a suffix of the name.
    help_text
        One sentence.
    """

    name: str
    unit: str
    help_text: str


_RATIO, _ROUNDS, _SECONDS = "ratio", "rounds", "seconds"
FAMILIES = {
    "steady_leakage": (_RATIO, "Steady leaked population"),
    "injection": (_RATIO, "Injection of leakage per round"),
    "seepage": (_RATIO, "Seepage of leakage per round"),
    "settling_rounds": (_ROUNDS, "Settling time of leakage"),
    "assignment": (_RATIO, "Probability of a right reading"),
    "logical_error_per_round": (_RATIO, "Logical error per round"),
    "leakage_share": (_RATIO, "Part of the logical error per round that leakage causes"),
    "detection_rise": (_RATIO, "Relative rise of the detection probability"),
    "kappa": (_RATIO, "Covariance strength over rise strength"),
}
"""Quantity to its unit and its help text."""


def metrics_text(summaries: Sequence[Mapping[str, Any]]) -> str:
    """Return the exposition of some summaries.

    A quantity that is not identifiable has no sample of its value: absence is the honest number.
    Its interval ends are given where they are known.

    Parameters
    ----------
    summaries
        Contents of `summary.json`, one per device and patch.
    """
    samples: dict[str, list[str]] = {}
    families: dict[str, Family] = {}

    def put(family: Family, labels: Mapping[str, str], value: float) -> None:
        families[family.name] = family
        samples.setdefault(family.name, []).append(_sample(family.name, labels, value))

    for summary in summaries:
        for family, labels, value in _samples(summary):
            put(family, labels, value)
    lines = []
    for name, family in families.items():
        lines.append(f"# TYPE {name} gauge\n")
        if family.unit:
            lines.append(f"# UNIT {name} {family.unit}\n")
        lines.append(f"# HELP {name} {_escaped(family.help_text)}\n")
        lines += samples[name]
    return "".join([*lines, END])


def _samples(
    summary: Mapping[str, Any],
) -> Iterator[tuple[Family, dict[str, str], float]]:
    for row in rows_of(summary):
        place = {"device": row.device, "patch": row.patch, "basis": row.basis}
        quantity = row.quantity
        if quantity.startswith("share_route_"):
            place["route"] = quantity.removeprefix("share_route_")
            quantity, level = "leakage_share", "route_"
        elif row.qubit:
            place |= {"qubit": row.qubit, "role": row.role}
            level = "qubit_"
        elif row.role:
            place["role"] = row.role
            quantity, level = quantity.removeprefix(f"{row.role}_"), "role_"
        else:
            level = ""
        unit, said = FAMILIES[quantity]
        stem = f"{PREFIX}_{level}{quantity.removesuffix(f'_{unit}')}"
        about = {"": "whole code", "role_": "by role", "qubit_": "by qubit"}.get(level, "by route")
        for suffix, number, words in (
            ("", row.value, "value"),
            ("_low", row.low, "lower end of the interval"),
            ("_high", row.high, "upper end of the interval"),
        ):
            if number is not None and math.isfinite(number):
                help_text = f"{said}, {about}: {words}."
                yield Family(f"{stem}{suffix}_{unit}", unit, help_text), place, number
    yield from _of_epoch(summary)


def _of_epoch(summary: Mapping[str, Any]) -> Iterator[tuple[Family, dict[str, str], float]]:
    patches = sorted({patch["patch"] for patch in summary["patches"]})
    for patch in patches:
        place = {"device": summary["device"], "patch": patch}
        for name, said in (("acquired_at", "was recorded"), ("made_at", "had its result made")):
            seconds = datetime.fromisoformat(summary[name]).timestamp()
            family = Family(
                f"{PREFIX}_{name}_seconds", _SECONDS, f"When the newest epoch {said}, Unix time."
            )
            yield family, place, seconds
        for severity in ("note", "watch", "act"):
            count = sum(one["severity"] == severity for one in summary["findings"])
            family = Family(f"{PREFIX}_findings", "", "Findings of the newest epoch by severity.")
            yield family, {**place, "severity": severity}, float(count)


def _sample(name: str, labels: Mapping[str, str], value: float) -> str:
    inside = ",".join(f'{key}="{_escaped(text)}"' for key, text in labels.items())
    return f"{name}{{{inside}}} {value!r}\n"


def _escaped(text: str) -> str:
    """Escape backslash, line feed and double quote, as help texts and label values want it."""
    escaped = text.replace("\\", "\\\\").replace("\n", "\\n")
    return escaped.replace('"', '\\"')
