"""The history in the terminal: epochs, one quantity per line, one qubit over time.

Everything returns text or what JSON can write; the command prints it.
"""

from __future__ import annotations

import math
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import asdict
from typing import Any

from leakpipe.history.rows import Row
from leakpipe.history.store import EpochLine
from leakpipe.history.words import amount, title

BLOCKS = "▁▂▃▄▅▆▇█"
GAP = "·"
MOST_EPOCHS = 40
"""Epochs in a sparkline: it stays on one line of a terminal."""
OF_CODE = (
    "logical_error_per_round",
    "leakage_share",
    "detection_rise",
    "settling_rounds",
    "data_steady_leakage",
    "measure_steady_leakage",
)
"""Quantities of the whole code that the overview shows, in this order."""


def sparkline(values: Sequence[float | None]) -> str:
    """Return the last values as a row of bars from their lowest to their highest, gaps dotted."""
    shown = list(values)[-MOST_EPOCHS:]
    known = [value for value in shown if value is not None and math.isfinite(value)]
    if not known:
        return GAP * len(shown)
    low, high = min(known), max(known)
    top = len(BLOCKS) - 1

    def bar(value: float | None) -> str:
        if value is None or not math.isfinite(value):
            return GAP
        return BLOCKS[round((value - low) / (high - low) * top) if high > low else top // 2]

    return "".join(map(bar, shown))


def epochs_text(epochs: Sequence[EpochLine]) -> str:
    """Return the list of epochs, newest last."""
    if not epochs:
        return "the history is empty"
    head = ("recorded", "calibration", "patch", "basis", "shots", "act", "watch")
    lines = [
        (
            one.acquired_at[:16].replace("T", " "),
            one.calibration_id,
            one.patch,
            one.bases,
            f"{one.shots:,}",
            str(one.act),
            str(one.watch),
        )
        for one in epochs
    ]
    return _table(head, lines, right={4, 5, 6})


def overview_text(rows: Iterable[Row], flags: Sequence[Mapping[str, Any]]) -> str:
    """Return one line per quantity of the code and its newest value, then what changed.

    Parameters
    ----------
    rows
        Rows of the whole code.
    flags
        Findings of the change detection, as JSON has them, oldest first.
    """
    series = _series(row for row in rows if not row.qubit)
    lines = []
    for (device, patch, basis, _, quantity), found in sorted(series.items(), key=_overview_order):
        if quantity in OF_CODE:
            lines.append((_place(device, patch, basis), title(quantity), *_newest(found)))
    if not lines:
        return "the history is empty"
    table = _table(("patch", "quantity", "newest", "over the epochs"), lines)
    return f"{table}\n\n{changes_text(flags)}"


def quantity_text(rows: Iterable[Row], quantity: str) -> str:
    """Return one quantity: a line per qubit (or for the whole code) and its newest value."""
    series = _series(row for row in rows if row.quantity == quantity)
    if not series:
        return f'the history holds no "{quantity}"'
    lines = [
        (_place(device, patch, basis), qubit or "all", *_newest(found))
        for (device, patch, basis, qubit, _), found in sorted(series.items())
    ]
    return _table(("patch", "qubit", title(quantity), "over the epochs"), lines)


def qubit_text(rows: Iterable[Row], qubit: str, quantity: str = "steady_leakage") -> str:
    """Return one qubit over time: a line per epoch with the value, its interval and a bar."""
    mine = [row for row in rows if row.qubit == qubit and row.quantity == quantity]
    if not mine:
        return f'the history holds no {title(quantity)} of "{qubit}"'
    highest = max((row.high or row.value or 0.0 for row in mine), default=0.0)
    lines = [
        (
            row.acquired_at[:16].replace("T", " "),
            row.calibration_id,
            _place("", row.patch, row.basis),
            amount(quantity, row.value, row.low, row.high),
            _interval_bar(row, highest),
        )
        for row in mine
    ]
    head = ("recorded", "calibration", "patch", f"{qubit} {title(quantity)}", "interval")
    return _table(head, lines)


def changes_text(flags: Sequence[Mapping[str, Any]]) -> str:
    """Return what changed, newest last, one line a finding."""
    if not flags:
        return "nothing moved beyond noise"
    return "\n".join(
        f"{flag['severity']:<5}  {flag['numbers'].get('epoch', '')}  {flag['sentence']}"
        for flag in flags
    )


def log_json(
    epochs: Sequence[EpochLine], rows: Iterable[Row], flags: Sequence[Mapping[str, Any]]
) -> dict[str, Any]:
    """Return the same for machines."""
    return {
        "epochs": [asdict(one) for one in epochs],
        "rows": [asdict(row) for row in rows],
        "changes": [dict(flag) for flag in flags],
    }


def page_rows(rows: Iterable[Row], flags: Sequence[Mapping[str, Any]]) -> list[dict[str, Any]]:
    """Return the rows as the page over all epochs takes them, each with its flags."""
    flagged: dict[tuple[Any, Any, Any], list[str]] = {}
    for flag in flags:
        numbers = flag["numbers"]
        key = (numbers.get("epoch"), numbers.get("quantity"), flag["where"])
        flagged.setdefault(key, []).append(flag["code"])
    return [
        {
            "epoch": row.calibration_id,
            "acquired_at": row.acquired_at,
            "patch": row.patch if row.basis == "" else f"{row.patch} {row.basis}",
            "qubit": row.qubit,
            "quantity": row.quantity,
            "value": row.value,
            "low": row.low,
            "high": row.high,
            "flags": [
                code
                for where in (row.qubit, f"{row.patch} {row.basis}", row.patch)
                if where
                for code in flagged.get((row.calibration_id, row.quantity, where), [])
            ],
        }
        for row in rows
    ]


_Key = tuple[str, str, str, str, str]


def _series(rows: Iterable[Row]) -> dict[_Key, list[Row]]:
    series: dict[_Key, list[Row]] = {}
    for row in rows:
        key = (row.device, row.patch, row.basis, row.qubit, row.quantity)
        series.setdefault(key, []).append(row)
    return series


def _overview_order(item: tuple[_Key, list[Row]]) -> tuple[str, str, str, int]:
    (device, patch, basis, _, quantity), _ = item
    place = OF_CODE.index(quantity) if quantity in OF_CODE else len(OF_CODE)
    return device, patch, basis, place


def _newest(found: Sequence[Row]) -> tuple[str, str]:
    last = found[-1]
    said = amount(last.quantity, last.value, last.low, last.high)
    return said, sparkline([row.value for row in found])


def _place(device: str, patch: str, basis: str) -> str:
    return " ".join(part for part in (device, patch, basis) if part)


BAR = 24
"""Columns of an interval bar."""


def _interval_bar(row: Row, highest: float) -> str:
    """Return the interval as dashes with a dot at the value, on a scale from 0 to `highest`."""
    if highest <= 0 or row.high is None:
        return ""

    def column(number: float) -> int:
        return min(max(round(number / highest * (BAR - 1)), 0), BAR - 1)

    cells = [" "] * BAR
    low = row.low if row.low is not None else 0.0
    for place in range(column(low), column(row.high) + 1):
        cells[place] = "─"
    if row.value is not None:
        cells[column(row.value)] = "●"
    return "".join(cells).rstrip()


def _table(
    head: Sequence[str], lines: Sequence[Sequence[str]], right: set[int] | None = None
) -> str:
    """Lay lines out in columns, those of `right` flush right."""
    right = right or set()
    widths = [max(len(line[i]) for line in (head, *lines)) for i in range(len(head))]

    def laid(line: Sequence[str]) -> str:
        cells = [
            text.rjust(width) if i in right else text.ljust(width)
            for i, (text, width) in enumerate(zip(line, widths, strict=True))
        ]
        return "  ".join(cells).rstrip()

    return "\n".join([laid(head), *map(laid, lines)])
