"""The recurrence of a leaked population and its closed forms.

p[r+1] = p[r] + G (1 - p[r]) - S p[r]; lam = 1 - G - S (Wood and Gambetta, Phys. Rev. A 97, 032306
(2018), L1 and L2, Lemma 1). The continuous convention has rates with lam = exp(-(G + S)).
"""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike, NDArray

FloatArray = NDArray[np.float64]


def steady_level(injection: ArrayLike, seepage: ArrayLike) -> FloatArray:
    """Return p_ss = G / (G + S); NaN where both are 0, since any level then stays."""
    g, s = np.asarray(injection, dtype=float), np.asarray(seepage, dtype=float)
    total = g + s
    return np.where(total > 0, g / np.where(total > 0, total, 1.0), np.nan)


def settling_time(memory: ArrayLike) -> FloatArray:
    """Return tau = -1 / ln(lam) in rounds: 0 for lam <= 0, infinite for lam >= 1."""
    lam = np.asarray(memory, dtype=float)
    inner = (lam > 0) & (lam < 1)
    edge = np.where(lam <= 0, 0.0, np.where(lam >= 1, np.inf, np.nan))
    return np.where(inner, -1 / np.log(np.where(inner, lam, 0.5)), edge)


def accumulated(
    injection: ArrayLike, seepage: ArrayLike, rounds: ArrayLike, start: ArrayLike = 0.0
) -> FloatArray:
    """Return p after `rounds` rounds: p_ss + (p_0 - p_ss) lam^r."""
    level = steady_level(injection, seepage)
    lam = 1 - np.asarray(injection, dtype=float) - np.asarray(seepage, dtype=float)
    return np.asarray(level + (np.asarray(start) - level) * lam ** np.asarray(rounds, dtype=float))


def rates_of(level: ArrayLike, memory: ArrayLike) -> tuple[FloatArray, FloatArray]:
    """Return injection p_ss (1 - lam) and seepage (1 - p_ss)(1 - lam)."""
    p, gone = np.asarray(level, dtype=float), 1 - np.asarray(memory, dtype=float)
    return np.asarray(p * gone), np.asarray((1 - p) * gone)


def continuous(injection: ArrayLike, seepage: ArrayLike) -> tuple[FloatArray, FloatArray]:
    """Return the rates of the continuous convention with the same steady level and memory.

    Raises
    ------
    ValueError
        G + S is 1 or more: no continuous process forgets everything in one round.
    """
    g, s = np.asarray(injection, dtype=float), np.asarray(seepage, dtype=float)
    if np.any(g + s >= 1):
        raise ValueError("injection + seepage must be below 1, got " + str(np.max(g + s)))
    scale = _limit_one(-np.log1p(-(g + s)), g + s)
    return np.asarray(g * scale), np.asarray(s * scale)


def discrete(injection: ArrayLike, seepage: ArrayLike) -> tuple[FloatArray, FloatArray]:
    """Return the per-round rates of a continuous process: the inverse of `continuous`."""
    g, s = np.asarray(injection, dtype=float), np.asarray(seepage, dtype=float)
    scale = _limit_one(-np.expm1(-(g + s)), g + s)
    return np.asarray(g * scale), np.asarray(s * scale)


def _limit_one(part: FloatArray, whole: FloatArray) -> FloatArray:
    """Return part / whole, 1 where both vanish."""
    return np.where(whole > 0, part / np.where(whole > 0, whole, 1.0), 1.0)
