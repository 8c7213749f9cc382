"""From the cost of a leaked reading to the hazard that leakage adds over a memory.

A leak episode of a data qubit is first seen at the end of the round it begins in (age 1), ends with
probability g at the start of every further round, and costs kappa(L) if it reached age L (the
closing readout sees those still open). The hazard
that leakage adds to ln(1 - 2P) after R rounds is Lambda(R). Assumes rare independent episodes with
geometric lifetimes that stay on their qubit; an episode that ended by seepage costs what one costs
that is open at the end. (Derived for leakpipe; tested against counterfactual simulation in
studies/share.py.)
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]


@dataclass(frozen=True)
class Episodes:
    """Leak episodes of the data qubits.

    Attributes
    ----------
    injection, seepage
        (data,) G and S per round.
    measure_leaked
        Mean number of leaked measure qubits per round.
    """

    injection: FloatArray
    seepage: FloatArray
    measure_leaked: float

    @property
    def ending(self) -> float:
        """Probability per round that an episode ends, g = (G + S)(1 - p_ss), mean over episodes."""
        total = self.injection + self.seepage
        steady = self.injection / total
        each = total * (1 - steady)
        weight = np.maximum(steady, 1e-300)
        return float(np.clip((each * weight).sum() / weight.sum(), 1e-3, 1 - 1e-6))

    @property
    def starts_of_each(self) -> FloatArray:
        """Episodes that start per round on each data qubit: G times the unleaked population.

        G is the population that a round leaves leaked, so an episode that ends in the round it
        began in is not counted; counting those too (an earlier form did) gave 15 to 20 % too much.
        """
        steady = self.injection / (self.injection + self.seepage)
        return np.asarray(self.injection * (1 - steady))

    @property
    def starts(self) -> float:
        """Episodes that start per round over all data qubits."""
        return float(self.starts_of_each.sum())


def cost(age: FloatArray, full: float, memory: float) -> FloatArray:
    """Return kappa(L) = kappa_inf (1 - rho^L)."""
    return np.asarray(full * (1 - memory**age))


def closing_cost(rounds: int, ending: float, full: float, memory: float) -> float:
    """Return the mean cost of an episode that is open at the end of R rounds, kappa_F(R)."""
    age = np.arange(1, rounds + 1, dtype=float)
    weight = (1 - ending) ** age
    return float(np.sum(weight * cost(age, full, memory)) / weight.sum())


def growth(ages: int, ending: float, memory: float) -> FloatArray:
    """Return what leaks that began 1 .. `ages` rounds before the end cost, over kappa_inf, (ages,).

    Mean over how long they lasted: (1 - g)^(m-1) (1 - rho^m) + sum_{L<m} g (1 - g)^(L-1)
    (1 - rho^L).

    Parameters
    ----------
    ages
        Largest age m.
    ending, memory
        g and rho.
    """
    age = np.arange(1, ages + 1, dtype=float)
    still_open = (1 - ending) ** (age - 1) * cost(age, 1.0, memory)
    # A leak of greatest possible age m has ended by then at an age below m.
    ended = np.cumsum(ending * still_open) - ending * still_open
    return np.asarray(still_open + ended)


def hazard(
    rounds: int, episodes: Episodes, measure_cost: float, full: float, memory: float
) -> float:
    """Return Lambda(R), what leakage adds to -ln(1 - 2P).

    Parameters
    ----------
    rounds
        R.
    episodes
        Rates of the data qubits and population of the measure qubits.
    measure_cost
        kappa_A, cost of one leaked measure-qubit round.
    full, memory
        kappa_inf and rho of the cost of a data episode.
    """
    data = 2 * episodes.starts * full * float(growth(rounds, episodes.ending, memory).sum())
    return 2 * measure_cost * episodes.measure_leaked * rounds + data
