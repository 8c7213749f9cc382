"""Findings about what moved: which, from what to what, where to look, and quiet otherwise."""

from __future__ import annotations

import json
from pathlib import Path

import numpy as np
import pytest
from history_examples import QUBITS, estimate, one_patch, season, summary

from leakpipe.codes.rotated import rotated_surface
from leakpipe.config.history import HistorySettings, LimitSettings
from leakpipe.findings import Finding
from leakpipe.history.changes import at_epoch, changes
from leakpipe.history.compare import limits_of, neighbours_of, since_last
from leakpipe.history.rows import Row, rows_of
from leakpipe.history.store import Store

SETTINGS = HistorySettings()
NEIGHBOURS = {
    **{f"D{i}": tuple(f"M{j}" for j in range(8) if (i + j) % 4 == 0) for i in range(9)},
    **{f"M{j}": tuple(f"D{i}" for i in range(9) if (i + j) % 4 == 0) for j in range(8)},
}


def rows_of_all(summaries: list[dict]) -> list[Row]:
    return [row for one in summaries for row in rows_of(one)]


def found_in(summaries: list[dict], settings: HistorySettings = SETTINGS) -> list[Finding]:
    return changes(rows_of_all(summaries), NEIGHBOURS, settings)


def test_a_qubit_that_gets_three_times_leakier_is_named_with_its_numbers() -> None:
    """The flag comes within three epochs and names qubit, levels, certainty and where to look."""
    for seed in range(10):
        summaries = season(30, np.random.default_rng(seed), moved={"D4": (20, 3.0)})
        flags = [one for one in found_in(summaries) if one.where == "D4"]
        flags = [one for one in flags if one.code == "leakage-changed"]
        assert flags, "no flag"
        first = flags[0]
        assert first.severity == "act"
        assert "cal-020" <= first.numbers["epoch"] <= "cal-022"
        assert first.numbers["since"] == "cal-020"
        # The ratio's own 95 % interval, widened to four errors.
        low, high = (first.numbers[name] for name in ("ratio_low", "ratio_high"))
        error = (np.log(high) - np.log(low)) / (2 * 1.96)
        assert abs(np.log(first.numbers["ratio"]) - np.log(3)) < 4 * error
        assert first.numbers["sigma"] > 4
        for word in ("D4", "rose from", "%", "standard errors", "look at D4 itself"):
            assert word in first.sentence


def test_a_jump_is_told_in_its_first_epoch() -> None:
    """A factor of three beyond noise needs no second night."""
    seen = 0
    for seed in range(20):
        summaries = season(12, np.random.default_rng(seed), moved={"M3": (4, 3.0)})
        jumps = [one for one in found_in(summaries) if one.code == "leakage-jumped"]
        seen += any(one.where == "M3" and one.numbers["epoch"] == "cal-004" for one in jumps)
        assert all(one.where == "M3" for one in jumps)
    # ln 3 over the error of a difference (.14): nearly eight, so four are reached almost surely.
    assert seen == 20


def test_a_quiet_season_is_told_as_nothing() -> None:
    """No finding of any kind but for the false alarms that the rate of the study allows."""
    count, epochs = 0, 40
    for seed in range(12):
        found = found_in(season(epochs, np.random.default_rng(1000 + seed)))
        assert not [one for one in found if one.code == "leakage-jumped"]
        count += len(found)
    # 17 qubits and 5 numbers of the code, both directions, .8 per 1000: 10 expected; 1e-4 tail.
    assert count <= 24


def test_a_wrong_calibration_is_one_finding_about_all_qubits() -> None:
    """All qubits 1.5 times higher in one epoch: one finding, and nobody is blamed."""
    blamed = 0
    for seed in range(10):
        summaries = season(25, np.random.default_rng(seed), together={18: 1.5})
        here = at_epoch(found_in(summaries), "cal-018")
        blamed += len([one for one in here if one.code != "leakage-shifted-together"])
        here = [one for one in here if one.code == "leakage-shifted-together"]
        assert len(here) == 1
        assert here[0].numbers["qubits"] == 17
        low, high = here[0].numbers["ratio_low"], here[0].numbers["ratio_high"]
        error = (np.log(high) - np.log(low)) / (2 * 1.96)
        assert abs(np.log(here[0].numbers["ratio"]) - np.log(1.5)) < 4 * error
        assert "readout calibration" in here[0].sentence
        later = [
            one for one in found_in(summaries) if one.numbers["epoch"] in ("cal-019", "cal-020")
        ]
        assert not [one for one in later if one.code == "leakage-shifted-together"]
    # Ordinary false alarms of that epoch: 22 series, both directions, .8 per 1000, ten seasons:
    # .35 expected; five are passed once in 20 000 runs.
    assert blamed <= 4


