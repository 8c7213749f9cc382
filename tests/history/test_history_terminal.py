"""The history in the terminal."""

from __future__ import annotations

import json
from pathlib import Path

import numpy as np
import pytest
from history_examples import one_patch, season, summary

from leakpipe.config.history import HistorySettings
from leakpipe.errors import ConfigError
from leakpipe.history.changes import changes
from leakpipe.history.duration import seconds
from leakpipe.history.rows import Row, rows_of
from leakpipe.history.store import Store
from leakpipe.history.terminal import (
    BLOCKS,
    GAP,
    MOST_EPOCHS,
    changes_text,
    epochs_text,
    log_json,
    overview_text,
    page_rows,
    quantity_text,
    qubit_text,
    sparkline,
)
from leakpipe.history.words import amount, joined


@pytest.fixture
def rows() -> list[Row]:
    summaries = season(26, np.random.default_rng(1), moved={"D4": (20, 3.0)})
    return [row for one in summaries for row in rows_of(one)]


def test_a_sparkline_goes_from_lowest_to_highest_with_gaps() -> None:
    """Lowest and highest bars stand where lowest and highest values are."""
    line = sparkline([1.0, 2.0, None, 3.0, float("nan")])
    assert line[0] == BLOCKS[0]
    assert line[3] == BLOCKS[-1]
    assert line[2] == line[4] == GAP
    assert len(sparkline([1.0] * 200)) == MOST_EPOCHS
    assert sparkline([None, None]) == GAP * 2
    assert len(set(sparkline([2.0, 2.0]))) == 1


def test_one_qubit_over_time_shows_every_epoch_with_its_interval(rows: list[Row]) -> None:
    """A line per epoch: value, interval, and a bar that is longest for the leakiest nights."""
    text = qubit_text(rows, "D4")
    lines = text.splitlines()
    assert len(lines) == 27
    assert all("% (" in line and "cal-0" in line and "●" in line for line in lines[1:])
    assert lines[22].index("●") > lines[15].index("●")
    assert 'holds no steady leakage of "D99"' in qubit_text(rows, "D99")


def test_the_overview_has_one_quantity_per_line_and_what_changed(rows: list[Row]) -> None:
    """Newest value, interval and trend of each number of the code, then the flags."""
    flags = [one.to_json() for one in changes(rows, {}, HistorySettings())]
    text = overview_text(rows, flags)
    for words in ("logical error per round", "leakage share", "settling time", "D4 steady leakage"):
        assert words in text
    assert overview_text([], []) == "the history is empty"
    assert changes_text([]) == "nothing moved beyond noise"


def test_one_quantity_has_a_line_per_qubit(rows: list[Row]) -> None:
    """All qubits of the patch, one line each."""
    text = quantity_text(rows, "steady_leakage")
    assert len(text.splitlines()) == 18
    assert 'holds no "nothing"' in quantity_text(rows, "nothing")


def test_epochs_are_listed_newest_last(tmp_path: Path) -> None:
    """One line an epoch, in columns."""
    store = Store(tmp_path / "h.sqlite")
    for one in season(3, np.random.default_rng(2)):
        store.add(one)
    lines = epochs_text(store.epochs()).splitlines()
    assert [line.split()[2] for line in lines[1:]] == ["cal-000", "cal-001", "cal-002"]
    assert epochs_text([]) == "the history is empty"


def test_machines_get_the_same_as_json(rows: list[Row]) -> None:
    """Everything goes through strict JSON."""
    flags = [one.to_json() for one in changes(rows, {}, HistorySettings())]
    content = json.loads(json.dumps(log_json([], rows, flags), allow_nan=False))
    assert len(content["rows"]) == len(rows)
    assert content["changes"] == json.loads(json.dumps(flags))


def test_flags_reach_the_rows_of_the_page(rows: list[Row]) -> None:
    """The flagged qubit's epoch is marked, others are not."""
    flags = [one.to_json() for one in changes(rows, {}, HistorySettings()) if one.where == "D4"]
    marked = [row for row in page_rows(rows, flags) if row["flags"]]
    assert marked
    assert {(row["qubit"], row["quantity"]) for row in marked} == {("D4", "steady_leakage")}


@pytest.mark.parametrize(
    ("quantity", "numbers", "words"),
    [
        ("steady_leakage", (0.0105, 0.0092, 0.0118), "1.05 % (0.92 to 1.18)"),
        ("settling_rounds", (5.04, 4.2, 6.0), "5.04 rounds (4.20 to 6.00)"),
        ("kappa", (0.99, 0.8, 1.2), "0.99 (0.80 to 1.20)"),
        ("steady_leakage", (None, 0.0, 0.001), "below 0.1 %"),
        ("settling_rounds", (None, 40.0, None), "above 40 rounds"),
        ("leakage_share", (None, None, None), "not identifiable"),
    ],
)
def test_amounts_carry_unit_and_interval(
    quantity: str, numbers: tuple[float | None, ...], words: str
) -> None:
    """Percent for fractions, rounds for times, limits as limits."""
    assert amount(quantity, *numbers) == words


def test_lists_of_names_read_as_words() -> None:
    """Commas and a closing 'and'; many are counted."""
    assert joined(["A"]) == "A"
    assert joined(["A", "B", "C"]) == "A, B and C"
    assert joined([f"Q{i}" for i in range(9)]) == "Q0, Q1, Q2, Q3 and 5 more"


@pytest.mark.parametrize(
    ("text", "value"), [("90s", 90), ("15m", 900), ("1h30m", 5400), ("1d", 86400), (" 0.5h ", 1800)]
)
def test_durations_are_read_as_people_write_them(text: str, value: float) -> None:
    """Seconds, minutes, hours and days."""
    assert seconds(text) == value


@pytest.mark.parametrize(
    "text", ["", "15", "15 m", "m", "30m1h", "5m5m", "0s", "-5m", "15x", "1e3s"]
)
def test_other_durations_are_refused_in_words(text: str) -> None:
    """The message shows what a duration looks like."""
    with pytest.raises(ConfigError, match="must"):
        seconds(text)


def test_unknown_values_are_shown_as_such() -> None:
    """A qubit that could not be told has its line, not a zero."""
    one = summary(0, [one_patch({"D0": None})])
    assert "not identifiable" in quantity_text(list(rows_of(one)), "steady_leakage")
