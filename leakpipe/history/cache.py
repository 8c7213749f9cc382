"""A folder of arrays under keys made from content: readout models, sums of a recording.

Entries are NPZ archives, never pickles. A damaged entry is a miss; a write is whole or not at all,
so two processes may share the folder.
"""

from __future__ import annotations

import json
import os
import re
import uuid
import zipfile
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

SUFFIX = ".npz"
_ATTRIBUTES = "attributes"
_KEY = re.compile(r"[A-Za-z0-9_-]{8,128}")


@dataclass(frozen=True)
class Entry:
    """Arrays by name and their attributes (what JSON can write)."""

    arrays: Mapping[str, NDArray[Any]]
    attributes: Mapping[str, Any]


class Cache:
    """A folder of entries.

    Parameters
    ----------
    folder
        Made on the first write. It may be deleted at any time: that only costs time.
    """

    def __init__(self, folder: Path) -> None:
        self.folder = folder

    def get(self, key: str) -> Entry | None:
        """Return an entry of arrays, or None if there is none or it is damaged."""
        path = self._path(key)
        try:
            with np.load(path, allow_pickle=False) as archive:
                arrays = {name: archive[name] for name in archive.files if name != _ATTRIBUTES}
                attributes = json.loads(str(archive[_ATTRIBUTES][()]))
        except (OSError, ValueError, KeyError, EOFError, zipfile.BadZipFile):
            return None
        self._touch(path)
        return Entry(arrays, attributes)

    def put(
        self, key: str, arrays: Mapping[str, NDArray[Any]], attributes: Mapping[str, Any]
    ) -> None:
        """Write an entry of arrays.

        Raises
        ------
        ValueError
            An array holds Python objects, or is named like the attributes.
        """
        for name, values in arrays.items():
            if name == _ATTRIBUTES or np.asarray(values).dtype.hasobject:
                raise ValueError(f"array {name!r} cannot be kept: objects, or a reserved name")
        text = json.dumps(attributes)
        named: dict[str, Any] = {**arrays, _ATTRIBUTES: np.array(text)}
        path = self._path(key)
        self.folder.mkdir(parents=True, exist_ok=True)
        fresh = self.folder / f".{path.name}.{uuid.uuid4().hex[:8]}.new"
        try:
            _save(fresh, named)
            fresh.replace(path)
        finally:
            fresh.unlink(missing_ok=True)

    def trim(self, most_bytes: int) -> int:
        """Remove the entries unused for longest until the folder fits; return how many.

        What killed writers left behind counts as an entry.
        """
        entries = [path for path in self.folder.glob("*") if path.suffix in (SUFFIX, ".new")]
        status = sorted(((path.stat(), path) for path in entries), key=lambda p: p[0].st_mtime_ns)
        size = sum(one.st_size for one, _ in status)
        removed = 0
        for one, path in status:
            if size <= most_bytes:
                break
            path.unlink(missing_ok=True)
            size -= one.st_size
            removed += 1
        return removed

    def _path(self, key: str) -> Path:
        if not _KEY.fullmatch(key):
            raise ValueError(f"key {key!r} must be 8 to 128 letters, digits, - or _")
        return self.folder / f"{key}{SUFFIX}"

    def _touch(self, path: Path) -> None:
        try:
            os.utime(path)
        except OSError:
            # A read-only cache is still a cache.
            return


def _save(path: Path, named: Mapping[str, Any]) -> None:
    with path.open("wb") as handle:
        np.savez(handle, allow_pickle=False, **named)
        handle.flush()
        os.fsync(handle.fileno())
