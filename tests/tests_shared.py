"""Helpers that tests import by name (pytest puts this folder on the path)."""

from __future__ import annotations

import subprocess
import sys
from pathlib import Path
from typing import Any

SCENARIO: dict[str, Any] = {
    "device": "test device (invented)",
    "seed": 20261101,
    "patch": "bench",
    "code": {"family": "rotated surface", "distance": 3},
    "bases": ["Z"],
    "rounds": [1, 3, 6, 10],
    "shots": 2500,
    "kind": "iq",
    "verdict": True,
    "noise": {
        "single_qubit": 1e-3,
        "two_qubit": 6e-3,
        "idle": 8e-3,
        "injection": 8e-4,
        "seepage": 0.25,
    },
    "readout": {"reference": "average", "calibration_shots": 1500},
    "truth": {"shots": 0, "readout_shots": 1000},
}
"""A small epoch: a distance-3 memory, readable in seconds (invented numbers)."""


def leakpipe(*arguments: str | Path) -> subprocess.CompletedProcess[str]:
    """Run a command in a process of its own and return what it printed."""
    command = [sys.executable, "-m", "leakpipe", *map(str, arguments)]
    return subprocess.run(command, capture_output=True, text=True, check=False, timeout=300)
