"""Readout models and sums of recordings that were made before: kept, and found by content.

A new memory recording then reuses the calibration and the sums of its neighbours, and a change of
the settings of a late stage reads no shot again. A key is the hash of everything its value is a
function of; the values come back to the bit.
"""

from __future__ import annotations

from collections.abc import Sequence
from functools import lru_cache
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
import xarray as xr

from leakpipe.detection.stage import DetectionSums
from leakpipe.findings import Finding
from leakpipe.history.cache import Cache
from leakpipe.history.inputs import content_hash, digest_of, stamp_of
from leakpipe.history.packing import packed, unpacked
from leakpipe.history.results import RESULT_VERSION
from leakpipe.logical.stage import LogicalSums
from leakpipe.readout.stage import ReadoutSums, Tuned, calibrate
from leakpipe.recordings.opening import open_calibration
from leakpipe.reduction import Reduced, reduce_each
from leakpipe.share.stage import ExposureSums

if TYPE_CHECKING:
    from leakpipe.codes.layout import Layout
    from leakpipe.config.models import Config
    from leakpipe.progress import Step
    from leakpipe.recordings.opening import MemoryRecording

FOLDER_NAME = ".cache"
MOST_BYTES = 4_000_000_000
"""What the cache may hold: some hundred recordings of a distance-5 code (our choice)."""
SECTIONS = ("readout", "detection", "logical")
"""Sections of the config that the sums of a recording rest on."""
CLASSES = (Tuned, ReadoutSums, DetectionSums, LogicalSums, ExposureSums, Finding)


def cache_of(config: Config) -> Cache:
    """Return the cache that lies beside the result folders."""
    return Cache(config.results / FOLDER_NAME)


def hash_of(path: Path) -> str:
    """Return the SHA-256 of a recording; it is read once as long as it stays as it is."""
    return _hash_of(path, stamp_of(path))


@lru_cache(maxsize=4096)
def _hash_of(path: Path, _stamp: Any) -> str:
    return content_hash(path)


def calibrated(paths: Sequence[Path], config: Config) -> tuple[xr.Dataset, str]:
    """Return the readout model of some calibrations, and its key.

    Parameters
    ----------
    paths
        Calibration recordings, newest last.
    config
        Its `readout` section and its seed; the results folder holds the cache.
    """
    settings = [config.readout.model_dump(mode="json"), _mapping(config)]
    hashes = [hash_of(path) for path in paths]
    key = digest_of(["readout model", RESULT_VERSION, settings, config.seed, hashes])
    cache = cache_of(config)
    entry = cache.get(key)
    if entry is not None:
        try:
            return _dataset(unpacked(entry.arrays, entry.attributes["value"], ())), key
        except (ValueError, KeyError):
            # Written by another version: as good as absent.
            pass
    calibrations = [open_calibration(path, config.recordings.mapping) for path in paths]
    model = calibrate(calibrations, config.readout, config.seed)
    arrays, structure = packed(_parts(model))
    cache.put(key, arrays, {"value": structure})
    return model, key


def reduce_kept(
    recordings: Sequence[MemoryRecording],
    model: xr.Dataset,
    model_key: str,
    config: Config,
    step: Step,
) -> list[Reduced]:
    """Return the sums of recordings in their order; only what is not kept is read.

    Parameters
    ----------
    recordings
        Memory recordings.
    model, model_key
        What `calibrated` returned.
    config
        Settings.
    step
        Told about every recording.
    """
    cache = cache_of(config)
    keys = [_key_of(one, model_key, config) for one in recordings]
    found = [_kept(cache, key, one) for key, one in zip(keys, recordings, strict=True)]
    missing = [position for position, one in enumerate(found) if one is None]
    for _ in range(len(found) - len(missing)):
        step.advance()
    fresh = reduce_each([recordings[position] for position in missing], model, config)
    for position, reduced in zip(missing, fresh, strict=True):
        found[position] = reduced
        arrays, structure = packed(_sums(reduced))
        cache.put(keys[position], arrays, {"value": structure})
        step.advance()
    return [one for one in found if one is not None]


def _key_of(recording: MemoryRecording, model_key: str, config: Config) -> str:
    settings = {name: getattr(config, name).model_dump(mode="json") for name in SECTIONS}
    return digest_of(
        [
            "sums",
            RESULT_VERSION,
            model_key,
            settings,
            _mapping(config),
            recording.frame.name,
            recording.frame.leaked_reads,
            _outline(recording.frame.layout),
            hash_of(recording.path),
        ]
    )


def _mapping(config: Config) -> object:
    """Return how foreign files are read: the same content read otherwise is other shots."""
    mapping = config.recordings.mapping
    return None if mapping is None else mapping.model_dump(mode="json")


def _outline(layout: Layout) -> list[object]:
    logical = {basis: list(qubits) for basis, qubits in layout.logical.items()}
    return [layout.data, layout.measure, layout.checks, layout.touches, layout.slots, logical]


def _kept(cache: Cache, key: str, recording: MemoryRecording) -> Reduced | None:
    entry = cache.get(key)
    if entry is None:
        return None
    try:
        return Reduced(recording.frame, *unpacked(entry.arrays, entry.attributes["value"], CLASSES))
    except (ValueError, KeyError, TypeError):
        # Written by another version: as good as absent.
        return None


def _sums(reduced: Reduced) -> tuple[object, ...]:
    return reduced.tuned, reduced.readout, reduced.detection, reduced.logical, reduced.exposures


def _parts(dataset: xr.Dataset) -> dict[str, Any]:
    def variables(names: Any) -> dict[str, Any]:
        return {
            str(name): [
                [str(dim) for dim in dataset[name].dims],
                _texts(dataset[name].values),
                dict(dataset[name].attrs),
            ]
            for name in names
        }

    return {
        "variables": variables(dataset.data_vars),
        "coordinates": variables(dataset.coords),
        "attributes": dict(dataset.attrs),
    }


def _texts(values: np.ndarray[Any, Any]) -> np.ndarray[Any, Any]:
    """Return texts as fixed-width texts: arrays of Python objects are not kept."""
    return values.astype(str) if values.dtype == object else values


def _dataset(parts: dict[str, Any]) -> xr.Dataset:
    return xr.Dataset(
        {name: tuple(one) for name, one in parts["variables"].items()},
        coords={name: tuple(one) for name, one in parts["coordinates"].items()},
        attrs=parts["attributes"],
    )
