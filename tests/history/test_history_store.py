"""The history file: adding, replacing, rebuilding, migrating."""

from __future__ import annotations

import json
import sqlite3
from dataclasses import astuple
from pathlib import Path

import numpy as np
import pytest
from history_examples import estimate, one_patch, season, summary

from leakpipe.errors import LeakpipeError
from leakpipe.history.rows import in_utc, rows_of
from leakpipe.history.store import MIGRATIONS, Store


def a_season(count: int = 4, bases: tuple[str, ...] = ("Z", "X")) -> list[dict]:
    return season(count, np.random.default_rng(3), bases=bases)


def test_rows_of_a_summary_come_back_from_the_store_unchanged(tmp_path: Path) -> None:
    """What is added is what is read, value for value, unknown ones included."""
    store = Store(tmp_path / "h.sqlite")
    one = summary(0, [one_patch({"D0": 0.01, "M0": None})])
    store.add(one)
    assert sorted(map(repr, store.rows())) == sorted(map(repr, rows_of(one)))
    unknown = store.rows(qubit="M0", quantity="steady_leakage")
    assert [(row.value, row.low, row.identifiable) for row in unknown] == [(None, None, False)]
    assert unknown[0].reason == "too few shots"


def test_adding_twice_changes_nothing(tmp_path: Path) -> None:
    """The second add of the same summaries, in any order, leaves every row as it was."""
    store = Store(tmp_path / "h.sqlite")
    summaries = a_season()
    for one in summaries:
        store.add(one)
    before = store.rows()
    for one in reversed(summaries):
        store.add(one)
    assert store.rows() == before
    assert len(store.epochs()) == len(summaries)


def test_a_new_result_replaces_the_old_one_with_all_its_bases(tmp_path: Path) -> None:
    """A basis that the new result no longer holds does not stay behind."""
    store = Store(tmp_path / "h.sqlite")
    store.add(summary(0, [one_patch({"D0": 0.01}, basis) for basis in ("Z", "X")]))
    store.add(summary(0, [one_patch({"D0": 0.02}, "Z")], made=5))
    assert {row.basis for row in store.rows()} == {"Z"}
    assert [row.value for row in store.rows(qubit="D0", quantity="steady_leakage")] == [0.02]


def test_patches_and_devices_with_the_same_calibration_name_are_kept_apart(tmp_path: Path) -> None:
    """Only the same device, calibration and patch is the same result."""
    store = Store(tmp_path / "h.sqlite")
    store.add(summary(0, [one_patch({"D0": 0.01}, patch="west")]))
    store.add(summary(0, [one_patch({"D0": 0.02}, patch="east")]))
    store.add(summary(0, [one_patch({"D0": 0.03}, patch="east")], device="other"))
    found = store.rows(qubit="D0", quantity="steady_leakage")
    assert sorted(row.value for row in found) == [0.01, 0.02, 0.03]
    assert len(store.rows(device="chip", patch="east", qubit="D0", quantity="injection")) == 1


def test_rebuilding_from_result_folders_gives_the_same_rows(tmp_path: Path) -> None:
    """The history is an index: thrown away and rebuilt, nothing is missing."""
    store = Store(tmp_path / "h.sqlite")
    for number, one in enumerate(a_season()):
        folder = tmp_path / "results" / f"e{number}"
        folder.mkdir(parents=True)
        (folder / "summary.json").write_text(json.dumps(one))
        store.add(one)
    hidden = tmp_path / "results" / ".e9.new-12345678"
    hidden.mkdir()
    (hidden / "summary.json").write_text(json.dumps(summary(9, [one_patch({"D0": 1e-2})])))
    broken = tmp_path / "results" / "broken"
    broken.mkdir()
    (broken / "summary.json").write_text('{"contract": "1", ')
    before, epochs = store.rows(), store.epochs()
    store.path.unlink()
    problems = store.rebuild(tmp_path / "results")
    assert len(problems) == 1
    assert "broken" in problems[0]
    assert store.rows() == before
    assert store.epochs() == epochs


def test_epochs_come_in_the_order_of_time_whatever_their_zone(tmp_path: Path) -> None:
    """Text order of the stored times is time order, also across zones."""
    store = Store(tmp_path / "h.sqlite")
    late, early = summary(0, [one_patch({"D0": 0.01})]), summary(1, [one_patch({"D0": 0.02})])
    late["acquired_at"] = "2026-03-01T23:30:00-02:00"
    early["acquired_at"] = "2026-03-02T01:00:00+01:00"
    for one in (late, early):
        store.add(one)
    assert [one.calibration_id for one in store.epochs()] == ["cal-001", "cal-000"]
    assert in_utc("2026-03-02T01:00:00+01:00") < in_utc("2026-03-01T23:30:00-02:00")
    until = store.rows(until="2026-03-02T00:30:00+00:00", qubit="D0", quantity="injection")
    assert [row.calibration_id for row in until] == ["cal-001"]
    with pytest.raises(ValueError, match="no zone"):
        in_utc("2026-03-02T01:00:00")


