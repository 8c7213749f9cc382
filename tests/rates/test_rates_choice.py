"""Critical values by simulation, choice of shape, scan of the first fitted round."""

from __future__ import annotations

import numpy as np
import pytest
from rates_tables import table
from scipy.stats import binom

from leakpipe.rates.choice import choose_shape, scan_starts
from leakpipe.rates.critical import critical_two, critical_values

ROUNDS = np.arange(2, 26.0)
VARIANCE = np.full(24, 0.002**2)
BATCHES = 50


def inputs(curve: np.ndarray, rng: np.random.Generator) -> tuple[np.ndarray, ...]:
    """Gaussian batches around a curve, binomial variance known and right."""
    batches = curve + rng.standard_normal((BATCHES, 24)) * np.sqrt(VARIANCE * BATCHES)
    mean = batches.mean(axis=0)
    return ROUNDS, mean, VARIANCE, (batches - mean) / BATCHES


def test_critical_values_match_the_tabulated_ones() -> None:
    """At 25 rounds the simulation gives the tabulated values to their last digit and its own error.

    20 000 draws give quantiles to (q (1-q) / n)^.5 over the density, about half exp(-x/2): 1.5 % of
    a 95 %, 3 % of a 99 %, 9 % of a 99.9 % quantile in standard errors; three of each, added to half
    the table's last digit and its own unknown simulation error, taken equal.
    """
    known = table("likelihood-ratios.csv")
    found = critical_values(ROUNDS, None)
    rows = {
        "rising exponential": found.rising,
        "exponential of either sign": found.either,
        "exponential": found.line,
        "two exponentials": critical_two(ROUNDS, None),
    }
    errors = (0.015, 0.03, 0.09)
    checked = 0
    for row, name in enumerate(known["alternative"]):
        for column, value, error in zip(
            ("at_95", "at_99", "at_999"), rows[name], errors, strict=False
        ):
            text = known[column][row]
            if not text:
                continue
            ends = [float(part) for part in text.split("-")]
            digit = 0.05 if "." in text else 0.5
            slack = digit + 3 * np.sqrt(2) * error * ends[-1]
            assert ends[0] - slack < value < ends[-1] + slack, (name, column)
            checked += 1
    assert checked == 9


def test_critical_values_grow_with_rounds_and_with_few_batches() -> None:
    """More rounds offer more places for a chance rise; an estimated variance needs more room."""
    few, many = critical_values(np.arange(2, 8.0), None), critical_values(np.arange(2, 61.0), None)
    assert few.either[1] < many.either[1]
    known, estimated = critical_values(ROUNDS, None), critical_values(ROUNDS, 49)
    assert known.either[1] < estimated.either[1] < 1.25 * known.either[1]
    assert critical_values(ROUNDS, 49) is critical_values(ROUNDS.copy(), 49), "kept in memory"


@pytest.mark.parametrize(
    ("curve", "shape"),
    [
        (np.full(24, 0.15), "flat"),
        (0.13 + 0.001 * ROUNDS, "line"),
        (0.15 - 0.03 * np.exp(-ROUNDS / 5), "one exponential"),
        (0.2 - 0.1 * np.exp(-ROUNDS / 1.5) - 0.05 * np.exp(-ROUNDS / 12), "two exponentials"),
    ],
)
def test_shapes(curve: np.ndarray, shape: str) -> None:
    """Each true shape is chosen, wrong at most as often as its level allows.

    40 draws; levels 1 % (flat), 5 % (line), 1 % (one exponential); power of the last case is near
    1. Bounds at a chance of 1e-4.
    """
    rng = np.random.default_rng(1)
    shapes = [choose_shape(*inputs(curve, rng)).shape for _ in range(40)]
    level = 0.05 if shape == "line" else 0.01
    assert shapes.count(shape) >= 40 - binom.ppf(1 - 1e-4, 40, level), shapes


def test_no_shape_from_three_rounds() -> None:
    """Three rounds carry no shape."""
    rng = np.random.default_rng(2)
    rounds, p, v, d = inputs(np.full(24, 0.1), rng)
    choice = choose_shape(rounds[:3], p[:3], v[:3], d[:, :3])
    assert choice.shape == "no data"


def test_transient_at_the_boundary_is_told_from_leakage() -> None:
    """A rise of the first two rounds is over early; leakage that settles in five goes on.

    Leakage is called over with a chance of at most 2.5 % for each of two later starts: bound at a
    chance of 1e-4. The transient is 15 and 5 standard errors at layers 2 and 3, and later rounds
    are flat: called rising with a chance of at most 2.5 % for each start.
    """
    transient = np.full(24, 0.15)
    transient[:2] -= (0.03, 0.01)
    leakage = 0.15 - 0.03 * np.exp(-ROUNDS / 5)
    rng = np.random.default_rng(3)
    wrong = binom.ppf(1 - 1e-4, 40, 0.05)
    for curve, course in ((transient, "over early"), (leakage, "goes on")):
        scans = [scan_starts(*inputs(curve, rng)) for _ in range(40)]
        assert all(scan.first.tolist() == [2.0, 4.0, 7.0] for scan in scans)
        courses = [scan.course for scan in scans]
        assert courses.count(course) >= 40 - wrong, courses


def test_later_part_is_one_for_an_exponential() -> None:
    """The later rise of an exponential is what the whole curve predicts, within its own errors.

    Mean of 60 pulls within 4 / sqrt(60); the prediction uses the same data, so pulls scatter less
    than 1 but not more.
    """
    rng = np.random.default_rng(5)
    curve = 0.15 - 0.05 * np.exp(-ROUNDS / 5)
    scans = [scan_starts(*inputs(curve, rng)) for _ in range(60)]
    for start in range(2):
        pulls = [(s.later_part[start] - 1) / s.later_error[start] for s in scans]
        assert abs(np.mean(pulls)) < 4 / np.sqrt(60)
        assert np.std(pulls) < 1 + 4 / np.sqrt(2 * 60)


def test_flat_and_noisy_curves_say_so() -> None:
    """No rise stays no rise, and a rise too noisy to follow is unclear, never transient."""
    rng = np.random.default_rng(6)
    flat = [scan_starts(*inputs(np.full(24, 0.15), rng)).course for _ in range(30)]
    assert flat.count("no rise") >= 30 - binom.ppf(1 - 1e-4, 30, 0.01)
    weak = 0.15 - 0.009 * np.exp(-ROUNDS / 5)
    courses = [scan_starts(*inputs(weak, rng)).course for _ in range(60)]
    assert courses.count("unclear") > 0
    assert courses.count("over early") <= binom.ppf(1 - 1e-4, 60, 0.05)


def test_scan_of_few_rounds_uses_what_is_there() -> None:
    """With too few rounds for later starts the scan holds only the whole curve."""
    rng = np.random.default_rng(4)
    rounds, p, v, d = inputs(0.15 - 0.05 * np.exp(-ROUNDS / 2), rng)
    scan = scan_starts(rounds[:5], p[:5], v[:5], d[:, :5])
    assert len(scan.fits) == 1
    assert scan.course in ("unclear", "no rise")
    assert scan_starts(rounds[:2], p[:2], v[:2], d[:, :2]).course == "no data"
