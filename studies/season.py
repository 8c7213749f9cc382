"""A scripted season of nights through `refit`, undisturbed and with kills: nothing needs a hand.

A rehearsed device over thirty nights: scatter from night to night, a recalibration of three qubits,
a night of readout drift, a night without data, a corrupt file, a half-written file, and a qubit
that gets three times leakier. The same season is run again with SIGKILLs at random moments and
pairs of refits started at once; what it leaves has to equal the undisturbed one.
"""

from __future__ import annotations

import json
import os
import re
import shutil
import signal
import sys
import tempfile
import time
from collections.abc import Callable, Iterator
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import numpy as np
from scipy.stats import poisson

from leakpipe.config.models import Config
from leakpipe.history.jobs import Pass
from leakpipe.history.publish import store_of
from leakpipe.progress import Silent
from leakpipe.refit import refit, standard_tools
from leakpipe.rehearsal.scenario import Scenario
from leakpipe.rehearsal.write import rehearse

NIGHTS = 30
BAD_QUBIT, BAD_FROM, BAD_FACTOR = "D4", 20, 3.0
CORRUPT, RECALIBRATED, HALF_WRITTEN, SILENT_NIGHT, DRIFTED = 5, 8, 9, 12, 15
KILLS, DOUBLES = 50, 20
LONGEST_LIFE = 4.0
"""Seconds after which a pass is killed at the latest, about what a night's result takes."""
FALSE_ALARMS = 0.8e-3
"""Per epoch, series and direction (`studies.chart`)."""
CHANCE = 1e-3
WARM_UP = 10
QUBITS, CODE_SERIES = 17, 5
QUIET_SECONDS = 60.0
AN_HOUR = 3600.0


def scenario(nights: int) -> Scenario:
    """Return the season to rehearse."""
    changes = [
        {"epoch": RECALIBRATED, "recalibrated": ["D0", "D5", "M3"]},
        {"epoch": SILENT_NIGHT, "silent": True},
        {"epoch": DRIFTED, "drift": {"rotation_degrees": 4.0, "gain": 0.97}},
        {"epoch": BAD_FROM, "factors": {"injection": {BAD_QUBIT: BAD_FACTOR}}},
    ]
    content = {
        "device": "season device (invented)",
        "seed": 977,
        "patch": "north",
        "code": {"family": "rotated surface", "distance": 3},
        "bases": ["Z"],
        "rounds": [1, 5, 10, 20],
        "shots": 6000,
        "kind": "iq",
        "verdict": True,
        "noise": {
            "single_qubit": 1e-3,
            "two_qubit": 6e-3,
            "idle": 8e-3,
            "reset": 4e-3,
            "injection": 6e-4,
            "seepage": 0.2,
            "qubit_spread": 0.2,
        },
        "readout": {"reference": "good", "calibration_shots": 2000},
        "season": {
            "epochs": nights,
            "scatter": 0.05,
            "started_at": "2026-03-01T01:00:00+00:00",
            "changes": [one for one in changes if one["epoch"] <= nights],
        },
        "truth": {"shots": 0, "readout_shots": 1000},
    }
    return Scenario.model_validate(content, strict=False)


def settings(recordings: Path, results: Path) -> Config:
    """Return the config of a season; the second route of the share is left out for speed."""
    content = {
        "recordings": {"folder": str(recordings)},
        "code": {"family": "rotated surface", "distance": 3},
        "results": str(results),
        "run_log": str(results / "run-log.jsonl"),
        "metrics": str(results / "metrics.txt"),
        "readout": {"replicas": 2},
        "share": {"twin": False},
        "history": {"quiet_seconds": QUIET_SECONDS},
    }
    return Config.model_validate_json(json.dumps(content))


@dataclass
class Told:
    """What the passes of a season said."""

    passes: list[Pass] = field(default_factory=list)
    waited: int = 0
    kills: int = 0
    doubles: int = 0


def arrive(staging: Path, recordings: Path, night: int) -> None:
    """Copy a night's recordings, as old as if they had been written an hour ago."""
    recordings.mkdir(parents=True, exist_ok=True)
    for path in sorted(staging.glob(f"cal-{night:03d}-*.nc")):
        shutil.copyfile(path, recordings / path.name)
        age(recordings / path.name, AN_HOUR)
    if night == CORRUPT:
        broken = recordings / f"cal-{night:03d}-Z-R99.nc"
        broken.write_bytes(b"not a recording" * 1000)
        age(broken, AN_HOUR)


