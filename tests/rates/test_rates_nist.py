"""Certified data: the residual sum at the certified values first, then the fit."""

from __future__ import annotations

import numpy as np
import pytest
from rates_tables import certified, digits, numbers

from leakpipe.rates.varpro import fit_curves, fit_separable

SATURATING = ("nist-misra1a.csv", "nist-boxbod.csv")
REQUIRED_DIGITS = 9
CERTIFIED_SUM_DIGITS = 8
"""The sum is quadratic about its minimum, so parameters certified to 11 digits reproduce it to all
its 11; what is lost is the rounding of y to 3 or 4 digits times a residual far smaller than y."""


def grid_over(x: np.ndarray, points: int) -> np.ndarray:
    """Settling lengths from a twentieth of the first to twenty times the last x, as ln."""
    return np.linspace(np.log(x[x > 0].min() / 20), np.log(20 * x.max()), points)


@pytest.mark.parametrize("name", SATURATING)
def test_saturating_sum_at_certified_values(name: str) -> None:
    """The table is transcribed rightly: certified parameters give the certified residual sum."""
    data, known = numbers(name), certified(name)
    b1, b2 = known["certified"]
    residual = data["y"] + b1 * np.expm1(-b2 * data["x"])
    total = known["certified residual sum of squares"][0]
    assert digits(float(residual @ residual), total) >= CERTIFIED_SUM_DIGITS


@pytest.mark.parametrize("name", SATURATING)
def test_saturating_exponential(name: str) -> None:
    """Misra1a and BoxBOD to nine digits of parameters, deviations and residual sum, no starts."""
    data, known = numbers(name), certified(name)
    x, y = data["x"], data["y"]

    def rising(u: np.ndarray) -> np.ndarray:
        return -np.expm1(-x * np.exp(-u[0]))[:, None]

    def slope(u: np.ndarray, c: np.ndarray) -> np.ndarray:
        rate = x * np.exp(-u[0])
        return (-c[0] * np.exp(-rate) * rate)[:, None]

    fit = fit_separable(rising, slope, grid_over(x, 60)[:, None], y)
    assert fit.converged
    rate = float(np.exp(-fit.nonlinear[0]))
    deviations = np.sqrt(np.diag(fit.inverse) * fit.residual_sum / (len(x) - 2))
    found = [fit.coefficients[0], rate, deviations[0], deviations[1] * rate, fit.residual_sum]
    wanted = [
        *known["certified"],
        *known["certified standard deviations"],
        *known["certified residual sum of squares"],
    ]
    for value, reference in zip(found, wanted, strict=True):
        assert digits(value, reference) >= REQUIRED_DIGITS


def mgh17() -> tuple[np.ndarray, np.ndarray, np.ndarray, float]:
    data, known = numbers("nist-mgh17.csv"), certified("nist-mgh17.csv")
    total = known["certified residual sum of squares"][0]
    return data["x"], data["y"], known["certified"], total


def test_two_exponentials_sum_at_certified_values() -> None:
    """The table of MGH17 is transcribed rightly."""
    x, y, b, total = mgh17()
    residual = y - b[0] - b[1] * np.exp(-b[3] * x) - b[2] * np.exp(-b[4] * x)
    assert digits(float(residual @ residual), total) >= CERTIFIED_SUM_DIGITS


def test_two_exponentials() -> None:
    """MGH17, two exponentials and a constant, to nine digits from a grid of pairs."""
    x, y, b, total = mgh17()

    def columns(u: np.ndarray) -> np.ndarray:
        return np.column_stack([np.ones_like(x), np.exp(-np.exp(-u) * x[:, None])])

    def slope(u: np.ndarray, c: np.ndarray) -> np.ndarray:
        rate = np.exp(-u) * x[:, None]
        return c[1:] * np.exp(-rate) * rate

    grid = grid_over(x, 20)
    pairs = np.array([(long, short) for short in grid for long in grid if long > short])
    fit = fit_separable(columns, slope, pairs, y)
    assert fit.converged
    found = [*fit.coefficients, *np.exp(-fit.nonlinear), fit.residual_sum]
    for value, reference in zip(found, [*b, total], strict=True):
        assert digits(value, reference) >= REQUIRED_DIGITS


def test_batch_fit_equals_separable_fit() -> None:
    """The batch fit of curves and the generic one reach the same minimum, to rounding.

    ln tau sits where the slope of the sum vanishes; both stop at steps below 1e-9, so their
    difference is bounded by 1e-8.
    """
    rng = np.random.default_rng(3)
    rounds = np.arange(2, 26.0)
    weight = rng.uniform(0.5, 2, len(rounds)) / 0.002**2
    values = 0.15 - 0.02 * np.exp(-rounds / 5) + rng.normal(size=(30, len(rounds))) * 0.002
    grid = np.linspace(np.log(0.3), np.log(300), 60)

    def columns(u: np.ndarray) -> np.ndarray:
        return np.column_stack([np.ones_like(rounds), -np.exp(-rounds * np.exp(-u[0]))])

    def slope(u: np.ndarray, c: np.ndarray) -> np.ndarray:
        rate = rounds * np.exp(-u[0])
        return (-c[1] * np.exp(-rate) * rate)[:, None]

    many = fit_curves(rounds, values, weight, grid)
    assert many.inside.sum() > 20
    for row in np.flatnonzero(many.inside):
        one = fit_separable(columns, slope, grid[:, None], values[row], weight)
        assert abs(one.nonlinear[0] - many.log_tau[row]) < 1e-8
        assert many.residual_sum[row] == pytest.approx(one.residual_sum, rel=1e-10)
