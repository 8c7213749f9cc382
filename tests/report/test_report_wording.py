"""Numbers in words."""

import math

import pytest
from hypothesis import given
from hypothesis import strategies as st

from leakpipe.estimates import Estimate
from leakpipe.report.wording import (
    decimals_for,
    in_rounds,
    listed,
    moment,
    number,
    one_line,
    percent,
    wrapped,
)


@pytest.mark.parametrize(
    ("estimate", "words"),
    [
        (Estimate(0.0093, 0.0081, 0.0106), "0.93 % (0.81 to 1.06)"),
        (Estimate(0.121, 0.086, 0.161), "12 % (9 to 16)"),
        (Estimate(0.029, None, None), "2.90 %"),
        (Estimate(None, None, None, identifiable=False), "not identifiable"),
        (Estimate.upper_limit(0.0012, "few shots"), "below 0.120 %"),
        (Estimate(None, 0.4, None, identifiable=False), "above 40.0 %"),
        (Estimate(None, 0.1, 0.3, identifiable=False), "between 10 and 30 %"),
        (Estimate(-0.00001, -0.001, 0.00098), "0.00 % (-0.10 to 0.10)"),
        (Estimate(0.0, 0.0, 0.0), "0 % (0 to 0)"),
    ],
)
def test_percent(estimate, words):
    """A fraction reads as percent, with the digits its interval deserves and no negative zero."""
    assert percent(estimate) == words


def test_signed_and_rounds():
    """Changes carry a plus sign, settling times their unit."""
    assert percent(Estimate(0.118, 0.106, 0.13), sign=True) == "+11.8 % (10.6 to 13.0)"
    assert in_rounds(Estimate(5.1, 4.5, 5.7)) == "5.1 rounds (4.5 to 5.7)"


@given(
    value=st.floats(-1e3, 1e3),
    half_width=st.floats(1e-3, 1e3),
)
def test_rounding_is_small_against_the_interval(value, half_width):
    """What is printed differs from the value by at most half a unit of the last digit shown.

    The rule keeps two digits of the half width below 3.55 and one above, so the last digit is at
    most a tenth of 1.0 or one of 3.55, and rounding moves a number by at most 1/7 half width.
    """
    text = number(Estimate(value, value - half_width, value + half_width))
    shown = float(text.split(" (")[0])
    tolerance = max(half_width / 7, 0.5e-5) + 1e-12 * abs(value)
    assert abs(shown - value) <= max(tolerance, 0.5 if half_width > 3.55 else 0)


@given(st.floats(1e-12, 1e12), st.one_of(st.none(), st.floats(1e-12, 1e12)))
def test_decimals_stay_in_range(value, half_width):
    """The number of decimals is never negative and never absurd, whatever the numbers."""
    assert 0 <= decimals_for(value, half_width) <= 5


def test_moments():
    """Times read to the minute; text that is no ISO time stands as it is."""
    assert moment("2026-11-30T21:04:00+00:00") == "2026-11-30 21:04 UTC"
    assert moment("2026-11-30T21:04:00Z") == "2026-11-30 21:04 UTC"
    assert moment("2026-11-30T21:04:00+01:00") == "2026-11-30 21:04 +01:00"
    assert moment("last night") == "last night"


def test_lists():
    """Long lists name the first and count the rest."""
    assert listed(["a", "b"]) == "a, b"
    assert listed(["a", "b", "c"], most=2) == "a, b and 1 more"


@given(st.text(max_size=400), st.text(max_size=40), st.integers(1, 6))
def test_wrapping_keeps_its_frame(text, label, most):
    """Whatever a recording calls its things, a paragraph stays inside its lines and columns."""
    lines = wrapped(label, text, width=78, indent=11, most=most)
    assert 1 <= len(lines) <= most
    assert all(len(line) <= 78 and one_line(line) == " ".join(line.split()) for line in lines)


def test_infinite_values_do_not_break_the_rule():
    """A value that is not finite gets no decimals instead of an exception."""
    assert decimals_for(math.inf, None) == 0
