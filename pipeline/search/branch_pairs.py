"""Which pair of spins to split a node on: reliability branching on the edges the program leaves undecided."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from patchwalk.bounds.cycles import CycleProgram, Multipliers
from patchwalk.search.branch_tree import Basis, Tree
from patchwalk.subsolvers.contract import F64, I64

RELIABLE = 4
"""A pair is trusted once each of its sides has been tried out so often."""

CANDIDATES, PATIENCE = 12, 4
"""At most so many pairs are tried out at a node; no more after so many in a row that were no better."""

STEPS = 60
"""Simplex steps of a trial."""

UNDECIDED = 1e-5


@dataclass(frozen=True)
class Half:
    """What a trial proved of one side of a split: a true ``bound`` by ``multipliers``, or that it is ``empty``."""

    bound: float
    multipliers: Multipliers
    empty: bool


@dataclass(frozen=True)
class Split:
    """An edge, and what trials proved of its two sides (None where none was made)."""

    edge: int
    agree: Half | None = None
    differ: Half | None = None


class PairChooser:
    """Chooses pairs, and remembers how much splits on them have gained."""

    def __init__(self, program: CycleProgram, tree: Tree) -> None:
        self.program, self.tree = program, tree
        count = len(program.costs)
        self._gains = np.zeros((2, count))  # per unit of x moved, summed over trials
        self._trials = np.zeros((2, count), np.int64)

    def choose(self, basis: Basis, goal: float, seconds_left: Callable[[], float]) -> Split:
        """The pair to split on. The program's box and basis are those of the node before and after."""
        program = self.program
        x, bound = program.x.copy(), program.bound
        doubt = np.minimum(x, 1.0 - x)
        free = np.flatnonzero((doubt > UNDECIDED) & (program.lower < program.upper))
        if not len(free):  # an integral point that is not closed: any pair that the node leaves free will do
            rest = np.flatnonzero(program.lower < program.upper)
            return Split(int(rest[np.argmax(np.abs(program.costs[rest]))]))
        scores = self._expected(x, free)
        order = free[np.argsort(-scores, kind="stable")]
        best = Split(int(order[0]))
        highest, idle, tried = -1.0, 0, 0
        for edge in order[: 4 * CANDIDATES]:
            edge = int(edge)
            if tried >= CANDIDATES or idle >= PATIENCE or seconds_left() <= 0.0:
                break
            if np.all(self._trials[:, edge] >= RELIABLE):
                score, split = float(self._expected(x, np.array([edge]))[0]), Split(edge)
            else:
                tried += 1
                split = self._tried(edge, basis, x, bound)
                score = self._score(split, bound, goal)
            if score > highest + 1e-12:
                highest, best, idle = score, split, 0
            else:
                idle += 1
            if math.isinf(score):
                break
        return best

    def _expected(self, x: F64, edges: I64) -> F64:
        """The product of what either side is expected to gain, by what was seen or, where nothing was, on average."""
        sides = []
        for side, distance in ((0, x[edges]), (1, 1.0 - x[edges])):
            seen = self._trials[side] > 0
            rates = self._gains[side][seen] / self._trials[side][seen]
            usual = float(rates.mean()) if len(rates) else 1.0
            own = self._trials[side][edges]
            rate = np.where(own > 0, self._gains[side][edges] / np.maximum(own, 1), usual)
            weight = np.where(own > 0, 1.0, np.abs(self.program.costs[edges]) ** 0.25)
            sides.append(np.maximum(rate * weight * distance, 1e-9))
        return np.asarray(sides[0] * sides[1])

    def _tried(self, edge: int, basis: Basis, x: F64, bound: float) -> Split:
        program = self.program
        lower, upper = program.lower.copy(), program.upper.copy()
        halves = []
        for side in range(2):
            low, high = lower.copy(), upper.copy()
            low[edge] = high[edge] = float(side)
            program.confine(low, high)
            program.start_from(basis)
            program.solve(interior=False, iterations=STEPS)
            halves.append(Half(program.bound, program.multipliers, program.infeasible))
            moved = x[edge] if side == 0 else 1.0 - x[edge]
            if not program.infeasible:
                self._gains[side, edge] += max(0.0, program.bound - bound) / moved
                self._trials[side, edge] += 1
        program.confine(lower, upper)
        program.start_from(basis)
        return Split(edge, halves[0], halves[1])

    def _score(self, split: Split, bound: float, goal: float) -> float:
        """The product of the gains, each counted up to where the half is closed."""
        gains = []
        for half in (split.agree, split.differ):
            assert half is not None
            closed = half.empty or self.tree.rounded_up(half.bound) >= goal
            gains.append(max(1e-9, (goal if closed else min(half.bound, goal)) - bound))
        return gains[0] * gains[1]
