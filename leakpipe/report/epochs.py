"""`epochs.html`: trends over all epochs with their intervals and flags."""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass
from typing import Any

from markupsafe import Markup

from leakpipe.estimates import Estimate
from leakpipe.findings import Finding
from leakpipe.report.marks import LOW, TALL, Moment, trend
from leakpipe.report.web import CAUTION, capitalised, rendered
from leakpipe.report.wording import in_rounds, listed, moment, number, percent

IN_ROUNDS = ("settling_rounds",)
PLAIN = ("kappa",)
CODE_FIRST = (
    "leakage_share",
    "logical_error_per_round",
    "data_steady_leakage",
    "measure_steady_leakage",
    "detection_rise",
    "settling_rounds",
    "kappa",
)
"""Quantities of the whole code that are shown first, in this order."""


@dataclass(frozen=True)
class _Series:
    """One quantity of one patch, of the code or of one qubit, over the epochs."""

    moments: list[Moment]
    flagged: list[str]

    @property
    def last(self) -> Estimate:
        return self.moments[-1].estimate


def epochs_page(rows: Iterable[Mapping[str, Any]], flags: Sequence[Any]) -> str:
    """Return the HTML of the page over all epochs.

    Parameters
    ----------
    rows
        One per epoch, patch, qubit and quantity, with keys ``epoch`` (or ``calibration_id``),
        ``acquired_at``, ``patch``, ``qubit`` (None or "" for the whole code), ``quantity``,
        ``value``, ``low``, ``high``; optionally ``basis``, ``device`` and ``flags`` (a text or a
        list; anything not empty marks the epoch).
    flags
        What moved, the newest last: findings, or dicts with ``severity``, ``where``, ``sentence``
        and optionally ``numbers`` with ``epoch`` and ``quantity``, which mark the epoch as well.
    """
    rows = _marked(list(rows), flags)
    epochs = _epochs(rows)
    series = _series(rows, epochs)
    patches = []
    for name in dict.fromkeys(str(row["patch"]) for row in rows):
        mine = {key[1:]: one for key, one in series.items() if key[0] == name}
        patches.append({"name": name, "code": _code(mine), "qubits": _qubits(mine)})
    moments = [moment(str(row["acquired_at"])) for row in rows]
    span = f"From {min(moments)} to {max(moments)}." if moments else ""
    content = {
        "epochs": len(epochs),
        "span": span,
        "patches": patches,
        "flags": [_flag(flag) for flag in reversed(flags)],
        "caution": CAUTION,
    }
    return rendered("epochs.html", content)


def _marked(rows: Sequence[Mapping[str, Any]], flags: Sequence[Any]) -> list[dict[str, Any]]:
    """Return the rows with one name for patch and basis, their epoch, and whether flagged."""
    several = len({row.get("device") for row in rows}) > 1
    told = set()
    for flag in flags:
        said = _as_dict(flag)
        numbers = said.get("numbers") or {}
        told.add((numbers.get("epoch"), numbers.get("quantity"), said.get("where")))
    marked = []
    for row in rows:
        epoch = str(row["epoch"] if "epoch" in row else row["calibration_id"])
        place = " ".join(filter(None, (str(row["patch"]), str(row.get("basis") or ""))))
        where = str(row.get("qubit") or "") or place
        marked.append(
            {
                **row,
                "epoch": epoch,
                "patch": f"{row['device']} {place}" if several else place,
                "flags": bool(row.get("flags")) or (epoch, row["quantity"], where) in told,
            }
        )
    return marked


def _as_dict(flag: Any) -> dict[str, Any]:
    return flag.to_json() if isinstance(flag, Finding) else dict(flag)


def _epochs(rows: Sequence[Mapping[str, Any]]) -> list[str]:
    """Return the epochs in the order they were recorded in."""
    first: dict[str, str] = {}
    for row in rows:
        epoch, at = str(row["epoch"]), str(row["acquired_at"])
        first[epoch] = min(first.get(epoch, at), at)
    return sorted(first, key=lambda epoch: (first[epoch], epoch))


