"""Findings from alarms of the chart: what moved, from what to what, how sure, where to look."""

from __future__ import annotations

from collections.abc import Mapping, Sequence

import numpy as np

from leakpipe.config.history import HistorySettings
from leakpipe.findings import Finding, Severity
from leakpipe.history import evidence
from leakpipe.history.chart import Chart
from leakpipe.history.judged import QUBIT_LEAKAGE, Judged
from leakpipe.history.panel import floor_of, from_scale, interval
from leakpipe.history.words import amount, joined, title

FALSE_ALARMS = 0.8e-3
"""False alarms per epoch, series and direction (`studies.chart`: 0.56e-3 to 0.94e-3)."""
TOGETHER = 2
"""Epochs that a qubit's own flag may lie before the start of its role's (our choice)."""


def alarms(
    patch: str,
    judged: Judged,
    qubits: Judged,
    neighbours: Mapping[str, Sequence[str]],
    settings: HistorySettings,
) -> list[tuple[int, Finding]]:
    """Return every alarm of a chart as (number of its epoch, finding).

    Parameters
    ----------
    patch
        Name of the patch.
    judged
        The quantity.
    qubits
        Steady leakage of the qubits, to tell a mean that moved with some of its qubits.
    neighbours
        Qubits that share a gate with each qubit.
    settings
        Severities.
    """
    found = []
    for now, column in zip(*np.nonzero(judged.chart.alarm), strict=True):
        numbers = _numbers(judged, int(now), int(column))
        series = judged.panel.series[column]
        words, severity = _sentence(judged, numbers, int(now), int(column), settings)
        since = judged.panel.epochs.index(str(numbers["since"]))
        if series.qubit:
            clue = evidence.around(
                series.qubit, neighbours, judged.panel, judged.chart, since, int(now)
            )
            if int(judged.chart.alarm[now, column]) > 0:
                # Nobody has to look for the cause of less leakage.
                words = f"{words}; {clue.words}"
            numbers["neighbours_moved"] = ",".join(clue.moved)
        elif series.role:
            flagged = _flagged(qubits, series.role, int(now), since, numbers["direction"])
            if flagged:
                # The qubits have findings of their own: their mean is only told.
                words, severity = f"{words}; flagged with it: {joined(flagged)}", "note"
        where = series.qubit or f"{patch} {series.basis}"
        code = f"{_code(judged.panel.quantity)}-changed"
        found.append((int(now), Finding(code, severity, where, f"{words}.", numbers)))
    return found


def _numbers(judged: Judged, now: int, column: int) -> dict[str, float | int | str | None]:
    one, run, quantity = judged.panel, judged.chart, judged.panel.quantity
    since = _change_point(run, int(run.since[now, column]), now, column)
    # The baseline of the first epoch that deviated: later ones may have learned from the change.
    before = float(run.baseline[since, column])
    before_error = float(run.baseline_error[since, column])
    after, after_error, count = _level(judged, since, now, column)
    error = float(np.hypot(before_error, after_error))
    old = (float(from_scale(quantity, before)), *interval(quantity, before, before_error))
    new = (float(from_scale(quantity, after)), *interval(quantity, after, after_error))
    ratio = _ratio(quantity, after - before, error, old[0], new[0])
    return {
        "epoch": one.epochs[now],
        "since": one.epochs[since],
        "epochs_since": count,
        "quantity": quantity,
        "direction": int(run.alarm[now, column]),
        **dict(zip(("from", "from_low", "from_high"), old, strict=True)),
        **dict(zip(("to", "to_low", "to_high"), new, strict=True)),
        **dict(zip(("ratio", "ratio_low", "ratio_high"), ratio, strict=True)),
        "sigma": abs(after - before) / error,
        "threshold": float(run.threshold[now]),
    }


def _sentence(
    judged: Judged,
    numbers: Mapping[str, float | int | str | None],
    now: int,
    column: int,
    settings: HistorySettings,
) -> tuple[str, Severity]:
    one, quantity = judged.panel, judged.panel.quantity
    qubit = one.series[column].qubit
    old, new = (
        [_float(numbers[f"{name}{end}"]) for end in ("", "_low", "_high")]
        for name in ("from", "to")
    )
    count, direction = numbers["epochs_since"], int(judged.chart.alarm[now, column])
    once_in = 1 / (FALSE_ALARMS * max(int(np.isfinite(one.scaled[now]).sum()), 1))
    name = f"{qubit} {title(quantity)}" if qubit else title(quantity).capitalize()
    words = (
        f"{name} {'rose' if direction > 0 else 'fell'} from {amount(quantity, *old)} "
        f"to {amount(quantity, *new)} since calibration {numbers['since']}, "
        f"{numbers['sigma']:.1f} standard errors over {count} epoch{'' if count == 1 else 's'}; "
        f"by chance about once in {once_in:.0f} epochs"
    )
    return words, _severity(quantity, direction, _float(numbers["ratio"]), settings)


def _float(value: float | int | str | None) -> float | None:
    return None if value is None else float(value)


def _flagged(
    qubits: Judged, role: str, now: int, since: int, direction: float | int | str | None
) -> list[str]:
    """Return the qubits of a role with an alarm of their own in the same direction and time."""
    window = qubits.chart.alarm[max(since - TOGETHER, 0) : now + 1]
    return [
        series.qubit
        for column, series in enumerate(qubits.panel.series)
        if series.role == role and (window[:, column] == direction).any()
    ]


def _change_point(run: Chart, first: int, now: int, column: int) -> int:
    """Return the epoch from which on the deviations speak most for a change.

    The sum may have left zero by chance a little earlier: of all starts u the one with the
    largest (sum of z from u to now)^2 over their number, the likelihood ratio of a step.
    """
    z = np.nan_to_num(run.deviation[first : now + 1, column])
    known = np.isfinite(run.deviation[first : now + 1, column])
    sums = np.cumsum(z[::-1])[::-1]
    counts = np.maximum(np.cumsum(known[::-1])[::-1], 1)
    return first + int(np.argmax(np.where(known, sums**2 / counts, -1.0)))


def _level(judged: Judged, since: int, now: int, column: int) -> tuple[float, float, int]:
    """Return the level of a series over some epochs, its error and the number of values."""
    values = judged.values[since : now + 1, column]
    errors = judged.panel.error[since : now + 1, column]
    good = np.isfinite(values) & np.isfinite(errors)
    weights = 1.0 / (errors[good] ** 2 + judged.chart.between[now] ** 2)
    middle = float((weights * values[good]).sum() / weights.sum())
    return middle, float(weights.sum() ** -0.5), int(good.sum())


def _ratio(
    quantity: str, difference: float, error: float, old: float, new: float
) -> tuple[float | None, float | None, float | None]:
    if floor_of(quantity) is None:
        return (new / old if old > 0 else None), None, None
    low, high = (float(np.exp(difference + sign * 1.96 * error)) for sign in (-1, 1))
    return float(np.exp(difference)), low, high


def _severity(
    quantity: str, direction: int, ratio: float | None, settings: HistorySettings
) -> Severity:
    if direction < 0:
        return "note"
    if quantity == "settling_rounds" or ratio is None or ratio < settings.act_ratio:
        return "watch"
    return "act"


def _code(quantity: str) -> str:
    return "leakage" if quantity.endswith(QUBIT_LEAKAGE) else title(quantity).replace(" ", "-")
