"""Closed forms of the recurrence against published tables, and their own consistency."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as some
from rates_tables import numbers

from leakpipe.rates.recurrence import (
    accumulated,
    continuous,
    discrete,
    rates_of,
    settling_time,
    steady_level,
)

RATE = some.floats(1e-6, 0.45)


def test_accumulation_formula() -> None:
    """The closed form gives the published accumulation to the eight decimals of the table."""
    known = numbers("leakage-accumulation.csv")
    found = accumulated(0.001, 0.09, known["rounds"])
    np.testing.assert_allclose(found, known["population"], rtol=0, atol=0.5e-8)
    assert steady_level(0.001, 0.09) == pytest.approx(0.0109890, abs=0.5e-7)
    assert settling_time(0.909) == pytest.approx(-1 / np.log(0.909), rel=1e-15)


def test_injection_seepage_table() -> None:
    """Published continuous rates give the published steady levels to the table's own agreement."""
    known = numbers("injection-seepage.csv")
    level = 100 * steady_level(known["injection_percent"], known["seepage_percent"])
    np.testing.assert_allclose(level, known["steady_percent"], rtol=0, atol=0.04)
    g, s = discrete(known["injection_percent"] / 100, known["seepage_percent"] / 100)
    np.testing.assert_allclose(100 * steady_level(g, s), level, rtol=1e-12)
    assert np.all(g + s < 1), "a seepage of 328 % per round is possible only as a continuous rate"
    lam = np.exp(-(known["injection_percent"] + known["seepage_percent"]) / 100)
    np.testing.assert_allclose(1 - g - s, lam, rtol=1e-12)


@given(g=RATE, s=RATE, rounds=some.integers(0, 60), start=some.floats(0, 1))
def test_closed_form_equals_stepping(g: float, s: float, rounds: int, start: float) -> None:
    """The closed form equals the recurrence applied round by round.

    Each step rounds to 1.1e-16 of a number below 1, and errors shrink by |lam| < 1: 1e-13 bounds
    the sum over 60 steps.
    """
    p = start
    for _ in range(rounds):
        p = p + g * (1 - p) - s * p
    assert accumulated(g, s, rounds, start) == pytest.approx(p, abs=1e-13)


@given(g=RATE, s=RATE)
def test_conventions_are_inverse_and_keep_what_is_seen(g: float, s: float) -> None:
    """Discrete to continuous and back is the identity; steady level and memory stay the same."""
    back = discrete(*continuous(g, s))
    np.testing.assert_allclose(back, (g, s), rtol=1e-12)
    rates = np.array(continuous(g, s))
    assert np.exp(-rates.sum()) == pytest.approx(1 - g - s, rel=1e-12)
    assert steady_level(*rates) == pytest.approx(float(steady_level(g, s)), rel=1e-12)
    np.testing.assert_allclose(rates_of(steady_level(g, s), 1 - g - s), (g, s), rtol=1e-9)


def test_everything_forgotten_has_no_continuous_rates() -> None:
    """Rates that forget everything in a round are refused, not turned into infinity."""
    with pytest.raises(ValueError, match="below 1"):
        continuous(0.5, 0.5)


def test_edges() -> None:
    """Nothing remembered, everything remembered and no rates at all give their limits, no noise."""
    np.testing.assert_array_equal(settling_time([-0.1, 0.0, 1.0]), [0.0, 0.0, np.inf])
    assert np.isnan(steady_level(0.0, 0.0))
    np.testing.assert_array_equal(continuous(0.0, 0.0), (0.0, 0.0))
    np.testing.assert_array_equal(discrete(0.0, 0.0), (0.0, 0.0))
