"""What a leak costs, measured: memories in which a data qubit was put into |2> on purpose.

A data qubit k that leaks m rounds before the end multiplies the logical fidelity by
1 - 2 kappa_k(m), so kappa_k(m) = [1 - (1 - 2 P_injected) / (1 - 2 P_reference)] / 2, with the
reference a memory of as many rounds without the leak. The leak may end on the way; kappa_k(m) is
what it costs on average. Ages that were not measured follow the law of `episodes`: a leak that
reached age L costs full_k (1 - rho^L), with one rho for all qubits.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from leakpipe.share.episodes import Episodes, growth

FloatArray = NDArray[np.float64]

MEMORIES = np.linspace(0.0, 0.98, 50)
"""Values of rho that are tried; beyond the last one costs rise along a straight line for as long as
memories last."""
LEAST_AGES = 2
"""Different ages per qubit that tell the full cost from its growth, pooled over qubits."""


@dataclass(frozen=True)
class Injections:
    """Memories with an injected leak, and the memories they are compared with.

    Attributes
    ----------
    qubit, age, reference
        (run,) index of the data qubit, rounds from the leak to the end, index of the reference.
    error, spread
        (run,) logical error P_injected, corrected for nothing, and its standard error.
    probability
        (run,) probability that the injection succeeds.
    reference_error, reference_spread
        (reference,) P_reference and its standard error.
    """

    qubit: NDArray[np.int64]
    age: NDArray[np.int64]
    reference: NDArray[np.int64]
    error: FloatArray
    spread: FloatArray
    probability: FloatArray
    reference_error: FloatArray
    reference_spread: FloatArray


@dataclass(frozen=True)
class Kernel:
    """Fitted costs.

    Attributes
    ----------
    full
        (data,) cost of a leak that lasts for ever.
    memory
        rho, common to all qubits.
    chi_square, freedom
        Goodness of fit.
    """

    full: FloatArray
    memory: float
    chi_square: float
    freedom: int


def costs(runs: Injections) -> tuple[FloatArray, FloatArray]:
    """Return kappa of each run and its standard error, both (run,).

    Where an injection fails the run is like its reference:
    1 - 2 P_injected = q (1 - 2 P_leaked) + (1 - q) (1 - 2 P_reference).
    """
    reference = 1 - 2 * runs.reference_error[runs.reference]
    ratio = (1 - 2 * runs.error) / reference
    leaked = (ratio - 1 + runs.probability) / runs.probability
    by_run = runs.spread / (reference * runs.probability)
    by_reference = ratio * runs.reference_spread[runs.reference] / (reference * runs.probability)
    return (1 - leaked) / 2, np.hypot(by_run, by_reference)


def fit_kernel(runs: Injections, qubits: int, ending: float) -> Kernel | None:
    """Fit the full cost of every qubit and their common growth by weighted least squares.

    Parameters
    ----------
    runs
        Injected memories; their spreads weigh them.
    qubits
        Number of data qubits.
    ending
        g.

    Returns
    -------
    kernel
        None where a data qubit has no run, or all runs have the same age.
    """
    if len(np.unique(runs.qubit)) < qubits or len(np.unique(runs.age)) < LEAST_AGES:
        return None
    value, error = costs(runs)
    weight = error**-2.0
    best: Kernel | None = None
    for memory in MEMORIES:
        shape = growth(int(runs.age.max()), ending, float(memory))[runs.age - 1]
        top = np.bincount(runs.qubit, weight * shape * value, minlength=qubits)
        full = top / np.bincount(runs.qubit, weight * shape**2, minlength=qubits)
        misfit = float(np.sum(weight * (value - full[runs.qubit] * shape) ** 2))
        if best is None or misfit < best.chi_square:
            best = Kernel(full, float(memory), misfit, len(value) - qubits - 1)
    return best


def redrawn(runs: Injections, rng: np.random.Generator) -> Injections:
    """Return the same runs with every logical error drawn anew within its standard error.

    Runs that share a reference share its deviation.
    """
    return Injections(
        runs.qubit,
        runs.age,
        runs.reference,
        runs.error + runs.spread * rng.normal(size=len(runs.error)),
        runs.spread,
        runs.probability,
        runs.reference_error + runs.reference_spread * rng.normal(size=len(runs.reference_error)),
        runs.reference_spread,
    )


def injected_hazard(rounds: int, episodes: Episodes, kernel: Kernel, measure_cost: float) -> float:
    """Return Lambda(R), what leakage adds to -ln(1 - 2P), with measured costs.

    Parameters
    ----------
    rounds
        R.
    episodes
        Rates of the data qubits and population of the measure qubits.
    kernel
        Costs of the data qubits.
    measure_cost
        kappa_A.
    """
    total = float(growth(rounds, episodes.ending, kernel.memory).sum())
    data = 2 * float(episodes.starts_of_each @ kernel.full) * total
    return 2 * measure_cost * episodes.measure_leaked * rounds + data


def by_age(runs: Injections, kernel: Kernel | None, ending: float) -> FloatArray:
    """Return mean cost, its standard error and the fitted mean for every measured age.

    Returns
    -------
    table
        (age, 4): age, inverse-variance mean over qubits, its standard error, kernel (NaN without).
    """
    value, error = costs(runs)
    rows = []
    for age in np.unique(runs.age):
        here = runs.age == age
        weight = error[here] ** -2.0
        fitted = np.nan
        if kernel is not None:
            shape = growth(int(age), ending, kernel.memory)[-1]
            fitted = float(np.sum(weight * kernel.full[runs.qubit[here]]) / weight.sum() * shape)
        mean = float(np.sum(weight * value[here]) / weight.sum())
        rows.append([float(age), mean, float(weight.sum() ** -0.5), fitted])
    return np.array(rows).reshape(-1, 4)
