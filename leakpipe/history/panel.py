"""Rows of the history as arrays: one quantity, its series, every epoch."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from statistics import NormalDist

import numpy as np
from numpy.typing import NDArray

from leakpipe.history.rows import Row

LOG_FLOOR = {"steady_leakage": 1e-4, "logical_error_per_round": 1e-6, "settling_rounds": 1e-2}
"""Where the logarithmic scale of a quantity turns linear, so that zero and below have a place: a
hundredth of what these quantities usually are (our choice). A population of 1 % moves by 1e-4 of
itself. Quantities not named here keep a linear scale."""
SAME_DIGITS = 1e-12
"""Smallest standard error, relative to the value: a rounded interval may have no width at all."""

Floats = NDArray[np.float64]


@dataclass(frozen=True)
class Series:
    """What one column of a panel is about; `basis` is "X Z" where both bases were joined."""

    basis: str
    qubit: str
    role: str


@dataclass(frozen=True)
class Panel:
    """One quantity over the epochs.

    Attributes
    ----------
    quantity
        Its name.
    epochs
        Names of the calibrations, oldest first.
    series
        The columns.
    value, low, high
        As reported, (epoch, series), NaN where there is none; joined bases are their weighted mean.
    scaled, error
        On the chart's scale, and its standard error there, (epoch, series).
    """

    quantity: str
    epochs: tuple[str, ...]
    series: tuple[Series, ...]
    value: Floats
    low: Floats
    high: Floats
    scaled: Floats
    error: Floats


def epochs_of(rows: Iterable[Row]) -> tuple[str, ...]:
    """Return the names of the calibrations in the order they were taken."""
    first: dict[str, str] = {}
    for row in rows:
        at = first.setdefault(row.calibration_id, row.acquired_at)
        first[row.calibration_id] = min(at, row.acquired_at)
    return tuple(sorted(first, key=lambda name: (first[name], name)))


def panel(
    rows: Iterable[Row],
    quantity: str,
    epochs: Sequence[str],
    *,
    of_qubits: bool,
    join_bases: bool,
) -> Panel:
    """Return one quantity of one patch.

    Parameters
    ----------
    rows
        Rows of one device and patch.
    quantity
        Name as in the rows.
    epochs
        Names of the epochs, oldest first.
    of_qubits
        Columns are the qubits; otherwise the whole code.
    join_bases
        Whether the bases of an epoch measure the same thing: their weighted mean is taken.
    """
    mine = [row for row in rows if row.quantity == quantity and bool(row.qubit) == of_qubits]
    bases = sorted({row.basis for row in mine})
    keys: dict[Series, list[Row]] = {}
    for row in mine:
        basis = " ".join(bases) if join_bases else row.basis
        keys.setdefault(Series(basis, row.qubit, row.role), []).append(row)
    shape = (len(epochs), len(keys))
    tables = [np.full(shape, np.nan) for _ in range(5)]
    place = {name: number for number, name in enumerate(epochs)}
    for column, found in enumerate(keys.values()):
        by_epoch: dict[str, list[Row]] = {}
        for row in found:
            by_epoch.setdefault(row.calibration_id, []).append(row)
        for name, several in by_epoch.items():
            for table, number in zip(tables, _mean(quantity, several), strict=True):
                table[place[name], column] = number
    return Panel(quantity, tuple(epochs), tuple(keys), *tables)


def _mean(quantity: str, rows: Sequence[Row]) -> tuple[float, float, float, float, float]:
    """Return value, low, high, scaled value and its error of one epoch, bases joined.

    Errors of the bases count as independent; what they share (a calibration) shows up between
    epochs and is charged there.
    """
    scaled, errors = [], []
    for row in rows:
        if row.value is None or row.low is None or row.high is None:
            continue
        width = to_scale(quantity, row.high) - to_scale(quantity, row.low)
        normal = NormalDist().inv_cdf(0.5 + row.level / 2)
        here = to_scale(quantity, row.value)
        scaled.append(here)
        errors.append(max(width / 2 / normal, SAME_DIGITS * max(abs(here), 1.0)))
    if not scaled:
        return (np.nan,) * 5
    weights = 1.0 / np.array(errors) ** 2
    middle = float((weights * np.array(scaled)).sum() / weights.sum())
    error = float(weights.sum() ** -0.5)
    low, high = interval(quantity, middle, error)
    return float(from_scale(quantity, middle)), low, high, middle, error


def interval(quantity: str, scaled: float, error: float) -> tuple[float, float]:
    """Return the ends of the 95 % interval, back on the quantity's own scale."""
    half = NormalDist().inv_cdf(0.975) * error
    low, high = (from_scale(quantity, scaled + sign * half) for sign in (-1, 1))
    return float(low), float(high)


def floor_of(quantity: str) -> float | None:
    """Return where the quantity's logarithmic scale turns linear; None for a linear scale."""
    return next((LOG_FLOOR[name] for name in LOG_FLOOR if quantity.endswith(name)), None)


def to_scale(quantity: str, value: float) -> float:
    """Return the value on the chart's scale: ln((x + sqrt(x^2 + 4 q^2)) / 2) with floor q.

    Equal to ln x far above the floor, linear around zero (generalised logarithm: B. P. Durbin et
    al., Bioinformatics 18 Suppl. 1, S105 (2002), recalled from memory).
    """
    floor = floor_of(quantity)
    if floor is None:
        return value
    return float(np.log(floor) + np.arcsinh(value / (2 * floor)))


def from_scale(quantity: str, scaled: float) -> float:
    """Undo `to_scale`."""
    floor = floor_of(quantity)
    if floor is None:
        return scaled
    return float(2 * floor * np.sinh(scaled - np.log(floor)))
