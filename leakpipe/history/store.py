"""The history: a SQLite file beside the result folders, an index that can be rebuilt from them.

A rollback journal, never write-ahead logging, which does not work on network file systems
(sqlite.org/wal.html, section 1); one short write transaction an epoch. Standard library only, so
that a refit with nothing to do starts at once.
"""

from __future__ import annotations

import json
import sqlite3
from collections.abc import Iterator, Mapping, Sequence
from contextlib import closing, contextmanager
from dataclasses import astuple, dataclass, fields, replace
from pathlib import Path
from typing import Any

from leakpipe.errors import LeakpipeError
from leakpipe.history.rows import Row, in_utc, rows_of

FILE_NAME = "history.sqlite"
BUSY_SECONDS = 30.0
"""How long a writer waits for another one; a write lasts milliseconds (our choice)."""

MIGRATIONS = (
    """
    CREATE TABLE entry (
        entry INTEGER PRIMARY KEY,
        device TEXT NOT NULL,
        calibration_id TEXT NOT NULL,
        patch TEXT NOT NULL,
        basis TEXT NOT NULL,
        acquired_at TEXT NOT NULL,
        made_at TEXT NOT NULL,
        family TEXT NOT NULL,
        distance INTEGER NOT NULL,
        shots INTEGER NOT NULL,
        UNIQUE (device, calibration_id, patch, basis)
    ) STRICT;
    CREATE TABLE quantity (
        entry INTEGER NOT NULL REFERENCES entry ON DELETE CASCADE,
        position INTEGER NOT NULL,
        qubit TEXT NOT NULL,
        role TEXT NOT NULL,
        quantity TEXT NOT NULL,
        value REAL,
        low REAL,
        high REAL,
        level REAL NOT NULL,
        identifiable INTEGER NOT NULL CHECK (identifiable IN (0, 1)),
        reason TEXT NOT NULL,
        PRIMARY KEY (entry, qubit, quantity)
    ) STRICT, WITHOUT ROWID;
    CREATE TABLE finding (
        device TEXT NOT NULL,
        calibration_id TEXT NOT NULL,
        patch TEXT NOT NULL,
        position INTEGER NOT NULL,
        code TEXT NOT NULL,
        severity TEXT NOT NULL,
        place TEXT NOT NULL,
        sentence TEXT NOT NULL,
        numbers TEXT NOT NULL,
        PRIMARY KEY (device, calibration_id, patch, position)
    ) STRICT, WITHOUT ROWID;
    """,
)
"""Migration n brings a file from `PRAGMA user_version` n to n + 1; an old one is never edited."""


@dataclass(frozen=True)
class EpochLine:
    """One line of the list of epochs: a patch under one calibration.

    Attributes
    ----------
    device, calibration_id, patch, acquired_at, made_at
        Which result; the times are ISO 8601 in UTC.
    bases
        The bases it holds, such as ``"X Z"``.
    shots
        Sum over its bases.
    act, watch
        Number of findings of these severities.
    """

    device: str
    calibration_id: str
    patch: str
    acquired_at: str
    made_at: str
    bases: str
    shots: int
    act: int
    watch: int


class HistoryDamaged(LeakpipeError):
    """The file is no SQLite file, or a damaged one."""


_ROW = tuple(field.name for field in fields(Row))
_LINE = tuple(field.name for field in fields(EpochLine))


