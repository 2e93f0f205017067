"""Branch-and-bound on dense problems: the semidefinite tree below, coolings and cluster calls above.

Odd-cycle programs are large and weak where every spin is coupled to most others. There the tree of
:mod:`patchwalk.bounds.dense_tree` proves more; before it is planted, clusters of the spins that the semidefinite bound
leaves undecided go to the subsolver, exactly as in :mod:`patchwalk.search.branching`.
"""

from __future__ import annotations

import math
from collections.abc import Iterator

import numpy as np

from patchwalk.bounds.certificate import Certificate
from patchwalk.bounds.dense import semidefinite_bound
from patchwalk.bounds.dense_tree import DenseProof, Progress, branch_dense
from patchwalk.bounds.spectral import vertex_count
from patchwalk.bounds.tightening import MOST_GROUPS
from patchwalk.engine import release
from patchwalk.problem.ising import Problem
from patchwalk.records import Round
from patchwalk.search.bound_search import BoundSearch, NodeLine
from patchwalk.subsolvers.contract import F64

CROWDED, SHARE = 12.0, 0.3
"""A problem counts as dense from so many couplings a spin on, or from such a share of all pairs."""

CLUSTER_ROUNDS = 12


def is_dense(problem: Problem) -> bool:
    """Whether the semidefinite tree is the better proof, and the problem within its reach."""
    size = len(problem)
    degree = 2 * problem.coupling_count / size
    crowded = degree >= CROWDED or (size > 4 and degree >= SHARE * (size - 1))
    return crowded and vertex_count(problem) <= MOST_GROUPS


class DenseBranching(BoundSearch):
    """One run. Without ``cuts`` or ``branching`` the bound is the root's."""

    lower_bound: float = -math.inf
    _proof: DenseProof | None = None

    @property
    def node_count(self) -> int:
        """Nodes of the tree."""
        return 0 if self._proof is None else self._proof.nodes

    @property
    def open_count(self) -> int:
        """How many of them wait."""
        return self.log[-1].open_nodes if self.log else 0

    @property
    def proof(self) -> str:
        """What proves the bound, in words."""
        if self._proof is None:
            return "nothing yet"
        cuts = len(self._proof.arrays["weights"])
        return f"semidefinite duals with {cuts:,} odd cuts over {_counted(self.node_count)}"

    def prepare(self) -> None:
        """Compile everything and let the subsolver calibrate, before the clock starts."""
        self.incumbent.prepare()
        draws = np.random.default_rng(1)
        heads, tails = np.triu_indices(14, 1)
        branch_dense(Problem.from_arrays(heads, tails, draws.standard_normal(len(heads))), nodes=3)

    def rounds(self) -> Iterator[Round]:
        """Look for a good configuration first, round by round, and then prove it."""
        self.begin()
        own, plan = self.incumbent, self.plan
        try:
            if plan.heuristic and plan.sweeps:
                own.cool(plan.sweeps, self.stopped)
                yield self.next_round(())
            root = semidefinite_bound(self.problem, tolerance=1e-3, seed=self.seed)
            own.offer(root.spins, "rounding")
            x = self._point(root.vectors)
            for _ in range(CLUSTER_ROUNDS if plan.heuristic else 0):
                if self.stopped():
                    break
                spins = own.round_off(x)
                if plan.sweeps:
                    own.cool(plan.sweeps, self.stopped)
                subject = spins if own.round % 2 else own.spins
                yield self.next_round(own.ask(x, subject, plan.clusters_per_round, self.stopped))
        finally:
            if self.subsolver is not None:
                release(self.subsolver)
        self._prove()
        yield self.next_round(())

    def certificate(self) -> Certificate:
        """What proves the bound, as data that :func:`patchwalk.bounds.certificate.check` takes."""
        if self._proof is None:
            self._prove()
        assert self._proof is not None
        bound = min(self._proof.lower_bound, self.problem.energy(self.best_spins))
        return Certificate(self.problem.fingerprint, "semidefinite", bound, self._proof.arrays)

    def _point(self, vectors: F64) -> F64:
        """How sure the semidefinite bound is that the ends of each edge differ: (1 - cosine) / 2, f64 (m,)."""
        graph = self.graph
        cosines = np.einsum("ek,ek->e", vectors[graph.heads], vectors[graph.tails])
        return np.clip(0.5 - 0.5 * cosines, 0.0, 1.0)

    def _prove(self) -> None:
        plan, own = self.plan, self.incumbent
        nodes = plan.nodes if plan.nodes is not None else 1_000_000
        root_only = not (plan.branching and plan.cuts) or self.stopped()
        proof = branch_dense(
            self.problem, own.spins, seconds=max(0.0, self.seconds_left()), nodes=1 if root_only else nodes,
            seed=self.seed, tell=self._tell,
        )  # fmt: skip
        self._proof = proof
        own.offer(proof.spins, "rounding")
        self.lower_bound = proof.lower_bound
        if root_only:
            self.conclude("cuts or branching are switched off and the root is done")
        else:
            self.conclude(f"the budget of {nodes:,} nodes is spent")

    def _tell(self, progress: Progress) -> bool:
        """Write the log; True asks the tree to end."""
        best, bound = progress.energy, min(progress.lower_bound, progress.energy)
        gap = (best - bound) / max(1.0, abs(best))
        self.lower_bound = bound
        self.log.append(
            NodeLine(progress.nodes, 0, bound, bound, best, gap, progress.open_nodes, 0, self.elapsed, "split")
        )
        self.told()
        return self.interrupted()


def _counted(nodes: int) -> str:
    return "1 node" if nodes == 1 else f"{nodes:,} nodes"
