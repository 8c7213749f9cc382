"""Sums over shots of detection events: counts, lag products, block products, leaked readings.

One pass, integers only. The 50 shots of a block are the bits of one 64-bit word, so a product of
two events costs one AND and one bit count for 50 shots, and the counts that block products are
made of come with it. `count_numpy` is the clear twin of the compiled form; a property test holds
them equal, field by field.
"""

from __future__ import annotations

from dataclasses import dataclass, fields
from typing import Any

import numpy as np
from numba import njit
from numpy.typing import NDArray

from leakpipe.recordings.shots import BATCHES, BLOCK

LAGS = 9
"""Lags 0..8 between the two events of a product."""

IntArray = NDArray[np.int64]
SmallIntArray = NDArray[np.int32]
BitArray = NDArray[np.uint8] | NDArray[np.bool_]


@dataclass(frozen=True)
class DetectionSums:
    """Integer sums of one recording (or a part of it).

    Attributes
    ----------
    events, trials
        (batch, layer, check) int64: detection events, and shots in which the event is defined and
        every reading that enters it was recorded.
    products
        (batch, pair, interior, lag) int32: shots in which the pair's early check has an event at
        interior layer 2 + i and the late one `lag` layers after; both layers interior (2..R),
        other entries stay 0. An event that is not valid counts as no event.
    block_products
        Same shape: sum over complete blocks of 50 shots of the product of the two event counts,
        so that (products - block_products / 50) / (49 blocks) is the covariance about local means.
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
        the last round and a leaked closing label of the data qubit, lags 0..8.
    leaked_before
        (lag, measure): shots with such a leaked label.
    shots
        (batch,) shots.
    missing
        Number of missing readings, rounds and closing, shape ().
    """

    events: IntArray
    trials: IntArray
    products: SmallIntArray
    block_products: SmallIntArray
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
    leaked: NDArray[np.bool_],
    closing_leaked: NDArray[np.bool_],
    pairs: IntArray,
    batch: IntArray,
    missing: int = 0,
) -> DetectionSums:
    """Count events, their products and leaked labels of some shots.

    Parameters
    ----------
    events
        (shot, layer, check) 0 or 1, layers 1..R + 1. The first shot starts a block of 50.
    valid
        Same shape: whether the event is defined and all its readings are there.
    leaked
        (shot, round, measure) labels.
    closing_leaked
        (shot, data) labels.
    pairs
        (pair, 2) early and late check.
    batch
        (shot,) batch of each shot; the shots of one block share theirs.
    missing
        Number of missing readings, carried along.
    """
    shots, layers, checks = events.shape
    sums = _nothing(leaked.shape[1], checks, closing_leaked.shape[1], len(pairs), missing)
    full, home = shots // BLOCK, batch[::BLOCK]
    sums["shots"] += np.bincount(batch, minlength=BATCHES)
    sums["blocks"] += np.bincount(home[:full], minlength=BATCHES)
    sums["block_shots"] += sums["blocks"] * BLOCK
    valid_words = _packed(valid).reshape(-1, layers, checks)
    event_words = _packed(events).reshape(-1, layers, checks) & valid_words
    leaked_words = _packed(leaked).reshape(-1, *leaked.shape[1:])
    closing_words = _packed(closing_leaked)
    for words, target in (
        (event_words, sums["events"]),
        (valid_words, sums["trials"]),
        (leaked_words, sums["leaked"]),
        (closing_words, sums["closing_leaked"]),
    ):
        _count_words(words.reshape(len(home), -1), home, target.reshape(BATCHES, -1))
    by_check = np.ascontiguousarray(event_words[:, 1 : layers - 1].transpose(0, 2, 1))
    _count_products(by_check, pairs, home, full, sums["products"], sums["block_products"])
    _count_after(leaked_words, closing_words, sums["after_leaked"], sums["leaked_before"])
    return DetectionSums(**sums)


def _nothing(rounds: int, checks: int, data: int, pairs: int, missing: int) -> dict[str, Any]:
    """Return the sums of no shots, by field."""
    interior = max(rounds - 1, 0)
    return {
        "events": np.zeros((BATCHES, rounds + 1, checks), dtype=np.int64),
        "trials": np.zeros((BATCHES, rounds + 1, checks), dtype=np.int64),
        "products": np.zeros((BATCHES, pairs, interior, LAGS), dtype=np.int32),
        "block_products": np.zeros((BATCHES, pairs, interior, LAGS), dtype=np.int32),
        "blocks": np.zeros(BATCHES, dtype=np.int64),
        "block_shots": np.zeros(BATCHES, dtype=np.int64),
        "leaked": np.zeros((BATCHES, rounds, checks), dtype=np.int64),
        "closing_leaked": np.zeros((BATCHES, data), dtype=np.int64),
        "after_leaked": np.zeros((LAGS, checks, data), dtype=np.int64),
        "leaked_before": np.zeros((LAGS, checks), dtype=np.int64),
        "shots": np.zeros(BATCHES, dtype=np.int64),
        "missing": np.array(missing, dtype=np.int64),
    }


