"""Covariances of pairs of checks against lag, boiled down from the detection sums.

The two orders of a pair are added. Over rounds each covariance is averaged with weights g(r) that
follow the leaked population; a model is averaged alike, so the weights cost no bias.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

BLOCK = 50
"""Shots of a local mean (docs/conventions.md)."""


@dataclass(frozen=True)
class PairMoments:
    """Local-mean covariances of n pairs.

    Attributes
    ----------
    first, second
        (n,) checks of the pair, first <= second.
    lags
        (lag,) that ordinary errors do not reach.
    rounds
        (round,) layer of the early event, from 1.
    value, variance
        (n, lag) covariance averaged over rounds, and its variance if events were independent.
    weight
        (n, order, round, lag) of each round's covariance in `value`, which is their weighted sum;
        order 0 has `first` early. Weights make it an amplitude in units of g.
    scores
        (batch, n, lag) what each batch contributes to `value` beyond its part.
    """

    first: IntArray
    second: IntArray
    lags: IntArray
    rounds: FloatArray
    value: FloatArray
    variance: FloatArray
    weight: FloatArray
    scores: FloatArray


def pair_moments(
    products: FloatArray,
    block_products: FloatArray,
    blocks: FloatArray,
    early: IntArray,
    late: IntArray,
    detection: FloatArray,
    growth: FloatArray,
    first_lag: int,
) -> PairMoments | None:
    """Average covariances over rounds and both orders; None where no lag is left.

    Parameters
    ----------
    products, block_products
        (batch, pair, round, lag) sums.
    blocks
        (batch, round) complete blocks in which a layer is interior.
    early, late
        (pair,) checks.
    detection
        (round, check) detection probability, for the variances.
    growth
        (round,) g(r) of the early event, 0 leaves a round out.
    first_lag
        Smallest lag that ordinary errors do not reach.
    """
    batches, _, rounds, lags = products.shape
    lag_axis = np.arange(first_lag, min(lags, rounds - 1))
    order = np.where(early <= late, 0, 1)
    keys = sorted(
        {(min(a, b), max(a, b)) for a, b in zip(early.tolist(), late.tolist(), strict=True)}
    )
    place = {key: index for index, key in enumerate(keys)}
    if not len(lag_axis) or not keys:
        return None
    first, second = np.array(keys, dtype=np.int64).T
    number = np.zeros((batches, rounds, len(lag_axis)))
    for column, lag in enumerate(lag_axis):
        number[:, : rounds - lag, column] = blocks[:, lag:] * (BLOCK - 1)
    g = np.broadcast_to(growth[:, None], number.shape[1:])
    shape = (len(keys), 2, rounds, len(lag_axis))
    top = np.zeros((batches, len(keys), len(lag_axis)))
    bottom = np.zeros_like(top)
    weight, variance = np.zeros(shape), np.zeros((len(keys), len(lag_axis)))
    total = number.sum(axis=0)
    spread = detection * (1 - detection)
    for pair, (a, b) in enumerate(zip(early.tolist(), late.tolist(), strict=True)):
        at, way = place[min(a, b), max(a, b)], int(order[pair])
        local = products[:, pair][:, :, lag_axis] - block_products[:, pair][:, :, lag_axis] / BLOCK
        top[:, at] += (g * local).sum(axis=1)
        bottom[:, at] += (g**2 * number).sum(axis=1)
        weight[at, way] = g * total
        for column, lag in enumerate(lag_axis):
            both = spread[: rounds - lag, a] * spread[lag:, b]
            variance[at, column] += np.sum(
                g[: rounds - lag, column] ** 2 * total[: rounds - lag, column] * both
            )
    below = bottom.sum(axis=0)
    good = np.all(below > 0, axis=0) & np.all(variance > 0, axis=0)
    if not good.any():
        return None
    below, top, bottom = below[:, good], top[:, :, good], bottom[:, :, good]
    value = top.sum(axis=0) / below
    return PairMoments(
        first,
        second,
        lag_axis[good],
        np.arange(1.0, rounds + 1),
        value,
        variance[:, good] / below**2,
        weight[:, :, :, good] / below[:, None, None],
        (top - bottom * value) / below,
    )