def _series(
    rows: Sequence[Mapping[str, Any]], epochs: Sequence[str]
) -> dict[tuple[str, str, str], _Series]:
    """Return (patch, quantity, qubit) to its values, with a gap where an epoch has none."""
    found: dict[tuple[str, str, str], dict[str, Moment]] = {}
    for row in rows:
        key = (str(row["patch"]), str(row["quantity"]), str(row.get("qubit") or ""))
        estimate = Estimate(
            row["value"], row["low"], row["high"], identifiable=row["value"] is not None
        )
        epoch, when = str(row["epoch"]), moment(str(row["acquired_at"]))
        words = f"{epoch}, {when}: {_words(key[1], estimate)}"
        found.setdefault(key, {})[epoch] = Moment(estimate, bool(row.get("flags")), words)
    gap = Moment(Estimate.unknown("no result in this epoch"))
    return {
        key: _Series(
            [by_epoch.get(epoch, gap) for epoch in epochs],
            [epoch for epoch in epochs if by_epoch.get(epoch, gap).flagged],
        )
        for key, by_epoch in found.items()
    }


def _words(quantity: str, estimate: Estimate) -> str:
    if quantity in IN_ROUNDS:
        return in_rounds(estimate)
    if quantity in PLAIN:
        return number(estimate)
    return percent(estimate)


def _title(quantity: str) -> str:
    return capitalised(quantity.replace("_", " "))


def _order(quantity: str) -> tuple[int, str]:
    place = CODE_FIRST.index(quantity) if quantity in CODE_FIRST else len(CODE_FIRST)
    return place, quantity


def _code(mine: Mapping[tuple[str, str], _Series]) -> list[dict[str, Any]]:
    shown = []
    for quantity, qubit in sorted(mine, key=lambda key: _order(key[0])):
        if qubit:
            continue
        one = mine[quantity, qubit]
        values = [m.estimate.value for m in one.moments if m.estimate.value is not None]
        ends = [min(values), max(values)] if values else []
        reach = [_words(quantity, Estimate(end, None, None)) for end in ends]
        if len(reach) > 1:
            # The unit once, at the end.
            reach[0] = reach[0].split(" ")[0]
        shown.append(
            {
                "title": _title(quantity),
                "svg": trend(one.moments, "data", TALL, reach[-1] if reach else ""),
                "last": _words(quantity, one.last),
                "range": " to ".join(reach) if reach else "none known",
                "flagged": listed(one.flagged),
            }
        )
    return shown


def _qubits(mine: Mapping[tuple[str, str], _Series]) -> list[tuple[str, list[dict[str, Any]]]]:
    quantities = dict.fromkeys(quantity for quantity, qubit in mine if qubit)
    tables = []
    for quantity in quantities:
        rows: list[dict[str, Any]] = []
        for name, qubit in mine:
            if name != quantity or not qubit:
                continue
            one = mine[name, qubit]
            svg: Markup = trend(one.moments, "data", LOW)
            rows.append(
                {
                    "qubit": qubit,
                    "last": _words(quantity, one.last),
                    "sort": "" if one.last.value is None else repr(float(one.last.value)),
                    "svg": svg,
                    "flagged": listed(one.flagged, most=3),
                }
            )
        # Flagged qubits first; the rest as the history gives them.
        rows.sort(key=lambda row: not row["flagged"])
        tables.append((_title(quantity), rows))
    return tables


def _flag(flag: Any) -> dict[str, str]:
    said = _as_dict(flag)
    return {
        "severity": str(said.get("severity", "watch")),
        "where": str(said.get("where", "")),
        "sentence": str(said.get("sentence", "")),
        "epoch": str(said.get("epoch") or (said.get("numbers") or {}).get("epoch") or ""),
    }