def test_a_lasting_shift_of_all_is_told_twice_and_then_no_more() -> None:
    """Onset and confirmation; the third night says nothing new."""
    summaries = season(26, np.random.default_rng(4), together=dict.fromkeys(range(18, 26), 1.6))
    shifts = [one for one in found_in(summaries) if one.code == "leakage-shifted-together"]
    assert [one.numbers["epoch"] for one in shifts] == ["cal-018", "cal-019"]
    assert "second epoch" in shifts[1].sentence


def test_a_bad_qubit_is_found_under_a_shift_of_all() -> None:
    """Taking off what all share does not hide what one does alone."""
    summaries = season(
        30, np.random.default_rng(5), moved={"D2": (20, 3.0)}, together={20: 1.5, 21: 1.5}
    )
    flags = [one for one in found_in(summaries) if one.code == "leakage-changed"]
    assert [one.where for one in flags if one.severity == "act"] == ["D2"]


def test_neighbours_that_moved_too_are_named_with_the_coupler() -> None:
    """Two qubits on one coupler that rise together point to the coupler."""
    partner = NEIGHBOURS["D4"][0]
    summaries = season(30, np.random.default_rng(6), moved={"D4": (20, 2.5), partner: (20, 2.5)})
    flags = [one for one in found_in(summaries) if one.code == "leakage-changed"]
    d4 = next(one for one in flags if one.where == "D4")
    assert d4.numbers["neighbours_moved"] == partner
    assert f"look at D4-{partner} first" in d4.sentence


def test_two_bases_are_one_measurement_of_a_qubit() -> None:
    """A qubit measured in both bases is flagged once, not once a basis."""
    summaries = season(30, np.random.default_rng(7), moved={"D4": (20, 2.0)}, bases=("Z", "X"))
    flags = [one for one in found_in(summaries) if one.where == "D4"]
    assert len([one for one in flags if one.code == "leakage-changed"]) == 1


@pytest.mark.parametrize(
    ("name", "code", "before", "after", "severity"),
    [
        ("share", "leakage-share-changed", 0.10, 0.18, "act"),
        ("logical", "logical-error-per-round-changed", 0.012, 0.014, "watch"),
        ("logical", "logical-error-per-round-changed", 0.012, 0.010, "note"),
        ("settling", "settling-time-changed", 5.0, 10.0, "watch"),
    ],
)
def test_numbers_of_the_code_are_watched_too(
    name: str, code: str, before: float, after: float, severity: str
) -> None:
    """Share, logical error and settling time are charted with their own severities."""
    generator = np.random.default_rng(8)
    spread = {"share": 0.08, "logical": 0.03, "settling": 0.1}[name]
    summaries = []
    for epoch in range(24):
        level = (before if epoch < 16 else after) * np.exp(spread * generator.normal())
        summaries.append(summary(epoch, [one_patch({"D0": 0.01}, **{name: float(level)})]))
    flags = [one for one in found_in(summaries) if one.code == code]
    assert flags
    assert flags[0].severity == severity
    assert "cal-016" <= flags[0].numbers["epoch"] <= "cal-020"
    assert flags[0].where == "west Z"


def test_what_cannot_be_told_is_left_out_and_breaks_nothing() -> None:
    """Unknown values, values at zero and negative intervals go through without a finding."""
    generator = np.random.default_rng(9)
    summaries = []
    for epoch in range(25):
        low = float(1e-4 * generator.normal())
        one = one_patch(
            {"D0": None, "D1": 0.01 * float(np.exp(0.085 * generator.normal()))}, share=None
        )
        zero = estimate(1e-4)
        zero.update(value=low, low=low - 2e-4, high=low + 2e-4)
        one["qubits"][0]["steady_leakage"] = zero if epoch % 2 else estimate(None)
        summaries.append(summary(epoch, [one]))
    assert not [one for one in found_in(summaries) if one.where == "D0"]


