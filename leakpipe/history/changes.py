"""What moved between epochs beyond noise: findings from the rows of the history.

Per qubit the steady leakage (bases joined), per code steady leakage, logical error per round,
share and settling time. A shift that all qubits share in one epoch is one finding about the
readout calibration, and is taken off the single qubits before they are judged.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from itertools import pairwise

import numpy as np

from leakpipe.config.history import HistorySettings
from leakpipe.findings import Finding, Severity
from leakpipe.history.alarms import alarms
from leakpipe.history.judged import QUBIT_LEAKAGE, Judged, judge
from leakpipe.history.panel import epochs_of, panel
from leakpipe.history.rows import Row
from leakpipe.history.thresholds import WORTH_RAISING
from leakpipe.history.words import amount, title

OF_CODE = (
    ("data_steady_leakage", True),
    ("measure_steady_leakage", True),
    ("logical_error_per_round", False),
    ("leakage_share", False),
    ("settling_rounds", False),
)
"""Quantities of the whole code, and whether its bases measure the same thing."""
CHARTED = (QUBIT_LEAKAGE, *(quantity for quantity, _ in OF_CODE))
"""All that `changes` looks at."""

JUMP_SIGMA = 4.0
"""Errors that a jump from one epoch to the next must exceed: by chance once in 16 000 epochs of a
qubit, well below the chart's own false alarms (our choice)."""


def changes(
    rows: Iterable[Row], neighbours: Mapping[str, Sequence[str]], settings: HistorySettings
) -> list[Finding]:
    """Return everything that moved over the history, oldest epoch first.

    Each finding names its epoch in ``numbers["epoch"]``. Only what was known up to an epoch is
    used for its findings, so they do not change when later epochs arrive.

    Parameters
    ----------
    rows
        Rows of the history.
    neighbours
        Qubits that share a gate with each qubit; missing qubits have none.
    settings
        Limits and severities.
    """
    groups: dict[tuple[str, str], list[Row]] = {}
    for row in rows:
        groups.setdefault((row.device, row.patch), []).append(row)
    found = []
    for (_, patch), mine in groups.items():
        found += _of_patch(patch, mine, neighbours, settings)
    return found


def at_epoch(findings: Iterable[Finding], calibration_id: str) -> list[Finding]:
    """Return the findings of one epoch."""
    return [one for one in findings if one.numbers.get("epoch") == calibration_id]


def _of_patch(
    patch: str,
    rows: Sequence[Row],
    neighbours: Mapping[str, Sequence[str]],
    settings: HistorySettings,
) -> list[Finding]:
    epochs = epochs_of(rows)
    qubits = judge(
        panel(rows, QUBIT_LEAKAGE, epochs, of_qubits=True, join_bases=True), in_common=True
    )
    codes = [
        judge(
            panel(rows, quantity, epochs, of_qubits=False, join_bases=joined),
            shift=qubits.shift if quantity.endswith(QUBIT_LEAKAGE) else None,
        )
        for quantity, joined in OF_CODE
    ]
    found = _shared_shifts(patch, qubits)
    for judged in (qubits, *codes):
        found += alarms(patch, judged, qubits, neighbours, settings)
    found += _jumps(qubits, settings)
    found += _correlated(patch, (qubits, *codes))
    return [finding for _, finding in sorted(found, key=lambda pair: pair[0])]


def _shared_shifts(patch: str, qubits: Judged) -> list[tuple[int, Finding]]:
    """One finding when a shift in common begins, and one when the next epoch confirms it."""
    run, found = qubits.chart, []
    lasted = 0
    for now in np.arange(len(run.is_shared)):
        before = run.shared[now - 1] if now and run.is_shared[now - 1] else 0.0
        goes_on = run.is_shared[now] and before * run.shared[now] > 0
        lasted = lasted + 1 if goes_on else int(run.is_shared[now])
        if lasted in (1, 2):
            found.append((int(now), _shared_shift(patch, qubits, int(now), again=lasted == 2)))
    return found