def _packed(bits: BitArray) -> NDArray[np.uint64]:
    """Pack (shot, ...) bits into one word per block of 50 shots: (block, product of the rest)."""
    shots = len(bits)
    flat = np.ascontiguousarray(bits).view(np.uint8).reshape(shots, -1)
    words = np.zeros((-(-shots // BLOCK), flat.shape[1]), dtype=np.uint64)
    _pack(flat, words)
    return words


@njit(cache=True, nogil=True)
def _pack(flat, words):  # type: ignore[no-untyped-def]
    for i in range(flat.shape[0]):
        block, place = i // BLOCK, np.uint64(i % BLOCK)
        for k in range(flat.shape[1]):
            words[block, k] |= np.uint64(flat[i, k]) << place


@njit(cache=True, nogil=True, inline="always")
def _ones(word):  # type: ignore[no-untyped-def]
    """Number of set bits, by adding neighbouring fields of growing width."""
    word = word - ((word >> np.uint64(1)) & np.uint64(0x5555555555555555))
    word = (word & np.uint64(0x3333333333333333)) + (
        (word >> np.uint64(2)) & np.uint64(0x3333333333333333)
    )
    word = (word + (word >> np.uint64(4))) & np.uint64(0x0F0F0F0F0F0F0F0F)
    return (word * np.uint64(0x0101010101010101)) >> np.uint64(56)


@njit(cache=True, nogil=True)
def _count_words(words, home, target):  # type: ignore[no-untyped-def]
    for b in range(words.shape[0]):
        row = target[home[b]]
        for k in range(words.shape[1]):
            row[k] += np.int64(_ones(words[b, k]))


@njit(cache=True, nogil=True)
def _count_products(words, pairs, home, full, products, block_products):  # type: ignore[no-untyped-def]
    """Add the products of every pair; `words` is (block, check, interior layer)."""
    blocks, checks, rounds = words.shape
    totals = np.zeros((checks, rounds), dtype=np.int32)
    for b in range(blocks):
        for c in range(checks):
            for r in range(rounds):
                totals[c, r] = np.int32(_ones(words[b, c, r]))
        for p in range(pairs.shape[0]):
            early, late = pairs[p, 0], pairs[p, 1]
            for r in range(rounds):
                word = words[b, early, r]
                if word == 0:
                    continue
                total = totals[early, r] if b < full else np.int32(0)
                for lag in range(min(LAGS, rounds - r)):
                    both = np.int32(_ones(word & words[b, late, r + lag]))
                    products[home[b], p, r, lag] += both
                    block_products[home[b], p, r, lag] += total * totals[late, r + lag]


@njit(cache=True, nogil=True)
def _count_after(leaked, closing, after, before):  # type: ignore[no-untyped-def]
    """Add leaked closing labels after leaked labels `lag` rounds before the last round."""
    blocks, rounds, checks = leaked.shape
    for b in range(blocks):
        for lag in range(min(LAGS, rounds)):
            for m in range(checks):
                word = leaked[b, rounds - 1 - lag, m]
                if word == 0:
                    continue
                before[lag, m] += np.int64(_ones(word))
                for q in range(closing.shape[1]):
                    after[lag, m, q] += np.int64(_ones(word & closing[b, q]))


def count_numpy(
    events: NDArray[np.uint8],
    valid: NDArray[np.bool_],
    leaked: NDArray[np.bool_],
    closing_leaked: NDArray[np.bool_],
    pairs: IntArray,
    batch: IntArray,
    missing: int = 0,
) -> DetectionSums:
    """Count the clear way; same arguments and result as `count`."""
    shots, layers, checks = events.shape
    rounds = layers - 1
    sums = _nothing(rounds, checks, closing_leaked.shape[1], len(pairs), missing)
    np.add.at(sums["shots"], batch, 1)
    np.add.at(sums["events"], batch, np.where(valid, events, 0))
    np.add.at(sums["trials"], batch, valid)
    np.add.at(sums["leaked"], batch, leaked)
    np.add.at(sums["closing_leaked"], batch, closing_leaked)
    clean = np.where(valid, events, 0)[:, 1:rounds].astype(np.int32)
    interior, full = clean.shape[1], shots // BLOCK
    totals = clean[: full * BLOCK].reshape(full, BLOCK, interior, checks).sum(axis=1)
    block_batch = batch[: full * BLOCK : BLOCK]
    np.add.at(sums["blocks"], block_batch, 1)
    np.add.at(sums["block_shots"], block_batch, BLOCK)
    for p, (early, late) in enumerate(pairs):
        for lag in range(min(LAGS, interior)):
            stop = interior - lag
            here = sums["products"][:, p, :stop, lag]
            np.add.at(here, batch, clean[:, :stop, early] * clean[:, lag:, late])
            there = sums["block_products"][:, p, :stop, lag]
            np.add.at(there, block_batch, totals[:, :stop, early] * totals[:, lag:, late])
    for lag in range(min(LAGS, rounds)):
        then = leaked[:, rounds - 1 - lag].astype(np.int64)
        sums["after_leaked"][lag] = then.T @ closing_leaked.astype(np.int64)
        sums["leaked_before"][lag] = then.sum(axis=0)
    return DetectionSums(**sums)
