"""Class densities with decay tails: every class is a mixture of equal Gaussians.

A shot that decays during the readout lands on the line between two class means: the integrated
signal is the mean of the first class until the jump and of the second after it (Gambetta et al.,
Phys. Rev. A 76, 012325 (2007), for two states). With a jump time that is uniform over the window,
the tail is an integral of Gaussians along that line, here by Gauss-Legendre quadrature.

Everything is in standardised coordinates (unit tied standard deviation, roughly). Components are
listed class by class: the undecayed Gaussian first, then the nodes of its tail.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numba import njit
from numpy.typing import NDArray

STATES = 3
TAILS = ((1, 0), (2, 1))
"""Jumps during the readout that the model holds: downward, one level."""

NODES = 14
"""Nodes per tail; more changed no density by 1e-6 in the prototype study."""

FloatArray = NDArray[np.float64]


@dataclass(frozen=True)
class Components:
    """The fixed structure of the mixture: which mean each component has, and whose it is.

    Attributes
    ----------
    mixing
        (component, 3): a component's mean is this row times the class means.
    state
        (component,) class that a component belongs to.
    tail
        (component,) index into `TAILS`, or -1 for the undecayed Gaussians.
    node_weight
        (component,) weight within its tail (sums to 1), or 1.
    """

    mixing: FloatArray
    state: NDArray[np.int64]
    tail: NDArray[np.int64]
    node_weight: FloatArray

    def weights(self, decay: FloatArray) -> FloatArray:
        """Return each component's weight within its class, given (tail,) decay probabilities."""
        stays = np.ones(STATES)
        for probability, (start, _) in zip(decay, TAILS, strict=True):
            stays[start] -= probability
        tail_part = np.append(decay, 0.0)[self.tail]
        own = np.where(self.tail < 0, stays[self.state], tail_part)
        return np.asarray(own * self.node_weight)


def components() -> Components:
    """Return the components of three classes with straight-line tails."""
    points, weights = np.polynomial.legendre.leggauss(NODES)
    fractions, weights = (points + 1) / 2, weights / 2
    mixing = [np.eye(STATES)[state] for state in range(STATES)]
    state, tail, node_weight = list(range(STATES)), [-1] * STATES, [1.0] * STATES
    for index, (start, end) in enumerate(TAILS):
        for fraction, weight in zip(fractions, weights, strict=True):
            row = np.zeros(STATES)
            row[start], row[end] = fraction, 1 - fraction
            mixing.append(row)
            state.append(start)
            tail.append(index)
            node_weight.append(weight)
    return Components(
        np.array(mixing), np.array(state), np.array(tail), np.array(node_weight, dtype=float)
    )


def class_densities(
    points: FloatArray,
    means: FloatArray,
    covariance: FloatArray,
    decay: FloatArray,
    parts: Components,
) -> FloatArray:
    """Return the density of each class at each point, (point, 3).

    Parameters
    ----------
    points
        (point, feature).
    means, covariance
        Class means (3, feature) and their tied covariance.
    decay
        (tail,) probability of each jump during the readout.
    """
    precision = np.linalg.inv(covariance)
    norm = np.sqrt(np.linalg.det(precision)) / (2 * np.pi) ** (points.shape[1] / 2)
    out = np.zeros((len(points), STATES))
    _add_densities(
        np.ascontiguousarray(points),
        parts.mixing @ means,
        precision,
        parts.weights(decay) * norm,
        parts.state,
        out,
    )
    return out


@njit(cache=True, nogil=True)
def _add_densities(points, centres, precision, weights, state, out):  # type: ignore[no-untyped-def]
    features = points.shape[1]
    for i in range(points.shape[0]):
        for c in range(centres.shape[0]):
            if weights[c] == 0.0:
                continue
            square = 0.0
            for a in range(features):
                for b in range(features):
                    square += (
                        (points[i, a] - centres[c, a])
                        * precision[a, b]
                        * (points[i, b] - centres[c, b])
                    )
            out[i, state[c]] += weights[c] * np.exp(-0.5 * square)


@njit(cache=True, nogil=True)
def expectation(  # type: ignore[no-untyped-def]
    points, counts, centres, precision, norm, weights, background
):
    """Sum responsibilities of components over weighted points (the E step of EM).

    Parameters
    ----------
    points
        (point, feature).
    counts
        (point,) weight of each point (1, or its bootstrap count).
    centres, precision, norm
        Component means, shared precision matrix and Gaussian normalisation.
    weights
        (component,) absolute weight of each component in this preparation.
    background
        Density times weight of the uniform background.

    Returns
    -------
    mass, first, second, outside, likelihood
        Summed responsibilities (component,), responsibility-weighted points (component, feature)
        and their second moment over all classes (feature, feature), summed background
        responsibility, log-likelihood.
    """
    features, count = points.shape[1], centres.shape[0]
    mass = np.zeros(count)
    first = np.zeros((count, features))
    second = np.zeros((features, features))
    part = np.zeros(count)
    outside, likelihood = 0.0, 0.0
    for i in range(points.shape[0]):
        if counts[i] == 0.0:
            continue
        total = background
        for c in range(count):
            part[c] = 0.0
            if weights[c] > 0.0:
                square = 0.0
                for a in range(features):
                    for b in range(features):
                        square += (
                            (points[i, a] - centres[c, a])
                            * precision[a, b]
                            * (points[i, b] - centres[c, b])
                        )
                if square < 80.0:
                    part[c] = weights[c] * norm * np.exp(-0.5 * square)
                    total += part[c]
        likelihood += counts[i] * np.log(total)
        outside += counts[i] * background / total
        scale = counts[i] / total
        inside = counts[i] * (1.0 - background / total)
        for a in range(features):
            for b in range(features):
                second[a, b] += inside * points[i, a] * points[i, b]
        for c in range(count):
            if part[c] > 0.0:
                mass[c] += part[c] * scale
                for a in range(features):
                    first[c, a] += part[c] * scale * points[i, a]
    return mass, first, second, outside, likelihood
