"""Semi-supervised Gaussian mixture of a calibration: shared classes, free preparation errors.

The preparations share three classes (means, one tied covariance); each has its own free weights,
which are its preparation errors. Labels are never trusted, only the sharing is. Expectation
maximisation after Dempster, Laird and Rubin, J. R. Stat. Soc. B 39, 1 (1977).
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from leakpipe.readout.densities import (
    STATES,
    TAILS,
    Components,
    FloatArray,
    components,
    expectation,
)

BACKGROUND_START = 1e-4
CONVERGED = 1e-8
"""Relative change of the log-likelihood per step that ends EM."""
STEPS = 300
NO_MASS = 1e-12
"""Share of all points below which a class holds nothing that could place its mean."""
LARGEST_DECAY = 0.3
"""A decay probability above this means that T1 is about the window: no tail model serves."""


@dataclass(frozen=True)
class Mixture:
    """A fitted mixture of one qubit, in the coordinates of its points.

    Attributes
    ----------
    means, covariance
        (3, feature) and (feature, feature).
    weights
        (preparation, 3) true-start weights of each preparation; rows plus background sum to 1.
    decay
        (tail,) probability of each jump of `TAILS` during the readout.
    background
        (preparation,) fraction in the uniform background.
    box
        (feature, 2) ends of the background's box.
    likelihood
        Log-likelihood per point.
    steps
        EM steps used; `converged` tells whether they sufficed.
    converged
        See above.
    """

    means: FloatArray
    covariance: FloatArray
    weights: FloatArray
    decay: FloatArray
    background: FloatArray
    box: FloatArray
    likelihood: float
    steps: int
    converged: bool

    @property
    def box_volume(self) -> float:
        """Volume of the background's box."""
        return float(np.prod(self.box[:, 1] - self.box[:, 0]))


def start(points: list[FloatArray], prepared: list[int]) -> Mixture:
    """Return starting values from the medians of the preparations.

    Parameters
    ----------
    points
        Per preparation (shot, feature), finite.
    prepared
        The state that each preparation aims at; all of 0, 1 and 2.
    """
    medians = {state: np.median(x, axis=0) for state, x in zip(prepared, points, strict=True)}
    means = np.array([medians[state] for state in range(STATES)])
    # The median absolute deviation holds 0.6745 sigma of a Gaussian; tails and wrong preparations
    # count little in it.
    spread = np.concatenate(
        [np.abs(x - medians[state]) for state, x in zip(prepared, points, strict=True)]
    )
    sigma = np.median(spread, axis=0) / 0.6745
    together = np.concatenate(points)
    margin = 3 * sigma
    box = np.stack([together.min(axis=0) - margin, together.max(axis=0) + margin], axis=1)
    weights = np.full((len(points), STATES), 0.02)
    for row, state in enumerate(prepared):
        weights[row, state] = 0.96 - BACKGROUND_START
    return Mixture(
        means=means,
        covariance=np.diag(sigma**2),
        weights=weights,
        decay=np.full(len(TAILS), 0.01),
        background=np.full(len(points), BACKGROUND_START),
        box=box,
        likelihood=-np.inf,
        steps=0,
        converged=False,
    )


def fit(
    points: list[FloatArray],
    begin: Mixture,
    *,
    counts: list[FloatArray] | None = None,
    decay: bool = True,
    steps: int = STEPS,
) -> Mixture:
    """Fit the mixture by expectation maximisation.

    Parameters
    ----------
    points
        Per preparation (shot, feature), finite.
    begin
        Starting values.
    counts
        Per preparation (shot,) weights of the points, for a bootstrap; 1 by default.
    decay
        Whether the decay probabilities are fitted; otherwise there are no tails.
    steps
        Largest number of steps.
    """
    parts = components()
    counts = [np.ones(len(x)) for x in points] if counts is None else counts
    totals = np.array([count.sum() for count in counts])
    now = begin if decay else replace(begin, decay=np.zeros(len(TAILS)))
    for step in range(1, steps + 1):
        following = _step(points, counts, totals, now, parts, fitted=decay)
        change = following.likelihood - now.likelihood
        converged = abs(change) < CONVERGED * max(1.0, abs(following.likelihood))
        now = replace(following, steps=step, converged=bool(converged))
        if converged:
            break
    return now


