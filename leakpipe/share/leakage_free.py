"""The logical error without leakage, from what leakage adds to -ln(1 - 2P), and its error.

P_without(R) = [1 - (1 - 2P) exp(Lambda(R))] / 2; the same fit of the error per round to P and to
P_without over the same numbers of rounds gives the share. Errors: costs, rates, populations and
logical errors are drawn again, each within its own error, and everything behind them is repeated.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from leakpipe.logical.per_round import fit_per_round
from leakpipe.share.episodes import Episodes, hazard
from leakpipe.share.injected import Injections, Kernel, fit_kernel, injected_hazard, redrawn
from leakpipe.share.regression import Regression

FloatArray = NDArray[np.float64]

ONE_SIGMA = (15.87, 84.13)
"""Percentiles one standard deviation off the mean of a normal distribution."""
LEAST_INJECTION, LEAST_SEEPAGE = 1e-9, 1e-6
"""Draws of rates are kept above these, so that a steady level exists."""
LARGEST_MEMORY = 0.98
REDRAWN_KERNELS = 200


@dataclass(frozen=True)
class Memories:
    """Logical errors of the recordings in the fit.

    Attributes
    ----------
    rounds
        (recording,) R.
    error, spread
        (recording,) logical error and its standard error.
    """

    rounds: NDArray[np.int64]
    error: FloatArray
    spread: FloatArray


@dataclass(frozen=True)
class Leakage:
    """How much leaks, with draws of it.

    Attributes
    ----------
    injection, seepage
        (data,) G and S per round of the data qubits.
    measure_leaked
        Mean number of leaked measure qubits per round.
    injection_draw, seepage_draw
        (draw, data).
    measure_leaked_draw
        (draw,).
    """

    injection: FloatArray
    seepage: FloatArray
    measure_leaked: float
    injection_draw: FloatArray
    seepage_draw: FloatArray
    measure_leaked_draw: FloatArray

    @property
    def episodes(self) -> Episodes:
        """The fitted episodes."""
        return _episodes(self.injection, self.seepage, self.measure_leaked)

    @property
    def drawn(self) -> list[Episodes]:
        """The episodes of every draw."""
        draws = zip(self.injection_draw, self.seepage_draw, self.measure_leaked_draw, strict=True)
        return [_episodes(*one) for one in draws]


@dataclass(frozen=True)
class LeakageFree:
    """What a route says.

    Attributes
    ----------
    share, share_error
        (eps with - eps without) / eps with, and its statistical error.
    per_round, per_round_error
        eps without leakage.
    fidelity
        (recording,) 1 - 2 P_without.
    """

    share: float
    share_error: float
    per_round: float
    per_round_error: float
    fidelity: FloatArray


def by_readings(
    memories: Memories, costs: Regression, leakage: Leakage, rng: np.random.Generator
) -> LeakageFree:
    """Return what the costs of leaked readings say."""

    def extra(episodes: Episodes, c: float, full: float, memory: float) -> FloatArray:
        kappa = float((1 - np.exp(c)) / 2)
        kept = float(np.clip(memory, 0.0, LARGEST_MEMORY))
        return np.array([hazard(int(r), episodes, kappa, full, kept) for r in memories.rounds])

    drawn = leakage.drawn
    sample = _costs(costs, len(drawn), rng)
    hazards = [extra(one, *theta) for one, theta in zip(drawn, sample.tolist(), strict=True)]
    centre = extra(leakage.episodes, costs.log_measure, costs.full, costs.memory)
    return _removed(memories, centre, hazards, rng)


def by_injection(
    memories: Memories,
    costs: Regression,
    leakage: Leakage,
    runs: Injections,
    kernel: Kernel,
    rng: np.random.Generator,
) -> LeakageFree:
    """Return what the measured costs of injected leaks say; measure qubits by their readings."""

    def extra(episodes: Episodes, c: float, one: Kernel) -> FloatArray:
        kappa = float((1 - np.exp(c)) / 2)
        return np.array([injected_hazard(int(r), episodes, one, kappa) for r in memories.rounds])

    qubits = len(leakage.injection)
    ending = leakage.episodes.ending
    kernels = [fit_kernel(redrawn(runs, rng), qubits, ending) for _ in range(REDRAWN_KERNELS)]
    drawn = leakage.drawn
    sample = _costs(costs, len(drawn), rng)[:, 0]
    hazards = [
        extra(one, float(c), kernels[position % REDRAWN_KERNELS] or kernel)
        for position, (one, c) in enumerate(zip(drawn, sample, strict=True))
    ]
    centre = extra(leakage.episodes, costs.log_measure, kernel)
    return _removed(memories, centre, hazards, rng)


def _costs(costs: Regression, count: int, rng: np.random.Generator) -> FloatArray:
    mean = [costs.log_measure, costs.full, costs.memory]
    return np.asarray(rng.multivariate_normal(mean, costs.covariance, size=count, method="eigh"))


def _removed(
    memories: Memories,
    centre: FloatArray,
    hazards: list[FloatArray],
    rng: np.random.Generator,
) -> LeakageFree:
    share, fidelity, per_round = _share_of(memories, centre)
    draws = []
    for extra in hazards:
        noise = rng.normal(size=len(memories.error)) * memories.spread
        shaken = np.clip(memories.error + noise, 1e-6, 0.5)
        found = _share_of(Memories(memories.rounds, shaken, memories.spread), extra)
        draws.append((found[0], found[2]))
    table = np.array(draws)
    table = table[np.isfinite(table).all(axis=1)]
    if not len(table):
        return LeakageFree(float("nan"), float("nan"), per_round, float("nan"), fidelity)
    # Half the distance between percentiles: robust against the odd draw at a pole.
    low, high = np.percentile(table, ONE_SIGMA, axis=0)
    width = (high - low) / 2
    return LeakageFree(share, float(width[0]), per_round, float(width[1]), fidelity)


def _share_of(memories: Memories, extra: FloatArray) -> tuple[float, FloatArray, float]:
    """Return share, fidelity without leakage and eps without: the same fit on both fidelities."""
    rounds = memories.rounds.astype(float)
    fidelity, variance = 1 - 2 * memories.error, (2 * memories.spread) ** 2
    without = fidelity * np.exp(extra)
    with_fit = fit_per_round(rounds, fidelity, variance)
    without_fit = fit_per_round(rounds, without, variance * np.exp(2 * extra))
    if with_fit is None or without_fit is None:
        return float("nan"), without, float("nan")
    eps, eps_without = with_fit.error_per_round, without_fit.error_per_round
    return (eps - eps_without) / eps, without, eps_without


def _episodes(injection: FloatArray, seepage: FloatArray, measure_leaked: float) -> Episodes:
    return Episodes(
        np.maximum(injection, LEAST_INJECTION),
        np.maximum(seepage, LEAST_SEEPAGE),
        max(float(measure_leaked), 0.0),
    )
