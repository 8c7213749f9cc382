"""Does every number of `summary.json` lie inside its own 95 % interval as often as it says?

Rehearses epochs with fresh seeds (a new device each), runs the pipeline from their files, and
counts truths inside intervals. Required: per-qubit and per-code coverage between .90 and .99 over
all quantities together, within three binomial errors; single quantities are listed.
"""

from __future__ import annotations

import argparse
import json
import sys
import tempfile
from collections import defaultdict
from pathlib import Path
from typing import Any

import numpy as np
import yaml

EPOCHS = 20
FIRST_SEED = 7100
SCENARIO: dict[str, Any] = {
    "device": "coverage study device (invented)",
    "patch": "study",
    "code": {"family": "rotated surface", "distance": 3},
    "bases": ["Z"],
    "rounds": [1, 2, 3, 5, 8, 11, 15, 20, 25],
    "shots": 6000,
    "kind": "iq",
    "verdict": True,
    "noise": {
        "single_qubit": 1e-3,
        "two_qubit": 6e-3,
        "idle": 8e-3,
        "reset": 2e-3,
        "injection": 4e-4,
        "seepage": 0.18,
        "qubit_spread": 0.25,
    },
    "readout": {"reference": "average", "calibration_shots": 5000},
    "truth": {"shots": 60000, "readout_shots": 20000},
}
CODE = (
    "logical_error_per_round",
    "leakage_share",
    "detection_rise",
    "settling_rounds",
    "kappa",
)
ROLE = ("steady_leakage", "injection", "seepage")
QUBIT = ("steady_leakage", "injection", "seepage", "settling_rounds")


def run_epoch(seed: int, folder: Path, changes: dict[str, Any]) -> tuple[dict, dict]:
    """Rehearse one epoch and run it; return its truth and its summary."""
    from leakpipe.config.loading import load
    from leakpipe.pipeline import run_all
    from leakpipe.rehearsal.scenario import load_scenario
    from leakpipe.rehearsal.write import rehearse

    scenario = {**SCENARIO, "seed": seed, **changes}
    file = folder / "scenario.yaml"
    file.write_text(yaml.safe_dump(scenario))
    rehearse(load_scenario(file), folder / "recordings")
    config = folder / "config.yaml"
    config.write_text(
        yaml.safe_dump(
            {
                "recordings": {"folder": "recordings"},
                "code": scenario["code"],
                "results": "results",
                "seed": seed,
            }
        )
    )
    (result,) = run_all(load(config))
    truth = json.loads((folder / "recordings" / "truth.json").read_text())
    return truth["epochs"][0]["patches"][0], result.summary["patches"][0]


def compare(truth: dict[str, Any], found: dict[str, Any]) -> list[tuple[str, float, float, dict]]:
    """Return (quantity, truth, error of the truth, estimate) for every quantity."""
    rows = [(name, *_pair(truth[name]), found[name]) for name in CODE]
    for name in ROLE:
        for role in ("data", "measure"):
            rows.append((f"{role} {name}", *_pair(truth[name][role]), found[name][role]))
    mine = {qubit["qubit"]: qubit for qubit in found["qubits"]}
    for qubit in truth["qubits"]:
        for name in QUBIT:
            estimate = mine[qubit["qubit"]][name]
            rows.append((f"{qubit['role']} qubit {name}", *_pair(qubit[name]), estimate))
    return rows


def _pair(truth: dict[str, float]) -> tuple[float, float]:
    return truth["value"], truth.get("error", 0.0)


def main(arguments: list[str] | None = None) -> int:
    """Run the study; return 0 if the coverage over all quantities holds."""
    parser = argparse.ArgumentParser()
    parser.add_argument("--epochs", type=int, default=EPOCHS)
    parser.add_argument("--seed", type=int, default=FIRST_SEED)
    parser.add_argument("--changes", default="{}", help="YAML mapping merged into the scenario")
    options = parser.parse_args(arguments or [])
    changes = yaml.safe_load(options.changes)
    table: dict[str, list[tuple[bool, bool, float]]] = defaultdict(list)
    for epoch in range(options.epochs):
        with tempfile.TemporaryDirectory() as folder:
            truth, found = run_epoch(options.seed + epoch, Path(folder), changes)
        for name, value, error, estimate in compare(truth, found):
            table[name].append(_judge(value, error, estimate))
        print(f"epoch {epoch + 1} of {options.epochs}", file=sys.stderr, flush=True)
    return report(table)


def _judge(value: float, error: float, estimate: dict[str, Any]) -> tuple[bool, bool, float]:
    """Return (is covered, has an interval, error in units of the half width)."""
    low, high = estimate["low"], estimate["high"]
    if low is None and high is None:
        return True, False, np.nan
    low, high = -np.inf if low is None else low, np.inf if high is None else high
    # A truth that is itself a simulation widens the interval by its own error.
    inside = low - 2 * error <= value <= high + 2 * error
    centre = estimate["value"]
    pull = np.nan if centre is None else (centre - value) / max((high - low) / 2, 1e-300)
    return inside, True, pull


def report(table: dict[str, list[tuple[bool, bool, float]]]) -> int:
    """Print coverage per quantity; return 0 if the total holds."""
    hits = total = 0
    print(f"{'quantity':34s}  inside    of  cover  mean pull  rms pull")
    for name, cells in table.items():
        with_interval = [cell for cell in cells if cell[1]]
        inside = sum(cell[0] for cell in with_interval)
        pulls = np.array([cell[2] for cell in with_interval if np.isfinite(cell[2])])
        mean = pulls.mean() if len(pulls) else np.nan
        rms = np.sqrt((pulls**2).mean()) if len(pulls) else np.nan
        share = inside / max(len(with_interval), 1)
        unknown = len(cells) - len(with_interval)
        note = f"   ({unknown} unknown)" if unknown else ""
        counts = f"{inside:7d} {len(with_interval):5d} {share:6.3f}"
        print(f"{name:34s} {counts} {mean:10.2f} {rms:9.2f}{note}")
        hits, total = hits + inside, total + len(with_interval)
    coverage = hits / max(total, 1)
    slack = 3 * np.sqrt(0.95 * 0.05 / max(total, 1))
    holds = 0.90 - slack <= coverage <= 0.99 + slack
    verdict = "ok" if holds else "FAILED"
    print(f"all: {hits} of {total} inside, {coverage:.3f} (required .90 to .99): {verdict}")
    return 0 if holds else 1


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))
