"""Which recordings there are, which are complete, and the hash of what is in them.

A hash is kept with the size and modification time of the files it was made from, so that a pass
with nothing new reads no recording. Time and size only find the hash again; what decides is the
hash. A recording is complete once it has not changed for some time.
"""

from __future__ import annotations

import hashlib
import json
import os
from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from leakpipe.history.files import write_whole

LEDGER_NAME = ".refit.json"
LEDGER_VERSION = 1
BLOCK = 1 << 20

Stamp = tuple[tuple[str, int, int], ...]
"""Relative name, size and modification time (ns) of every file of a recording."""


@dataclass
class Ledger:
    """What earlier passes saw; a file that is lost or damaged only costs time.

    Attributes
    ----------
    hashes
        Path to (stamp, hash of the content).
    seen
        Path to (stamp, moment it was first seen like this, seconds), of recordings whose
        modification time says nothing: it lies in the future.
    bad
        Hash of the content of a recording that turned out damaged while it was read, to the
        sentence that says so.
    problems
        Sentences of the last pass about recordings that cannot be used.
    failures
        Identity of a result that could not be made to (number of tries, sentence).
    settled
        Digest of everything the last pass saw when it left nothing to do; empty otherwise.
    """

    hashes: dict[str, tuple[Stamp, str]]
    seen: dict[str, tuple[Stamp, float]]
    bad: dict[str, str]
    failures: dict[str, tuple[int, str]]
    problems: tuple[str, ...] = ()
    settled: str = ""

    @classmethod
    def load(cls, folder: Path) -> Ledger:
        """Read the ledger of a folder of results; an empty one if there is none to read."""
        try:
            found = json.loads((folder / LEDGER_NAME).read_text(encoding="utf-8"))
            if found["version"] != LEDGER_VERSION:
                return cls({}, {}, {}, {})
            return cls(
                {path: (_stamp(stamp), str(sha)) for path, (stamp, sha) in found["hashes"].items()},
                {path: (_stamp(stamp), float(at)) for path, (stamp, at) in found["seen"].items()},
                {sha: str(why) for sha, why in found["bad"].items()},
                {key: (int(n), str(why)) for key, (n, why) in found["failures"].items()},
                tuple(map(str, found["problems"])),
                str(found["settled"]),
            )
        except (OSError, ValueError, KeyError, TypeError, AttributeError):
            return cls({}, {}, {}, {})

    def save(self, folder: Path) -> None:
        """Write the ledger, whole or not at all."""
        content = {
            "version": LEDGER_VERSION,
            "hashes": self.hashes,
            "seen": self.seen,
            "bad": self.bad,
            "failures": self.failures,
            "problems": self.problems,
            "settled": self.settled,
        }
        write_whole(folder / LEDGER_NAME, json.dumps(content).encode())


def _stamp(found: Iterable[Any]) -> Stamp:
    return tuple((str(name), int(size), int(time)) for name, size, time in found)


def recordings_in(folder: Path, patterns: Iterable[str]) -> list[Path]:
    """Return the files and stores that match the patterns, sorted, hidden ones left out.

    The same rule as `leakpipe.recordings.finding`, without its imports (a test holds them equal).
    """
    found = {path for pattern in patterns for path in folder.rglob(pattern)}
    return sorted(path for path in found if not path.name.startswith("."))


def stamp_of(path: Path) -> Stamp:
    """Return the stamp of a file, or of all files of a store.

    Raises
    ------
    OSError
        The recording vanished.
    """
    if not path.is_dir():
        return (_one("", path.stat()),)
    files = sorted(one for one in path.rglob("*") if one.is_file())
    return tuple(_one(str(one.relative_to(path)), one.stat()) for one in files)


def _one(name: str, status: os.stat_result) -> tuple[str, int, int]:
    return name, status.st_size, status.st_mtime_ns


def content_hash(path: Path) -> str:
    """Return the SHA-256 of a file, or of all files of a store in the order of their names.

    Raises
    ------
    OSError
        The recording cannot be read.
    """
    digest = hashlib.sha256()
    files = [path] if not path.is_dir() else sorted(p for p in path.rglob("*") if p.is_file())
    for file in files:
        if file != path:
            digest.update(str(file.relative_to(path)).encode())
        with file.open("rb") as handle:
            while block := handle.read(BLOCK):
                digest.update(block)
    return digest.hexdigest()


@dataclass(frozen=True)
class Inputs:
    """The recordings of one pass.

    Attributes
    ----------
    hashes
        Complete recordings and the hash of their content.
    waiting
        Recordings that are still being written.
    problems
        One sentence for every recording that cannot be read at all.
    """

    hashes: Mapping[Path, str]
    waiting: tuple[Path, ...]
    problems: tuple[str, ...]


def look(paths: Iterable[Path], ledger: Ledger, *, quiet_seconds: float, now: float) -> Inputs:
    """Return the complete recordings with their hashes, and bring the ledger up to date.

    Parameters
    ----------
    paths
        Recordings.
    ledger
        Changed in place: new hashes come in, those of vanished recordings go.
    quiet_seconds
        A recording whose last change is younger is left for the next pass.
    now
        Seconds since the epoch of the clock that the modification times are from.
    """
    hashes: dict[Path, str] = {}
    waiting, problems, seen = [], [], {}
    for path in paths:
        key = str(path)
        try:
            stamp = stamp_of(path)
            known = ledger.hashes.get(key)
            if known is not None and known[0] == stamp:
                hashes[path] = known[1]
                continue
            age = now - max((time for _, _, time in stamp), default=0) / 1e9
            if age < 0:
                first_stamp, first = ledger.seen.get(key, (stamp, now))
                first = first if first_stamp == stamp else now
                seen[key] = (stamp, first)
                age = now - first
            if age < quiet_seconds:
                waiting.append(path)
                continue
            sha = content_hash(path)
            if stamp_of(path) != stamp:
                waiting.append(path)
                continue
        except OSError as error:
            problems.append(f"{path}  cannot be read: {error.strerror or error}")
            continue
        hashes[path] = sha
        ledger.hashes[key] = (stamp, sha)
    present = {str(path) for path in hashes}
    ledger.hashes = {key: value for key, value in ledger.hashes.items() if key in present}
    ledger.seen = seen
    return Inputs(hashes, tuple(waiting), tuple(problems))


def digest_of(value: object) -> str:
    """Return the SHA-256 of a value that JSON can write, keys sorted."""
    text = json.dumps(value, sort_keys=True, separators=(",", ":"), allow_nan=False, default=str)
    return hashlib.sha256(text.encode()).hexdigest()
