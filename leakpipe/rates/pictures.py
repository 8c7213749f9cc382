"""Which picture of a leaked qubit's consequences do the correlations themselves prefer?

The pairs of checks that fire together two and more rounds apart depend on what a leaked qubit does
to its gates' partners. At a given memory the covariances are linear in the levels, so the pictures
are compared by linear least squares (chi-square against independent events).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.optimize import minimize_scalar

from leakpipe.codes.layout import Layout
from leakpipe.rates.moments import PairMoments
from leakpipe.rates.network_model import network, predicted_covariances
from leakpipe.rates.visibility import Picture, Visibility, visibility

FloatArray = NDArray[np.float64]

GRID = np.linspace(0.0, 1.0, 11)
"""Depolarising parts tried before the best is refined: chi-square has several minima."""
SMALL = 1e-6
"""Level at which the law is linear."""
CLEARLY = 9.0
"""Chi-square by which the other picture must fit better than the expected one (three standard
errors)."""


@dataclass(frozen=True)
class Preference:
    """Outcome of the comparison.

    Attributes
    ----------
    picture, depolarise
        Preferred picture, and the depolarising part in the circuit picture.
    depolarise_low, depolarise_high
        95 % interval of the part, from the profile of chi-square scaled to its degrees of freedom.
    chi_square, other_chi_square
        Of the preferred picture and of the other one.
    freedom
        Of the preferred picture.
    """

    picture: Picture
    depolarise: float
    depolarise_low: float
    depolarise_high: float
    chi_square: float
    other_chi_square: float
    freedom: int


def prefer(
    layout: Layout,
    moments: PairMoments,
    detection: FloatArray,
    log_tau: float,
    *,
    outcome: bool,
    reset: bool,
    only: Picture | None = None,
) -> Preference:
    """Compare the pictures.

    Parameters
    ----------
    layout
        Code.
    moments, detection
        Covariances, and (round, check) detection probability at their rounds.
    log_tau
        ln tau of the code.
    outcome, reset
        As in `visibility`.
    only
        Take this picture; only the depolarising part is then searched.
    """

    def chi(picture: Picture, part: float) -> float:
        shown = visibility(layout, picture, outcome=outcome, depolarise=part, reset=reset)
        return linear_chi_square(moments, detection, shown, log_tau)

    def circuit(part: float) -> float:
        return chi("circuit", part)

    sums = np.array([circuit(part) for part in GRID])
    at = int(np.argmin(sums))
    ends = (GRID[max(at - 1, 0)], GRID[min(at + 1, len(GRID) - 1)])
    found = minimize_scalar(circuit, bounds=ends, method="bounded", options={"xatol": 1e-3})
    part, least = (
        (float(found.x), float(found.fun)) if found.fun < sums[at] else (GRID[at], sums[at])
    )
    own = chi("own check", 0.0)
    shown = visibility(layout, "circuit", outcome=outcome, depolarise=1.0, reset=reset)
    freedom = max(moments.value.size - shown.strength.shape[1] - 1, 1)
    # Chi-square above its freedom is misfit: the interval of the part widens with it.
    limit = least + 3.84 * max(least / freedom, 1.0)
    inside = np.append(GRID[sums <= limit], part)
    low, high = _edge(circuit, inside.min(), 0.0, limit), _edge(circuit, inside.max(), 1.0, limit)
    picture: Picture = only or ("own check" if own < least - CLEARLY else "circuit")
    best, other = (own, least) if picture == "own check" else (least, own)
    return Preference(picture, float(part), low, high, float(best), float(other), freedom)


def _edge(chi: object, inside: float, end: float, limit: float) -> float:
    """Return where the profile crosses its limit on one grid step outwards, by bisection."""
    outside = float(np.clip(inside + np.sign(end - inside) * (GRID[1] - GRID[0]), 0.0, 1.0))
    if outside == inside or chi(outside) <= limit:  # type: ignore[operator]
        return outside
    for _ in range(8):
        middle = (inside + outside) / 2
        inside, outside = (middle, outside) if chi(middle) <= limit else (inside, middle)  # type: ignore[operator]
    return (inside + outside) / 2


def linear_chi_square(
    moments: PairMoments, detection: FloatArray, shown: Visibility, log_tau: float
) -> float:
    """Return the chi-square of the best levels at one settling time, to first order."""
    seen = visible(moments, shown)
    if not seen.any():
        return float(np.sum(moments.value**2 / moments.variance))
    laid = network(shown.of(seen), moments, detection, np.zeros(0))
    count = int(seen.sum())
    _, unit, _ = predicted_covariances(laid, np.full(count, SMALL), np.full(count, log_tau))
    rows = np.zeros((*moments.value.shape, count))
    rows[laid.pair, :, laid.qubit] = unit
    root = np.sqrt(moments.variance)
    scaled, wanted = (rows / root[..., None]).reshape(-1, count), (moments.value / root).ravel()
    level = np.linalg.lstsq(scaled, wanted, rcond=None)[0]
    return float(np.sum((wanted - scaled @ level) ** 2))


def visible(moments: PairMoments, shown: Visibility) -> NDArray[np.bool_]:
    """Return (qubit,) which qubits show in any of the pairs."""
    both = shown.strength[moments.first] * shown.strength[moments.second]
    return np.asarray(both.sum(axis=0) > 0)
