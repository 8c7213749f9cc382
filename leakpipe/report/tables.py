"""Rows and cells of the page's tables."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from typing import Any

from markupsafe import Markup

from leakpipe.estimates import Estimate
from leakpipe.report import attention
from leakpipe.report.inputs import PatchReport
from leakpipe.report.marks import interval_bar
from leakpipe.report.wording import in_rounds, number, percent


@dataclass(frozen=True)
class Cell:
    """One cell: words, interval, what it sorts by, whether it is known, and an optional bar."""

    words: str
    interval: str = ""
    sort: str = ""
    known: bool = True
    place: str = ""
    bar: Markup | None = None


@dataclass(frozen=True)
class QubitRow:
    """One qubit's row."""

    qubit: str
    role: str
    stands_out: bool
    cells: list[Cell]


@dataclass(frozen=True)
class QubitTable:
    """The qubits of one patch and basis."""

    place: str
    heads: list[str]
    rows: list[QubitRow]


def _cell(
    estimate: Estimate, words: Callable[[Estimate], str], place: str = "", bar: Markup | None = None
) -> Cell:
    sort = "" if estimate.value is None else repr(float(estimate.value))
    said, bracket, interval = words(estimate).partition(" (")
    ends = f"({interval}" if bracket else ""
    return Cell(said, ends, sort, estimate.identifiable, place, bar)


def _signed(estimate: Estimate) -> str:
    return percent(estimate, sign=True)


def _plain(estimate: Estimate) -> str:
    return number(estimate)


def key_numbers(summary: Mapping[str, Any]) -> list[tuple[str, list[Cell]]]:
    """Return one row per quantity with a cell per patch."""
    rows: list[tuple[str, str, str | None, Callable[[Estimate], str]]] = [
        ("rise of the detection probability", "detection_rise", None, _signed),
        ("settling time", "settling_rounds", None, in_rounds),
        ("steady leakage, data qubits", "steady_leakage", "data", percent),
        ("steady leakage, measure qubits", "steady_leakage", "measure", percent),
        ("injection per round, data qubits", "injection", "data", percent),
        ("injection per round, measure qubits", "injection", "measure", percent),
        ("seepage per round, data qubits", "seepage", "data", percent),
        ("seepage per round, measure qubits", "seepage", "measure", percent),
        ("kappa (1 leakage, 0 heating)", "kappa", None, _plain),
        ("logical error per round", "logical_error_per_round", None, percent),
        ("share of it from leakage", "leakage_share", None, percent),
    ]
    table = []
    for words, name, role, write in rows:
        cells = []
        for patch in summary["patches"]:
            part = patch[name] if role is None else patch[name][role]
            cells.append(_cell(Estimate(**part), write, f"{patch['patch']} {patch['basis']}"))
        table.append((words, cells))
    return table


def qubit_tables(summary: Mapping[str, Any], patches: Sequence[PatchReport]) -> list[QubitTable]:
    """Return one table per patch and basis: leakage, rates, readout, probability of being worst."""
    tables = []
    for position, part in enumerate(summary["patches"]):
        odd = {one.qubit for one in attention.outliers(part)}
        worst = _worst(patches[position]) if position < len(patches) else {}
        heads = [
            "qubit",
            "kind",
            "steady leakage",
            "injection",
            "seepage",
            "settling time",
            "right readings",
        ]
        if worst:
            heads.append("chance to be the worst of its kind")
        tops = [qubit["steady_leakage"]["high"] or 0.0 for qubit in part["qubits"]]
        largest = max(tops, default=0.0)
        rows = [_row(qubit, largest, odd, worst) for qubit in part["qubits"]]
        tables.append(QubitTable(f"{part['patch']} {part['basis']}", heads, rows))
    return tables


def _row(
    qubit: Mapping[str, Any], largest: float, odd: set[str], worst: Mapping[str, float]
) -> QubitRow:
    def of(name: str) -> Estimate:
        return Estimate(**qubit[name])

    leakage = of("steady_leakage")
    cells = [
        _cell(leakage, percent, bar=interval_bar(leakage, largest, qubit["role"])),
        _cell(of("injection"), percent),
        _cell(of("seepage"), percent),
        _cell(of("settling_rounds"), in_rounds),
        Cell("not reported", known=False)
        if qubit["assignment"] is None
        else _cell(of("assignment"), percent),
    ]
    if worst:
        chance = worst.get(qubit["qubit"])
        cells.append(
            Cell("not known", known=False)
            if chance is None
            else Cell(_chance(chance), sort=repr(float(chance)))
        )
    return QubitRow(qubit["qubit"], qubit["role"], qubit["qubit"] in odd, cells)


def _chance(chance: float) -> str:
    """Return a probability in words; the bootstrap behind it cannot tell 0.2 % from 0.4 %."""
    if chance < 0.01:
        return "under 1 %"
    return "over 99 %" if chance > 0.99 else f"{100 * chance:.0f} %"


def _worst(patch: PatchReport) -> dict[str, float]:
    """Return the probability that each qubit is the worst, where the rates stage gives it."""
    values = patch.array("rates", "worst_probability", ("qubit",))
    if values is None:
        return {}
    names = patch.labels("rates", "qubit")
    return {
        str(name): float(value)
        for name, value in zip(names, values, strict=True)
        if value == value  # not NaN
    }


@dataclass(frozen=True)
class RouteRow:
    """One route of the share in one patch."""

    name: str
    place: str
    words: str
    known: bool
    basis: str
    bar: Markup


def routes(summary: Mapping[str, Any]) -> list[RouteRow]:
    """Return the reported share and the routes of every patch, the reported one first."""
    rows = []
    for patch in summary["patches"]:
        place = f"{patch['patch']} {patch['basis']}"
        named = [("reported", patch["leakage_share"]), *patch["share_routes"].items()]
        ends = [part["high"] for _, part in named if part["high"] is not None]
        largest = max(ends, default=0.0)
        for name, part in named:
            estimate = Estimate(**part)
            color = "third" if name == "reported" else "data"
            bar = interval_bar(estimate, largest, color)
            rows.append(
                RouteRow(name, place, percent(estimate), estimate.identifiable, estimate.basis, bar)
            )
    return rows