def _shared_shift(patch: str, qubits: Judged, now: int, *, again: bool) -> Finding:
    one, run = qubits.panel, qubits.chart
    ratio, error = float(np.exp(run.shared[now])), float(run.shared_error[now])
    low, high = (ratio * float(np.exp(sign * 1.96 * error)) for sign in (-1, 1))
    count = int(np.isfinite(run.deviation[now]).sum())
    moved = f"Leakage of {count} qubits moved together by a factor {ratio:.2f}"
    interval_words = f"({low:.2f} to {high:.2f})"
    clue = (
        "for the second epoch: either both calibrations are off, or the whole chip changed"
        if again
        else "look at the readout calibration before any single qubit"
    )
    return Finding(
        "leakage-shifted-together",
        "watch",
        patch,
        f"{moved} {interval_words}; {clue}.",
        {
            "epoch": one.epochs[now],
            "quantity": one.quantity,
            "ratio": ratio,
            "ratio_low": low,
            "ratio_high": high,
            "sigma": abs(float(run.shared[now])) / error,
            "qubits": count,
        },
    )


def _jumps(qubits: Judged, settings: HistorySettings) -> list[tuple[int, Finding]]:
    """Qubits far from their last value before, beyond noise; works from the second epoch on."""
    one, run = qubits.panel, qubits.chart
    values = qubits.values
    found = []
    for column, series in enumerate(one.series):
        known = np.flatnonzero(np.isfinite(values[:, column]))
        for before, now in pairwise(known):
            step = values[now, column] - values[before, column]
            spread = np.sqrt(
                one.error[now, column] ** 2
                + one.error[before, column] ** 2
                + 2 * run.between[now] ** 2
            )
            large = abs(step) >= np.log(settings.limits.jump)
            if not large or abs(step) < JUMP_SIGMA * spread or run.alarm[now, column]:
                continue
            old, new = (
                (one.value[t, column], one.low[t, column], one.high[t, column])
                for t in (int(before), int(now))
            )
            sentence = (
                f"{series.qubit} {title(one.quantity)} jumped from "
                f"{amount(one.quantity, *old)} to {amount(one.quantity, *new)} since "
                f"calibration {one.epochs[before]}, {abs(step) / spread:.1f} standard errors."
            )
            numbers: dict[str, float | int | str | None] = {
                "epoch": one.epochs[now],
                "since": one.epochs[before],
                "quantity": one.quantity,
                "direction": 1 if step > 0 else -1,
                "from": float(old[0]),
                "to": float(new[0]),
                "ratio": float(np.exp(step)),
                "sigma": float(abs(step) / spread),
            }
            severity: Severity = "act" if step > 0 else "note"
            found.append(
                (int(now), Finding("leakage-jumped", severity, series.qubit, sentence, numbers))
            )
    return found


def _correlated(patch: str, all_judged: Sequence[Judged]) -> list[tuple[int, Finding]]:
    """One note at the newest epoch per quantity whose epochs hang together in time."""
    found = []
    for judged in all_judged:
        run, one = judged.chart, judged.panel
        if not len(run.is_correlated) or not run.is_correlated[-1]:
            continue
        phi, limit = float(run.between_correlation[-1]), float(run.threshold[-1])
        if not phi > WORTH_RAISING:
            continue
        sentence = (
            f"{title(one.quantity)} drifts from epoch to epoch (autocorrelation {phi:.2f}): the "
            f"threshold for a change was raised to {limit:.2f}, so changes are found later."
        )
        numbers: dict[str, float | int | str | None] = {
            "epoch": one.epochs[-1],
            "quantity": one.quantity,
            "autocorrelation": phi,
            "threshold": limit,
        }
        last = len(one.epochs) - 1
        found.append((last, Finding("epochs-correlated", "note", patch, sentence, numbers)))
    return found
