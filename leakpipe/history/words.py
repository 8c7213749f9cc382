"""Numbers of the history in words, for the terminal and for findings.

Free of heavy imports, so that the history answers at once.
"""

from __future__ import annotations

import math
from collections.abc import Sequence

ROUNDS_QUANTITIES = ("settling_rounds",)
PLAIN_QUANTITIES = ("kappa",)
UNKNOWN = "not identifiable"

TITLES = {
    "steady_leakage": "steady leakage",
    "data_steady_leakage": "steady leakage, data",
    "measure_steady_leakage": "steady leakage, measure",
    "logical_error_per_round": "logical error per round",
    "leakage_share": "leakage share",
    "settling_rounds": "settling time",
    "detection_rise": "detection rise",
}


def title(quantity: str) -> str:
    """Return a quantity's name in plain words."""
    return TITLES.get(quantity, quantity.replace("_", " "))


def amount(quantity: str, value: float | None, low: float | None, high: float | None) -> str:
    """Return an estimate with its interval and unit, such as ``"1.05 % (0.92 to 1.18)"``.

    One-sided statements read ``"below 0.1 %"``; an unknown value says so.
    """
    if quantity in ROUNDS_QUANTITIES:
        scale, unit = 1.0, " rounds"
    elif quantity in PLAIN_QUANTITIES:
        scale, unit = 1.0, ""
    else:
        scale, unit = 100.0, " %"
    value, low, high = (None if x is None else x * scale for x in (value, low, high))
    if value is None:
        return _limit(low, high, unit)
    if low is None or high is None:
        return f"{value:.3g}{unit}"
    digits = _decimals((high - low) / 2)
    return f"{value:.{digits}f}{unit} ({low:.{digits}f} to {high:.{digits}f})"


def _limit(low: float | None, high: float | None, unit: str) -> str:
    if high is not None:
        return f"below {high:.2g}{unit}"
    if low is not None:
        return f"above {low:.2g}{unit}"
    return UNKNOWN


def _decimals(half_width: float) -> int:
    """Return the decimals that leave two digits of the half width (our choice)."""
    if not (half_width > 0 and math.isfinite(half_width)):
        return 3
    return min(max(1 - math.floor(math.log10(half_width)), 0), 6)


def joined(names: Sequence[str], most: int = 4) -> str:
    """Return names as a list in words, the ones beyond `most` counted."""
    shown = list(names[:most])
    if len(names) > most:
        return f"{', '.join(shown)} and {len(names) - most} more"
    return " and ".join([", ".join(shown[:-1]), shown[-1]]) if len(shown) > 1 else "".join(shown)
