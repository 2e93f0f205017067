"""HOW the problem is cut: which spins make a cluster.

A rule fills one round with clusters, no two of which share a spin or are joined by a coupling, so that each may be
accepted on its own and exactly. Rules that never look at the spins may be used for sampling as well: couplings,
boundary fields and counts of calls are theirs to use.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, field
from typing import Protocol

import numpy as np

from patchwalk.clusters.growing import balls, scattered
from patchwalk.clusters.ranks import RankRule
from patchwalk.clusters.strip import StripRule
from patchwalk.clusters.trails import TrailRule
from patchwalk.problem.ising import Problem
from patchwalk.subsolvers.contract import F64, I8, I32, I64


@dataclass(eq=False)
class Marks:
    """Scratch memory kept between rounds: marks i64 (n,) that belong to a round or an attempt by their number alone.

    ``flip_is_free`` says that the problem has no fields, so that a configuration is as good as its opposite.
    """

    blocked: I64
    visited: I64
    queue: I32
    flip_is_free: bool
    turn: I64 = field(default_factory=lambda: np.zeros(1, np.int64))

    @classmethod
    def for_problem(cls, problem: Problem) -> Marks:
        size = len(problem)
        free = not np.any(problem.fields)
        return cls(np.zeros(size, np.int64), np.zeros(size, np.int64), np.empty(size, np.int32), free)


@dataclass(frozen=True, eq=False)
class View:
    """What a rule may look at beside the problem.

    ``spins`` i8 (n,), the present configuration, and its ``local_fields`` f64 (n,), h_i + sum_j J_ij s_j; ``elites``
    i8 (E, n), good distinct configurations, E may be 0; ``counts`` i64 (n,), how often each spin was in a call.
    """

    spins: I8
    local_fields: F64
    elites: I8
    counts: I64

    @classmethod
    def of(cls, problem: Problem, spins: I8) -> View:
        """The view of a configuration that nothing else is known of yet."""
        size = len(problem)
        return cls(spins, problem.local_fields(spins), np.empty((0, size), np.int8), np.zeros(size, np.int64))


class ClusterRule(Protocol):
    """Picks at most ``wanted`` clusters of ``size`` spins, and at least one: arrays i32 (B, k), one for each size k
    that occurs, members rising in each row. Smaller ones occur only where groups of spins must stay whole, or where
    strips must stay narrow.
    """

    @property
    def name(self) -> str: ...

    @property
    def looks_at_spins(self) -> bool: ...

    def pick(
        self, problem: Problem, size: int, wanted: int, seed: int, marks: Marks, view: View
    ) -> tuple[I32, ...]: ...


@dataclass(frozen=True)
class BlindRule:
    """A rule that looks at the graph only, given by the function that grows its clusters."""

    name: str
    grow: Callable[[Problem, int, int, int, Marks], I32]
    looks_at_spins: bool = False

    def pick(self, problem: Problem, size: int, wanted: int, seed: int, marks: Marks, view: View) -> tuple[I32, ...]:  # noqa: ARG002 (blind)
        return (self.grow(problem, size, wanted, seed, marks),)


STRIP = StripRule()


def strips(problem: Problem, size: int, wanted: int, seed: int, marks: Marks) -> I32:
    """Long clusters behind a narrow front, i32 (B, size)."""
    members = STRIP.pick(problem, size, wanted, seed, marks)
    marks.turn[0] += 2 * STRIP.width  # layers are marked by the turn plus their number: none may look like a later turn
    return members


def cluster_rule(name: str) -> ClusterRule:
    """The rule of this name; raises ``KeyError`` for another."""
    return RULES[name]


RULES: dict[str, ClusterRule] = {
    "ball": BlindRule("ball", balls),
    "scattered": BlindRule("scattered", scattered),
    "strip": BlindRule("strip", strips),
    "frustrated": TrailRule("frustrated", disputed=False),
    "loose": RankRule("loose", weakest=True, looks_at_spins=True),
    "disputed": TrailRule("disputed", disputed=True),
    "stale": RankRule("stale", weakest=False, looks_at_spins=False),
}
