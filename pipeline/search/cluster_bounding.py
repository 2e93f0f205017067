"""Bounds by exact minima of clusters: coolings and cluster calls above, shares of fields and couplings below.

A narrow problem is one cluster, eliminated exactly, and that is the proof. Any other is covered by overlapping clusters
with multipliers on what they share, by larger ones in turn as long as the budget lasts.
"""

from __future__ import annotations

import math
from collections.abc import Iterator

import numpy as np

from patchwalk.bounds.certificate import Certificate
from patchwalk.bounds.clusters import ClusterBound, cluster_bound
from patchwalk.bounds.narrow import narrow_minimum, narrow_order
from patchwalk.engine import release
from patchwalk.problem.ising import Problem
from patchwalk.records import Round
from patchwalk.search.bound_search import BoundSearch, NodeLine

SIZES = (8, 10, 12, 14)
"""Spins in overlapping clusters, turn by turn; each takes two to four times as long as the one before."""

CLUSTER_ROUNDS = 4


class ClusterBounding(BoundSearch):
    """One run; ``nodes`` of its plan are turns, each with larger clusters. Without ``cuts`` multipliers stay as they
    are at first, without ``branching`` there is one turn."""

    held: ClusterBound | None = None

    @property
    def lower_bound(self) -> float:
        """A true lower bound on the energy of every configuration, at any time."""
        return -math.inf if self.held is None else self.held.lower_bound

    @property
    def node_count(self) -> int:
        """Turns taken."""
        return len(self.log)

    @property
    def open_count(self) -> int:
        """Nothing waits: there is no tree."""
        return 0

    @property
    def proof(self) -> str:
        """What proves the bound, in words."""
        return "nothing yet" if self.held is None else self.held.proof

    def prepare(self) -> None:
        """Compile everything and let the subsolver calibrate, before the clock starts."""
        self.incumbent.prepare()
        ring = Problem.from_arrays([0, 1, 2, 3], [1, 2, 3, 0], [1.0, 1.0, 1.0, 0.5], fields=[0.25, 0, 0, 0])
        narrow_order(ring)
        cluster_bound(ring, cluster_size=3)

    def rounds(self) -> Iterator[Round]:
        """Look for a good configuration first, round by round, and then prove it."""
        self.begin()
        own, plan = self.incumbent, self.plan
        undecided = np.full(len(self.graph.heads), 0.5)
        try:
            for number in range(1 + CLUSTER_ROUNDS if plan.heuristic else 0):
                if self.stopped():
                    break
                if plan.sweeps:
                    own.cool(plan.sweeps, self.stopped)
                wanted = plan.clusters_per_round if number else 0
                yield self.next_round(own.ask(undecided, own.spins, wanted, self.stopped))
        finally:
            if self.subsolver is not None:
                release(self.subsolver)
        order = narrow_order(self.problem)
        if order is not None:
            spins, bound = narrow_minimum(self.problem, order)
            own.offer(spins, "elimination")
            self._hold(bound, len(self.problem))
        else:
            self._cover()
        yield self.next_round(())
        self.conclude("all sizes of clusters are done" if plan.nodes is None else "the budget of nodes is spent")

    def certificate(self) -> Certificate:
        """What proves the bound, as data that :func:`patchwalk.bounds.certificate.check` takes."""
        held = self.held
        if held is None:
            held = cluster_bound(self.problem, cluster_size=SIZES[0], steps=0)
        return Certificate(self.problem.fingerprint, "clusters", held.lower_bound, held.arrays)

    def _cover(self) -> None:
        """Overlapping clusters of one size after the other."""
        turns = 1 if not self.plan.branching else self.plan.nodes or len(SIZES)
        steps = {} if self.plan.cuts else {"steps": 0}
        for size in SIZES[:turns]:
            self._hold(cluster_bound(self.problem, cluster_size=size, stopped=self.stopped, **steps), size)
            if self.lower_bound >= self.goal or size >= len(self.problem) or self.stopped():
                break

    def _hold(self, bound: ClusterBound, size: int) -> None:
        if bound.lower_bound > self.lower_bound:
            self.held = bound
        shown, best = min(self.lower_bound, self.best_energy), self.best_energy
        gap = (best - shown) / max(1.0, abs(best))
        place = len(self.log)
        own = min(bound.lower_bound, best)
        self.log.append(NodeLine(place, 0, own, shown, best, gap, 0, 0, self.elapsed, f"{size} spins"))
        self.told()
