"""Many noisy values of one kind: how much they really differ, and what each is then worth."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]


@dataclass(frozen=True)
class Shrunk:
    """Values pulled to their common mean.

    Attributes
    ----------
    value, error
        (n,) shrunk values and their standard errors, that of the mean included.
    mean, mean_error
        Of the population of values.
    spread
        Standard deviation between them beyond their errors; 0 if none is seen.
    own
        (n,) part that each value's own data have in it: 1 not shrunk, 0 the mean alone.
    """

    value: FloatArray
    error: FloatArray
    mean: float
    mean_error: float
    spread: float
    own: FloatArray


def shrink(value: FloatArray, error: FloatArray) -> Shrunk:
    """Shrink values to their mean by the moment estimate of their spread.

    DerSimonian and Laird, Control. Clin. Trials 7, 177 (1986): spread^2 = (Q - (n - 1)) / (sum w -
    sum w^2 / sum w), w = 1 / error^2, Q = sum w (value - mean)^2, not below 0.

    Raises
    ------
    ValueError
        No value, or an error that is not positive.
    """
    if not len(value) or not np.all(error > 0):
        raise ValueError("shrinking needs values with positive errors")
    weight = 1 / error**2
    total = weight.sum()
    centre = weight @ value / total
    surplus = weight @ (value - centre) ** 2 - (len(value) - 1)
    scale = total - (weight**2).sum() / total
    between = max(float(surplus / scale), 0.0) if scale > 0 else 0.0
    joint = 1 / (error**2 + between)
    mean, mean_variance = float(joint @ value / joint.sum()), float(1 / joint.sum())
    own = between / (between + error**2)
    variance = own * error**2 + (1 - own) ** 2 * mean_variance
    return Shrunk(
        value=own * value + (1 - own) * mean,
        error=np.sqrt(variance),
        mean=mean,
        mean_error=float(np.sqrt(mean_variance)),
        spread=float(np.sqrt(between)),
        own=own,
    )
