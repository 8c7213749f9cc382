"""Sums of detection events: kernel against twin, chunks against the whole, counts by hand."""

from __future__ import annotations

from dataclasses import fields
from itertools import pairwise

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as some

from leakpipe.detection.sums import LAGS, DetectionSums, count, count_numpy, merge
from leakpipe.recordings.shots import BATCHES, BLOCK

MANY = settings(max_examples=40, deadline=None)


def assert_equal(a: DetectionSums, b: DetectionSums) -> None:
    for one in fields(DetectionSums):
        left, right = getattr(a, one.name), getattr(b, one.name)
        assert left.dtype == right.dtype, one.name
        np.testing.assert_array_equal(left, right, err_msg=one.name)


def random_inputs(seed: int, shots: int, rounds: int, checks: int, data: int, rate: float):
    rng = np.random.default_rng(seed)
    events = (rng.random((shots, rounds + 1, checks)) < rate).astype(np.uint8)
    valid = rng.random(events.shape) < 0.9
    leaked = rng.random((shots, rounds, checks)) < rate
    closing = rng.random((shots, data)) < rate
    pairs = np.array([(a, b) for a in range(checks) for b in range(checks)], dtype=np.int64)
    blocks = max(shots // BLOCK, 1)
    block = np.minimum(np.arange(shots) // BLOCK, blocks - 1)
    return events, valid, leaked, closing, pairs, block * BATCHES // blocks


@MANY
@given(
    seed=some.integers(0, 2**31),
    shots=some.integers(1, 230),
    rounds=some.integers(1, 14),
    checks=some.integers(1, 4),
    rate=some.floats(0, 1),
)
def test_kernel_equals_twin(seed: int, shots: int, rounds: int, checks: int, rate: float) -> None:
    """The packed kernel and its numpy twin agree in every field, for any shape and event rate."""
    inputs = random_inputs(seed, shots, rounds, checks, checks + 1, rate)
    assert_equal(count(*inputs, 7), count_numpy(*inputs, 7))


@MANY
@given(
    seed=some.integers(0, 2**31),
    shots=some.integers(1, 400),
    cuts=some.lists(some.integers(1, 8), max_size=3, unique=True),
)
def test_chunks_equal_the_whole(seed: int, shots: int, cuts: list[int]) -> None:
    """Any cutting at multiples of a block, merged in any grouping, gives the whole to the bit."""
    *arrays, pairs, batch = random_inputs(seed, shots, 6, 3, 4, 0.2)
    edges = [0, *sorted(cut * BLOCK for cut in cuts if cut * BLOCK < shots), shots]
    parts = [
        count(*(array[a:b] for array in arrays), pairs, batch[a:b], b - a)
        for a, b in pairwise(edges)
    ]
    left = parts[0]
    for part in parts[1:]:
        left = merge(left, part)
    right = parts[-1]
    for part in parts[-2::-1]:
        right = merge(part, right)
    whole = count(*arrays, pairs, batch, shots)
    assert_equal(left, whole)
    assert_equal(right, whole)


def test_counts_by_hand() -> None:
    """Two events two rounds apart in one shot give one product at their round and lag."""
    events = np.zeros((60, 6, 2), dtype=np.uint8)
    events[3, 1, 0] = events[3, 3, 1] = 1
    events[4, 0, 0] = events[4, 5, 1] = 1  # boundary layers never enter products
    quiet = np.zeros((60, 5, 2), dtype=bool)
    closing = np.zeros((60, 3), dtype=bool)
    quiet[7, 3, 1] = closing[7, 2] = True
    pairs = np.array([[0, 1], [1, 0]])
    sums = count(
        events, np.ones_like(events, bool), quiet, closing, pairs, np.zeros(60, dtype=np.int64)
    )
    expected = np.zeros((BATCHES, 2, 4, LAGS), dtype=np.int32)
    expected[0, 0, 0, 2] = 1
    np.testing.assert_array_equal(sums.products, expected)
    np.testing.assert_array_equal(sums.block_products, expected)
    assert sums.blocks.tolist() == [1] + [0] * (BATCHES - 1)
    assert sums.block_shots[0] == BLOCK
    assert sums.shots[0] == 60
    assert sums.events.sum() == 4
    after = np.zeros((LAGS, 2, 3), dtype=np.int64)
    after[1, 1, 2] = 1
    np.testing.assert_array_equal(sums.after_leaked, after)
    assert sums.leaked_before[1, 1] == 1


@pytest.mark.parametrize("drift", [0.0, 0.25])
def test_local_mean_covariance_is_free_of_drift(drift: float) -> None:
    """Covariances about local means are unbiased under a drift that ruins those about one mean.

    Tolerance: 4.5 standard errors from the scatter of the batches' own covariances; with drift,
    the plain covariance must be off by more than that (the test's own negative control).
    """
    rng = np.random.default_rng(5)
    shots, rounds, common = 100_000, 5, 0.02
    level = 0.1 + drift * np.sin(np.linspace(0, 9, shots))[:, None] ** 2
    fired = rng.random((shots, rounds + 1)) < level
    burst = rng.random(shots) < common
    fired[:, 1] |= burst
    fired[:, 3] |= burst
    events = fired[:, :, None].astype(np.uint8)
    pairs = np.array([[0, 0]])
    batch = np.arange(shots) * BATCHES // shots
    leaked, closing = np.zeros((shots, rounds, 1), bool), np.zeros((shots, 1), bool)
    sums = count(events, np.ones_like(events, bool), leaked, closing, pairs, batch)
    products = sums.products[:, 0, 0, 2].astype(float)
    local = (products - sums.block_products[:, 0, 0, 2] / BLOCK) / ((BLOCK - 1) * sums.blocks)
    error = local.std(ddof=1) / np.sqrt(BATCHES)
    # Both layers fire if the burst came or each fired alone: q (1-q) (1-d)^2 averaged over drift.
    truth = common * (1 - common) * np.mean((1 - level) ** 2)
    assert abs(local.mean() - truth) < 4.5 * error
    plain = products.sum() / shots - events[:, 1].mean() * events[:, 3].mean()
    assert (abs(plain - truth) > 4.5 * error) == (drift > 0)
