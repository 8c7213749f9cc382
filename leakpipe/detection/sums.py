"""Sums over shots of detection events: counts, lag products, block products, leaked readings.

One pass, integers only. The rounds of a check are packed into 64-bit words, so that products of
rare events cost a few operations each. `count_numpy` is the clear twin of the compiled kernel; a
property test holds them equal.
"""

from __future__ import annotations

from dataclasses import dataclass, fields

import numpy as np
from numba import njit
from numpy.typing import NDArray

from leakpipe.recordings.shots import BATCHES, BLOCK

LAGS = 9
"""Lags 0..8 between the two events of a product."""

IntArray = NDArray[np.int64]


@dataclass(frozen=True)
class DetectionSums:
    """Integer sums of one recording (or a part of it).

    Attributes
    ----------
    events, trials
        (batch, layer, check): detection events, and shots in which the event is defined.
    products
        (batch, pair, round, lag): shots in which the pair's early check has an event at `round`
        and the late one at `round + lag`; interior layers 2..R only, others stay 0.
    block_products
        Same dims: sum over complete blocks of 50 shots of the product of the two checks' counts.
    blocks
        (batch,) number of complete blocks.
    block_shots
        (batch,) shots in complete blocks.
    leaked
        (batch, round, measure) readings labelled leaked.
    closing_leaked
        (batch, data) closing readings labelled leaked.
    after_leaked
        (lag, measure, data): shots with a leaked label of the measure qubit `lag` rounds before
        the end and a leaked closing label of the data qubit, lags 0..8 (0: the last round).
    leaked_before
        (lag, measure): shots with such a leaked label.
    shots
        (batch,) shots.
    missing
        Number of missing readings, rounds and closing.
    """

    events: IntArray
    trials: IntArray
    products: IntArray
    block_products: IntArray
    blocks: IntArray
    block_shots: IntArray
    leaked: IntArray
    closing_leaked: IntArray
    after_leaked: IntArray
    leaked_before: IntArray
    shots: IntArray
    missing: IntArray


def merge(a: DetectionSums, b: DetectionSums) -> DetectionSums:
    """Add the sums of two parts of a recording."""
    return DetectionSums(
        **{one.name: getattr(a, one.name) + getattr(b, one.name) for one in fields(DetectionSums)}
    )


def count(
    events: NDArray[np.uint8],
    valid: NDArray[np.bool_],
    pairs: IntArray,
    batch: IntArray,
    first: int,
    shots_in_recording: int,
) -> tuple[IntArray, IntArray, IntArray, IntArray, IntArray, IntArray]:
    """Count events and their products.

    Parameters
    ----------
    events
        (shot, layer, check) 0 or 1; undefined layers hold 0.
    valid
        Same shape: whether the event is defined and both its readings are there.
    pairs
        (pair, 2) early and late check.
    batch
        (shot,) batch of each shot.
    first
        Index of the first shot, a multiple of BLOCK.
    shots_in_recording
        Tells whether the last block is complete.

    Returns
    -------
    events, trials, products, block_products, blocks, block_shots
        As in `DetectionSums`.
    """
    shots, layers, checks = events.shape
    event_sums = np.zeros((BATCHES, layers, checks), dtype=np.int64)
    trials = np.zeros_like(event_sums)
    interior = max(layers - 2, 0)
    products = np.zeros((BATCHES, len(pairs), interior, LAGS), dtype=np.int64)
    block_products = np.zeros_like(products)
    _count_layers(events, valid, batch, event_sums, trials)
    clean = np.where(valid, events, np.uint8(0))[:, 1 : layers - 1]
    _count_products(np.ascontiguousarray(clean), pairs, batch, products)
    complete = min(shots, shots_in_recording - first) // BLOCK
    _count_blocks(np.ascontiguousarray(clean), pairs, batch, complete, block_products)
    blocks = np.bincount(batch[: complete * BLOCK : BLOCK], minlength=BATCHES).astype(np.int64)
    return event_sums, trials, products, block_products, blocks, blocks * BLOCK


