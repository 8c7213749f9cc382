"""Does a run still look like its calibration? If not: rotation, gain and offset from the run.

The check is a binned chi-square of the run's points against the calibrated classes with free
weights; its excess per shot, phi = (X2 - freedom) / N, does not grow with the number of shots. The
mend carries all three classes along, the rare leaked one too: the abundant clouds of 0 and 1
determine rotation, gain and offset.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from scipy.optimize import minimize
from scipy.stats import chi2

from leakpipe.readout.densities import FloatArray, class_densities, components
from leakpipe.readout.mixture import Mixture

BIN = 0.75
"""Bin width of the check in tied standard deviations."""
FEWEST_EXPECTED = 5.0
"""Bins with a smaller expectation are pooled (Cochran, Biometrics 10, 417 (1954))."""
WEIGHT_STEPS = 100
MEND_POINTS = 4000
ROTATIONS = np.deg2rad(np.arange(-180, 180, 10))
"""Starting rotations: a poor start slips the labels."""
PRIOR_WEIGHTS = np.array([0.6, 0.389, 0.01, 0.001])
GAIN_RANGE = (0.8, 1.25)
"""A mended gain outside this is refused (prototype study)."""


@dataclass(frozen=True)
class RunCheck:
    """Outcome of the check of one qubit's run.

    Attributes
    ----------
    phi
        Excess chi-square per shot.
    p_value
        Probability of a chi-square this large by chance.
    weights
        (4,) fitted weights of states 0, 1, 2 and background.
    """

    phi: float
    p_value: float
    weights: FloatArray


@dataclass(frozen=True)
class Change:
    """Rotation (rad), gain and offset that take calibration points to run points."""

    rotation: float = 0.0
    gain: float = 1.0
    offset: tuple[float, float] = (0.0, 0.0)

    def matrix(self) -> FloatArray:
        """Return gain times rotation, (2, 2)."""
        c, s = np.cos(self.rotation), np.sin(self.rotation)
        return self.gain * np.array([[c, -s], [s, c]])

    def backward(self, points: FloatArray) -> FloatArray:
        """Return run points in calibration coordinates."""
        return np.asarray((points - np.array(self.offset)) @ np.linalg.inv(self.matrix()).T)

    def apply(self, mixture: Mixture) -> Mixture:
        """Return the mixture in run coordinates; its response matrix does not change."""
        matrix = self.matrix()
        return replace(
            mixture,
            means=mixture.means @ matrix.T + np.array(self.offset),
            covariance=matrix @ mixture.covariance @ matrix.T,
        )


def check_run(points: FloatArray, mixture: Mixture) -> RunCheck:
    """Compare a run's points with the calibrated classes.

    Parameters
    ----------
    points
        (point, 2) finite points of one qubit, in calibration coordinates.
    mixture
        Calibrated classes.
    """
    sigma = np.sqrt(np.diag(mixture.covariance))
    low = np.minimum(mixture.box[:, 0], points.min(axis=0))
    high = np.maximum(mixture.box[:, 1], points.max(axis=0))
    counts_of = np.maximum(np.ceil((high - low) / (BIN * sigma)).astype(int), 1)
    edges = [low[a] + BIN * sigma[a] * np.arange(counts_of[a] + 1) for a in range(2)]
    observed = np.histogram2d(points[:, 0], points[:, 1], bins=edges)[0].ravel()
    expected_of = _bin_probabilities(mixture, edges)
    weights = fit_weights(observed, expected_of)
    expected = observed.sum() * expected_of @ weights
    order = np.argsort(expected)
    pooled = np.cumsum(expected[order]) < FEWEST_EXPECTED
    small = np.zeros(len(order), dtype=bool)
    small[order[pooled | (expected[order] < FEWEST_EXPECTED)]] = True
    o = np.append(observed[~small], observed[small].sum())
    e = np.append(expected[~small], expected[small].sum())
    keep = e > 0
    statistic = float(np.sum((o[keep] - e[keep]) ** 2 / e[keep]))
    freedom = max(int(keep.sum()) - 4, 1)
    return RunCheck(
        phi=(statistic - freedom) / len(points),
        p_value=float(chi2.sf(statistic, freedom)),
        weights=weights,
    )


def fit_weights(observed: FloatArray, densities: FloatArray) -> FloatArray:
    """Return maximum-likelihood weights of fixed densities for counts, by EM.

    Parameters
    ----------
    observed
        (cell,) counts.
    densities
        (cell, class) probability or density of each class in each cell.
    """
    weights = PRIOR_WEIGHTS[: densities.shape[1]].copy()
    weights /= weights.sum()
    for _ in range(WEIGHT_STEPS):
        mixed = densities * weights
        total = mixed.sum(axis=1)
        share = np.divide(observed, total, out=np.zeros_like(total), where=total > 0)
        weights = mixed.T @ share / max(observed.sum(), 1.0)
        weights /= weights.sum()
    return weights


def _bin_probabilities(mixture: Mixture, edges: list[FloatArray]) -> FloatArray:
    """Integrate the classes over bins with 3 x 3 Gauss-Legendre points each."""
    nodes, node_weights = np.polynomial.legendre.leggauss(3)
    axes, axis_weights = [], []
    for edge in edges:
        width = np.diff(edge)
        axes.append((edge[:-1, None] + width[:, None] * (nodes + 1) / 2).ravel())
        axis_weights.append((width[:, None] / 2 * node_weights).ravel())
    mesh = np.meshgrid(*axes, indexing="ij")
    points = np.stack([one.ravel() for one in mesh], axis=1)
    weights = np.multiply.outer(*axis_weights).ravel()
    density = class_densities(
        points, mixture.means, mixture.covariance, mixture.decay, components()
    )
    inside = np.all((points >= mixture.box[:, 0]) & (points <= mixture.box[:, 1]), axis=1)
    density = np.column_stack([density, inside / mixture.box_volume]) * weights[:, None]
    shape = (len(edges[0]) - 1, 3, len(edges[1]) - 1, 3, 4)
    return np.asarray(density.reshape(shape).sum(axis=(1, 3)).reshape(-1, 4))


def find_change(points: FloatArray, mixture: Mixture) -> Change:
    """Return the rotation, gain and offset that make a run's points fit its calibration best.

    Phase first (a grid of rotations at the working prior), then all four by simplex.

    Parameters
    ----------
    points
        (point, 2) finite points of the run.
    mixture
        Calibrated classes.
    """
    sample = points[:: max(len(points) // MEND_POINTS, 1)]
    coarse = sample[:: max(len(sample) // 500, 1)]
    # Without tails a density costs a tenth; the search uses it, the last steps have the tails.
    plain = replace(mixture, decay=np.zeros_like(mixture.decay))
    best = max(ROTATIONS, key=lambda angle: _likelihood(coarse, plain, Change(rotation=angle)))
    sigma = float(np.sqrt(np.trace(mixture.covariance) / 2))

    def loss(x: FloatArray, classes: Mixture) -> float:
        change = Change(x[0], float(np.exp(x[1])), (x[2] * sigma, x[3] * sigma))
        return -_likelihood(sample, classes, change)

    begin = np.array([best, 0.0, 0.0, 0.0])
    found = begin
    for classes, step, most in ((plain, 1.0, 300), (mixture, 0.1, 60)):
        simplex = np.vstack([found, found + step * np.diag([0.05, 0.05, 0.3, 0.3])])
        options = {"initial_simplex": simplex, "xatol": 1e-4, "fatol": 1e-6, "maxiter": most}
        found = minimize(loss, found, args=(classes,), method="Nelder-Mead", options=options).x
    return Change(
        float(found[0]), float(np.exp(found[1])), (float(found[2] * sigma), float(found[3] * sigma))
    )


def _likelihood(points: FloatArray, mixture: Mixture, change: Change) -> float:
    """Return the mean log-likelihood of run points, weights of 0 and 1 free."""
    density = class_densities(
        change.backward(points), mixture.means, mixture.covariance, mixture.decay, components()
    )
    density = np.column_stack([density, np.full(len(points), 1 / mixture.box_volume)])
    weights = PRIOR_WEIGHTS.copy()
    for _ in range(5):
        mixed = density * weights
        part = (mixed / mixed.sum(axis=1, keepdims=True)).mean(axis=0)
        # The leaked share stays at its prior: a slip of labels would pay otherwise.
        weights[:2] = part[:2] / part[:2].sum() * PRIOR_WEIGHTS[:2].sum()
    return float(np.mean(np.log((density * weights).sum(axis=1))) - 2 * np.log(change.gain))
