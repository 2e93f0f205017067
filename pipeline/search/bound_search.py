"""What every search for a lower bound has: its plan, its best configuration, its clock, and what it shows of itself."""

from __future__ import annotations

import math
import time
from abc import ABC, abstractmethod
from collections.abc import Callable, Iterator
from dataclasses import dataclass

from patchwalk.bounds.certificate import Certificate
from patchwalk.bounds.cut_graph import cut_graph
from patchwalk.problem.ising import Problem
from patchwalk.records import Calls, Improvement, Round, Snapshot
from patchwalk.search.branch_primal import Incumbent
from patchwalk.subsolvers.contract import I8, Subsolver


@dataclass(frozen=True)
class BranchPlan:
    """How to search. ``sweeps`` is how long the cooling lasts that gives the first configuration; another one, half
    as long, goes with every round of cuts.

    Any of ``cuts``, ``heuristic`` and ``branching`` may be switched off, to see what it is worth. Without ``cuts`` only
    integral points that are no configuration are cut off; without ``heuristic`` the best energy comes from integral
    points of the program alone, and no subsolver is asked; without ``branching`` only the root is worked on. With
    ``clusters`` a cluster bound may stand beside the tree of cycles.
    """

    seconds: float | None = None
    nodes: int | None = None
    cluster_size: int = 12
    clusters_per_round: int = 8
    interior_rounds: int | None = None
    sweeps: int = 2000
    cuts: bool = True
    heuristic: bool = True
    branching: bool = True
    clusters: bool = False


@dataclass(frozen=True)
class NodeLine:
    """One line of the node log. ``bound`` is the bound of the whole problem, ``outcome`` what became of the node."""

    node: int
    depth: int
    node_bound: float
    bound: float
    best: float
    gap: float
    open_nodes: int
    cuts: int
    seconds: float
    outcome: str


class BoundSearch(ABC):
    """One run. Iterate over :meth:`rounds`; then read ``status``, ``lower_bound``, ``best_spins``, ``certificate()``.

    ``status`` is ``proved_optimal`` where the bound reached the best energy (within ``problem.tie_tolerance``), else
    ``budget`` or ``interrupted``. ``log`` holds a line for each node worked on, after which ``told`` is called.
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
        self.graph = cut_graph(problem)
        asked = subsolver if plan.heuristic else None
        self.incumbent = Incumbent(problem, self.graph, asked, plan.cluster_size, seed, start)
        self.status, self.message = "budget", ""
        self.log: list[NodeLine] = []
        self.told: Callable[[], None] = lambda: None
        self.interrupted = interrupted
        self._began = time.perf_counter()

    @property
    @abstractmethod
    def lower_bound(self) -> float:
        """A true lower bound on the energy of every configuration, at any time."""

    @property
    @abstractmethod
    def node_count(self) -> int:
        """Nodes of the tree."""

    @property
    @abstractmethod
    def open_count(self) -> int:
        """How many of them wait."""

    @property
    @abstractmethod
    def proof(self) -> str:
        """What proves the bound, in words."""

    @abstractmethod
    def prepare(self) -> None:
        """Compile everything and let the subsolver calibrate, before the clock starts."""

    @abstractmethod
    def rounds(self) -> Iterator[Round]:
        """Search until the bound reaches the best energy or an end is reached, one round at a time."""

    @abstractmethod
    def certificate(self) -> Certificate:
        """What proves the bound, as data that :func:`patchwalk.bounds.certificate.check` takes."""

    @property
    def subsolver(self) -> Subsolver | None:
        """Who answers the clusters."""
        return self.incumbent.subsolver

    @property
    def best_energy(self) -> float:
        """The lowest energy known."""
        return self.incumbent.energy

    @property
    def best_spins(self) -> I8:
        """Its configuration, i8 (n,)."""
        return self.incumbent.spins

    @property
    def goal(self) -> float:
        """A bound from here on proves the best configuration optimal."""
        return self.best_energy - self.problem.tie_tolerance

    @property
    def gap(self) -> float:
        """(best energy - lower bound) / max(1, |best energy|)."""
        return (self.best_energy - self.lower_bound) / max(1.0, abs(self.best_energy))

    @property
    def elapsed(self) -> float:
        """Seconds since the search began, compiling apart."""
        return time.perf_counter() - self._began

    @property
    def stage(self) -> float:
        """The fraction of the seconds spent; 0 where they are not limited."""
        return min(1.0, self.elapsed / self.plan.seconds) if self.plan.seconds else 0.0

    def take_improvements(self) -> tuple[Improvement, ...]:
        """The new best energies since the last call of this method, in order."""
        return self.incumbent.take_improvements()

    def snapshot(self) -> Snapshot:
        """The state between two rounds, as the run file keeps it."""
        return self.incumbent.snapshot(self.elapsed)

    def begin(self) -> None:
        """Start the clock."""
        self._began = time.perf_counter()
        self.incumbent.begin()

    def stopped(self) -> bool:
        """Whether the user or the clock asks for an end."""
        return self.interrupted() or self.seconds_left() <= 0.0

    def seconds_left(self) -> float:
        """Seconds of the budget that are left, plus infinity where they are not limited."""
        return math.inf if self.plan.seconds is None else self.plan.seconds - self.elapsed

    def conclude(self, otherwise: str) -> None:
        """Say how it ended: a proof, an interrupt, the seconds spent, or ``otherwise``; an error was told already."""
        if self.status == "error":
            return
        if self.lower_bound >= self.goal:
            self.status, self.message = "proved_optimal", "proved optimal"
        elif self.interrupted():
            self.status, self.message = "interrupted", "interrupted; bound and configuration are the best so far"
        elif self.plan.seconds is not None and self.elapsed >= self.plan.seconds:
            self.message = f"the budget of {self.plan.seconds:g} seconds is spent"
        else:
            self.message = otherwise

    def next_round(self, calls: tuple[Calls, ...]) -> Round:
        """The record of the round that is over."""
        number = self.incumbent.round
        self.incumbent.round += 1
        return self.incumbent.round_of(number, self.stage, calls)
