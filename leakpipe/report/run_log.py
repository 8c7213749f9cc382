"""The run-log block: at most 25 lines that a tired person reads in ten seconds."""

from __future__ import annotations

import json
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

from leakpipe.estimates import Estimate
from leakpipe.findings import Finding
from leakpipe.report import attention
from leakpipe.report.wording import count, in_rounds, listed, moment, percent, plural, wrapped

MOST_LINES = 25
WIDTH = 78
INDENT = 11

CAUTION = (
    "Estimates rest on stated assumptions: check local practice and the "
    "responsible operator's judgement before changing hardware settings."
)


_FIXED = 9
"""Order of the paragraphs that are never shortened: verdict and caution."""


@dataclass(frozen=True)
class _Part:
    """A labelled paragraph; `order` says which is shortened first when there is no room."""

    label: str
    text: str
    most: int
    order: int


def verdict(summary: Mapping[str, Any]) -> tuple[str, str]:
    """Return the verdict word and its sentence.

    The word is ACT or WATCH after the most severe finding, BLIND if no leaked population and no
    share could be told (silence is then no good news), and QUIET otherwise.
    """
    act = [finding for finding in summary["findings"] if finding["severity"] == "act"]
    watch = [finding for finding in summary["findings"] if finding["severity"] == "watch"]
    if act:
        where = listed(_unique([finding["where"].split(": ")[-1] for finding in act]), most=3)
        also = f", {len(watch)} to watch" if watch else ""
        return "ACT", f"look at {where} first: {plural(len(act), 'finding')} to act on{also}."
    if _blind(summary):
        return "BLIND", "the recordings tell neither a leaked population nor a share."
    if watch:
        return "WATCH", f"nothing to act on, {plural(len(watch), 'finding')} to watch."
    return "QUIET", "nothing to act on, nothing to watch."


def _blind(summary: Mapping[str, Any]) -> bool:
    def known(estimate: Mapping[str, Any]) -> bool:
        return any(estimate[key] is not None for key in ("value", "low", "high"))

    return not any(
        known(patch["leakage_share"]) or any(map(known, patch["steady_leakage"].values()))
        for patch in summary["patches"]
    )


def _unique(words: Sequence[str]) -> list[str]:
    return list(dict.fromkeys(words))


def _tag(summary: Mapping[str, Any], patch: Mapping[str, Any]) -> str:
    """Return what tells this patch from the others of the summary: nothing if it is alone."""
    if len(summary["patches"]) == 1:
        return ""
    if len({other["patch"] for other in summary["patches"]}) == 1:
        return f"{patch['basis']} "
    return f"{patch['patch']} {patch['basis']} "


def run_log_block(summary: Mapping[str, Any], changes: Sequence[Finding] | None = None) -> str:
    """Return the block for `summary.md` and the terminal: at most 25 lines of at most 78 columns.

    Parameters
    ----------
    summary
        What `leakpipe.report.summary.summary` returned.
    changes
        Findings about what moved since the last calibration; empty if nothing did, None if no
        earlier epoch was compared with.
    """
    word, said = verdict(summary)
    parts = [_Part(word, said, 2, _FIXED), _Part("epoch", _epoch(summary), 3, 8)]
    for patch in summary["patches"]:
        parts += _patch_parts(patch, _tag(summary, patch))
    parts.append(_Part("look at", _look_at(summary), 3, 6))
    for severity, most, order in (("act", 5, 7), ("watch", 4, 2)):
        text = _of_severity(summary, severity, changes or ())
        if text:
            parts.append(_Part(severity, text, most, order))
    parts.append(_Part("changed", changed_words(changes), 3, 5))
    cannot = attention.unknowns(summary)
    if cannot:
        names = listed(_unique([one.quantity for one in cannot]))
        parts.append(_Part("cannot say", f"{names}; reasons on the page.", 3, 3))
    parts.append(_Part("caution", CAUTION, 3, _FIXED))
    return "\n".join(_fitted(parts)) + "\n"


def _fitted(parts: Sequence[_Part]) -> list[str]:
    """Lay the parts out, shortening the least important ones until they fit."""

    def lay(most: Sequence[int]) -> list[list[str]]:
        return [
            wrapped(part.label, part.text, width=WIDTH, indent=INDENT, most=lines)
            for part, lines in zip(parts, most, strict=True)
        ]

    most = [part.most for part in parts]
    while sum(map(len, laid := lay(most))) > MOST_LINES:
        used = [len(lines) for lines in laid]
        shortenable = [i for i, lines in enumerate(used) if lines > 1 and parts[i].order < _FIXED]
        if not shortenable:
            break
        first = min(shortenable, key=lambda i: (parts[i].order, -used[i]))
        most[first] = used[first] - 1
    *body, tail = laid
    lines = [line for block in body for line in block]
    room = MOST_LINES - len(tail)
    if len(lines) > room:
        # More patches than lines: keep the head and the caution, say what is missing.
        hidden = len(lines) - room + 1
        lines = [*lines[: room - 1], f"{'...':{INDENT}}{hidden} more lines on the page"]
    return [*lines, *tail]


