"""Branch-and-bound on dense problems: the semidefinite tree below, coolings and cluster calls above.

Odd-cycle programs are large and weak where every spin is coupled to most others. There the tree of
:mod:`patchwalk.bounds.dense_tree` proves more; before it is planted, clusters of the spins that the semidefinite bound
leaves undecided go to the subsolver, exactly as in :mod:`patchwalk.search.branching`, whose surface this search has.
"""

from __future__ import annotations

import math
import time
from collections.abc import Callable, Iterator

import numpy as np

from patchwalk.bounds.certificate import Certificate
from patchwalk.bounds.cut_graph import cut_graph
from patchwalk.bounds.dense import semidefinite_bound
from patchwalk.bounds.dense_tree import DenseProof, Progress, branch_dense
from patchwalk.bounds.spectral import vertex_count
from patchwalk.bounds.tightening import MOST_GROUPS
from patchwalk.engine import release
from patchwalk.problem.ising import Problem
from patchwalk.records import Calls, Round
from patchwalk.search.branch_primal import Incumbent, Standing
from patchwalk.search.branching import BranchPlan, NodeLine
from patchwalk.subsolvers.contract import F64, I8, Subsolver

CROWDED, SHARE = 12.0, 0.3
"""A problem counts as dense from so many couplings a spin on, or from such a share of all pairs."""

CLUSTER_ROUNDS = 12


def is_dense(problem: Problem) -> bool:
    """Whether the semidefinite tree is the better proof, and the problem within its reach."""
    size = len(problem)
    degree = 2 * problem.coupling_count / size
    crowded = degree >= CROWDED or (size > 4 and degree >= SHARE * (size - 1))
    return crowded and vertex_count(problem) <= MOST_GROUPS


class DenseBranching(Standing):
    """One run; :class:`patchwalk.search.branching.BranchAndBound` says what is to be read from it.

    Without ``cuts`` or ``branching`` the bound is the root's. ``told`` is called after every line of the log.
    """

    def __init__(
        self,
        problem: Problem,
        subsolver: Subsolver | None,
        plan: BranchPlan,
        seed: int = 1,
        start: I8 | None = None,
        interrupted: Callable[[], bool] = lambda: False,
    ) -> None:
        self.problem, self.plan, self.seed = problem, plan, seed
        asked = subsolver if plan.heuristic else None
        self.incumbent = Incumbent(problem, cut_graph(problem), asked, plan.cluster_size, seed, start)
        self.status, self.message = "budget", ""
        self.log: list[NodeLine] = []
        self.told: Callable[[], None] = lambda: None
        self.lower_bound = -math.inf
        self._interrupted, self._proof = interrupted, None
        self._began = time.perf_counter()

    _proof: DenseProof | None

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
        self._began = time.perf_counter()
        own, plan = self.incumbent, self.plan
        own.begin()
        try:
            if plan.heuristic and plan.sweeps:
                own.cool(plan.sweeps, self._stopped)
                yield self._round(())
            root = semidefinite_bound(self.problem, tolerance=1e-3, seed=self.seed)
            own.offer(root.spins, "rounding")
            x = self._point(root.vectors)
            for _ in range(CLUSTER_ROUNDS if plan.heuristic else 0):
                if self._stopped():
                    break
                spins = own.round_off(x)
                if plan.sweeps:
                    own.cool(plan.sweeps, self._stopped)
                subject = spins if own.round % 2 else own.spins
                yield self._round(own.ask(x, subject, plan.clusters_per_round, self._stopped))
        finally:
            if self.subsolver is not None:
                release(self.subsolver)
        self._prove()
        yield self._round(())

    def certificate(self) -> Certificate:
        """What proves the bound, as data that :func:`patchwalk.bounds.certificate.check` takes."""
        if self._proof is None:
            self._prove()
        assert self._proof is not None
        bound = min(self._proof.lower_bound, self.problem.energy(self.best_spins))
        return Certificate(self.problem.fingerprint, "semidefinite", bound, self._proof.arrays)

    def _point(self, vectors: F64) -> F64:
        """How sure the semidefinite bound is that the ends of each edge differ: (1 - cosine) / 2, f64 (m,)."""
        graph = self.incumbent.graph
        cosines = np.einsum("ek,ek->e", vectors[graph.heads], vectors[graph.tails])
        return np.clip(0.5 - 0.5 * cosines, 0.0, 1.0)

    def _prove(self) -> None:
        plan, own = self.plan, self.incumbent
        nodes = plan.nodes if plan.nodes is not None else 1_000_000
        root_only = not (plan.branching and plan.cuts) or self._stopped()
        proof = branch_dense(
            self.problem, own.spins, seconds=max(0.0, self._seconds_left()), nodes=1 if root_only else nodes,
            seed=self.seed, tell=self._tell,
        )  # fmt: skip
        self._proof = proof
        own.offer(proof.spins, "rounding")
        self.lower_bound = proof.lower_bound
        if proof.proved_optimal:
            self.status, self.message = "proved_optimal", "proved optimal"
        elif self._interrupted():
            self.status, self.message = "interrupted", "interrupted; bound and configuration are the best so far"
        elif plan.seconds is not None and self.elapsed >= plan.seconds:
            self.message = f"the budget of {plan.seconds:g} seconds is spent"
        elif root_only:
            self.message = "cuts or branching are switched off and the root is done"
        else:
            self.message = f"the budget of {nodes:,} nodes is spent"

    def _tell(self, progress: Progress) -> bool:
        """Write the log; True asks the tree to end."""
        best, bound = progress.energy, min(progress.lower_bound, progress.energy)
        gap = (best - bound) / max(1.0, abs(best))
        self.lower_bound = bound
        self.log.append(
            NodeLine(progress.nodes, 0, bound, bound, best, gap, progress.open_nodes, 0, self.elapsed, "split")
        )
        self.told()
        return self._interrupted()

    def _stopped(self) -> bool:
        return self._interrupted() or self._seconds_left() <= 0.0

    def _seconds_left(self) -> float:
        return math.inf if self.plan.seconds is None else self.plan.seconds - self.elapsed

    def _round(self, calls: tuple[Calls, ...]) -> Round:
        number = self.incumbent.round
        self.incumbent.round += 1
        stage = min(1.0, self.elapsed / self.plan.seconds) if self.plan.seconds else 0.0
        return self.incumbent.round_of(number, stage, calls)


def _counted(nodes: int) -> str:
    return "1 node" if nodes == 1 else f"{nodes:,} nodes"
