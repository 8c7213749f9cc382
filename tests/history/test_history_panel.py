"""Rows as arrays on the chart's scale."""

from __future__ import annotations

import numpy as np
import pytest
from history_examples import ERROR, estimate, one_patch, summary
from hypothesis import given, settings
from hypothesis import strategies as st

from leakpipe.history.panel import LOG_FLOOR, epochs_of, floor_of, from_scale, panel, to_scale
from leakpipe.history.rows import Row, rows_of

QUANTITIES = ("steady_leakage", "data_steady_leakage", "leakage_share", "settling_rounds")


def rows(*summaries: dict) -> list[Row]:
    return [row for one in summaries for row in rows_of(one)]


@settings(deadline=None)
@given(st.sampled_from(QUANTITIES), st.floats(-10, 1e3))
def test_the_scale_can_be_undone(quantity: str, value: float) -> None:
    """Back and forth loses no more than the rounding of the scale, which is largest far below."""
    floor = floor_of(quantity)
    if floor is None:
        assert from_scale(quantity, to_scale(quantity, value)) == value
        return
    # scaled - ln q is off by a few roundings of terms of its size; sinh passes that on with the
    # slope sqrt(x^2 + 4 q^2), and rounds once more itself.
    size = 1 + abs(np.log(floor)) + abs(np.arcsinh(value / (2 * floor)))
    allowed = 8 * np.finfo(float).eps * size * np.hypot(value, 2 * floor)
    assert abs(from_scale(quantity, to_scale(quantity, value)) - value) <= allowed


@settings(deadline=None)
@given(st.sampled_from(QUANTITIES), st.floats(-1, 100), st.floats(1e-6, 10))
def test_the_scale_keeps_the_order(quantity: str, value: float, step: float) -> None:
    """More leakage is never less on the chart."""
    assert to_scale(quantity, value + step) > to_scale(quantity, value)


def test_usual_levels_are_on_a_logarithm() -> None:
    """At one percent the scale is ln p to the square of the floor over the level."""
    level = 0.01
    bound = (LOG_FLOOR["steady_leakage"] / level) ** 2
    assert abs(to_scale("steady_leakage", level) - np.log(level)) <= bound
    assert to_scale("leakage_share", -0.1) == -0.1


def test_errors_come_from_the_interval() -> None:
    """A 95 % interval of exp(+-1.96 s) has error s on the chart."""
    mine = rows(summary(0, [one_patch({"D0": 0.02})]))
    one = panel(mine, "steady_leakage", epochs_of(mine), of_qubits=True, join_bases=True)
    # The floor's share in the slope, (floor / level)^2, is the only deviation.
    assert one.error[0, 0] == pytest.approx(ERROR, rel=1e-3)
    assert one.low[0, 0] < 0.02 < one.high[0, 0]


def test_bases_are_joined_by_weight() -> None:
    """Two equal measurements have an error smaller by the root of two; one alone keeps its own."""
    both = [one_patch({"D0": 0.02, "D1": None}, basis) for basis in ("Z", "X")]
    mine = rows(summary(0, both), summary(1, both[:1]))
    one = panel(mine, "steady_leakage", epochs_of(mine), of_qubits=True, join_bases=True)
    assert one.error[0, 0] == pytest.approx(one.error[1, 0] / np.sqrt(2))
    assert np.isnan(one.scaled[:, 1]).all()
    assert {series.basis for series in one.series} == {"X Z"}
    apart = panel(mine, "leakage_share", epochs_of(mine), of_qubits=False, join_bases=False)
    assert sorted(series.basis for series in apart.series) == ["X", "Z"]
    assert np.isnan(apart.scaled[1]).sum() == 1


def test_an_interval_without_width_breaks_nothing() -> None:
    """A rounded estimate may have equal ends: its error is tiny, not zero."""
    one = one_patch({"D0": 0.02})
    flat = estimate(0.02)
    flat.update(low=0.02, high=0.02)
    one["qubits"][0]["steady_leakage"] = flat
    mine = rows(summary(0, [one]))
    made = panel(mine, "steady_leakage", epochs_of(mine), of_qubits=True, join_bases=True)
    assert 0 < made.error[0, 0] < 1e-9


def test_epochs_are_in_order_of_time_not_of_name() -> None:
    """A calibration may have any name."""
    late, early = summary(0, [one_patch({"D0": 0.01})]), summary(5, [one_patch({"D0": 0.01})])
    late["calibration_id"], early["calibration_id"] = "b", "a"
    assert epochs_of(rows(early, late)) == ("b", "a")
