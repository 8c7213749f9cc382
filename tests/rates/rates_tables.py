"""Reading of the reference tables in shared/tables, for tests."""

from __future__ import annotations

import re
from pathlib import Path

import numpy as np

FOLDER = Path(__file__).parents[2] / "shared" / "tables"


def table(name: str) -> dict[str, list[str]]:
    """Return the columns of a table as text."""
    lines = (FOLDER / name).read_text().splitlines()
    header, *rows = [line.split(",") for line in lines if not line.startswith("#")]
    return {key: [row[i] for row in rows] for i, key in enumerate(header)}


def numbers(name: str) -> dict[str, np.ndarray]:
    """Return the columns of a table as numbers."""
    return {key: np.array(column, dtype=float) for key, column in table(name).items()}


def certified(name: str) -> dict[str, np.ndarray]:
    """Return the certified numbers in the head of a NIST table, by the words before the colon."""
    found = {}
    for line in (FOLDER / name).read_text().splitlines():
        if match := re.match(r"# (certified[^:]*): (.*)", line):
            values = re.findall(r"(?:b\d )?(-?\d[\d.]*(?:e-?\d+)?)(?:,|$)", match[2])
            found[match[1]] = np.array(values, dtype=float)
    return found


def digits(value: float, reference: float) -> float:
    """Return the number of matching digits, -log10 of the relative difference (at most 16)."""
    difference = abs(value - reference) / abs(reference)
    return 16.0 if difference == 0 else min(-np.log10(difference), 16.0)