def _epoch(summary: Mapping[str, Any]) -> str:
    kinds = _unique(
        [f"{p['patch']} ({p['family']}, distance {p['distance']})" for p in summary["patches"]]
    )
    runs = [
        f"{_tag(summary, patch)}{count(patch['shots'])} shots, {_rounds(patch['rounds'])}"
        for patch in summary["patches"]
    ]
    return (
        f"{summary['device']} {listed(kinds)}, calibration {summary['calibration_id']}, "
        f"{moment(summary['acquired_at'])}; {'; '.join(runs)}"
    )


def _rounds(rounds: Sequence[int]) -> str:
    if len(rounds) <= 1:
        return f"R = {rounds[0]}" if rounds else "no rounds"
    return f"R = {rounds[0]} to {rounds[-1]}"


def _patch_parts(patch: Mapping[str, Any], tag: str) -> list[_Part]:
    def of(name: str) -> Estimate:
        return Estimate(**patch[name])

    def role(name: str, which: str) -> Estimate:
        return Estimate(**patch[name][which])

    mark = f" {tag}".rstrip()
    rise = f"{percent(of('detection_rise'), sign=True)}; "
    rise += f"settling time {in_rounds(of('settling_rounds'))}"
    leaked = f"data {percent(role('steady_leakage', 'data'))}; "
    leaked += f"measure {percent(role('steady_leakage', 'measure'))}"
    logical = f"error per round {percent(of('logical_error_per_round'))}"
    return [
        _Part(f"rise{mark}", rise, 2, 4),
        _Part(f"leaked{mark}", leaked, 2, 4),
        _Part(f"logical{mark}", logical, 2, 4),
        _Part(f"share{mark}", _share(patch), 2, 4),
    ]


def _share(patch: Mapping[str, Any]) -> str:
    """Return the share with its interval, then the values of the routes that gave one."""
    said = f"from leakage {percent(Estimate(**patch['leakage_share']))}"
    routes = []
    for name, estimate in patch["share_routes"].items():
        if estimate["value"] is not None:
            routes.append(f"{name} {percent(Estimate(**estimate)).split(' (')[0]}")
    return f"{said}; by {', '.join(routes)}" if len(routes) > 1 else said


def _look_at(summary: Mapping[str, Any]) -> str:
    found = attention.joined(summary)
    if not found:
        known = any(
            qubit["steady_leakage"]["value"] is not None
            for patch in summary["patches"]
            for qubit in patch["qubits"]
        )
        return (
            "no qubit stands out from its kind."
            if known
            else "no leakage per qubit is identifiable, so none can be named."
        )
    several = len({patch["basis"] for patch in summary["patches"]}) > 1
    words = []
    for one, bases in found:
        seen = f", in {' and '.join(bases)}" if several else ""
        words.append(
            f"{one.qubit} {percent(one.leakage)}, {one.ratio:.1f} x the median "
            f"{one.role} qubit{seen}"
        )
    return f"{'; '.join(words[:3])}{f'; and {len(words) - 3} more' if len(words) > 3 else ''}."


def _of_severity(summary: Mapping[str, Any], severity: str, changes: Sequence[Finding]) -> str:
    """Return the findings of one severity; changes have a line of their own."""
    told = {(change.code, change.where) for change in changes}
    found = [
        finding
        for finding in summary["findings"]
        if finding["severity"] == severity and (finding["code"], finding["where"]) not in told
    ]
    return " ".join(placed(finding["where"], finding["sentence"]) for finding in found)


def placed(where: str, sentence: str) -> str:
    """Return the sentence with its place in front, as far as it does not begin with it anyway."""
    said = _sentence(sentence)
    head, separator, tail = where.rpartition(": ")
    if said.startswith(where):
        return said
    if separator and said.startswith(tail):
        return f"{head}: {said}"
    return f"{where}: {said}"


def _sentence(text: str) -> str:
    """Return the text with a full stop, so that several read as sentences."""
    return text if text.endswith((".", "!", "?")) else f"{text}."


def changed_words(changes: Sequence[Finding] | None) -> str:
    """Return what moved since the last calibration, in words."""
    if changes is None:
        return "not compared with an earlier epoch."
    if not changes:
        return "nothing beyond noise since the last calibration."
    return " ".join(placed(change.where, change.sentence) for change in changes)


def json_line(summary: Mapping[str, Any]) -> str:
    """Return the summary as one line of JSON with a line break, for a run log of such lines.

    Raises
    ------
    ValueError
        The summary holds a number that is not finite; JSON has none.
    """
    return json.dumps(summary, allow_nan=False, separators=(",", ":")) + "\n"