def test_a_reader_during_a_failed_write_sees_the_state_before(tmp_path: Path) -> None:
    """A summary that cannot be stored leaves nothing of itself behind."""
    store = Store(tmp_path / "h.sqlite")
    store.add(summary(0, [one_patch({"D0": 0.01})]))
    before = store.rows()
    bad = summary(0, [one_patch({"D0": 0.05}), one_patch({"D1": 0.05}, "X")])
    bad["patches"][1]["shots"] = "many"
    with pytest.raises(LeakpipeError):
        store.add(bad)
    assert store.rows() == before


def test_findings_are_counted_and_come_back(tmp_path: Path) -> None:
    """The list of epochs says how many findings ask for attention."""
    store = Store(tmp_path / "h.sqlite")
    one = summary(0, [one_patch({"D0": 0.01}), one_patch({"D0": 0.01}, "X")])
    one["findings"] = [
        {"code": "a", "severity": "act", "where": "D0", "sentence": "S.", "numbers": {"x": 1.5}},
        {"code": "b", "severity": "note", "where": "D0", "sentence": "T.", "numbers": {}},
    ]
    store.add(one)
    (line,) = store.epochs()
    assert (line.act, line.watch, line.bases, line.shots) == (1, 0, "X Z", 120000)
    assert store.findings("chip", "cal-000", "west") == one["findings"]


def test_the_file_uses_a_rollback_journal_and_strict_tables(tmp_path: Path) -> None:
    """A file that someone switched to write-ahead logging is switched back; types are held."""
    path = tmp_path / "h.sqlite"
    store = Store(path)
    store.add(summary(0, [one_patch({"D0": 0.01})]))
    with sqlite3.connect(path) as connection:
        connection.execute("PRAGMA journal_mode = WAL")
    connection.close()
    assert store.rows()
    connection = sqlite3.connect(path)
    assert connection.execute("PRAGMA journal_mode").fetchone() == ("delete",)
    with pytest.raises(sqlite3.IntegrityError, match="TEXT value in"):
        connection.execute("UPDATE quantity SET value = 'large'")
    strict = connection.execute("SELECT name, strict FROM pragma_table_list WHERE schema='main'")
    assert all(is_strict for name, is_strict in strict if not name.startswith("sqlite_"))
    connection.close()


def test_a_newer_file_and_a_foreign_file_are_refused_in_words(tmp_path: Path) -> None:
    """Neither is touched; the message says what to do."""
    store = Store(tmp_path / "h.sqlite")
    store.add(summary(0, [one_patch({"D0": 0.01})]))
    connection = sqlite3.connect(store.path)
    connection.execute(f"PRAGMA user_version = {len(MIGRATIONS) + 1}")
    connection.close()
    with pytest.raises(LeakpipeError, match="newer leakpipe"):
        store.rows()
    foreign = tmp_path / "notes.sqlite"
    foreign.write_bytes(b"these are notes, not a database" * 100)
    with pytest.raises(LeakpipeError, match="rebuild it from the result folders"):
        Store(foreign).rows()
    assert foreign.read_bytes().startswith(b"these are notes")


def test_an_empty_history_answers_without_making_a_file(tmp_path: Path) -> None:
    """Reading makes no file."""
    store = Store(tmp_path / "h.sqlite")
    assert (store.rows(), store.epochs(), store.made()) == ([], [], {})
    assert not store.path.exists()


def test_every_estimate_of_a_summary_is_in_the_rows() -> None:
    """No estimate of the contract is forgotten when a summary is taken apart."""
    one = summary(0, [one_patch({"D0": 0.01, "M0": 0.02})])
    marks = iter(range(1, 1000))

    def marked(part: object) -> None:
        if isinstance(part, dict):
            if "identifiable" in part:
                part.update(estimate(next(marks) * 1e-3))
            else:
                for inner in part.values():
                    marked(inner)
        elif isinstance(part, list):
            for inner in part:
                marked(inner)

    marked(one)
    count = next(marks) - 1
    values = {row.value for row in rows_of(one)}
    assert values == {number * 1e-3 for number in range(1, count + 1)}
    assert len({astuple(row)[3:8] for row in rows_of(one)}) == count
