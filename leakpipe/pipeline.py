"""From recordings to result folders: calibrate, reduce, run the stages, write, log."""

from __future__ import annotations

import importlib.metadata
import json
from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace
from datetime import UTC, datetime
from itertools import groupby
from pathlib import Path
from typing import TYPE_CHECKING, Any

import xarray as xr
import yaml

from leakpipe import __version__
from leakpipe.detection.stage import detection
from leakpipe.errors import LeakpipeError
from leakpipe.findings import Finding
from leakpipe.history.compare import limits_of, neighbours_of, since_last, write_epochs_page
from leakpipe.history.files import append_once, locked
from leakpipe.history.jobs import Job
from leakpipe.history.publish import store_of
from leakpipe.logical.stage import logical
from leakpipe.progress import Reporter, Silent
from leakpipe.rates.stage import rates
from leakpipe.readout.stage import readout
from leakpipe.recordings.finding import Epoch, find, layout_of, usable
from leakpipe.recordings.opening import MemoryRecording, open_calibration
from leakpipe.reduction import Reduced
from leakpipe.report.figures import write_figures
from leakpipe.report.inputs import PatchReport
from leakpipe.report.page import page
from leakpipe.report.run_log import json_line, run_log_block
from leakpipe.report.summary import summary
from leakpipe.result import PatchResult, folder_name, replacing, write_numbers
from leakpipe.reuse import MOST_BYTES, cache_of, calibrated, hash_of, reduce_kept
from leakpipe.share.stage import share

if TYPE_CHECKING:
    from leakpipe.config.models import Config

LIBRARIES = ("numpy", "scipy", "scikit-learn", "lmfit", "xarray", "netCDF4", "numba", "pymatching")
CLOUD_POINTS = 400
"""Calibration points per qubit and preparation that the figure of clouds shows."""


@dataclass(frozen=True)
class Material:
    """What the stages of one patch and basis work on."""

    model: xr.Dataset
    reduced: Sequence[Reduced]
    config: Config
    done: dict[str, xr.Dataset]


def _readout(on: Material) -> xr.Dataset:
    parts = [(one.frame, one.tuned, one.readout) for one in on.reduced]
    return readout(on.model, parts, on.config.readout)


def _detection(on: Material) -> xr.Dataset:
    return detection([(one.frame, one.detection) for one in on.reduced], on.config.detection)


def _rates(on: Material) -> xr.Dataset:
    layout = on.reduced[0].frame.layout
    return rates(on.done["detection"], on.done["readout"], layout, on.config.rates, on.config.seed)


def _logical(on: Material) -> xr.Dataset:
    return logical([(one.frame, one.logical) for one in on.reduced], on.config.logical)


def _share(on: Material) -> xr.Dataset:
    return share(
        [(one.frame, one.exposures, one.logical) for one in on.reduced],
        on.done["logical"],
        on.done["rates"],
        on.done["readout"],
        on.done["detection"],
        on.reduced[0].frame.layout,
        on.config.share,
        on.config.seed,
    )


STAGES: tuple[tuple[str, Callable[[Material], xr.Dataset]], ...] = (
    ("readout", _readout),
    ("detection", _detection),
    ("rates", _rates),
    ("logical", _logical),
    ("share", _share),
)


def run_all(config: Config, reporter: Reporter | None = None) -> list[PatchResult]:
    """Run every epoch that the config's folder of recordings holds.

    Returns
    -------
    results
        One per epoch and patch, oldest epoch first.

    Raises
    ------
    ConfigError, LayoutError
        The code layout is not given or cannot be used.
    RecordingError
        Any recording cannot be used; nothing is run then.
    LeakpipeError
        A refit is writing into the same folder of results.
    """
    reporter = reporter or Silent()
    with reporter.step("opening recordings"):
        epochs = usable(find(config))
    with locked(config.results) as mine:
        if not mine:
            raise LeakpipeError(f"{config.results}  is being written by another leakpipe")
        return _run_epochs(epochs, config, reporter)


def _run_epochs(epochs: Sequence[Epoch], config: Config, reporter: Reporter) -> list[PatchResult]:
    results = []
    for epoch in epochs:
        for patch in sorted({one.patch for one in epoch.memories}):
            reports = run_patch(epoch, patch, config, reporter)
            place = config.results / folder_name(epoch.calibration_id, patch)
            with reporter.step(f"{epoch.calibration_id} {patch}: writing report"):
                with replacing(place) as folder:
                    content, block = write_result(folder, reports, config)
                if config.run_log is not None:
                    append_once(config.run_log, json_line(content))
            acts = any(finding["severity"] == "act" for finding in content["findings"])
            results.append(PatchResult(place, content, block, acts))
    return results


