"""Limits of the config: levels that are worth a finding whatever they were before."""

from __future__ import annotations

from collections.abc import Iterable

from leakpipe.config.history import HistorySettings
from leakpipe.findings import Finding
from leakpipe.history.rows import Row
from leakpipe.history.words import amount, title


def over_limits(rows: Iterable[Row], settings: HistorySettings) -> list[Finding]:
    """Return a finding for every quantity above its limit.

    "act" where the whole interval lies above, "watch" where only the value does, or where the
    value is not identifiable but its lower end lies above.

    Parameters
    ----------
    rows
        Rows of one epoch.
    settings
        Its limits; a limit that is None is none.
    """
    limits = {
        "steady_leakage": (settings.limits.steady_leakage, True),
        "leakage_share": (settings.limits.leakage_share, False),
    }
    found = []
    for row in rows:
        limit, of_qubits = limits.get(row.quantity, (None, False))
        if limit is None or bool(row.qubit) != of_qubits:
            continue
        sure = row.low is not None and row.low > limit
        if not sure and not (row.value is not None and row.value > limit):
            continue
        place = row.qubit or f"{row.patch} {row.basis}"
        sentence = (
            f"{f'{row.qubit} ' if row.qubit else ''}{title(row.quantity)} "
            f"{amount(row.quantity, row.value, row.low, row.high)} in basis {row.basis} is above "
            f"the limit of {amount(row.quantity, limit, None, None)}"
            f"{'' if sure else ', though its interval reaches below'}."
        )
        found.append(
            Finding(
                f"{title(row.quantity).replace(' ', '-')}-over-limit",
                "act" if sure and row.value is not None else "watch",
                place,
                sentence[0].upper() + sentence[1:],
                {
                    "epoch": row.calibration_id,
                    "quantity": row.quantity,
                    "value": row.value,
                    "low": row.low,
                    "high": row.high,
                    "limit": limit,
                },
            )
        )
    return found
