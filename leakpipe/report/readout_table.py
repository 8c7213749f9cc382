"""The page's table of readout diagnostics, one row per qubit, from whatever the stages report."""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np

from leakpipe.report.inputs import PatchReport


@dataclass
class ReadoutTable:
    """Column headings and, per qubit, its texts and what they sort by ("" if not reported)."""

    place: str
    heads: list[str] = field(default_factory=list)
    rows: dict[str, list[tuple[str, str]]] = field(default_factory=dict)

    def add(self, head: str, values: dict[str, float], form: str, scale: float = 1.0) -> None:
        """Add a column of plain numbers; a missing or not finite one reads "-"."""
        self.heads.append(head)
        for qubit, row in self.rows.items():
            value = values.get(qubit, np.nan)
            known = bool(np.isfinite(value))
            row.append((form.format(scale * value), repr(float(value))) if known else ("-", ""))


def readout_table(patch: PatchReport) -> ReadoutTable | None:
    """Return the diagnostics of every qubit, or None without a readout model.

    Plain numbers, without intervals: they describe the calibration and are no results.
    """
    names = [str(name) for name in patch.labels("model", "qubit")]
    wanted = [name for name in (*patch.layout.data, *patch.layout.measure) if name in names]
    if not wanted:
        return None
    table = ReadoutTable(patch.label, rows={name: [] for name in wanted})
    _matrix(table, patch, names, "assignment", "misread true {} (%)", ("state", "label"))
    weights = ("prepared", "state")
    _matrix(table, patch, names, "preparation_weight", "failed preparation of {} (%)", weights)
    _columns(table, patch, names, "separation", "pair_of_states", "distance {} (sigma)", "{:.1f}")
    _columns(table, patch, names, "decay", "tail", "decay {} (%)", "{:.2f}", 100.0)
    for name, head, form, scale in (
        ("error_ratio", "leakage error against ideal", "{:.2f}", 1.0),
        ("missing", "missing (%)", "{:.2f}", 100.0),
        ("rail", "at the rail (%)", "{:.2f}", 100.0),
        ("temperature_mk", "effective temperature (mK)", "{:.0f}", 1.0),
    ):
        values = patch.array("model", name, ("qubit",))
        if values is not None:
            table.add(head, dict(zip(names, values.tolist(), strict=True)), form, scale)
    _drift(table, patch)
    return table if table.heads else None


def _matrix(
    table: ReadoutTable,
    patch: PatchReport,
    names: list[str],
    variable: str,
    head: str,
    dims: tuple[str, str],
) -> None:
    """Add one minus the diagonal of a matrix per qubit, a column per state."""
    values = patch.array("model", variable, ("qubit", *dims))
    if values is None:
        return
    for state in range(min(values.shape[1:])):
        wrong = 1 - values[:, state, state]
        if np.isfinite(wrong).any():
            column = dict(zip(names, wrong.tolist(), strict=True))
            table.add(head.format(state), column, "{:.2f}", 100.0)


def _columns(
    table: ReadoutTable,
    patch: PatchReport,
    names: list[str],
    variable: str,
    dim: str,
    head: str,
    form: str,
    scale: float = 1.0,
) -> None:
    """Add a column per label of a dimension."""
    values = patch.array("model", variable, ("qubit", dim))
    if values is None:
        return
    for position, label in enumerate(patch.labels("model", dim)):
        column = dict(zip(names, values[:, position].tolist(), strict=True))
        table.add(head.format(label), column, form, scale)


def _drift(table: ReadoutTable, patch: PatchReport) -> None:
    """Add the largest misfit, rotation and gain change over the recordings."""
    qubits = [str(name) for name in patch.labels("readout", "qubit")]
    for name, head, form, centre, scale in (
        ("phi", "misfit per shot, worst (1e-3)", "{:.1f}", 0.0, 1e3),
        ("rotation", "rotation, largest (degrees)", "{:+.1f}", 0.0, 180 / np.pi),
        ("gain", "gain, furthest from 1", "{:.3f}", 1.0, 1.0),
    ):
        values = patch.array("readout", name, ("recording", "qubit"))
        if values is None or not np.isfinite(values).any():
            continue
        away = np.where(np.isfinite(values), np.abs(values - centre), -1.0)
        furthest = np.take_along_axis(values, away.argmax(axis=0)[None], axis=0)[0]
        table.add(head, dict(zip(qubits, furthest.tolist(), strict=True)), form, scale)
