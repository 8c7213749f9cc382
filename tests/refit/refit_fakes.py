"""A season of made-up recordings and the fake tools that make results of them in milliseconds.

A recording is a small JSON file with the ending of a real one. What a result says is a function of
the contents of its recordings alone, so that two seasons can be compared. Run as a program, this
file does one refit: `python refit_fakes.py RECORDINGS RESULTS [SECONDS_PER_RESULT]`.
"""

from __future__ import annotations

import json
import sys
import time
from collections.abc import Sequence
from datetime import UTC, datetime, timedelta
from pathlib import Path
from typing import Any

sys.path.append(str(Path(__file__).parents[1] / "history"))

from history_examples import START, one_patch

from leakpipe.config.models import Config
from leakpipe.errors import RecordingError
from leakpipe.history.jobs import Job, Plan, Tools
from leakpipe.history.publish import store_of
from leakpipe.progress import Silent
from leakpipe.refit import Pass, refit

DAMAGED = "damaged inside"


def config_for(recordings: Path, results: Path, **history: Any) -> Config:
    """Return a config that waits for nothing and writes everything beside the results."""
    return Config.model_validate_json(
        json.dumps(
            {
                "recordings": {"folder": str(recordings)},
                "results": str(results),
                "run_log": str(results / "run-log.jsonl"),
                "metrics": str(results / "metrics.txt"),
                "history": {"quiet_seconds": 0, **history},
            }
        )
    )


def write(path: Path, **content: Any) -> Path:
    """Write a made-up recording."""
    path.parent.mkdir(parents=True, exist_ok=True)
    path.write_text(json.dumps(content))
    return path


def night(
    folder: Path, number: int, *, leakage: float = 0.01, patch: str = "west", device: str = "chip"
) -> None:
    """Write the recordings of one night: a calibration and two memories."""
    name = f"cal-{number:03d}"
    about = {"calibration_id": name, "device": device}
    at = (START + timedelta(days=number)).isoformat()
    write(folder / f"{name}.nc", recording="calibration", at=at, **about)
    for rounds in (5, 25):
        write(
            folder / f"{name}-{patch}-{rounds}.nc",
            recording="memory",
            patch=patch,
            leakage=leakage * (1 + 0.001 * rounds),
            **about,
        )


def plan(config: Config, complete: Sequence[Path], waiting: Sequence[Path]) -> Plan:
    """Sort made-up recordings into jobs."""
    read: dict[Path, dict[str, Any]] = {}
    problems = {}
    for path in complete:
        try:
            read[path] = json.loads(path.read_text())
        except ValueError:
            problems[path] = f"{path}  cannot be opened"
    calibrations = {
        (one["device"], one["calibration_id"]): path
        for path, one in read.items()
        if one["recording"] == "calibration"
    }
    memories: dict[tuple[str, str, str], list[Path]] = {}
    for path, one in read.items():
        if one["recording"] == "memory":
            key = (one["device"], one["calibration_id"], one["patch"])
            memories.setdefault(key, []).append(path)
    jobs = []
    for key, paths in memories.items():
        calibration = calibrations.get(key[:2])
        if calibration is not None:
            jobs.append(Job(key, read[calibration]["at"], (calibration, *paths)))
    keys = set()
    for path in waiting:
        try:
            one = json.loads(path.read_text())
            keys.add((one["device"], one["calibration_id"], one["patch"]))
        except (ValueError, KeyError):
            continue
    return Plan(tuple(jobs), frozenset(keys), problems)


def make(
    job: Job,
    folder: Path,
    config: Config,
    findings: Sequence[Any],
    reporter: Any,
    *,
    seconds: float = 0.0,
) -> None:
    """Write a summary and some files around it."""
    contents = [json.loads(path.read_text()) for path in job.inputs]
    for path, one in zip(job.inputs, contents, strict=True):
        if one.get("inside") == DAMAGED:
            raise RecordingError(f"{path}  damaged while reading")
    levels = [one["leakage"] for one in contents if one["recording"] == "memory"]
    for name in ("leakage.nc", "summary.md", "page.html"):
        (folder / name).write_text(f"{name} of {job.key}: {sorted(levels)}\n" * 50)
        time.sleep(seconds / 4)
    mean = sum(levels) / len(levels)
    summary = {
        "contract": "1",
        "device": job.key[0],
        "calibration_id": job.key[1],
        "acquired_at": job.acquired_at,
        "made_at": datetime.now(UTC).isoformat(),
        "patches": [one_patch({"D0": mean, "M0": 2 * mean}, patch=job.key[2])],
        "findings": [one.to_json() for one in findings],
    }
    (folder / "summary.json").write_text(json.dumps(summary))
    time.sleep(seconds / 4)


def tools(seconds: float = 0.0) -> Tools:
    """Return the fake tools; each result takes some time on request."""

    def run(job: Job, folder: Path, config: Config, findings: Sequence[Any], reporter: Any) -> None:
        make(job, folder, config, findings, reporter, seconds=seconds)

    return Tools(plan, run)


def one_pass(config: Config, seconds: float = 0.0) -> Pass:
    """Do one refit with the fake tools."""
    return refit(config, tools(seconds), Silent())


def state(config: Config) -> dict[str, Any]:
    """Return everything a season leaves, without the moments it was made at."""
    results = config.results

    def plain(text: str) -> Any:
        content = json.loads(text)
        content.pop("made_at")
        return content

    log = config.run_log
    return {
        "folders": {
            folder.name: {
                path.name: plain(path.read_text()) if path.suffix == ".json" else path.read_text()
                for path in sorted(folder.iterdir())
            }
            for folder in sorted(results.iterdir())
            if folder.is_dir()
        },
        "history": [repr(row) for row in store_of(results).rows()],
        "epochs": [(one.calibration_id, one.act) for one in store_of(results).epochs()],
        "log": [plain(line) for line in log.read_text().splitlines()] if log else [],
        "metrics": [
            line
            for line in config.metrics.read_text().splitlines()
            if not line.startswith("leakpipe_made_at")
        ]
        if config.metrics
        else [],
        "other": sorted(path.name for path in results.iterdir() if not path.is_dir()),
    }


def main(recordings: str, results: str, seconds: str = "0") -> int:
    """Do one refit and say so; the first line tells that the imports are done."""
    import leakpipe.result  # noqa: F401

    print("ready", flush=True)
    told = one_pass(config_for(Path(recordings), Path(results)), float(seconds))
    print(told.text())
    return told.exit_code


if __name__ == "__main__":
    sys.exit(main(*sys.argv[1:]))
