"""Branch-and-bound: odd-cycle cuts below, roundings and cluster calls above, splits on agreements of two spins between.

The node of lowest bound comes first. Its linear program is tightened; if the bound does not reach the best energy
known, the node is split on a pair of coupled spins: in one half they agree, in the other they differ. The pair is
chosen by reliability (Achterberg, Koch & Martin, Oper. Res. Lett. 33 (2005) 42): pairs whose effect has rarely been
seen are tried out with a few simplex steps on either side, the others are judged by the average of what splits on
them gained before. Clusters of spins the program leaves undecided go to the subsolver, as in neighbourhood search.

Barahona, Grotschel, Junger & Reinelt, Oper. Res. 36 (1988) 493; De Simone et al., J. Stat. Phys. 80 (1995) 487.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Generator, Iterator

import numpy as np

from patchwalk.bounds.certificate import Certificate
from patchwalk.bounds.clusters import ClusterBound, cluster_bound, promising
from patchwalk.bounds.cuts import Cuts
from patchwalk.bounds.cycle_certificate import BOUNDED, BRANCHED, EMPTY, SETTLED
from patchwalk.bounds.cycles import CycleProgram, tightening
from patchwalk.engine import release
from patchwalk.problem.ising import Problem
from patchwalk.records import Round
from patchwalk.search.bound_search import BoundSearch, BranchPlan, NodeLine
from patchwalk.search.branch_tree import Node, Tree
from patchwalk.search.branch_work import NodeWork
from patchwalk.subsolvers.contract import I8, Subsolver

ROUNDS_AT_ROOT, ROUNDS_AT_NODE = 400, 20
INTERIOR_ROUNDS, DEGENERATE_ROUNDS, FLAT = 12, 40, 4.5
"""Rounds by the interior point at the root; the larger number where energies move in steps and a spin has at most so
many couplings (measured: 50 x 50 +-J in 2 s of processor time instead of 2 to 15)."""

LEAST_SHARE = 0.1
"""Below the root, rounds of cuts go on while they gain such a share of what is missing to close the node."""

LATER_COOLINGS = 2
"""By how much coolings after the first are shorter."""

SPINS_A_SECOND = 300
"""Clusters stand aside where there are more spins for each second of the budget: to check their shares, once when they
are found and once at the end, takes more than a millisecond a spin."""

OUTCOMES = {BRANCHED: "split", BOUNDED: "bounded", EMPTY: "empty", SETTLED: "settled"}


class BranchAndBound(BoundSearch):
    """The tree of odd-cycle programs. Another proof may stand beside it, such as the cluster bound where clusters
    promise more: the higher of the two is the bound."""

    def __init__(
        self,
        problem: Problem,
        subsolver: Subsolver | None,
        plan: BranchPlan,
        seed: int = 1,
        start: I8 | None = None,
        interrupted: Callable[[], bool] = lambda: False,
    ) -> None:
        super().__init__(problem, subsolver, plan, seed, start, interrupted)
        self.program = CycleProgram(self.graph)
        self.tree = Tree(problem, self.graph)
        self.beside: ClusterBound | None = None
        self.nodes_done = 0
        self._current: Node | None = None
        self._work = NodeWork(problem, self.program, self.tree)

    @property
    def lower_bound(self) -> float:
        """A true lower bound on the energy of every configuration, at any time."""
        return max(self._tree_bound, self._floor)

    @property
    def _tree_bound(self) -> float:
        """What the tree alone proves."""
        if not self.tree.nodes:
            return min(self.program.bound, self.best_energy)
        bound = min(self.tree.lowest_open, self.best_energy)
        return bound if self._current is None else min(bound, self._current.bound)

    @property
    def _floor(self) -> float:
        """The bound of the proof beside the tree."""
        return -math.inf if self.beside is None else min(self.beside.lower_bound, self.best_energy)

    @property
    def node_count(self) -> int:
        """Nodes of the tree."""
        return len(self.tree.nodes)

    @property
    def open_count(self) -> int:
        """How many of them wait."""
        return self.tree.open_count

    @property
    def proof(self) -> str:
        """What proves the bound, in words."""
        if self.beside is not None and self._floor >= self._tree_bound:
            return self.beside.proof
        cuts = np.unique(np.concatenate([node.multipliers.cuts for node in self.tree.nodes]))
        nodes = "1 node" if self.node_count == 1 else f"{self.node_count:,} nodes"
        return f"{len(cuts):,} odd-cycle cuts with their multipliers over {nodes}"

    @property
    def stage(self) -> float:
        """The fraction of the budget spent: of the nodes where they are limited, else of the seconds."""
        if self.plan.nodes:
            return min(1.0, self.nodes_done / self.plan.nodes)
        return super().stage

    def take_up(self, certificate: Certificate) -> None:
        """Go on from the tree of an earlier run, whose best configuration is to be given as ``start``.

        Where clusters proved more than its tree, there is none: then their bound stands beside a new tree. Raises
        ``ValueError`` for a certificate of another kind or of another problem.
        """
        if certificate.method == "clusters" and certificate.fingerprint == self.problem.fingerprint:
            self.beside = ClusterBound(certificate.bound, certificate.arrays, 0)
            return
        self.tree = Tree.taken_up(self.problem, self.graph, certificate)
        given = certificate.arrays
        self.program.add(Cuts(given["cut_starts"], given["cut_edges"], given["cut_odd"]))
        self._work = NodeWork(self.problem, self.program, self.tree)
        self._work.note_root()
        if len(self.tree.nodes) > 1:  # the program's first point, for roundings
            self.program.solve(interior=False, seconds=self.seconds_left())

    def prepare(self) -> None:
        """Compile everything and let the subsolver calibrate, before the clock starts."""
        self.incumbent.prepare()
        heads = [0, 1, 2, 0, 1, 3]
        tails = [1, 2, 3, 3, 3, 4]
        small = Problem.from_arrays(heads, tails, [1.0, 1.0, 1.0, 1.0, 0.5, 1.0], fields=[0.25, 0, 0, 0, 0])
        rehearsal = BranchAndBound(small, None, BranchPlan(interior_rounds=2))
        for _ in rehearsal.rounds():
            pass
        rehearsal.certificate()

    def rounds(self) -> Iterator[Round]:
        """Search until the bound reaches the best energy or an end is reached, one round at a time."""
        self.begin()
        if not self.tree.nodes:
            program = self.program
            root = self.tree.add(None, -1, 0, self.tree.rounded_up(program.bound), program.multipliers)
            self.tree.open(root)
        try:
            if self.plan.heuristic and self.plan.sweeps:
                self.incumbent.cool(self.plan.sweeps, self.stopped)
                yield self.next_round(())
            self._try_clusters()
            while self.tree.open_count and not self._ended():
                self._current = self.tree.next()
                yield from self._work_on(self._current)
                self._current = None
        finally:
            if self._current is not None:
                self.tree.open(self._current)
                self._current = None
            if self.subsolver is not None:
                release(self.subsolver)
        self.conclude(self.message)

    def certificate(self) -> Certificate:
        """What proves the bound, as data that :func:`patchwalk.bounds.certificate.check` takes."""
        if self.beside is not None and self._floor >= self._tree_bound:
            return Certificate(self.problem.fingerprint, "clusters", self.beside.lower_bound, self.beside.arrays)
        return self.tree.certificate(self.program.pool, self.best_spins)

    def _ended(self) -> bool:
        plan = self.plan
        if max(self.tree.lowest_open, self._floor) >= self.goal or self.stopped():
            return True
        if plan.nodes is not None and self.nodes_done >= plan.nodes:
            self.message = f"the budget of {plan.nodes:,} nodes is spent"
        elif not plan.branching and self.nodes_done:
            self.message = "branching is switched off and the root is done"
        else:
            return False
        return True

    def _work_on(self, node: Node) -> Iterator[Round]:
        """Tighten a node's program, and close the node, split it, or leave it open where time is up."""
        if node.bound >= self.goal:
            self._note(node)
            return
        self._work.enter(node, self.seconds_left)
        self._learn(node)
        yield from self._tighten(node)
        if self.stopped() and not self._closed(node):
            self.tree.open(node)
            return
        self.nodes_done += 1
        if node.number == 0:
            self._work.note_root()
        if not self._closed(node):
            self._work.split(node, self.goal, self.seconds_left)
        self._note(node)

    def _learn(self, node: Node) -> None:
        self._work.learn(node, self.best_spins, self.best_energy)

    def _closed(self, node: Node) -> bool:
        return self._work.closed(node, self.best_energy)

    def _try_clusters(self) -> None:
        """Where clusters promise to prove more, let their bound stand beside the tree, in half of the seconds at most.

        Before the root, which takes longer on such problems and leaves more of the gap.
        """
        most = SPINS_A_SECOND * (self.plan.seconds or math.inf)
        if not self.plan.clusters or len(self.problem) > most or not promising(self.problem):
            return
        half = 0.5 * self.seconds_left()
        found = cluster_bound(self.problem, stopped=lambda: self.stopped() or self.seconds_left() < half)
        if self.beside is None or found.lower_bound > self.beside.lower_bound:
            self.beside = found

    def _tighten(self, node: Node) -> Generator[Round, None, None]:
        """Cuts and configurations in turn, until the node is closed or cuts do not pay any more."""
        yield self._look_for_better()
        while not self.plan.cuts and self._is_integral() and not self._closed(node) and self.program.separate():
            self.program.solve(interior=False, seconds=self.seconds_left())
            self._learn(node)
        if not self.plan.cuts or self._closed(node):
            return
        is_root = node.number == 0
        rounds = tightening(
            self.program,
            self.seconds_left,
            interior_rounds=self._interior_rounds if is_root else 0,
            most_rounds=ROUNDS_AT_ROOT if is_root else ROUNDS_AT_NODE,
            thin_out=is_root,
            least_gain=0.0 if is_root else LEAST_SHARE * self._missing,
        )
        for _ in rounds:
            self._learn(node)
            if self._closed(node):
                return
            if is_root:  # below it, once a node
                yield self._look_for_better()
            if self._closed(node) or self.stopped():
                return

    @property
    def _missing(self) -> float:
        """By how much the program's own bound must still rise to close its node."""
        return max(0.0, self.goal - float(self.tree.levels[0]) - self.program.value.bound)

    @property
    def _interior_rounds(self) -> int:
        """How long the interior point pays: to the end where many ground states are joined by free moves."""
        if self.plan.interior_rounds is not None:
            return self.plan.interior_rounds
        degree = 2 * self.problem.coupling_count / len(self.problem)
        return DEGENERATE_ROUNDS if self.tree.levels[0] and degree <= FLAT else INTERIOR_ROUNDS

    def _look_for_better(self) -> Round:
        """Round the program's point off, and ask for clusters of what it leaves undecided."""
        x, own = self.program.x, self.incumbent
        if not self.plan.heuristic:
            if self._is_integral():
                own.round_off(x, tries=1)
            return self.next_round(())
        spins = own.round_off(x)
        if self.plan.sweeps // LATER_COOLINGS and own.round:
            own.cool(self.plan.sweeps // LATER_COOLINGS, self.stopped)
        subject = spins if own.round % 2 else own.spins
        return self.next_round(own.ask(x, subject, self.plan.clusters_per_round, self.stopped))

    def _is_integral(self) -> bool:
        x = self.program.x
        return bool(np.all(np.minimum(x, 1.0 - x) < 1e-6))

    def _note(self, node: Node) -> None:
        best, bound = self.best_energy, self.lower_bound
        if node.outcome == BRANCHED:  # the node is not what is open any longer, its halves are
            bound = max(min(self.tree.lowest_open, best), self._floor)
        self.log.append(
            NodeLine(
                node.number, node.depth, min(node.bound, best), bound, best, (best - bound) / max(1.0, abs(best)),
                self.tree.open_count, len(self.program.rows), self.elapsed, OUTCOMES[node.outcome],
            )
        )  # fmt: skip
        self.told()
