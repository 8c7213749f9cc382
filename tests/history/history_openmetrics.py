"""A strict reader of the OpenMetrics 1.0 text format, written from the standard's ABNF grammar.

    exposition   = metricset HASH SP eof [ LF ]
    metricset    = *metricfamily
    metricfamily = *metric-descriptor *metric
    metric-descriptor = HASH SP type SP metricname SP metric-type LF
                      / HASH SP help SP metricname SP escaped-string LF
                      / HASH SP unit SP metricname SP *metricname-char LF
    sample       = metricname [ labels ] SP number [ SP timestamp ] [ exemplar ] LF
    labels       = "{" [ label *( "," label ) ] "}"
    label        = label-name "=" DQUOTE escaped-string DQUOTE
    number       = realnumber / [SIGN] ("inf" / "infinity") / "nan"   (case insensitive)
    metricname   = metricname-initial-char 0*metricname-char    letters, "_", ":", then digits
    label-name   = label-name-initial-char *label-name-char     letters, "_", then digits
    escaped-string = *escaped-char; within it BS "n", BS DQUOTE, BS BS are the escapes

and the rules in words beside it: names of families are unique and not interleaved, every family has
its descriptors before its samples and each at most once, a unit is a suffix of the name after an
underscore, no two samples of a family have the same labels, gauges have samples of their own name.
Exemplars and timestamps are not written by leakpipe and refused here.
"""

from __future__ import annotations

import re
from dataclasses import dataclass, field

NAME = r"[a-zA-Z_:][a-zA-Z0-9_:]*"
TYPES = {
    "counter",
    "gauge",
    "histogram",
    "gaugehistogram",
    "stateset",
    "info",
    "summary",
    "unknown",
}
ESCAPED = r'(?:[^\\"\n]|\\[\\n"])*'
LABEL = rf'([a-zA-Z_][a-zA-Z0-9_]*)="({ESCAPED})"'
REAL = r"[+-]?(?:[0-9]+(?:\.[0-9]*)?|\.[0-9]+)(?:[eE][+-]?[0-9]+)?"
NUMBER = rf"(?:{REAL}|[+-]?[iI][nN][fF](?:[iI][nN][iI][tT][yY])?|[nN][aA][nN])"
DESCRIPTOR = re.compile(rf"# (TYPE|HELP|UNIT) ({NAME}) (.*)")
SAMPLE = re.compile(rf"({NAME})(?:\{{((?:{LABEL}(?:,{LABEL})*)?)\}})? ({NUMBER})")
HELP = re.compile(r'(?:[^\\"\n]|\\[\\n"])*')


@dataclass
class FamilyRead:
    """One metric family as read: descriptors and samples by sorted labels."""

    kind: str = ""
    help_text: str | None = None
    unit: str = ""
    samples: dict[tuple[tuple[str, str], ...], float] = field(default_factory=dict)


def unescaped(text: str) -> str:
    """Undo the three escapes."""
    return re.sub(r"\\(.)", lambda m: "\n" if m[1] == "n" else m[1], text)


def read_openmetrics(text: str) -> dict[str, FamilyRead]:
    """Return the families of an exposition.

    Raises
    ------
    ValueError
        The text breaks the grammar or the rules; the message says where.
    """
    if not text.endswith("# EOF\n") and not text.endswith("# EOF"):
        raise ValueError("does not end with # EOF")
    lines = text.removesuffix("\n").split("\n")[:-1]
    families: dict[str, FamilyRead] = {}
    current = ""
    for number, line in enumerate(lines, 1):
        described = DESCRIPTOR.fullmatch(line)
        sample = SAMPLE.fullmatch(line)
        name = described[2] if described else sample[1] if sample else None
        if name is None:
            raise ValueError(f"line {number} is neither descriptor nor sample: {line!r}")
        if name != current:
            if name in families:
                raise ValueError(f"line {number}: family {name} is interleaved")
            if not described:
                raise ValueError(f"line {number}: samples of {name} without descriptors")
            families[name], current = FamilyRead(), name
        family = families[name]
        if described:
            if family.samples:
                raise ValueError(f"line {number}: descriptor after the samples")
            _describe(family, name, described[1], described[3], number)
        else:
            assert sample is not None
            pairs = re.findall(LABEL, sample[2] or "")
            labels = tuple(sorted((key, unescaped(value)) for key, value in pairs))
            if len({key for key, _ in labels}) != len(labels):
                raise ValueError(f"line {number}: a label twice")
            if labels in family.samples:
                raise ValueError(f"line {number}: the same labels twice")
            family.samples[labels] = float(sample.groups()[-1])
    for name, family in families.items():
        if family.kind != "gauge":
            raise ValueError(f"{name} is not a gauge")
    return families


def _describe(family: FamilyRead, name: str, what: str, text: str, number: int) -> None:
    if what == "TYPE":
        if family.kind or text not in TYPES:
            raise ValueError(f"line {number}: type {text!r} twice or unknown")
        family.kind = text
    elif what == "HELP":
        if family.help_text is not None or not HELP.fullmatch(text):
            raise ValueError(f"line {number}: help twice or not escaped")
        family.help_text = unescaped(text)
    else:
        if family.unit or not name.endswith(f"_{text}") or not text:
            raise ValueError(f"line {number}: unit {text!r} twice or no suffix of {name}")
        family.unit = text
