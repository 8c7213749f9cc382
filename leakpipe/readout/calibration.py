"""One qubit's readout model from its calibration shots, plain arrays only."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from leakpipe.readout.densities import STATES, TAILS, FloatArray
from leakpipe.readout.mixture import Mixture, compressed, fit, start
from leakpipe.readout.population import (
    WORKING_PRIOR,
    Discriminant,
    discriminant,
    grid,
    posteriors,
    response,
)

FINISH_STEPS = 8
"""EM steps on the points after convergence on cells: they restore the spread within cells."""
REPLICA_STEPS = 6
"""EM steps of a bootstrap refit that starts from the full fit."""
FAR = 4.5
"""Standard deviations from every known class beyond which a point counts as far."""
FEWEST_FAR = 50
"""Far points needed to seed a leaked class that was never prepared (prototype study)."""
FAR_AWAY = 60.0
"""Where the leaked class is put, in standard deviations, when nothing shows where it is."""
REFERENCE_LEAK = 1e-3
"""Leaked population at which the loss of precision by overlap is quoted."""


@dataclass(frozen=True)
class QubitModel:
    """Readout model of one qubit.

    Attributes
    ----------
    mixture
        Fitted classes.
    response
        A (4, 4).
    replicas
        (replica, 4, 4) responses of bootstrapped calibrations to the same rule.
    labels
        (3, 3) probability of each label per true start state.
    as_prepared
        (preparation, 3) fraction of each label per preparation.
    shots
        (preparation,) finite shots.
    missing
        Fraction of missing shots.
    error_ratio
        Standard error of a leaked population of 1e-3 over that of a perfect readout.
    usable
        Whether a leaked population can be had; `reason` says why not.
    reason
        See above.
    """

    mixture: Mixture
    response: FloatArray
    replicas: FloatArray
    labels: FloatArray
    as_prepared: FloatArray
    shots: FloatArray
    missing: float
    error_ratio: float
    usable: bool
    reason: str

    @property
    def separations(self) -> FloatArray:
        """Distances 0-1, 1-2, 0-2 in tied standard deviations along the line between them."""
        m, precision = self.mixture.means, np.linalg.inv(self.mixture.covariance)
        gaps = np.array([m[1] - m[0], m[2] - m[1], m[2] - m[0]])
        return np.asarray(np.sqrt(np.einsum("pa,ab,pb->p", gaps, precision, gaps)))


def model_qubit(
    points: list[FloatArray],
    prepared: list[int],
    rng: np.random.Generator,
    *,
    replicas: int,
    decay: bool,
) -> QubitModel:
    """Fit one qubit's readout model.

    Parameters
    ----------
    points
        Per preparation (shot, 2); NaN rows are missing.
    prepared
        State of each preparation: 0, 1 and perhaps 2.
    rng
        For the bootstrap.
    replicas
        Bootstrap copies.
    decay
        Whether decay tails are fitted.
    """
    total = sum(len(x) for x in points)
    points = [np.ascontiguousarray(x[np.isfinite(x).all(axis=1)], dtype=float) for x in points]
    missing = 1 - sum(len(x) for x in points) / total
    begin, reason = (start(points, prepared), "") if 2 in prepared else _without_leaked(points)
    cells, cell_counts = compressed(points, np.sqrt(np.diag(begin.covariance)))
    coarse = fit(cells, begin, counts=cell_counts, decay=decay)
    # The cells decide where EM converges; the points themselves finish it.
    mixture = replace(
        fit(points, coarse, decay=decay, steps=FINISH_STEPS), converged=coarse.converged
    )
    if reason:
        mixture = _leaked_far_away(mixture)
    rule = discriminant(mixture.means, mixture.covariance, mixture.box_volume)
    where, area = grid(mixture)
    table, labels = response(mixture, rule, where, area)
    copies = []
    for _ in range(replicas):
        # A sum of n Poisson(1) weights is Poisson(n): the bootstrap of the points, cell by cell.
        counts = [rng.poisson(count).astype(float) for count in cell_counts]
        copy = fit(cells, coarse, counts=counts, decay=decay, steps=REPLICA_STEPS)
        if reason:
            copy = _leaked_far_away(copy)
        copies.append(response(copy, rule, where, area)[0])
    as_prepared = np.array(
        [
            np.eye(STATES)[posteriors(x, rule)[:, :STATES].argmax(axis=1)].mean(axis=0)
            for x in points
        ]
    )
    return QubitModel(
        mixture=mixture,
        response=table,
        replicas=np.array(copies),
        labels=labels,
        as_prepared=as_prepared,
        shots=np.array([len(x) for x in points], dtype=float),
        missing=missing,
        error_ratio=_error_ratio(mixture, rule, table, where, area),
        usable=not reason,
        reason=reason,
    )


def _without_leaked(points: list[FloatArray]) -> tuple[Mixture, str]:
    """Start a mixture whose leaked class was not prepared: seed it in the far tail."""
    together = np.concatenate(points)
    base = start([*points, points[1]], [0, 1, 2])
    two = replace(
        base,
        weights=np.array([[0.97, 0.0299, 0.0], [0.0299, 0.97, 0.0]]),
        background=np.full(2, 1e-4),
    )
    precision = np.linalg.inv(base.covariance)
    fractions = np.linspace(0, 1, 11)[:, None]
    line = base.means[0] + fractions * (base.means[1] - base.means[0])
    distance = np.min(
        [np.einsum("ia,ab,ib->i", together - m, precision, together - m) for m in line], axis=0
    )
    far = distance > FAR**2
    if int(far.sum()) < FEWEST_FAR:
        return (
            two,
            f"state 2 was not prepared and only {int(far.sum())} of the calibration's shots lie "
            f"far from states 0 and 1 ({FEWEST_FAR} are needed to place it)",
        )
    means = base.means.copy()
    means[2] = np.median(together[far], axis=0)
    weights = two.weights - np.array([[0.0, 0.0, -1], [0.0, 0.0, -1]]) * 1e-3
    return replace(two, means=means, weights=weights / weights.sum(axis=1, keepdims=True)), ""


def _leaked_far_away(mixture: Mixture) -> Mixture:
    """Put the leaked class where no point is, so that no reading is ever called leaked."""
    sigma = np.sqrt(np.diag(mixture.covariance))
    means = mixture.means.copy()
    means[2] = means[1] + FAR_AWAY * sigma
    return replace(mixture, means=means, decay=np.append(mixture.decay[:1], 0.0))


def _error_ratio(
    mixture: Mixture, rule: Discriminant, table: FloatArray, where: FloatArray, area: float
) -> float:
    """Return how much overlap widens the shot error of a leaked population of 1e-3."""
    from leakpipe.readout.densities import class_densities, components

    score = posteriors(where, rule) @ np.linalg.inv(table)[:, 2]
    densities = class_densities(
        where, mixture.means, mixture.covariance, mixture.decay, components()
    )
    densities = densities * area
    densities /= densities.sum(axis=0)
    mix = np.array([WORKING_PRIOR[0], WORKING_PRIOR[1], REFERENCE_LEAK])
    mix[:2] *= (1 - REFERENCE_LEAK) / mix[:2].sum()
    first, second = score @ densities @ mix, (score**2) @ densities @ mix
    return float(np.sqrt((second - first**2) / (REFERENCE_LEAK * (1 - REFERENCE_LEAK))))


def tail_names() -> list[str]:
    """Return the names of the decay tails, such as "1 to 0"."""
    return [f"{start_} to {end}" for start_, end in TAILS]
