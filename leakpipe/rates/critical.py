"""Critical values of the likelihood ratios between shapes of a rise, by simulation.

Chi-square tables do not apply: under a flat curve tau is unidentified, and a straight line is an
exponential at the edge of its parameter space. The values depend on the rounds only, so they are
simulated once for each set of rounds, with a fixed seed, and kept in memory. The ratios they are
compared with are divided by a variance ratio that is itself estimated from batches; the simulation
does the same.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray

from leakpipe.rates.varpro import fit_curves

FloatArray = NDArray[np.float64]

SHORTEST, LONGEST = 0.3, 300.0
"""Search range of tau in rounds for runs of 25 rounds (prototype study of the rates)."""
LONGEST_FACTOR = 12.0
"""The search goes to this many times the longest run, 300 / 25 (prototype study of the rates)."""
GRID_POINTS = 60
"""Points of the search in ln tau; a minimum is refined, profile ends are root-found."""
PAIR_POINTS = 20
"""Points per axis of the search over two settling times."""
DRAWS = 20_000
"""Simulated curves: 1.4 % of a 99 % quantile of 9 (measured by repeating)."""
SEED = 20_260_101
"""Fixed, so that one set of rounds always has the same thresholds."""
SLOPES = (10.0, 30.0)
"""Squared signal over noise of the straight lines tried: around and above the threshold of the test
against flat, the only ones that reach the test against a line."""
PARALLEL = 1e-8
"""Two decays whose squared overlap is this close to 1 differ by rounding only (sqrt of a double's
precision)."""
CHUNK = 2_000
"""Curves at once, so that the search over pairs stays within a few MB."""
ONE_EXPONENTIAL = (100.0, (0.1, 0.2, 0.4))
"""Squared signal over noise and settling times, in longest runs, of the exponentials tried."""


@dataclass(frozen=True)
class CriticalValues:
    """Quantiles of likelihood ratios under the simpler shape.

    Attributes
    ----------
    either
        (95, 99, 99.9 %) flat against an exponential of either sign.
    rising
        The same against a rising exponential.
    line
        (95, 99 %) straight line against an exponential, counting only lines found not flat.
    """

    either: tuple[float, float, float]
    rising: tuple[float, float, float]
    line: tuple[float, float]


def search_grid(longest: float) -> FloatArray:
    """Return the grid of ln tau for runs of up to `longest` rounds."""
    end = max(LONGEST, LONGEST_FACTOR * longest)
    return np.linspace(np.log(SHORTEST), np.log(end), GRID_POINTS)


def line_sums(rounds: FloatArray, values: FloatArray, weight: FloatArray) -> FloatArray:
    """Return the weighted residual sums of m curves (m, n) about straight lines, (m,)."""
    centred = values - ((values @ weight) / weight.sum())[:, None]
    off = rounds - (rounds @ weight) / weight.sum()
    along = (centred * weight) @ off
    return np.asarray((centred**2) @ weight - along**2 / (weight @ off**2))


def critical_values(rounds: FloatArray, freedom: int | None) -> CriticalValues:
    """Return the critical values for curves over the given rounds.

    Parameters
    ----------
    rounds
        (n,) rounds of the curve; equal weights are assumed (weights that fall linearly to 1/25
        change the values by less than their simulation error).
    freedom
        Degrees of freedom of the variance ratio the likelihood ratios are divided by; None where
        the variance is known.
    """
    return _simulated(tuple(np.asarray(rounds, dtype=float).tolist()), freedom)


@lru_cache(maxsize=64)
def _simulated(rounds: tuple[float, ...], freedom: int | None) -> CriticalValues:
    rng = np.random.default_rng(SEED)
    at, weight = np.array(rounds), np.ones(len(rounds))
    grid = search_grid(at.max())
    noise = rng.standard_normal((DRAWS, len(at)))
    scale = np.ones(DRAWS) if freedom is None else rng.chisquare(freedom, DRAWS) / freedom
    fits = fit_curves(at, noise, weight, grid)
    either = (fits.flat_sum - np.minimum(fits.residual_sum, line_sums(at, noise, weight))) / scale
    rising = _rising_gain(at, noise, weight, grid) / scale
    either_ends = np.quantile(either, [0.95, 0.99, 0.999])
    off = at - at.mean()
    lines = []
    for signal in SLOPES:
        curves = noise + np.sqrt(signal / (off @ off)) * off
        fits = fit_curves(at, curves, weight, grid)
        straight = line_sums(at, curves, weight)
        best = np.minimum(fits.residual_sum, straight)
        seen = (fits.flat_sum - best) / scale > either_ends[1]
        lines.append(np.quantile(np.where(seen, (straight - best) / scale, 0.0), [0.95, 0.99]))
    line = np.max(lines, axis=0)
    return CriticalValues(
        tuple(either_ends.tolist()),
        tuple(np.quantile(rising, [0.95, 0.99, 0.999]).tolist()),
        tuple(line.tolist()),
    )


def _rising_gain(
    rounds: FloatArray, values: FloatArray, weight: FloatArray, grid: FloatArray
) -> FloatArray:
    """Return what the best exponential with a positive amplitude explains, (m,)."""
    decay = np.exp(-np.exp(-grid)[:, None] * rounds)
    decay -= ((decay @ weight) / weight.sum())[:, None]
    along = -(values * weight) @ decay.T / np.sqrt(weight @ (decay**2).T)
    return np.asarray(np.maximum(along, 0.0).max(axis=1) ** 2)


def two_exponentials(
    rounds: FloatArray, values: FloatArray, weight: FloatArray
) -> tuple[FloatArray, FloatArray]:
    """Return residual sums of m curves about a constant and two exponentials, and their ln tau.

    Both amplitudes have one sign: leaked populations of different settling times add up. The two
    settling times are searched on a grid, so the sum is an upper bound of the minimum; the critical
    values come from the same search.

    Returns
    -------
    sums
        (m,).
    log_taus
        (m, 2); equal where one exponential of the grid does better.
    """
    start, end = search_grid(rounds.max())[[0, -1]]
    grid = np.linspace(start, end, PAIR_POINTS)
    total = weight.sum()
    decay = np.exp(-np.exp(-grid)[:, None] * rounds)
    decay -= ((decay @ weight) / total)[:, None]
    decay /= np.sqrt((decay**2) @ weight)[:, None]
    overlap = (decay * weight) @ decay.T
    first, second = np.triu_indices(PAIR_POINTS, 1)
    apart = 1 - overlap[first, second] ** 2
    kept = apart > PARALLEL
    first, second, apart = first[kept], second[kept], apart[kept]
    shared = overlap[first, second]
    centred = values - ((values @ weight) / total)[:, None]
    along = (centred * weight) @ decay.T
    single = np.argmax(along**2, axis=1)
    gain = (along**2).max(axis=1)
    log_taus = np.column_stack([grid[single], grid[single]])
    for begin in range(0, len(values), CHUNK):
        rows = np.arange(begin, min(begin + CHUNK, len(values)))
        one, two = along[rows][:, first], along[rows][:, second]
        a, b = (one - shared * two) / apart, (two - shared * one) / apart
        gains = np.where(a * b > 0, a * one + b * two, 0.0)
        at = np.argmax(gains, axis=1)
        best = gains[np.arange(len(rows)), at]
        better = best > gain[rows]
        gain[rows[better]] = best[better]
        log_taus[rows[better]] = np.column_stack([grid[first[at]], grid[second[at]]])[better]
    return np.asarray((centred**2) @ weight - gain), log_taus


def critical_two(rounds: FloatArray, freedom: int | None) -> tuple[float, float]:
    """Return the (95, 99 %) critical values of one exponential against two.

    They depend on the one exponential: the largest over settling times of a tenth, a fifth and two
    fifths of the longest run is taken.
    """
    return _simulated_two(tuple(np.asarray(rounds, dtype=float).tolist()), freedom)


@lru_cache(maxsize=64)
def _simulated_two(rounds: tuple[float, ...], freedom: int | None) -> tuple[float, float]:
    rng = np.random.default_rng(SEED)
    at, weight = np.array(rounds), np.ones(len(rounds))
    noise = rng.standard_normal((DRAWS, len(at)))
    scale = np.ones(DRAWS) if freedom is None else rng.chisquare(freedom, DRAWS) / freedom
    signal, taus = ONE_EXPONENTIAL
    ends = []
    for tau in taus:
        shape = -np.exp(-at / (tau * at.max()))
        shape -= shape.mean()
        curves = noise + np.sqrt(signal / (shape @ shape)) * shape
        ends.append(np.quantile(one_against_two(at, curves, weight) / scale, [0.95, 0.99]))
    low, high = np.max(ends, axis=0)
    return float(low), float(high)


def one_against_two(rounds: FloatArray, values: FloatArray, weight: FloatArray) -> FloatArray:
    """Return the likelihood ratio of one exponential against two for m curves, (m,), 0 at least."""
    one = fit_curves(rounds, values, weight, search_grid(rounds.max())).residual_sum
    return np.maximum(one - two_exponentials(rounds, values, weight)[0], 0.0)
