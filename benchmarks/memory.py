"""Does the memory of a run stay bounded when the number of shots grows tenfold?

Rehearses the same epoch with N and 10 N shots (states and points of distance 3), runs the pipeline
on each in a process of its own, and compares peak resident memory as the operating system accounts
it. Required: growth below 20 %.
"""

from __future__ import annotations

import subprocess
import sys
import tempfile
from pathlib import Path

import yaml

SHOTS = 4000
FACTOR = 10
MOST_GROWTH = 1.20
SCENARIO = {
    "device": "memory benchmark device (invented)",
    "seed": 11,
    "patch": "bench",
    "code": {"family": "rotated surface", "distance": 3},
    "bases": ["Z"],
    "rounds": [5, 15, 25],
    "kind": "iq",
    "verdict": True,
    "noise": {"injection": 4e-4, "seepage": 0.18, "idle": 8e-3},
    "readout": {"reference": "average", "calibration_shots": 2000},
    "truth": {"shots": 0, "readout_shots": 1000},
}


def peak(shots: int) -> float:
    """Return the peak resident memory, in MB, of a run on recordings of `shots` shots."""
    with tempfile.TemporaryDirectory() as name:
        folder = Path(name)
        scenario = folder / "scenario.yaml"
        scenario.write_text(yaml.safe_dump({**SCENARIO, "shots": shots}))
        config = folder / "config.yaml"
        config.write_text(
            yaml.safe_dump(
                {
                    "recordings": {"folder": "recordings"},
                    "code": SCENARIO["code"],
                    "results": "results",
                    "share": {"twin": False},
                }
            )
        )
        command = [sys.executable, "-m", "leakpipe"]
        subprocess.run(
            [*command, "rehearse", scenario, folder / "recordings", "--quiet"], check=True
        )
        measured = (
            "import resource, subprocess, sys\n"
            "subprocess.run(sys.argv[1:], check=True, stdout=subprocess.DEVNULL)\n"
            "print(resource.getrusage(resource.RUSAGE_CHILDREN).ru_maxrss)"
        )
        done = subprocess.run(
            [sys.executable, "-c", measured, *command, "run", config, "--quiet"],
            check=True,
            capture_output=True,
            text=True,
        )
    return int(done.stdout) / 1024


def main() -> int:
    """Print both peaks and their ratio; return 0 if the growth is small enough."""
    few, many = peak(SHOTS), peak(SHOTS * FACTOR)
    print(f"peak of a run: {few:.0f} MB at {SHOTS} shots, {many:.0f} MB at {SHOTS * FACTOR}")
    print(f"growth {many / few:.3f} (required at most {MOST_GROWTH})")
    return 0 if many / few <= MOST_GROWTH else 1


if __name__ == "__main__":
    sys.exit(main())
