"""A lower bound by odd-cycle cuts: a linear program that is tightened until no cut is broken, or long enough.

Barahona, Grotschel, Junger & Reinelt, Oper. Res. 36 (1988) 493. The program is solved by an interior point without
crossover in the first rounds, whose points lie deep in the optimal face and break many cuts at once, and by the dual
simplex method, warm from round to round, after that. The bound is never the solver's objective: it is computed anew
from the multipliers (:func:`patchwalk.bounds.cycle_certificate.dual_value`).
"""

from __future__ import annotations

import math
from collections.abc import Callable, Generator
from dataclasses import dataclass
from typing import Any

import highspy
import numpy as np

from patchwalk.bounds.cut_graph import CutGraph
from patchwalk.bounds.cuts import Cuts
from patchwalk.bounds.cycle_certificate import DualValue, dual_value
from patchwalk.bounds.separation import violated_cuts
from patchwalk.subsolvers.contract import F64, I32, I64

LEAST = 1e-3
"""Cuts broken by less are left alone until nothing else is broken, and then a tenth of it, once."""

INTERIOR_TOLERANCE = 1e-5
SLACK_TO_DROP, SHARE_TO_DROP = 0.05, 0.1
THIN_OUT = 3
"""Rows without multiplier that are slack by so much are dropped, if they are such a share of all, every third round."""


@dataclass(frozen=True, eq=False)
class Multipliers:
    """Those that are not zero: ``cuts`` i32, numbers in the program's pool, and ``values`` f64."""

    cuts: I32
    values: F64


class _Silent(highspy.Highs):
    """A solver that keeps off standard output from the beginning: its banner comes with the callbacks."""

    def enableCallbacks(self) -> None:  # noqa: N802 - the name is the library's
        self.setOptionValue("output_flag", False)
        super().enableCallbacks()  # type: ignore[no-untyped-call]


class CycleProgram:
    """The linear program of a graph, its cuts and, after :meth:`solve`, its point ``x`` and its bound.

    ``pool`` keeps every cut ever found; ``rows`` i64 says which of them are rows of the program now. ``infeasible``
    says that the last solve proved the box empty, with ``value`` then the value of its ray, above zero.
    """

    def __init__(self, graph: CutGraph) -> None:
        self.graph = graph
        count = len(graph.heads)
        self.costs = graph.costs
        sizes = np.abs(self.costs[self.costs != 0.0])
        self._scale = float(np.exp2(np.rint(np.log2(np.median(sizes))))) if len(sizes) else 1.0
        self.lower, self.upper = np.zeros(count), np.ones(count)
        self.x: F64 = (self.costs < 0.0).astype(np.float64)
        self.pool = Cuts.none()
        self.rows: I64 = np.empty(0, np.int64)
        self.multipliers = Multipliers(np.empty(0, np.int32), np.empty(0))
        self.infeasible = False
        self.value = self._evaluate(np.empty(0))
        self.solver: Any = _Silent()  # type: ignore[no-untyped-call]
        self.solver.setOptionValue("threads", 1)
        self.solver.addVars(count, self.lower, self.upper)
        self.solver.changeColsCost(count, np.arange(count, dtype=np.int32), self.costs / self._scale)

    @property
    def bound(self) -> float:
        """A true lower bound on the energy within the box; plus infinity where the box is proved empty."""
        return math.inf if self.infeasible else self.value.bound

    def separate(self, least: float = LEAST, each_edge: int = 8) -> int:
        """Add the cuts that ``x`` breaks; returns how many."""
        return self.add(violated_cuts(self.graph, self.x, least, each_edge))

    def add(self, cuts: Cuts) -> int:
        """Add cuts to pool and program; returns how many."""
        if not len(cuts):
            return 0
        fresh = np.arange(len(self.pool), len(self.pool) + len(cuts))
        self.pool = self.pool.joined(cuts)
        self._put_in(fresh)
        return len(cuts)

    def _put_in(self, fresh: I64) -> None:
        cuts = self.pool.chosen(fresh)
        self.solver.addRows(
            len(cuts), np.full(len(cuts), -highspy.kHighsInf), cuts.limits, len(cuts.edges),
            cuts.offsets[:-1].astype(np.int32), cuts.edges, cuts.signs,
        )  # fmt: skip
        self.rows = np.concatenate([self.rows, fresh])

    def confine(self, lower: F64, upper: F64) -> None:
        """Set the box."""
        changed = np.flatnonzero((lower != self.lower) | (upper != self.upper)).astype(np.int32)
        if len(changed):
            self.solver.changeColsBounds(len(changed), changed, lower[changed], upper[changed])
            self.lower, self.upper = lower.copy(), upper.copy()

    def solve(self, interior: bool, seconds: float = math.inf, iterations: int | None = None) -> bool:
        """Solve the program as it is; False if the solver gave up before it had a new point.

        The bound is brought up to date in any case: whatever multipliers there are make one.
        """
        solver = self.solver
        solver.setOptionValue("solver", "ipm" if interior else "simplex")
        solver.setOptionValue("run_crossover", "off" if interior else "on")
        solver.setOptionValue("presolve", "choose" if interior else "off")
        solver.setOptionValue("ipm_optimality_tolerance", INTERIOR_TOLERANCE)
        solver.setOptionValue("simplex_iteration_limit", 2**31 - 1 if iterations is None else iterations)
        solver.setOptionValue("time_limit", solver.getRunTime() + max(0.01, min(seconds, 1e6)))
        solver.run()
        state = solver.getModelStatus()
        self.infeasible = False
        if state == highspy.HighsModelStatus.kInfeasible:
            return self._note_infeasible(interior)
        solution = solver.getSolution()
        if solution.dual_valid and len(solution.row_dual) == len(self.rows):
            self._note_duals(-np.asarray(solution.row_dual) * self._scale)
        optimal = state == highspy.HighsModelStatus.kOptimal
        if solution.value_valid and (optimal or interior):
            self.x = np.clip(np.asarray(solution.col_value), self.lower, self.upper)
        return bool(optimal)

    def _note_duals(self, duals: F64) -> None:
        duals = np.where(np.isfinite(duals), np.maximum(duals, 0.0), 0.0)
        duals[duals < 1e-12 * self._scale] = 0.0
        self.value = self._evaluate(duals)
        own = np.flatnonzero(duals)
        self.multipliers = Multipliers(self.rows[own].astype(np.int32), duals[own])

    def _note_infeasible(self, interior: bool) -> bool:
        """The box is empty if the solver's ray proves it; else nothing new is known."""
        if interior:
            return self.solve(interior=False)
        _, has_ray, ray = self.solver.getDualRay()
        if has_ray:
            for sign in (-1.0, 1.0):
                duals = np.maximum(sign * np.asarray(ray), 0.0)
                largest = float(duals.max(initial=0.0))
                if not largest:
                    continue
                duals = np.where(duals > 1e-9 * largest, duals / largest, 0.0)
                cuts = self.pool.chosen(self.rows)
                value = dual_value(
                    np.zeros(len(self.costs)), 0.0, cuts.offsets, cuts.edges, cuts.odd, duals, self.lower, self.upper
                )
                if value.bound > 0.0:
                    self.infeasible, self.value = True, value
                    own = np.flatnonzero(duals)
                    self.multipliers = Multipliers(self.rows[own].astype(np.int32), duals[own])
                    return True
        return False

    def _evaluate(self, duals: F64) -> DualValue:
        cuts = self.pool.chosen(self.rows)
        return dual_value(
            self.costs, self.graph.constant, cuts.offsets, cuts.edges, cuts.odd, duals, self.lower, self.upper
        )

    @property
    def basis(self) -> tuple[list[Any], list[Any]]:
        """The basis of the last simplex solve: the status of every column and of every row."""
        basis = self.solver.getBasis()
        return list(basis.col_status), list(basis.row_status)

    def start_from(self, basis: tuple[list[Any], list[Any]]) -> None:
        """Let the next simplex solve begin with a basis of this program when it had as many rows, or fewer."""
        columns, rows = basis
        fresh = highspy.HighsBasis()
        fresh.valid = True
        fresh.col_status = columns
        fresh.row_status = rows + [highspy.HighsBasisStatus.kBasic] * (len(self.rows) - len(rows))
        self.solver.setBasis(fresh)

    def drop_slack(self) -> None:
        """Take rows without multiplier that the point keeps clear of out of the program, if they are many."""
        if not len(self.rows):
            return
        cuts = self.pool.chosen(self.rows)
        used = np.add.reduceat(cuts.signs * self.x[cuts.edges], cuts.offsets[:-1])
        held = np.zeros(len(self.pool), np.bool_)
        held[self.multipliers.cuts] = True
        idle = np.flatnonzero((cuts.limits - used > SLACK_TO_DROP) & ~held[self.rows]).astype(np.int32)
        if len(idle) > SHARE_TO_DROP * len(self.rows):
            self.solver.deleteRows(len(idle), idle)
            self.rows = np.delete(self.rows, idle)