def age(path: Path, seconds: float) -> None:
    then = time.time() - seconds
    os.utime(path, (then, then))


def one_pass(config: Config) -> Pass:
    return refit(config, standard_tools(), Silent())


def season(
    staging: Path, config: Config, nights: int, disturb: Callable[[Told, Config], None]
) -> Told:
    """Go through the nights; each ends with passes that are left alone."""
    told = Told()
    for night in range(1, nights + 1):
        arrive(staging, config.recordings.folder, night)
        if night == HALF_WRITTEN:
            last = max(config.recordings.folder.glob(f"cal-{night:03d}-Z-*.nc"))
            whole = last.read_bytes()
            last.write_bytes(whole[: len(whole) // 2])
            half = one_pass(config)
            told.waited += len(half.waiting)
            told.passes.append(half)
            last.write_bytes(whole)
            age(last, AN_HOUR)
        disturb(told, config)
        told.passes.append(one_pass(config))
        print(".", end="", flush=True)
    print()
    return told


def calm(_told: Told, _config: Config) -> None:
    """Disturb nothing."""


def in_child(config: Config) -> int:
    """Fork a process that does one pass, and return its number."""
    child = os.fork()
    if child == 0:
        try:
            code = one_pass(config).exit_code
        except BaseException as error:
            print(f"\na pass failed by itself: {error!r}", file=sys.stderr, flush=True)
            code = 1
        os._exit(code)
    return child


def disturbing(generator: np.random.Generator, kills: int, doubles: int, nights: int) -> Any:
    """Return what kills passes at random moments and starts two at once, spread over the nights."""
    left = {"kills": kills, "doubles": doubles, "nights": nights}

    def disturb(told: Told, config: Config) -> None:
        for _ in range(-(-left["kills"] // left["nights"])):
            child = in_child(config)
            time.sleep(generator.uniform(0, LONGEST_LIFE))
            os.kill(child, signal.SIGKILL)
            _, status = os.waitpid(child, 0)
            if os.WIFSIGNALED(status):
                left["kills"] -= 1
                told.kills += 1
        if generator.random() < left["doubles"] / left["nights"]:
            children = [in_child(config), in_child(config)]
            codes = [os.waitstatus_to_exitcode(os.waitpid(one, 0)[1]) for one in children]
            told.doubles += 1
            left["doubles"] -= 1
            if any(codes):
                raise RuntimeError(f"two at once ended with {codes}")
        left["nights"] -= 1

    return disturb


def left_behind(config: Config) -> dict[str, Any]:
    """Return what a season leaves, without the moments it was made at."""
    results = config.results
    return {
        "history": [repr(row) for row in store_of(results).rows()],
        "findings": [
            (one.calibration_id, one.act, one.watch) for one in store_of(results).epochs()
        ],
        "run log": [_timeless(line) for line in config.run_log.read_text().splitlines()]
        if config.run_log
        else [],
        "summaries": {
            path.parent.name: _timeless(path.read_text())
            for path in sorted(results.glob("*/summary.json"))
        },
        "numbers": {
            path.parent.name: dict(_arrays(path)) for path in sorted(results.glob("*/leakage.nc"))
        },
        "files": sorted(
            str(path.relative_to(results))
            for path in results.rglob("*")
            if path.is_file() and ".cache" not in path.parts
        ),
    }


def _timeless(text: str) -> str:
    return re.sub(r'"made_at": ?"[^"]*"', '"made_at": ""', text)


def _arrays(path: Path) -> Iterator[tuple[str, bytes]]:
    import netCDF4

    def walk(group: Any, name: str) -> Iterator[tuple[str, bytes]]:
        for key, variable in group.variables.items():
            values = np.asarray(variable[:])
            text = repr(values.tolist()).encode() if values.dtype == object else values.tobytes()
            yield f"{name}/{key}", text
        for key, inside in group.groups.items():
            yield from walk(inside, f"{name}/{key}")

    with netCDF4.Dataset(path) as opened:
        opened.set_auto_mask(False)
        yield from walk(opened, "")


@dataclass
class Report:
    """Lines of measured against required."""

    failed: int = 0

    def line(self, what: str, measured: object, required: str, good: bool) -> None:
        self.failed += not good
        print(f"{what:58}{measured!s:>12}  {required}{'' if good else '  FAILED'}")


def judge_season(report: Report, config: Config, told: Told, nights: int) -> None:
    """Print what the undisturbed season found."""
    epochs = store_of(config.results).epochs()
    expected = nights - (nights >= SILENT_NIGHT)
    report.line("results made", len(epochs), f"= {expected}", len(epochs) == expected)
    failures = sum(len(one.failures) for one in told.passes)
    report.line("passes that failed", failures, "= 0", failures == 0)
    if nights >= HALF_WRITTEN:
        good = told.waited >= 1
        report.line("left for the next pass while half written", told.waited, ">= 1", good)
    flags = []
    for one in epochs:
        flags += store_of(config.results).findings(one.device, one.calibration_id, one.patch)
    corrupt = [one for one in flags if one["code"] == "recording-unreadable"]
    report.line("results that tell of the corrupt file", len(corrupt), "= 1", len(corrupt) == 1)
    moved = [one for one in flags if one["code"].endswith(("-changed", "-jumped"))]
    acts = [one for one in moved if one["where"] == BAD_QUBIT and one["severity"] == "act"]
    if nights >= BAD_FROM + 2:
        first = min((one["numbers"]["epoch"] for one in acts), default="never")
        good = f"cal-{BAD_FROM:03d}" <= first <= f"cal-{BAD_FROM + 2:03d}"
        report.line(f"{BAD_QUBIT} named", first, f"within three of cal-{BAD_FROM:03d}", good)
    others = [one for one in moved if one["where"] != BAD_QUBIT and _alone(one)]
    watched = max(len(epochs) - WARM_UP, 0) * (QUBITS + CODE_SERIES)
    most = poisson.ppf(1 - CHANCE, 2 * FALSE_ALARMS * watched)
    required = f"<= {most:.0f} ({2 * FALSE_ALARMS * watched:.1f} expected)"
    report.line("changes told of anything else", len(others), required, len(others) <= most)
    for one in others:
        print(f"    {one['severity']}: {one['sentence']}")
    start = time.process_time()
    idle = one_pass(config)
    seconds = time.process_time() - start
    report.line("idle pass, seconds of processor", f"{seconds:.2f}", "< 2", seconds < 2)
    report.line("results made by an idle pass", len(idle.made), "= 0", not idle.made)


def _alone(finding: dict[str, Any]) -> bool:
    """Whether a finding is not just the bad qubit's share in a number of the whole code."""
    late = str(finding["numbers"]["epoch"]) >= f"cal-{BAD_FROM:03d}"
    return not (late and finding["where"].startswith("north"))


def run(nights: int, kills: int, doubles: int, seed: int) -> int:
    """Run both seasons and print the comparison."""
    import leakpipe.pipeline  # noqa: F401

    report = Report()
    with tempfile.TemporaryDirectory(prefix="season-") as name:
        folder = Path(name)
        rehearse(scenario(nights), folder / "staging")
        quiet = settings(folder / "recordings", folder / "results")
        start = time.monotonic()
        told = season(folder / "staging", quiet, nights, calm)
        print(f"undisturbed: {time.monotonic() - start:.0f} s")
        judge_season(report, quiet, told, nights)
        rough = settings(folder / "rough-recordings", folder / "rough-results")
        disturb = disturbing(np.random.default_rng(seed), kills, doubles, nights)
        start = time.monotonic()
        told = season(folder / "staging", rough, nights, disturb)
        print(f"disturbed: {time.monotonic() - start:.0f} s")
        report.line("passes killed", told.kills, f">= {kills}", told.kills >= kills)
        report.line("pairs started at once", told.doubles, f">= {doubles}", told.doubles >= doubles)
        expected, found = left_behind(quiet), left_behind(rough)
        for part, wanted in expected.items():
            same = found[part] == wanted
            report.line(f"{part} as undisturbed", "yes" if same else "no", "yes", same)
    return int(report.failed > 0)


def main() -> int:
    return run(NIGHTS, KILLS, DOUBLES, seed=int(time.time()))