def _step(
    points: list[FloatArray],
    counts: list[FloatArray],
    totals: FloatArray,
    now: Mixture,
    parts: Components,
    *,
    fitted: bool,
) -> Mixture:
    precision = np.linalg.inv(now.covariance)
    features = precision.shape[0]
    norm = float(np.sqrt(np.linalg.det(precision)) / (2 * np.pi) ** (features / 2))
    centres = parts.mixing @ now.means
    inner = parts.weights(now.decay)
    mass = np.zeros((len(points), len(inner)))
    first = np.zeros((len(inner), features))
    outside = np.zeros(len(points))
    likelihood = 0.0
    second = np.zeros((features, features))
    for row, (x, count) in enumerate(zip(points, counts, strict=True)):
        weights = now.weights[row, parts.state] * inner
        background = now.background[row] / now.box_volume
        row_mass, row_first, row_second, outside[row], value = expectation(
            x, count, centres, precision, norm, weights, background
        )
        mass[row] = row_mass
        first += row_first
        second += row_second
        likelihood += value
    together = mass.sum(axis=0)
    gram = (parts.mixing * together[:, None]).T @ parts.mixing
    # A class without any mass (a state that was neither prepared nor seeded) stays where it is.
    seen = np.diag(gram) > NO_MASS * together.sum()
    means = now.means.copy()
    means[seen] = np.linalg.solve(gram[np.ix_(seen, seen)], (parts.mixing.T @ first)[seen])
    centres = parts.mixing @ means
    scatter = second - first.T @ centres - centres.T @ first
    scatter = scatter + (centres * together[:, None]).T @ centres
    by_state = np.stack([mass[:, parts.state == s].sum(axis=1) for s in range(STATES)], axis=1)
    new_decay = now.decay
    if fitted:
        in_tail = np.array([together[parts.tail == t].sum() for t in range(len(TAILS))])
        whole = np.array([together[parts.state == s].sum() for s, _ in TAILS])
        new_decay = np.clip(in_tail / np.maximum(whole, 1e-300), 0.0, LARGEST_DECAY)
    return replace(
        now,
        means=means,
        covariance=(scatter + scatter.T) / (2 * together.sum()),
        weights=by_state / totals[:, None],
        background=outside / totals,
        decay=new_decay,
        likelihood=likelihood / totals.sum(),
    )


CELL = 0.2
"""Side of the cells, in tied standard deviations, whose points are pooled into their mean."""


def compressed(
    points: list[FloatArray], sigma: FloatArray
) -> tuple[list[FloatArray], list[FloatArray]]:
    """Pool close points into their mean and count, ten times fewer for EM to visit.

    What is lost is the spread within a cell, CELL^2 / 12 = 0.3 % of the variance; a few steps on
    the points themselves bring it back.

    Parameters
    ----------
    points
        Per preparation (shot, feature).
    sigma
        (feature,) standard deviations.

    Returns
    -------
    means, counts
        Per preparation (cell, feature) and (cell,).
    """
    means, counts = [], []
    for x in points:
        cells = np.floor(x / (CELL * sigma)).astype(np.int64)
        _, home, count = np.unique(cells, axis=0, return_inverse=True, return_counts=True)
        home = home.ravel()
        sums = [np.bincount(home, x[:, a], minlength=len(count)) for a in range(x.shape[1])]
        means.append(np.ascontiguousarray(np.stack(sums, axis=1) / count[:, None]))
        counts.append(count.astype(float))
    return means, counts
