"""The result folder of one epoch and patch: written beside its place, then renamed."""

from __future__ import annotations

import json
import os
import re
import shutil
import uuid
from collections.abc import Hashable, Iterator, Mapping
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import xarray as xr


@dataclass(frozen=True)
class PatchResult:
    """What a run leaves of one epoch and patch.

    Attributes
    ----------
    folder
        The result folder.
    summary
        Content of `summary.json`.
    block
        The run-log block, text of `summary.md`.
    flagged
        True if a finding says "act".
    """

    folder: Path
    summary: dict[str, Any]
    block: str
    flagged: bool


def folder_name(calibration_id: str, patch: str) -> str:
    """Return the name of a result folder, safe on every file system."""
    return re.sub(r"[^A-Za-z0-9._-]+", "_", f"{calibration_id}-{patch}").lstrip(".") or "epoch"


@contextmanager
def replacing(place: Path) -> Iterator[Path]:
    """Give a fresh folder beside `place`, which takes its place when the context ends well.

    A reader sees the old folder or the new one. An error, or a kill at any moment, leaves the old
    one; a folder left behind by a kill starts with a dot and is removed by the next run.
    """
    place.parent.mkdir(parents=True, exist_ok=True)
    clear_leftovers(place)
    fresh = place.parent / f".{place.name}.new-{uuid.uuid4().hex[:8]}"
    fresh.mkdir()
    try:
        yield fresh
        _sync(fresh)
        if place.exists():
            old = place.parent / f".{place.name}.old-{uuid.uuid4().hex[:8]}"
            place.rename(old)
            fresh.rename(place)
            shutil.rmtree(old)
        else:
            fresh.rename(place)
    except BaseException:
        shutil.rmtree(fresh, ignore_errors=True)
        raise


def clear_leftovers(place: Path) -> None:
    """Remove what a killed run left beside `place`, bringing back an old folder if needed."""
    for old in sorted(place.parent.glob(f".{place.name}.old-*")):
        if place.exists():
            shutil.rmtree(old, ignore_errors=True)
        else:
            old.rename(place)
    for fresh in place.parent.glob(f".{place.name}.new-*"):
        shutil.rmtree(fresh, ignore_errors=True)


def _sync(folder: Path) -> None:
    for path in [*folder.rglob("*"), folder]:
        handle = os.open(path, os.O_RDONLY)
        try:
            os.fsync(handle)
        finally:
            os.close(handle)


def write_numbers(
    path: Path, groups: Mapping[str, xr.Dataset], provenance: Mapping[str, str]
) -> None:
    """Write every stage's dataset as one group of a netCDF file.

    Parameters
    ----------
    groups
        Group path, such as ``"Z/rates"``, to dataset.
    provenance
        Attributes of the root group: config text, input hashes, versions, seeds.
    """
    tree = xr.DataTree.from_dict({f"/{name}": _writable(data) for name, data in groups.items()})
    tree.attrs.update(provenance)
    tree.to_netcdf(path, engine="netcdf4")


def _writable(data: xr.Dataset) -> xr.Dataset:
    """Return the dataset without what netCDF refuses: bool, None and dict attributes."""
    data = data.copy()
    data.attrs = _plain(data.attrs)
    for name in data.variables:
        data[name].attrs = _plain(data[name].attrs)
    return data


def _plain(attributes: Mapping[Hashable, Any]) -> dict[Hashable, str | int | float]:
    return {
        key: value if isinstance(value, str | int | float) else json.dumps(value)
        for key, value in attributes.items()
        if value is not None and not isinstance(value, bool)
    }