@njit(cache=True, nogil=True)
def _count_layers(events, valid, batch, event_sums, trials):  # type: ignore[no-untyped-def]
    for i in range(events.shape[0]):
        home = batch[i]
        for r in range(events.shape[1]):
            for c in range(events.shape[2]):
                if valid[i, r, c]:
                    trials[home, r, c] += 1
                    event_sums[home, r, c] += events[i, r, c]


@njit(cache=True, nogil=True)
def _count_products(events, pairs, batch, products):  # type: ignore[no-untyped-def]
    """Add products of events; `events` holds interior layers only."""
    shots, rounds, checks = events.shape
    fired = np.zeros((checks, rounds + LAGS), dtype=np.uint8)
    when = np.zeros((checks, rounds), dtype=np.int64)
    number = np.zeros(checks, dtype=np.int64)
    for i in range(shots):
        home = batch[i]
        number[:] = 0
        for r in range(rounds):
            for c in range(checks):
                hit = events[i, r, c]
                fired[c, r] = hit
                if hit:
                    when[c, number[c]] = r
                    number[c] += 1
        for p in range(pairs.shape[0]):
            early, late = pairs[p, 0], pairs[p, 1]
            if number[late] == 0:
                continue
            for k in range(number[early]):
                r = when[early, k]
                for lag in range(LAGS):
                    products[home, p, r, lag] += fired[late, r + lag]


@njit(cache=True, nogil=True)
def _count_blocks(events, pairs, batch, complete, block_products):  # type: ignore[no-untyped-def]
    rounds, checks = events.shape[1], events.shape[2]
    totals = np.zeros((checks, rounds + LAGS), dtype=np.int64)
    for b in range(complete):
        totals[:] = 0
        for i in range(b * BLOCK, (b + 1) * BLOCK):
            for r in range(rounds):
                for c in range(checks):
                    totals[c, r] += events[i, r, c]
        home = batch[b * BLOCK]
        for p in range(pairs.shape[0]):
            early, late = pairs[p, 0], pairs[p, 1]
            for r in range(rounds):
                for lag in range(LAGS):
                    block_products[home, p, r, lag] += totals[early, r] * totals[late, r + lag]


def count_numpy(
    events: NDArray[np.uint8],
    valid: NDArray[np.bool_],
    pairs: IntArray,
    batch: IntArray,
    first: int,
    shots_in_recording: int,
) -> tuple[IntArray, IntArray, IntArray, IntArray, IntArray, IntArray]:
    """Count events and their products the clear way; same arguments and results as `count`."""
    shots, layers, checks = events.shape
    event_sums = np.zeros((BATCHES, layers, checks), dtype=np.int64)
    trials = np.zeros_like(event_sums)
    np.add.at(event_sums, batch, np.where(valid, events, 0).astype(np.int64))
    np.add.at(trials, batch, valid.astype(np.int64))
    interior = max(layers - 2, 0)
    clean = np.where(valid, events, 0)[:, 1 : layers - 1].astype(np.int64)
    products = np.zeros((BATCHES, len(pairs), interior, LAGS), dtype=np.int64)
    block_products = np.zeros_like(products)
    complete = min(shots, shots_in_recording - first) // BLOCK
    totals = clean[: complete * BLOCK].reshape(complete, BLOCK, interior, checks).sum(axis=1)
    block_batch = batch[: complete * BLOCK : BLOCK]
    for p, (early, late) in enumerate(pairs):
        for lag in range(min(LAGS, interior)):
            stop = interior - lag
            here = products[:, p, :stop, lag]
            np.add.at(here, batch, clean[:, :stop, early] * clean[:, lag:, late])
            there = block_products[:, p, :stop, lag]
            np.add.at(there, block_batch, totals[:, :stop, early] * totals[:, lag:, late])
    blocks = np.bincount(block_batch, minlength=BATCHES).astype(np.int64)
    return event_sums, trials, products, block_products, blocks, blocks * BLOCK