class Store:
    """The history file.

    Every method opens the file, does one thing and closes it again: nothing is held between
    epochs, and a kill at any moment leaves the last committed state.

    Parameters
    ----------
    path
        The SQLite file; made on the first write.
    """

    def __init__(self, path: Path) -> None:
        self.path = path

    def add(self, summary: Mapping[str, Any]) -> None:
        """Put a summary into the history, in place of what it held of the same epoch and patches.

        Adding the same summary again changes nothing.

        Raises
        ------
        LeakpipeError
            The file was written by a newer leakpipe, or is no SQLite file.
        """
        self.path.parent.mkdir(parents=True, exist_ok=True)
        with self._connected() as connection, _writing(connection):
            _add(connection, summary)

    def rebuild(self, results: Path) -> list[str]:
        """Make the history anew from the `summary.json` files of the result folders.

        The new file is built beside the old one and takes its place at the end.

        Returns
        -------
        problems
            One sentence for every summary that could not be read.
        """
        problems = []
        fresh = self.path.with_name(f".{self.path.name}.new")
        fresh.unlink(missing_ok=True)
        with Store(fresh)._connected() as connection, _writing(connection):
            for path in summary_files(results):
                try:
                    _add(connection, json.loads(path.read_text(encoding="utf-8")))
                except (OSError, ValueError, KeyError, TypeError) as error:
                    problems.append(f"{path}  cannot be read as a summary: {error}")
        fresh.replace(self.path)
        return problems

    def made(self) -> dict[tuple[str, str, str], str]:
        """Return (device, calibration_id, patch) to the moment its result was made."""
        if not self.path.exists():
            return {}
        with self._connected() as connection:
            found = connection.execute(
                "SELECT device, calibration_id, patch, min(made_at) FROM entry GROUP BY 1, 2, 3"
            )
            return {(device, name, patch): made for device, name, patch, made in found}

    def rows(
        self,
        *,
        device: str | None = None,
        patch: str | None = None,
        quantity: str | tuple[str, ...] | None = None,
        qubit: str | None = None,
        until: str | None = None,
    ) -> list[Row]:
        """Return the rows of the history, oldest epoch first.

        Parameters
        ----------
        device, patch, quantity, qubit
            Only these; several quantities may be named; ``qubit=""`` is the whole code.
        until
            Only epochs recorded at this time (ISO 8601 with a zone) or before.
        """
        if not self.path.exists():
            return []
        named = (quantity,) if isinstance(quantity, str) else quantity
        wanted = {
            "device = ?": device,
            "patch = ?": patch,
            "quantity IN (SELECT value FROM json_each(?))": named and json.dumps(named),
            "qubit = ?": qubit,
            "acquired_at <= ?": None if until is None else in_utc(until),
        }
        conditions = {text: value for text, value in wanted.items() if value is not None}
        where = f"WHERE {' AND '.join(conditions)}" if conditions else ""
        with self._connected() as connection:
            found = connection.execute(
                f"SELECT {', '.join(_ROW)} FROM entry JOIN quantity USING (entry) {where} "
                "ORDER BY acquired_at, calibration_id, device, patch, basis, position",
                list(conditions.values()),
            )
            return [_row(values) for values in found]

    def epochs(self, *, device: str | None = None, patch: str | None = None) -> list[EpochLine]:
        """Return one line per device, calibration and patch, oldest first."""
        if not self.path.exists():
            return []
        chosen = [(device, "device"), (patch, "patch")]
        conditions = " AND ".join(f"{name} = ?" for value, name in chosen if value is not None)
        act, watch = _count_of("act"), _count_of("watch")
        with self._connected() as connection:
            found = connection.execute(
                "SELECT device, calibration_id, patch, min(acquired_at), max(made_at), "
                f"group_concat(basis, ' '), sum(shots), {act}, {watch} "
                f"FROM entry {'WHERE ' + conditions if conditions else ''} "
                "GROUP BY device, calibration_id, patch "
                "ORDER BY min(acquired_at), calibration_id, device, patch",
                [value for value, _ in chosen if value is not None],
            )
            # SQLite joins the bases in any order.
            lines = [EpochLine(**dict(zip(_LINE, row, strict=True))) for row in found]
            return [replace(one, bases=" ".join(sorted(one.bases.split()))) for one in lines]

    def findings(self, device: str, calibration_id: str, patch: str) -> list[dict[str, Any]]:
        """Return the findings of one result as `summary.json` has them."""
        if not self.path.exists():
            return []
        with self._connected() as connection:
            found = connection.execute(
                "SELECT code, severity, place, sentence, numbers FROM finding "
                "WHERE device = ? AND calibration_id = ? AND patch = ? ORDER BY position",
                (device, calibration_id, patch),
            )
            names = ("code", "severity", "where", "sentence")
            return [
                {**dict(zip(names, row[:-1], strict=True)), "numbers": json.loads(row[-1])}
                for row in found
            ]

    @contextmanager
    def _connected(self) -> Iterator[sqlite3.Connection]:
        with closing(
            sqlite3.connect(self.path, timeout=BUSY_SECONDS, isolation_level=None)
        ) as connection:
            try:
                connection.execute("PRAGMA journal_mode = DELETE")
                connection.execute("PRAGMA foreign_keys = ON")
                _migrate(connection, self.path)
                yield connection
            except sqlite3.DatabaseError as error:
                # The subclasses are about one statement, a lock or the disk, not about the file.
                kind = HistoryDamaged if type(error) is sqlite3.DatabaseError else LeakpipeError
                raise kind(
                    f"{self.path}  cannot be used as a history: {error}. "
                    "It is only an index: move it away and rebuild it from the result folders."
                ) from error


