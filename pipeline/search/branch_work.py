"""The work on one node of branch-and-bound: enter its box, learn what the program proves, close it or split it."""

from __future__ import annotations

import math
from collections.abc import Callable

import numpy as np

from patchwalk.bounds.cycle_certificate import BOUNDED, BRANCHED, EMPTY, SETTLED, settled_energy
from patchwalk.bounds.cycles import CycleProgram, Multipliers
from patchwalk.bounds.energy_step import lower_energy
from patchwalk.problem.ising import Problem
from patchwalk.search.branch_pairs import Half, PairChooser
from patchwalk.search.branch_tree import Node, Tree
from patchwalk.subsolvers.contract import I8

NEAR = 1e-4
"""Relative gap below which it is worth looking whether reduced costs leave one configuration only."""

ROW_GROWTH = 1.5
"""Rows are thinned out when there are so many times as many as after the root."""


class NodeWork:
    """One program for all nodes of a tree, confined to one of them at a time."""

    def __init__(self, problem: Problem, program: CycleProgram, tree: Tree) -> None:
        self.problem, self.program, self.tree = problem, program, tree
        self._chooser = PairChooser(program, tree)
        self._epoch, self._root_rows = 0, 0

    def note_root(self) -> None:
        """The root is done: so many rows are usual from now on."""
        self._root_rows = len(self.program.rows)

    def enter(self, node: Node, seconds_left: Callable[[], float]) -> None:
        """Confine the program to a node, and solve it there from the basis of the node above."""
        self.program.confine(*self.tree.box(node))
        if node.basis is not None and node.epoch == self._epoch:
            self.program.start_from(node.basis)
        if node.number and not self.program.solve(interior=False, seconds=seconds_left()):
            self.program.solve(interior=True, seconds=seconds_left())

    def learn(self, node: Node, best_spins: I8, best_energy: float) -> None:
        """Take over what the program now says about its box, if that is more than the node knows.

        Where reduced costs leave one configuration only, none is better than ``best_spins``, and the node is settled.
        """
        program = self.program
        if program.infeasible:
            node.outcome, node.bound, node.multipliers = EMPTY, math.inf, program.multipliers
            return
        bound = self.tree.rounded_up(program.bound)
        if bound > node.bound or (bound == node.bound and node.number == 0):
            node.bound, node.multipliers = bound, program.multipliers
        near = best_energy - program.bound < NEAR * abs(best_energy)
        if bound < self._goal(best_energy) and (near or np.all(program.lower == program.upper)):
            self._try_to_settle(node, best_spins)

    def _try_to_settle(self, node: Node, best_spins: I8) -> None:
        program, target = self.program, lower_energy(self.problem, best_spins)
        value = program.value
        sure = np.abs(value.reduced) >= target - value.bound
        if np.count_nonzero(sure | (program.lower == program.upper)) < self.program.graph.vertices - 1:
            return
        graph = program.graph
        pairs = np.stack([graph.heads, graph.tails], axis=1)
        reached = settled_energy(self.problem, pairs, value, program.lower, program.upper, target)
        if reached >= target:
            node.outcome, node.bound, node.multipliers = SETTLED, reached, program.multipliers

    def closed(self, node: Node, best_energy: float) -> bool:
        """Whether nothing better than ``best_energy`` is left in the node."""
        return node.outcome != BOUNDED or node.bound >= self._goal(best_energy)

    def _goal(self, best_energy: float) -> float:
        return best_energy - self.problem.tie_tolerance

    def split(self, node: Node, goal: float, seconds_left: Callable[[], float]) -> None:
        """Choose a pair, and open the two halves."""
        program = self.program
        if self._root_rows and len(program.rows) > ROW_GROWTH * self._root_rows:
            program.drop_slack()
            self._epoch += 1
            program.solve(interior=False, seconds=seconds_left())
        basis = program.basis
        split = self._chooser.choose(basis, goal, seconds_left)
        node.outcome = BRANCHED
        for side, half in enumerate((split.agree, split.differ)):
            child = self.tree.add(node, split.edge, side, node.bound, node.multipliers)
            child.basis, child.epoch = basis, self._epoch
            _inherit(child, half, self.tree)
            if child.outcome == EMPTY:
                continue
            self.tree.open(child)
        node.basis, node.multipliers = None, Multipliers(np.empty(0, np.int32), np.empty(0))


def _inherit(child: Node, half: Half | None, tree: Tree) -> None:
    """Give a new node what trying it out proved."""
    if half is None:
        return
    if half.empty:
        child.outcome, child.bound, child.multipliers = EMPTY, math.inf, half.multipliers
    elif tree.rounded_up(half.bound) > child.bound:
        child.bound, child.multipliers = tree.rounded_up(half.bound), half.multipliers
