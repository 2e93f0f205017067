"""Proofs for dense problems: a tree whose nodes tie two groups of spins together, same or opposite.

Every node has the semidefinite bound with odd cuts (:mod:`patchwalk.bounds.tightening`) and starts from its parent's
multipliers: with y_b = s y_a, u_b is added to u_a and a cut stays a cut. The node of lowest bound is split first.
Configurations come from hyperplanes through the vectors of X, brought down by single flips.
"""

from __future__ import annotations

import heapq
import math
from collections.abc import Callable
from dataclasses import dataclass
from time import perf_counter
from typing import Any, NamedTuple

import numpy as np
import numpy.typing as npt

from patchwalk.bounds.dense import semidefinite_bound
from patchwalk.bounds.dense_certificate import pack_tree
from patchwalk.bounds.energy_step import energy_levels, rounded_up
from patchwalk.bounds.lowrank import round_rows
from patchwalk.bounds.merging import tied
from patchwalk.bounds.spectral import (
    F64,
    I8,
    I32,
    SquareCertificate,
    grouped_matrix,
    settled,
    trivial_groups,
    vertex_count,
)
from patchwalk.bounds.tightening import MOST_GROUPS, SMOOTHEST, Dual, bare, tied_dual, tighten
from patchwalk.problem.ising import Problem
from patchwalk.subsolvers.draws import stream_for

ROUNDING_STREAM = 0x7EE
ROOT_TRIALS, NODE_TRIALS = 300, 10
WARM = 2e-3
"""Smoothing that a child starts with at least, in units of the mean |u|."""


class Progress(NamedTuple):
    """After a split: nodes bounded so far, the lower bound, the best energy, nodes still open."""

    nodes: int
    lower_bound: float
    energy: float
    open_nodes: int


@dataclass(frozen=True, eq=False)
class DenseProof:
    """What the tree proved: no configuration lies below ``lower_bound``; ``spins`` i8 (n,) have ``energy``.

    ``proved_optimal`` where both meet, exactly for whole numbers and within the problem's tie tolerance otherwise.
    ``nodes`` were bounded with ``evaluations`` of the dual; ``log`` has a line for every split.
    ``arrays`` are the certificate (:mod:`patchwalk.bounds.dense_certificate`).
    """

    lower_bound: float
    energy: float
    spins: I8
    proved_optimal: bool
    nodes: int
    evaluations: int
    log: tuple[Progress, ...]
    arrays: dict[str, npt.NDArray[Any]]


def branch_dense(
    problem: Problem,
    start: npt.ArrayLike | None = None,
    *,
    seconds: float = math.inf,
    nodes: int = 1_000_000,
    seed: int = 0,
    tell: Callable[[Progress], bool | None] | None = None,
) -> DenseProof:
    """The ground state with its proof, or the best bound within ``seconds`` or ``nodes``, the root alone at least.

    ``start`` is a configuration known beforehand; ``tell`` hears of every split, and ends the work
    where it returns True. Equal calls give equal bits unless
    ``seconds`` ends them. An open node of 100 groups holds about 0.2 MB. Raises ``ValueError`` beyond 2000 spins.

    >>> triangle = Problem.from_arrays([0, 1, 2], [1, 2, 0], [1, 1, 1])
    >>> proof = branch_dense(triangle)
    >>> proof.lower_bound, proof.energy, proof.proved_optimal
    (-1.0, -1.0, True)
    """
    if vertex_count(problem) > MOST_GROUPS:
        raise ValueError(
            f"branching on dense problems: {vertex_count(problem)} spins (one carries the fields), the limit is "
            f"{MOST_GROUPS}; use the semidefinite or the cycle bound"
        )
    deadline = perf_counter() + seconds
    tree = _Tree(problem, start, seed, deadline)
    tree.plant()
    while tree.open and len(tree.nodes) + 2 <= nodes and not (seconds < math.inf and perf_counter() >= deadline):
        tree.split()
        if tell is not None and tell(tree.log[-1]):
            break
    return tree.proof()


@dataclass(eq=False)
class _Node:
    """In this node vertex ``tie[0]`` is ``tie[2]`` times vertex ``tie[1]``, beside all that its parent says.

    ``groups`` and ``signs`` say the same of all vertices; ``dual``, ``gram`` and ``smoothing`` are where its climb
    ended; ``bound`` is proved by ``certificate``, which a node loses when it is split.
    """

    parent: int
    tie: tuple[int, int, int]
    groups: I32
    signs: I8
    dual: Dual
    gram: F64
    smoothing: float
    bound: float = -math.inf
    certificate: SquareCertificate | None = None