@dataclass(frozen=True)
class Tightened:
    """One round of tightening: its number from 1, cuts added before it, and whether the interior point was used."""

    number: int
    added: int
    interior: bool


def tightening(
    program: CycleProgram,
    seconds_left: Callable[[], float],
    interior_rounds: int = 12,
    most_rounds: int = 1000,
    least_gain: float = 0.0,
    thin_out: bool = True,
) -> Generator[Tightened, None, bool]:
    """Add cuts and solve, round by round, until no cut is broken, the time is up or ``most_rounds`` are over.

    It also ends after three rounds in a row that raised the bound by less than ``least_gain`` each. With ``thin_out``
    rows that have become slack leave the program again, and earlier bases do not fit it any more. The generator's
    own value is whether the program is as tight as odd-cycle cuts can make it.
    """
    least, idle, interior = LEAST, 0, False
    for number in range(1, most_rounds + 1):
        if seconds_left() <= 0.0:
            return False
        added = program.separate(least)
        if not added and not interior:
            if least < LEAST:
                return True
            least = LEAST / 10.0
            continue
        # where nothing is broken by an interior point, the dual simplex method has the last word
        before, interior = program.bound, bool(added) and number <= interior_rounds
        if not program.solve(interior, seconds_left()) and not interior and not program.solve(True, seconds_left()):
            return False
        yield Tightened(number, added, interior)
        if program.infeasible:
            return False
        if interior or (thin_out and number % THIN_OUT == 0):
            program.drop_slack()
        idle = idle + 1 if program.bound - before < least_gain else 0
        if idle >= 3:
            return False
    return False


def tighten(
    program: CycleProgram,
    closed: Callable[[], bool] = lambda: False,
    seconds_left: Callable[[], float] = lambda: math.inf,
    after_round: Callable[[Tightened], None] = lambda _: None,
    interior_rounds: int = 12,
) -> bool:
    """All of :func:`tightening` in one go, or until ``closed()`` after a round; returns its value."""
    rounds = tightening(program, seconds_left, interior_rounds)
    while True:
        try:
            after_round(next(rounds))
        except StopIteration as end:
            return bool(end.value)
        if closed():
            return False
