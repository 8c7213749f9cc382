"""The result folders on disk: whose they are, what they were made from, what a kill left behind."""

from __future__ import annotations

import hashlib
import json
import re
import shutil
from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from leakpipe.history.files import write_whole

RESULT_VERSION = 1
"""Raised by hand when a change of leakpipe changes numbers: every result is then stale."""
IDENTITY_NAME = "identity.json"
SUMMARY_NAME = "summary.json"
_LEFTOVER = re.compile(r"\.(?P<place>.+)\.(?P<kind>old|new)-[0-9a-f]{8}")

Key = tuple[str, str, str]
"""Device, calibration_id and patch."""


@dataclass(frozen=True)
class Finished:
    """A finished result folder.

    Attributes
    ----------
    folder
        Where it is.
    key
        Whose it is.
    identity
        Hash of everything its numbers rest on; empty if it was not made by a refit.
    inputs
        Recording, relative to the folder of recordings, to the hash of its content.
    made_at
        When, as its summary says.
    told
        Hashes of the damaged recordings that its findings tell of.
    """

    folder: Path
    key: Key
    identity: str
    inputs: Mapping[str, str]
    made_at: str
    told: tuple[str, ...] = ()


def finished(results: Path) -> list[Finished]:
    """Return the finished result folders, sorted by name; folders of other kinds are left out."""
    found = []
    for summary_path in sorted(results.glob(f"*/{SUMMARY_NAME}")):
        folder = summary_path.parent
        if folder.name.startswith("."):
            continue
        noted = _read(folder / IDENTITY_NAME)
        if noted is None:
            summary = _read(summary_path)
            key = None if summary is None else key_of(summary)
            noted = {"key": key, "made_at": (summary or {}).get("made_at", "")}
        if noted.get("key") is None:
            continue
        found.append(
            Finished(
                folder,
                tuple(noted["key"]),
                str(noted.get("identity", "")),
                dict(noted.get("inputs", {})),
                str(noted["made_at"]),
                tuple(noted.get("told", ())),
            )
        )
    return found


def key_of(summary: Mapping[str, Any]) -> Key | None:
    """Return whose a summary is, or None if it is not of a single patch."""
    try:
        patches = {patch["patch"] for patch in summary["patches"]}
        if len(patches) != 1:
            return None
        return summary["device"], summary["calibration_id"], patches.pop()
    except (KeyError, TypeError):
        return None


def read_summary(folder: Path) -> dict[str, Any] | None:
    """Return the summary of a result folder, or None if it cannot be read."""
    return _read(folder / SUMMARY_NAME)


def note_identity(of: Finished) -> None:
    """Write into a result folder what it was made from."""
    content = {
        "key": of.key,
        "identity": of.identity,
        "inputs": dict(of.inputs),
        "made_at": of.made_at,
        "told": of.told,
    }
    write_whole(of.folder / IDENTITY_NAME, json.dumps(content, indent=1).encode())


def place_for(results: Path, key: Key, taken: Mapping[Path, Key]) -> Path:
    """Return the folder of a result: a plain name, or one with a hash where that is another's.

    Parameters
    ----------
    results
        Folder of the result folders.
    key
        Whose result.
    taken
        Folders of all finished results, and whose they are.
    """
    own = [folder for folder, owner in taken.items() if owner == key]
    if own:
        return min(own)
    device, calibration_id, patch = key
    plain = re.sub(r"[^A-Za-z0-9._-]+", "_", f"{calibration_id}-{patch}").lstrip(".") or "epoch"
    mark = hashlib.sha256(json.dumps([device, calibration_id, patch]).encode()).hexdigest()[:8]
    # File systems that ignore case would take two names that differ in case for one.
    names = {folder.name.lower() for folder in taken}
    place = results / plain[:MOST_CHARACTERS]
    if place.name.lower() in names or plain != place.name:
        place = results / f"{plain[:MOST_CHARACTERS]}-{mark}"
    return place


MOST_CHARACTERS = 120
"""Longest plain folder name: with marks and a leading dot it stays below the 255 bytes that common
file systems allow."""


def clear_leftovers(results: Path) -> list[str]:
    """Undo what a killed run left half done; call it under the lock only.

    A folder ``.NAME.old-X`` goes back to ``NAME`` if that is missing, else it is removed; a folder
    ``.NAME.new-X`` is removed. (`leakpipe.result.replacing` makes them.)

    Returns
    -------
    cleared
        Names of the folders put back or removed.
    """
    cleared = []
    for folder, match in _leftovers(results):
        place = results / match["place"]
        if match["kind"] == "old" and not place.exists():
            folder.rename(place)
        else:
            shutil.rmtree(folder, ignore_errors=True)
        cleared.append(folder.name)
    return cleared


def _leftovers(results: Path) -> Iterator[tuple[Path, re.Match[str]]]:
    for folder in sorted(results.iterdir()) if results.is_dir() else ():
        match = _LEFTOVER.fullmatch(folder.name)
        if match and folder.is_dir():
            yield folder, match


def _read(path: Path) -> dict[str, Any] | None:
    try:
        found = json.loads(path.read_text(encoding="utf-8"))
    except (OSError, ValueError):
        return None
    return found if isinstance(found, dict) else None
