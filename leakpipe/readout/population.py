"""Populations from posteriors: the linear response-matrix estimator.

Posteriors r_j(x) of classes 0, 1, 2 and background are taken at a fixed working prior from the
plain Gaussian classes. Their mean over a class that starts in state k, A_kj = E_k[r_j], is
integrated under the class densities *with* decay tails. Then mean r = A^T p, so p = A^-T mean r is
linear in the shots: it streams, pools over rounds, may go slightly negative and is unbiased at
p = 0. (Linear unfolding of a known response; for the two-state case see Bravyi et al., Phys. Rev. A
103, 042605 (2021), and references there.) Counting labels instead overstates a leaked population of
1e-3 by factors.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from leakpipe.readout.densities import STATES, FloatArray, class_densities, components
from leakpipe.readout.mixture import Mixture

CLASSES = STATES + 1
"""Classes of the posterior: three states and the background."""

WORKING_PRIOR = (0.60, 0.389, 0.01, 0.001)
"""Fixed prior of states 0, 1, 2 and background; the estimator is unbiased for any."""

GRID_STEP = 0.2
"""Grid step in tied standard deviations. A posterior between classes s sigma apart has its poles at
pi / s, so the trapezoid rule errs by exp(-2 pi^2 / (s h)): 4e-6 at s = 8, less where closer."""
GRID_MARGIN = 7.0
"""Standard deviations that the grid reaches beyond the outermost class means."""


@dataclass(frozen=True)
class Discriminant:
    """Log-odds of a point as polynomials: everything a posterior needs.

    Attributes
    ----------
    linear
        (2, feature + 1): log-odds of class 1 and of class 2 against class 0, linear in the point
        because the classes share one covariance (last entry: constant).
    square
        (feature, feature), (feature,), constant: log density of class 0 at its prior.
    background
        Log of the background's density times its prior.
    """

    linear: FloatArray
    precision: FloatArray
    centre: FloatArray
    constant: float
    background: float


def discriminant(
    means: FloatArray,
    covariance: FloatArray,
    box_volume: float,
    prior: tuple[float, ...] = WORKING_PRIOR,
) -> Discriminant:
    """Return the log-odds polynomials of Gaussian classes without tails.

    Parameters
    ----------
    means, covariance
        (3, feature), (feature, feature).
    box_volume
        Volume over which the background is uniform.
    prior
        Of states 0, 1, 2 and background.
    """
    precision = np.linalg.inv(covariance)
    features = precision.shape[0]
    linear = np.zeros((STATES - 1, features + 1))
    for row, state in enumerate(range(1, STATES)):
        slope = precision @ (means[state] - means[0])
        middle = (means[state] + means[0]) / 2
        linear[row, :-1] = slope
        linear[row, -1] = np.log(prior[state] / prior[0]) - slope @ middle
    norm = np.log(np.linalg.det(precision)) / 2 - features / 2 * np.log(2 * np.pi)
    return Discriminant(
        linear=linear,
        precision=np.asarray(precision, dtype=np.float64),
        centre=means[0].copy(),
        constant=float(np.log(prior[0]) + norm),
        background=float(np.log(prior[3] / box_volume)),
    )


def posteriors(points: FloatArray, rule: Discriminant) -> FloatArray:
    """Return the posteriors of states 0, 1, 2 and background, (point, 4)."""
    offset = points - rule.centre
    log_zero = rule.constant - 0.5 * np.einsum("ia,ab,ib->i", offset, rule.precision, offset)
    logs = np.empty((len(points), CLASSES))
    logs[:, 0] = 0.0
    logs[:, 1:STATES] = points @ rule.linear[:, :-1].T + rule.linear[:, -1]
    logs[:, STATES] = rule.background - log_zero
    logs -= logs.max(axis=1, keepdims=True)
    odds = np.exp(logs)
    return np.asarray(odds / odds.sum(axis=1, keepdims=True))


def grid(mixture: Mixture) -> tuple[FloatArray, float]:
    """Return the points of the integration grid, (point, 2), and the area of its cells.

    The grid covers the classes and the background's box, in steps of a fraction of the smallest
    standard deviation.
    """
    sigma = np.sqrt(np.diag(mixture.covariance))
    step = GRID_STEP * sigma
    low = np.minimum(mixture.means.min(axis=0) - GRID_MARGIN * sigma, mixture.box[:, 0])
    high = np.maximum(mixture.means.max(axis=0) + GRID_MARGIN * sigma, mixture.box[:, 1])
    axes = [np.arange(a, b + s, s) for a, b, s in zip(low, high, step, strict=True)]
    mesh = np.meshgrid(*axes, indexing="ij")
    return np.stack([one.ravel() for one in mesh], axis=1), float(np.prod(step))


def response(
    mixture: Mixture, rule: Discriminant, points: FloatArray, area: float
) -> tuple[FloatArray, FloatArray]:
    """Integrate the response of the posteriors to each true start state.

    Parameters
    ----------
    mixture
        Classes with their decay tails.
    rule
        The posteriors' fixed rule.
    points, area
        From `grid`.

    Returns
    -------
    response
        A (4, 4): mean posterior (columns) of shots that start in each state or in the background.
    labels
        (3, 3): probability that the most probable state is each, per true start state.
    """
    soft = posteriors(points, rule)
    densities = class_densities(
        points, mixture.means, mixture.covariance, mixture.decay, components()
    )
    weights = densities * area
    weights /= weights.sum(axis=0)
    inside = np.all((points >= mixture.box[:, 0]) & (points <= mixture.box[:, 1]), axis=1)
    uniform = inside / inside.sum()
    table = np.vstack([weights.T @ soft, uniform @ soft])
    hard = np.eye(STATES)[np.argmax(soft[:, :STATES], axis=1)]
    return table, weights.T @ hard


def unfold(mean_posterior: FloatArray, table: FloatArray) -> FloatArray:
    """Return populations p = A^-T mean r over the last axis, (..., 4) to (..., 4)."""
    return np.asarray(mean_posterior @ np.linalg.inv(table))