def test_a_clean_qubit_that_starts_to_leak_is_found() -> None:
    """From 'zero within errors' to one percent: no logarithm of zero hides it."""
    generator = np.random.default_rng(10)
    summaries = []
    for epoch in range(20):
        level = 0.0 if epoch < 15 else 0.01
        value = level + 1e-4 * float(generator.normal())
        one = one_patch({"D0": 0.01, "D1": 0.01})
        now = estimate(1.0)
        now.update(value=value, low=value - 2e-4, high=value + 2e-4)
        one["qubits"][0]["steady_leakage"] = now
        summaries.append(summary(epoch, [one]))
    first = next(one for one in found_in(summaries) if one.where == "D0")
    assert first.numbers["epoch"] == "cal-015"
    assert first.severity == "act"


def test_findings_of_an_epoch_do_not_depend_on_later_epochs(tmp_path: Path) -> None:
    """An old result made again compares with what was before it only."""
    summaries = season(26, np.random.default_rng(11), moved={"D4": (20, 3.0)})
    some, every = Store(tmp_path / "some.sqlite"), Store(tmp_path / "every.sqlite")
    for number, one in enumerate(summaries):
        every.add(one)
        if number < 21:
            some.add(one)
    then = since_last(some, summaries[21], NEIGHBOURS, SETTINGS)
    now = since_last(every, summaries[21], NEIGHBOURS, SETTINGS)
    assert then == now
    assert then


def test_the_first_epoch_has_nothing_to_compare_with(tmp_path: Path) -> None:
    """None, not an empty list: silence about changes would be a statement."""
    store = Store(tmp_path / "h.sqlite")
    one, two = season(2, np.random.default_rng(12))
    assert since_last(store, one, NEIGHBOURS, SETTINGS) is None
    store.add(one)
    assert since_last(store, one, NEIGHBOURS, SETTINGS) is None
    told = since_last(store, two, NEIGHBOURS, SETTINGS)
    assert [(item.code, item.severity) for item in told] == [("changes-not-watched-yet", "note")]
    assert "1 earlier epoch of 10" in told[0].sentence


def test_silence_is_good_news_only_once_the_chart_has_begun(tmp_path: Path) -> None:
    """With ten earlier epochs an empty list says that nothing moved."""
    store = Store(tmp_path / "h.sqlite")
    summaries = season(11, np.random.default_rng(3))
    for one in summaries[:-1]:
        store.add(one)
    assert since_last(store, summaries[-1], NEIGHBOURS, SETTINGS) == []


def test_limits_act_where_the_interval_is_above_and_watch_where_only_the_value_is() -> None:
    """Severity follows what is certain; no limit means no finding."""
    one = summary(0, [one_patch({"D0": 0.02, "D1": 0.0105, "D2": 0.001}, share=0.3)])
    limits = LimitSettings(steady_leakage=0.01, leakage_share=0.2)
    found = limits_of(one, HistorySettings(limits=limits))
    told = {(item.where, item.code): item.severity for item in found}
    assert told == {
        ("D0", "steady-leakage-over-limit"): "act",
        ("D1", "steady-leakage-over-limit"): "watch",
        ("west Z", "leakage-share-over-limit"): "act",
    }
    assert limits_of(one, SETTINGS) == []


def test_findings_can_be_written_as_json() -> None:
    """Every finding goes into summary.json: finite numbers, texts or null."""
    summaries = season(30, np.random.default_rng(13), moved={"D4": (20, 3.0)}, together={15: 1.5})
    found = found_in(summaries)
    assert found
    for one in found:
        text = json.dumps(one.to_json(), allow_nan=False)
        assert all(type(v) in (int, float, str, type(None)) for v in one.numbers.values()), text


def test_neighbours_come_from_the_layout() -> None:
    """Every qubit of a layout has its gate partners, both ways."""
    layout = rotated_surface(3)
    found = neighbours_of(layout)
    assert set(found) == {*layout.data, *layout.measure}
    assert all(qubit in found[other] for qubit, others in found.items() for other in others)
    assert len(QUBITS) == len(found)