class _Tree:
    """Nodes in the order in which they were bounded, the ``open`` ones by their bound, and the best configuration."""

    def __init__(self, problem: Problem, start: npt.ArrayLike | None, seed: int, deadline: float) -> None:
        self.problem, self.seed, self.deadline = problem, seed, deadline
        self.levels = energy_levels(problem)
        self.tolerance = max(problem.tie_tolerance, 4 * float(np.spacing(abs(problem.offset))), 1e-250)
        self.nodes: list[_Node] = []
        self.open: list[tuple[float, int]] = []
        self.log: list[Progress] = []
        self.evaluations = 0
        self.spins = np.ones(len(problem), np.int8) if start is None else problem.spins_from(start)
        self.energy = problem.energy(self.spins)

    def plant(self) -> None:
        """The root, from the semidefinite bound without cuts."""
        root = semidefinite_bound(self.problem, tolerance=1e-3, seed=self.seed)
        self.offer(root.spins)
        dual, gram = bare(root.certificate.diagonal), root.vectors @ root.vectors.T
        self.add(_Node(-1, (0, 0, 0), *trivial_groups(self.problem), dual, gram, SMOOTHEST), ROOT_TRIALS)

    def split(self) -> None:
        """Split the open node of lowest bound, unless a better configuration has closed it meanwhile."""
        _, index = heapq.heappop(self.open)
        node = self.nodes[index]
        if not self.closed(node.bound):
            low, high = pair_to_split(node.gram)
            for relation in (1, -1):
                self.add(_child(node, index, low, high, relation), NODE_TRIALS)
            node.certificate, node.dual, node.gram = None, bare(np.empty(0)), np.empty((0, 0))
        lowest = rounded_up(self.problem, min([self.energy, *(bound for bound, _ in self.open[:1])]), self.levels)
        self.log.append(Progress(len(self.nodes), lowest, self.energy, len(self.open)))

    def add(self, node: _Node, trials: int) -> None:
        """Bound a node, look for a configuration in it, and keep it open if it may hold a better one."""
        index, size = len(self.nodes), len(node.dual.diagonal)
        matrix, _ = grouped_matrix(self.problem, node.groups, node.signs, size)
        climb = tighten(
            matrix, node.dual, node.gram,
            target=self.target(), smoothing=node.smoothing, deadline=self.deadline,
        )  # fmt: skip
        node.dual, node.gram, node.smoothing = climb.best, climb.gram, climb.smoothing
        node.bound, node.certificate = settled(self.problem, SquareCertificate(node.groups, node.signs, *climb.best))
        self.evaluations += climb.evaluations
        self.nodes.append(node)
        self.round(node, matrix, trials, index)
        if size > 1 and not self.closed(node.bound):
            heapq.heappush(self.open, (node.bound, index))

    def target(self) -> float:
        """Where a climb may stop, less the offset: in the middle of the tolerance, or just above the level below."""
        step = float(self.levels[0])
        return self.energy - (step * (1 - 1e-6) if step else self.tolerance / 2) - self.problem.offset

    def closed(self, bound: float) -> bool:
        """Whether nothing better than the best configuration can be above this bound."""
        return rounded_up(self.problem, bound, self.levels) >= self.energy - (0 if self.levels[0] else self.tolerance)

    def round(self, node: _Node, matrix: F64, trials: int, index: int) -> None:
        """Configurations of the node from hyperplanes through the vectors of X."""
        size = len(matrix)
        levels, modes = np.linalg.eigh(node.gram)
        vectors = np.ascontiguousarray(modes * np.sqrt(np.maximum(levels, 0.0)))
        apart = ~np.eye(size, dtype=bool)
        starts, neighbours = np.arange(size + 1, dtype=np.int64) * (size - 1), np.nonzero(apart)[1].astype(np.int32)
        signs, stream = np.ones(size, np.int8), stream_for(self.seed, ROUNDING_STREAM, index)
        round_rows(starts, neighbours, matrix[apart], vectors, trials, self.tolerance, stream, signs)
        vertices, count = node.signs * signs[node.groups], len(self.problem)
        self.offer(np.ascontiguousarray(vertices[:count] * (vertices[-1] if len(vertices) > count else 1)))

    def offer(self, spins: I8) -> None:
        """Take a configuration that is better than the best so far."""
        energy = self.problem.energy(spins)
        if energy < self.energy:
            self.energy, self.spins = energy, spins

    def proof(self) -> DenseProof:
        least = min(node.bound for node in self.nodes if node.certificate is not None)
        return DenseProof(
            lower_bound=min(self.energy, rounded_up(self.problem, least, self.levels)),
            energy=self.energy,
            spins=self.spins,
            proved_optimal=self.closed(least),
            nodes=len(self.nodes),
            evaluations=self.evaluations,
            log=tuple(self.log),
            arrays=pack_tree(
                [node.parent for node in self.nodes],
                [node.tie for node in self.nodes],
                [node.certificate for node in self.nodes],
            ),
        )


def pair_to_split(gram: F64) -> tuple[int, int]:
    """The two groups whose rows of X are farthest both from being the same and from being opposite.

    It needs a sixth fewer evaluations at n = 80 than the pair of smallest |X_ij| (computed here, two seeds).
    """
    products = gram @ gram
    squares = np.diag(products)
    rows, columns = np.triu_indices(len(gram), 1)
    chosen = int(np.argmax(squares[rows] + squares[columns] - 2 * np.abs(products[rows, columns])))
    return int(rows[chosen]), int(columns[chosen])


def _child(node: _Node, index: int, low: int, high: int, relation: int) -> _Node:
    """The node with y_high = relation * y_low."""
    first, second = int(np.argmax(node.groups == low)), int(np.argmax(node.groups == high))
    sign = relation * int(node.signs[first]) * int(node.signs[second])
    groups, signs = tied(node.groups, node.signs, first, second, sign)
    gram = np.ascontiguousarray(np.delete(np.delete(node.gram, high, 0), high, 1))
    dual = tied_dual(node.dual, low, high, relation)
    return _Node(index, (first, second, sign), groups, signs, dual, gram, max(node.smoothing, WARM))