def run_patch(
    epoch: Epoch, patch: str, config: Config, reporter: Reporter | None = None
) -> list[PatchReport]:
    """Run all stages on one patch of one epoch.

    Parameters
    ----------
    epoch
        A calibration, the older ones, and the memory recordings under it.
    patch
        Name of the patch.
    config
        Settings.
    reporter
        Told about every step.

    Returns
    -------
    reports
        One per basis of the patch.

    Raises
    ------
    RecordingError
        A recording turned out damaged, or a qubit is in no calibration.
    """
    reporter = reporter or Silent()
    label = f"{epoch.calibration_id} {patch}"
    with reporter.step(f"{label}: calibrating readout"):
        model, model_key = calibrated([one.path for one in epoch.calibrations], config)
    memories = [one for one in epoch.memories if one.patch == patch]
    reports = []
    for basis, group in groupby(memories, key=lambda one: one.frame.basis):
        recordings = list(group)
        with reporter.step(f"{label} {basis}: reading shots", len(recordings)) as step:
            reduced = reduce_kept(recordings, model, model_key, config, step)
        done: dict[str, xr.Dataset] = {}
        for name, stage in STAGES:
            with reporter.step(f"{label} {basis}: {name}"):
                done[name] = stage(Material(model, reduced, config, done))
        newest = open_calibration(epoch.calibrations[-1].path, config.recordings.mapping)
        reports.append(_report(epoch, recordings, done, model, newest, config))
    return reports


def _report(
    epoch: Epoch,
    recordings: Sequence[MemoryRecording],
    done: dict[str, xr.Dataset],
    model: xr.Dataset,
    calibration: xr.Dataset,
    config: Config,
) -> PatchReport:
    frame = recordings[0].frame
    inputs = [*(one.path for one in epoch.calibrations), *(one.path for one in recordings)]
    return PatchReport(
        device=epoch.device,
        calibration_id=epoch.calibration_id,
        acquired_at=epoch.acquired_at.isoformat(),
        made_at=datetime.now(UTC).isoformat(timespec="seconds"),
        patch=recordings[0].patch,
        family=frame.layout.family,
        distance=frame.layout.distance,
        basis=frame.basis,
        shots=sum(one.frame.shots for one in recordings),
        rounds=tuple(sorted({one.frame.rounds for one in recordings})),
        layout=frame.layout,
        stages={"model": model, **done},
        config_text=config_text(config),
        input_hashes={path.name: hash_of(path) for path in inputs},
        versions={"leakpipe": __version__, **_versions()},
        seed=config.seed,
        points=_cloud(calibration),
    )


def config_text(config: Config) -> str:
    """Return the resolved settings as YAML: what a result is rerun from."""
    return yaml.safe_dump(config.model_dump(mode="json"), sort_keys=False, allow_unicode=True)


def _versions() -> dict[str, str]:
    return {name: importlib.metadata.version(name) for name in LIBRARIES}


def _cloud(calibration: xr.Dataset) -> xr.Dataset | None:
    """Return a few calibration points per qubit and preparation, for the eye."""
    if "iq" not in calibration:
        return None
    step = max(calibration.sizes["shot"] // CLOUD_POINTS, 1)
    sample = calibration[["iq"]].isel(shot=slice(None, None, step))
    return sample.rename(shot="point")


def write_result(
    folder: Path,
    reports: Sequence[PatchReport],
    config: Config,
    changes: Sequence[Finding] | None = None,
) -> tuple[dict[str, Any], str]:
    """Fill an empty folder with everything about one patch of one epoch.

    Parameters
    ----------
    folder
        Exists and is empty.
    reports
        One per basis.
    config
        Its limits may add findings.
    changes
        What moved since earlier epochs; None without an earlier one.

    Returns
    -------
    summary, block
        Content of `summary.json` and `summary.md`.
    """
    limits = limits_of(summary(reports), config.history)
    reports = [replace(reports[0], findings=(*reports[0].findings, *limits)), *reports[1:]]
    content = summary(reports, changes or ())
    block = run_log_block(content, changes)
    groups = {f"{one.basis}/{name}": data for one in reports for name, data in one.stages.items()}
    write_numbers(folder / "leakage.nc", groups, _provenance(reports))
    figures = [file for one in reports for file in write_figures(one, folder / "figures")]
    (folder / "summary.json").write_text(_json(content), encoding="utf-8")
    (folder / "summary.md").write_text(block + "\n", encoding="utf-8")
    html = page(content, reports, figures, changes)
    (folder / "page.html").write_text(html, encoding="utf-8")
    return content, block


def close_pass(config: Config) -> None:
    """End a pass of refits: write the page over all epochs, keep the cache within its size."""
    neighbours = neighbours_of(layout_of(config))
    write_epochs_page(config.results, store_of(config.results), neighbours, config.history)
    cache_of(config).trim(MOST_BYTES)


def run_job(
    job: Job, folder: Path, config: Config, findings: Sequence[Finding], reporter: Reporter
) -> None:
    """Make one result of a refit: fill its empty folder, with what moved since earlier epochs."""
    epoch, patch = job.payload, job.key[2]
    reports = run_patch(epoch, patch, config, reporter)
    reports[0] = replace(reports[0], findings=(*reports[0].findings, *findings))
    neighbours = neighbours_of(reports[0].layout)
    changes = since_last(store_of(config.results), summary(reports), neighbours, config.history)
    write_result(folder, reports, config, changes)


def _provenance(reports: Sequence[PatchReport]) -> dict[str, str]:
    first = reports[0]
    hashes = {name: value for one in reports for name, value in one.input_hashes.items()}
    return {
        "contract": "1",
        "device": first.device,
        "calibration_id": first.calibration_id,
        "patch": first.patch,
        "made_at": first.made_at,
        "config": first.config_text,
        "input_hashes": _json(hashes),
        "versions": _json(dict(first.versions)),
        "seed": str(first.seed),
    }


def _json(value: Any) -> str:
    return json.dumps(value, indent=1, ensure_ascii=False, allow_nan=False)
