"""Sandwich errors of weighted least squares over contiguous batches of shots.

Bread (J^T W J)^-1, filling from the batches' own deviations: right under any correlation between
rounds of one shot and under drift within a batch. The correction B / (B - 1) and Student's t with
B - 1 degrees of freedom are the usual ones for few clusters (Liang and Zeger, Biometrika 73, 13
(1986); Bell and McCaffrey, Survey Methodology 28, 169 (2002), from memory).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]

LEAST_RATIO, LARGEST_RATIO = 0.5, 10.0
"""Range of a variance ratio believed of 50 batches: its own spread is 20 %, so a smaller one is
chance, and a larger one means another model (ours)."""


@dataclass(frozen=True)
class Sandwich:
    """The batches' deviations of one curve, ready to be filled into a sandwich.

    Attributes
    ----------
    weight
        (n,) inverse binomial variances.
    deviations
        (batch, n) contributions of the batches to the curve less their expected part; they sum to
        0 over batches.
    """

    weight: FloatArray
    deviations: FloatArray

    @property
    def batches(self) -> int:
        """Number of batches that hold shots."""
        return int(np.any(self.deviations != 0, axis=1).sum())

    @property
    def freedom(self) -> int:
        """Degrees of freedom of errors, at least 1."""
        return max(self.batches - 1, 1)

    def covariance(self, jacobian: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Return the binomial and the sandwich covariance of the parameters of J, (p, p) each."""
        root = np.linalg.qr(np.sqrt(self.weight)[:, None] * jacobian, mode="r")
        inverse_root = np.linalg.pinv(root)
        inverse = inverse_root @ inverse_root.T
        scores = self.deviations @ (self.weight[:, None] * jacobian)
        return inverse, inverse @ (self.correction * scores.T @ scores) @ inverse

    def ratio(self, direction: FloatArray) -> float:
        """Return sandwich over binomial variance of a curve's component along a direction (n,).

        1 where the direction vanishes.
        """
        along = self.deviations @ (self.weight * direction)
        return limited_ratio(
            self.correction * float(along @ along), float(self.weight @ direction**2)
        )

    @property
    def correction(self) -> float:
        """B / (B - 1)."""
        return self.batches / self.freedom


def limited_ratio(sandwich: float, binomial: float) -> float:
    """Return the ratio of two variances inside the believed range; 1 where there is none."""
    if not (binomial > 0 and np.isfinite(sandwich)):
        return 1.0
    return float(np.clip(sandwich / binomial, LEAST_RATIO, LARGEST_RATIO))


def error_along(gradient: FloatArray, covariance: FloatArray) -> FloatArray:
    """Return the standard errors of linear combinations, (..., p) -> (...)."""
    variance = np.einsum("...a,ab,...b", gradient, covariance, gradient)
    return np.asarray(np.sqrt(np.maximum(variance, 0.0)), dtype=float)