def _row(values: tuple[Any, ...]) -> Row:
    named = dict(zip(_ROW, values, strict=True))
    # SQLite has no truth values.
    named["identifiable"] = bool(named["identifiable"])
    return Row(**named)


def summary_files(results: Path) -> list[Path]:
    """Return the summaries of the finished result folders, sorted by folder name."""
    return sorted(
        path for path in results.glob("*/summary.json") if not path.parent.name.startswith(".")
    )


@contextmanager
def _writing(connection: sqlite3.Connection) -> Iterator[None]:
    """One write transaction: locked from its start, all of it or nothing."""
    connection.execute("BEGIN IMMEDIATE")
    try:
        yield
    except BaseException:
        connection.execute("ROLLBACK")
        raise
    connection.execute("COMMIT")


def _migrate(connection: sqlite3.Connection, path: Path) -> None:
    if _version(connection) == len(MIGRATIONS):
        return
    with _writing(connection):
        # Read again: another process may have migrated while this one waited for the lock.
        version = _version(connection)
        if version > len(MIGRATIONS):
            raise LeakpipeError(
                f"{path}  is a history of version {version}, written by a newer leakpipe; "
                f"this one knows versions up to {len(MIGRATIONS)}"
            )
        for migration in MIGRATIONS[version:]:
            # Not executescript: it would commit the transaction first.
            for statement in filter(str.strip, migration.split(";")):
                connection.execute(statement)
        connection.execute(f"PRAGMA user_version = {len(MIGRATIONS)}")


def _version(connection: sqlite3.Connection) -> int:
    return int(connection.execute("PRAGMA user_version").fetchone()[0])


def _count_of(severity: str) -> str:
    return (
        "(SELECT count(*) FROM finding WHERE finding.device = entry.device "
        "AND finding.calibration_id = entry.calibration_id AND finding.patch = entry.patch "
        f"AND severity = '{severity}')"
    )


def _add(connection: sqlite3.Connection, summary: Mapping[str, Any]) -> None:
    rows = list(rows_of(summary))
    device, calibration_id = summary["device"], summary["calibration_id"]
    patches = {patch["patch"] for patch in summary["patches"]}
    for name in patches:
        # All its bases: one that is no longer in the summary must not stay behind.
        connection.execute(
            "DELETE FROM entry WHERE device = ? AND calibration_id = ? AND patch = ?",
            (device, calibration_id, name),
        )
    for patch in summary["patches"]:
        key = (device, calibration_id, patch["patch"], patch["basis"])
        moments = (in_utc(summary["acquired_at"]), in_utc(summary["made_at"]))
        entry = connection.execute(
            f"INSERT INTO entry VALUES (NULL, {_marks(9)})",
            (*key, *moments, patch["family"], patch["distance"], patch["shots"]),
        ).lastrowid
        mine = [row for row in rows if (row.patch, row.basis) == key[2:]]
        first = _ROW.index("qubit")
        connection.executemany(
            f"INSERT INTO quantity VALUES ({_marks(11)})",
            [(entry, position, *astuple(row)[first:]) for position, row in enumerate(mine)],
        )
    for name in patches:
        _add_findings(connection, (device, calibration_id, name), summary["findings"])


def _add_findings(
    connection: sqlite3.Connection, key: tuple[str, str, str], found: Sequence[Mapping[str, Any]]
) -> None:
    connection.execute(
        "DELETE FROM finding WHERE device = ? AND calibration_id = ? AND patch = ?", key
    )
    connection.executemany(
        f"INSERT INTO finding VALUES ({_marks(9)})",
        [
            (
                *key,
                position,
                one["code"],
                one["severity"],
                one["where"],
                one["sentence"],
                json.dumps(one["numbers"]),
            )
            for position, one in enumerate(found)
        ],
    )


def _marks(count: int) -> str:
    return ", ".join("?" * count)
