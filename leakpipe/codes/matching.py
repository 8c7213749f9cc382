"""A matching decoder for any layout: fault enumeration, matching graph, predicted logical flips.

Every single fault of one round of the circuit is propagated to the checks it flips; faults that
flip the same checks and the same logical value become one edge (Dennis, Kitaev, Landahl and
Preskill, J. Math. Phys. 43, 4452 (2002), for the graph in space and time). Only flips that checks
of the memory's basis see matter: within a check of that basis a flip goes from data to measure
qubit, within a check of the other basis from measure to data qubit (hook errors).
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from functools import cached_property
from typing import Any

import numpy as np
from numpy.typing import NDArray

from leakpipe.codes.layout import Basis, Layout

Node = tuple[int, int]
"""(layers after the fault's round, check)."""


@dataclass(frozen=True)
class FaultRates:
    """Fault probabilities that set the edge weights.

    The defaults are the trade's usual levels (common practice, no source); a decoder depends on
    their ratios only weakly.
    """

    two_qubit: float = 6e-3
    data_idle: float = 2e-3
    measurement: float = 2e-2


@dataclass(frozen=True)
class Edge:
    """Faults that flip the same one or two checks and agree about the logical value."""

    nodes: tuple[Node, ...]
    logical: bool
    probability: float


def edges_of_round(layout: Layout, basis: Basis, rates: FaultRates) -> tuple[Edge, ...]:
    """Return the edges that the faults of one round make.

    Parameters
    ----------
    layout, basis
        Code and basis of the memory.
    rates
        Fault probabilities.
    """
    total: dict[tuple[tuple[Node, ...], bool], float] = {}
    for nodes, logical, probability in _faults(layout, basis, rates):
        if 1 <= len(nodes) <= 2:
            key = (nodes, logical)
            old = total.get(key, 0.0)
            total[key] = old + probability - 2 * old * probability
    return tuple(Edge(nodes, logical, p) for (nodes, logical), p in sorted(total.items()))


def _faults(
    layout: Layout, basis: Basis, rates: FaultRates
) -> Iterator[tuple[tuple[Node, ...], bool, float]]:
    """Yield flipped checks, logical flip and probability of every fault of one round."""
    gates = _gates(layout, basis)
    support = set(layout.logical[basis])
    own = layout.of_basis(basis)

    def outcome(position: int, data: set[int], checks: set[int]) -> tuple[tuple[Node, ...], bool]:
        """Propagate flips present after gate `position - 1` to the end of the next round."""
        now, read = set(data), set(checks)
        for kind, check, qubit in gates[position:]:
            _propagate(kind, check, qubit, now, read)
        first = {check for check in read if own[check]}
        later: set[int] = set()
        still = set(now)
        for kind, check, qubit in gates:
            _propagate(kind, check, qubit, still, later)
        second = {check for check in later if own[check]}
        # A check's value differs from the round before in the first layer, from the first layer
        # in the second: detection events are the changes.
        nodes = [(0, check) for check in first] + [(1, check) for check in first ^ second]
        return tuple(sorted(nodes)), len(now & support) % 2 == 1

    for qubit in range(len(layout.data)):
        # Two thirds of a depolarising error flip a given basis.
        yield *outcome(0, {qubit}, set()), 2 / 3 * rates.data_idle
    for position, (_, check, qubit) in enumerate(gates, start=1):
        # Of the fifteen two-qubit Paulis four flip the first qubit only, four the second, four
        # both.
        for data, checks in (({qubit}, set()), (set(), {check}), ({qubit}, {check})):
            yield *outcome(position, data, checks), 4 / 15 * rates.two_qubit
    for check in np.flatnonzero(own).tolist():
        yield ((0, check), (1, check)), False, rates.measurement


def _gates(layout: Layout, basis: Basis) -> list[tuple[bool, int, int]]:
    """Return (is of the basis, check, data qubit) in time order."""
    timed = [
        (slot, check, qubit)
        for check in range(len(layout.measure))
        for slot, qubit in zip(layout.slots[check], layout.touches[check], strict=True)
    ]
    return [(layout.checks[check] == basis, check, qubit) for _, check, qubit in sorted(timed)]


def _propagate(own: bool, check: int, qubit: int, data: set[int], checks: set[int]) -> None:
    if own and qubit in data:
        checks ^= {check}
    elif not own and check in checks:
        data ^= {qubit}


@dataclass(frozen=True)
class MatchingDecoder:
    """Decodes memories of one layout, basis and number of rounds."""

    layout: Layout
    basis: Basis
    rounds: int
    rates: FaultRates = FaultRates()

    @cached_property
    def _own(self) -> NDArray[np.int64]:
        return np.flatnonzero(self.layout.of_basis(self.basis))

    @cached_property
    def _matching(self) -> Any:
        from pymatching import Matching

        own = self._own
        place = {int(check): index for index, check in enumerate(own)}
        layers, width = self.rounds + 1, len(own)
        matching = Matching()
        edges = edges_of_round(self.layout, self.basis, self.rates)
        for layer in range(layers):
            for edge in edges:
                nodes = [(layer + after) * width + place[check] for after, check in edge.nodes]
                reach = layer + max(after for after, _ in edge.nodes)
                if reach >= layers:
                    continue
                weight = float(np.log((1 - edge.probability) / edge.probability))
                faults = {0} if edge.logical else set()
                if len(nodes) == 1:
                    matching.add_boundary_edge(
                        nodes[0], fault_ids=faults, weight=weight, merge_strategy="smallest-weight"
                    )
                else:
                    matching.add_edge(
                        *nodes, fault_ids=faults, weight=weight, merge_strategy="smallest-weight"
                    )
        return matching

    def decode(self, events: NDArray[np.uint8]) -> NDArray[np.uint8]:
        """Return the predicted flip of the logical value of each shot.

        Parameters
        ----------
        events
            (shot, round + 1, check) detection events of all checks.
        """
        syndromes = events[:, :, self._own].reshape(len(events), -1)
        matching = self._matching
        predicted = matching.decode_batch(np.ascontiguousarray(syndromes))
        return np.asarray(
            predicted[:, 0] if predicted.shape[1] else np.zeros(len(events)), np.uint8
        )


def matching_decoder(
    layout: Layout, basis: Basis, rounds: int, rates: FaultRates | None = None
) -> MatchingDecoder:
    """Return the decoder of a memory, at the trade's usual fault rates by default."""
    return MatchingDecoder(layout, basis, rounds, rates or FaultRates())
