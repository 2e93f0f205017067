"""The tree of branch-and-bound: its nodes, which of them are open, and the certificate they make."""

from __future__ import annotations

import heapq
import math
from collections.abc import Iterator
from dataclasses import dataclass, field
from fractions import Fraction
from typing import Any

import numpy as np
import numpy.typing as npt

from patchwalk.bounds.certificate import Certificate
from patchwalk.bounds.cut_graph import CutGraph
from patchwalk.bounds.cuts import Cuts
from patchwalk.bounds.cycle_certificate import BOUNDED, BRANCHED, EMPTY, SETTLED, dual_value, settled_energy
from patchwalk.bounds.cycles import Multipliers
from patchwalk.bounds.energy_step import energy_levels, lower_energy, rounded_up
from patchwalk.problem.ising import Problem
from patchwalk.subsolvers.contract import F64, I8

Basis = tuple[list[Any], list[Any]]


@dataclass(eq=False)
class Node:
    """A part of all configurations: those in which the pairs split above it agree or differ as it says.

    ``bound`` is a true lower bound on their energies, rounded up where energies move in steps, and what ``multipliers``
    prove; ``outcome`` is one of the certificate's, ``BOUNDED`` while the node is open.
    """

    number: int
    parent: int
    edge: int
    side: int
    depth: int
    bound: float
    multipliers: Multipliers
    outcome: int = BOUNDED
    basis: Basis | None = None
    epoch: int = 0


@dataclass(eq=False)
class Tree:
    """All nodes in the order in which they came to be, and those still open, the lowest bound first."""

    problem: Problem
    graph: CutGraph
    nodes: list[Node] = field(default_factory=list)
    levels: tuple[Fraction, Fraction] = (Fraction(0), Fraction(0))
    _open: list[tuple[float, int]] = field(default_factory=list)

    def __post_init__(self) -> None:
        self.levels = energy_levels(self.problem)

    @classmethod
    def taken_up(cls, problem: Problem, graph: CutGraph, certificate: Certificate) -> Tree:
        """The tree behind a certificate of cycles, to go on with; its cuts are then the pool, in the same order.

        Raises ``ValueError`` for a certificate of another kind or of another problem.
        """
        given = certificate.arrays
        pairs = np.stack([graph.heads, graph.tails], axis=1)
        if certificate.method != "cycles" or certificate.fingerprint != problem.fingerprint:
            raise ValueError("only a tree of odd-cycle cuts on the same problem can be taken up again")
        if not np.array_equal(given["pairs"], pairs):
            raise ValueError("the certificate numbers its edges in another order")
        tree = cls(problem, graph)
        for number, parent in enumerate(given["parents"].tolist()):
            own = slice(*given["dual_starts"][number : number + 2])
            multipliers = Multipliers(given["dual_cuts"][own].astype(np.int32), given["duals"][own].copy())
            above = None if parent < 0 else tree.nodes[parent]
            edge, side = int(given["split_edges"][number]), int(given["split_sides"][number])
            node = tree.add(above, edge, side, tree.rounded_up(float(given["node_bounds"][number])), multipliers)
            node.outcome = int(given["outcomes"][number])
            if node.outcome == EMPTY:
                node.bound = math.inf
            elif node.outcome == BOUNDED:
                tree.open(node)
        return tree

    def rounded_up(self, bound: float) -> float:
        """A true bound rounded up to the next reachable energy."""
        return rounded_up(self.problem, bound, self.levels)

    def add(self, parent: Node | None, edge: int, side: int, bound: float, multipliers: Multipliers) -> Node:
        """A new open node."""
        number, depth = len(self.nodes), 0 if parent is None else parent.depth + 1
        node = Node(number, -1 if parent is None else parent.number, edge, side, depth, bound, multipliers)
        self.nodes.append(node)
        return node

    def open(self, node: Node) -> None:
        """Put a node among those to be worked on."""
        heapq.heappush(self._open, (node.bound, node.number))

    def next(self) -> Node:
        """The open node with the lowest bound, the oldest among equals; it is not among the open ones any longer."""
        return self.nodes[heapq.heappop(self._open)[1]]

    @property
    def open_count(self) -> int:
        """How many nodes wait."""
        return len(self._open)

    @property
    def lowest_open(self) -> float:
        """The lowest bound of all that wait, plus infinity where none does."""
        return self._open[0][0] if self._open else math.inf

    def box(self, node: Node) -> tuple[F64, F64]:
        """Bounds of the program's variables within a node."""
        count = len(self.graph.heads)
        lower, upper = np.zeros(count), np.ones(count)
        for step in self._above(node):
            lower[step.edge] = upper[step.edge] = float(step.side)
        return lower, upper

    def _above(self, node: Node) -> Iterator[Node]:
        while node.parent >= 0:
            yield node
            node = self.nodes[node.parent]

    def certificate(self, pool: Cuts, best: I8) -> Certificate:
        """What proves the bound it states: the lowest of all leaves, or the energy of ``best`` if that is lower."""
        leaves = [node for node in self.nodes if node.outcome != BRANCHED]
        used = np.unique(np.concatenate([node.multipliers.cuts for node in leaves]).astype(np.int64))
        place = np.full(len(pool) + 1, -1, np.int64)
        place[used] = np.arange(len(used))
        cuts = pool.chosen(used)
        pairs = np.stack([self.graph.heads, self.graph.tails], axis=1)
        node_bounds, starts = np.zeros(len(self.nodes)), np.zeros(len(self.nodes) + 1, np.int64)
        own_cuts, own_values = [np.empty(0, np.int32)], [np.empty(0)]
        stated, values = lower_energy(self.problem, best), {}
        for node in self.nodes:
            starts[node.number + 1] = starts[node.number]
            if node.outcome == BRANCHED:
                continue
            starts[node.number + 1] += len(node.multipliers.cuts)
            own_cuts.append(place[node.multipliers.cuts].astype(np.int32))
            own_values.append(node.multipliers.values)
            duals = np.zeros(len(cuts))
            duals[own_cuts[-1]] = own_values[-1]
            empty = node.outcome == EMPTY
            costs = np.zeros(len(pairs)) if empty else self.graph.costs
            constant = 0.0 if empty else self.graph.constant
            box = self.box(node)
            value = dual_value(costs, constant, cuts.offsets, cuts.edges, cuts.odd, duals, *box)
            node_bounds[node.number] = value.bound
            if node.outcome == BOUNDED:
                stated = min(stated, self.rounded_up(value.bound))
            elif node.outcome == SETTLED:
                values[node.number] = value, box
        for value, box in values.values():
            reached = settled_energy(self.problem, pairs, value, *box, stated)
            stated = min(stated, max(reached, self.rounded_up(value.bound)))
        arrays: dict[str, npt.NDArray[Any]] = {
            "pairs": pairs.astype(np.int32),
            "cut_starts": cuts.offsets,
            "cut_edges": cuts.edges,
            "cut_odd": cuts.odd,
            "parents": np.array([node.parent for node in self.nodes], np.int64),
            "split_edges": np.array([node.edge for node in self.nodes], np.int32),
            "split_sides": np.array([node.side for node in self.nodes], np.int8),
            "outcomes": np.array([node.outcome for node in self.nodes], np.int8),
            "node_bounds": node_bounds,
            "dual_starts": starts,
            "dual_cuts": np.concatenate(own_cuts),
            "duals": np.concatenate(own_values),
        }
        return Certificate(self.problem.fingerprint, "cycles", stated, arrays)
