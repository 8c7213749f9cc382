"""The phenomenological memory of the studies against closed forms, counted by detection sums."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from scipy.stats import chi2

from leakpipe.recordings.shots import BLOCK
from studies.phenomenological import (
    Truth,
    expected_detection,
    reduced,
    simulate,
    usual,
    without_leakage,
)

SHOTS = 60_000
CHANCE = 1e-4
"""Chance of each comparison to fail on its own."""


def hot(observation: str = "detector random") -> Truth:
    truth = usual(3, 12, level=0.04, tau=4.0)
    return replace(truth, observation=observation, flip=0.4)


@pytest.mark.parametrize("observation", ["detector random", "outcome random"])
def test_detection_probability_is_exact(observation: str) -> None:
    """Simulated detection probabilities have the closed form, for both ways leakage is seen.

    Chi-square per check over interior layers; layers of one shot are correlated, so a scatter of
    the batches' sums replaces binomial errors: mean over layers, Student-like z below 4.5.
    """
    truth = hot(observation)
    _, sums = reduced(truth, SHOTS, np.random.default_rng(1))
    expected = expected_detection(truth)
    events, trials = sums.events[:, 1 : truth.rounds], sums.trials[:, 1 : truth.rounds]
    z = (events.sum(axis=0) / SHOTS - expected) / np.sqrt(expected * (1 - expected) / SHOTS)
    assert np.abs(z).max() < 5
    batch = (events / trials - expected).mean(axis=(1, 2))
    assert abs(batch.mean()) < 4.5 * batch.std(ddof=1) / np.sqrt(len(batch))


def test_leaked_populations_follow_the_recurrence() -> None:
    """Leaked readings per round and the closing ones have the recurrence's populations.

    Shots are independent: chi-square over qubits in each of a few rounds.
    """
    truth = replace(hot(), start=np.linspace(0, 0.1, 17))
    drawn = simulate(truth, SHOTS, np.random.default_rng(2))
    data = len(truth.layout.data)
    for found, wanted in (
        (drawn.leaked[:, 0].mean(axis=0), truth.populations[1, data:]),
        (drawn.leaked[:, 5].mean(axis=0), truth.populations[6, data:]),
        (drawn.closing.mean(axis=0), truth.populations[-1, :data]),
    ):
        square = np.sum((found - wanted) ** 2 / (wanted * (1 - wanted) / SHOTS))
        assert square < chi2.ppf(1 - CHANCE, len(wanted))


@pytest.mark.parametrize("leaky", [True, False])
def test_lag_covariance_has_the_closed_form(leaky: bool) -> None:
    """Covariances two and more rounds apart follow the leakage law; without leakage they vanish.

    C(r, r+k) = (P_r P_s / 4) [prod_q (1 + 4 v^2 p_r (1-p_r) lam^k / (w_r w_s)) - 1] over the shared
    qubits, here of each check with itself and of one pair. Mean over early rounds at each lag, 4.5
    standard errors from the batches' scatter; with leakage it must also be seen at lag 2.
    """
    truth = hot() if leaky else without_leakage(hot())
    _, sums = reduced(truth, 3 * SHOTS, np.random.default_rng(3))
    covariance = (sums.products - sums.block_products / BLOCK) / (
        (BLOCK - 1) * sums.blocks[:, None, None, None]
    )
    layout, data = truth.layout, len(truth.layout.data)
    expected = expected_detection(truth)
    memory = 1 - truth.injection - truth.seepage
    pairs = list(layout.sharing_pairs)
    diagonal = next((a, b) for a, b in pairs if a != b and layout.checks[a] == layout.checks[b])
    compared = [(c, c) for c in range(len(layout.measure))] + [diagonal]
    seen = 0.0
    for lag in range(2, 7):
        off = np.zeros((len(sums.blocks), len(compared)))
        for column, (early, late) in enumerate(compared):
            qubits = sorted(set(layout.touches[early]) & set(layout.touches[late]))
            qubits += [data + early] if early == late else []
            r = np.arange(truth.rounds - 1 - lag)
            p, q = (truth.populations[2 + r + k][:, qubits] for k in (0, lag))
            clear = (1 - 2 * truth.flip * p) * (1 - 2 * truth.flip * q)
            gain = 4 * truth.flip**2 * p * (1 - p) * memory[qubits] ** lag / clear
            signs = (1 - 2 * expected[r, early]) * (1 - 2 * expected[r + lag, late])
            law = signs / 4 * ((1 + gain).prod(axis=1) - 1)
            found = covariance[:, pairs.index((early, late)), : len(r), lag]
            off[:, column] = (found - law).mean(axis=1)
            if lag == 2:
                one = found.mean(axis=1)
                seen = max(seen, one.mean() / (one.std(ddof=1) / np.sqrt(len(one))))
        z = off.mean(axis=0) / (off.std(axis=0, ddof=1) / np.sqrt(len(off)))
        assert np.abs(z).max() < 4.5, lag
    assert (seen > 10) == leaky
