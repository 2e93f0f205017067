"""A tree of odd-cycle cuts as a certificate, and the check of it from the problem alone.

Every inner node is split in two by saying of one pair of spins that they agree or that they differ; every leaf carries
multipliers of cuts. For multipliers ``lambda >= 0`` of valid cuts ``A x <= b`` and ``l <= x <= u``,

    E >= constant - lambda b + sum_e min over x_e in {l_e, u_e} of (c + lambda A)_e x_e

whatever the multipliers are, so nothing a solver says has to be believed. With c and the constant set to 0, a positive
value says that the leaf is empty. Beyond that, an edge e whose wrong side costs ``|d_e|`` more (d = c + lambda A) is
settled wherever the bound plus ``|d_e|`` reaches the energy in question; where settled edges reach every spin, only one
configuration is left, and the leaf is worth its energy.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt
from scipy import sparse

from patchwalk.bounds.certificate_error import CertificateError
from patchwalk.bounds.energy_step import lower_energy, rounded_up
from patchwalk.problem.ising import Problem

F64 = npt.NDArray[np.float64]
I8 = npt.NDArray[np.int8]
I32 = npt.NDArray[np.int32]
I64 = npt.NDArray[np.int64]

BRANCHED, BOUNDED, EMPTY, SETTLED = 0, 1, 2, 3
"""What became of a node: split in two; bounded by its multipliers; empty; one configuration left."""

UNIT = 2.0**-53


@dataclass(frozen=True)
class DualValue:
    """A true lower bound, what it could be off by rounding already taken off; ``reduced`` f64 (m,) are the costs d."""

    bound: float
    margin: float
    reduced: F64


def dual_value(
    costs: F64, constant: float, starts: I64, edges: I32, odd: I8, duals: F64, lower: F64, upper: F64
) -> DualValue:
    """The bound that multipliers ``duals`` f64 (c,) >= 0 of cuts prove for ``lower`` <= x <= ``upper``.

    The last sum is exact before it is rounded (``math.fsum``); for every sum of k terms before that, (k + 2) 2^-53 of
    the sum of the terms' sizes is taken off (Higham, Accuracy and Stability of Numerical Algorithms, 2002, section 4.2:
    k 2^-53 / (1 - k 2^-53) suffices).
    """
    lengths = np.diff(starts)
    limits = np.add.reduceat(odd.astype(np.float64), starts[:-1]) - 1.0 if len(lengths) else np.empty(0)
    spread = np.repeat(duals, lengths)
    reduced = costs + np.bincount(edges, spread * (2.0 * odd - 1.0), minlength=len(costs))
    sizes = np.abs(costs) + np.bincount(edges, spread, minlength=len(costs))
    best = np.minimum(reduced * lower, reduced * upper)
    value = math.fsum([constant, *(-duals * limits).tolist(), *best.tolist()])
    terms = int(np.bincount(edges, minlength=1).max(initial=0)) + 4
    margin = terms * UNIT * (abs(constant) + float(sizes.sum()) + float(duals @ limits)) * 1.01
    return DualValue(value - margin, margin, reduced)


class CycleTree:
    """The check of a tree that is ``stated`` to prove a bound by the arrays ``given``."""

    def __init__(self, problem: Problem, stated: float, given: Mapping[str, npt.NDArray[Any]]) -> None:
        self.problem, self.stated = problem, stated
        try:
            self.pairs = np.asarray(given["pairs"], np.int32).reshape(-1, 2)
            self.starts, self.edges = given["cut_starts"].astype(np.int64), given["cut_edges"].astype(np.int32)
            self.odd = given["cut_odd"].astype(np.int8)
            self.parents, self.outcomes = given["parents"].astype(np.int64), given["outcomes"].astype(np.int8)
            self.split_edges, self.sides = given["split_edges"].astype(np.int32), given["split_sides"].astype(np.int8)
            self.node_bounds = given["node_bounds"].astype(np.float64)
            self.dual_starts, self.dual_cuts = (
                given["dual_starts"].astype(np.int64),
                given["dual_cuts"].astype(np.int32),
            )
            self.duals = given["duals"].astype(np.float64)
        except (KeyError, ValueError) as error:
            raise CertificateError(f"the certificate is incomplete: {error}") from error
        self.weights = self._weights()
        self.constant = math.fsum([problem.offset, *self.weights.tolist()])

    def proved(self) -> float:
        """The bound stated, once all of it is checked; raises :class:`CertificateError` with what is wrong."""
        self._check_layout()
        self._check_cuts()
        self._check_tree()
        for node in np.flatnonzero(self.outcomes != BRANCHED):
            self._check_leaf(int(node))
        return self.stated

    def _weights(self) -> F64:
        """The weights of the certificate's edges; every coupling and field of the problem must be among them."""
        size, pairs = len(self.problem), self.pairs
        low, high = pairs.min(axis=1, initial=size), pairs.max(axis=1, initial=0)
        if len(pairs) and (low.min() < 0 or high.max() > size or np.any(low == high)):
            raise CertificateError("the certificate has an edge between spins that do not exist")
        keys = low.astype(np.int64) * (size + 1) + high
        if len(np.unique(keys)) < len(keys):
            raise CertificateError("the certificate has an edge twice")
        rows = np.repeat(np.arange(size), np.diff(self.problem.row_starts))
        once = rows < self.problem.neighbours
        fielded = np.flatnonzero(self.problem.fields)
        true_keys = np.concatenate(
            [rows[once] * np.int64(size + 1) + self.problem.neighbours[once], fielded * np.int64(size + 1) + size]
        )
        values = np.concatenate([self.problem.couplings[once], self.problem.fields[fielded]])
        order = np.argsort(keys)
        places = np.searchsorted(keys, true_keys, sorter=order)
        if np.any(places >= len(keys)) or np.any(keys[order[np.minimum(places, len(keys) - 1)]] != true_keys):
            raise CertificateError("the certificate leaves out a coupling or a field of the problem")
        weights = np.zeros(len(keys))
        weights[order[places]] = values
        return weights

    def _check_layout(self) -> None:
        nodes = len(self.parents)
        lengths = {len(a) for a in (self.outcomes, self.split_edges, self.sides, self.node_bounds)}
        if nodes == 0 or lengths != {nodes} or len(self.dual_starts) != nodes + 1:
            raise CertificateError("the certificate's columns of nodes differ in length, or there are none")
        for starts, total, what in (
            (self.starts, len(self.edges), "cuts"), (self.dual_starts, len(self.duals), "multipliers"),
        ):  # fmt: skip
            if not len(starts) or starts[0] != 0 or starts[-1] != total or np.any(np.diff(starts) < 0):
                raise CertificateError(f"the certificate's {what} do not begin and end where it says")
        if len(self.odd) != len(self.edges) or len(self.dual_cuts) != len(self.duals):
            raise CertificateError("the certificate's cuts or multipliers have columns of different lengths")
        for numbers, limit, what in (
            (self.edges, len(self.pairs), "a cut names an edge"),
            (self.dual_cuts, len(self.starts) - 1, "a multiplier names a cut"),
            (self.split_edges[1:], len(self.pairs), "a node names an edge"),
        ):
            if len(numbers) and (numbers.min() < 0 or numbers.max() >= limit):
                raise CertificateError(f"{what} that does not exist")
        wrong = np.flatnonzero(~(self.duals >= 0) | ~np.isfinite(self.duals))
        if len(wrong):
            raise CertificateError(
                f"multiplier {wrong[0]} is {self.duals[wrong[0]]:.6g}; only numbers >= 0 prove anything"
            )

    def _check_cuts(self) -> None:
        """Every cut's edges meet every vertex an even number of times, and F is odd: then no cut breaks it."""
        count = len(self.starts) - 1
        if count == 0:
            return
        lengths = np.diff(self.starts)
        if np.any(lengths == 0) or not np.isin(self.odd, (0, 1)).all():
            raise CertificateError("the certificate has an empty cut, or a sign other than 0 and 1")
        rows = np.repeat(np.arange(count), lengths)
        shape = (count, len(self.problem) + 1)
        ones = np.ones(2 * len(rows), np.int64)
        ends = (np.concatenate([rows, rows]), self.pairs[self.edges].T.ravel())
        degrees = sparse.coo_array((ones, ends), shape=shape).tocsr()
        degrees.sum_duplicates()
        if np.any(degrees.data % 2):
            raise CertificateError("a cut's edges do not close to cycles")
        twice = sparse.coo_array((np.ones(len(rows)), (rows, self.edges)), shape=(count, len(self.pairs))).tocsr()
        twice.sum_duplicates()
        if np.any(twice.data > 1):
            raise CertificateError("a cut has an edge twice")
        if np.any(np.add.reduceat(self.odd.astype(np.int64), self.starts[:-1]) % 2 == 0):
            raise CertificateError("a cut has an even number of edges in its odd part")

    def _check_tree(self) -> None:
        """Every split node has its two children, every other node but the first has a split parent."""
        if (
            self.parents[0] != -1
            or np.any(self.parents[1:] < 0)
            or np.any(self.parents[1:] >= np.arange(1, len(self.parents)))
        ):
            raise CertificateError("the tree's first node must have no parent, and every other one an earlier parent")
        if not np.isin(self.outcomes, (BRANCHED, BOUNDED, EMPTY, SETTLED)).all():
            raise CertificateError("a node of the tree is neither split nor closed")
        children: dict[int, list[int]] = {}
        for node in range(1, len(self.parents)):
            children.setdefault(int(self.parents[node]), []).append(node)
        for node, outcome in enumerate(self.outcomes):
            own = children.get(node, [])
            if outcome != BRANCHED:
                if own:
                    raise CertificateError(f"node {node} is closed and yet has children")
                continue
            sides = sorted(int(self.sides[child]) for child in own)
            if sides != [0, 1] or len({int(self.split_edges[child]) for child in own}) != 1:
                raise CertificateError(
                    f"node {node} is split, but a node is missing: its children must be the two halves of one split"
                )

    def _box(self, node: int) -> tuple[F64, F64]:
        lower, upper = np.zeros(len(self.pairs)), np.ones(len(self.pairs))
        while node > 0:
            edge, side = self.split_edges[node], float(self.sides[node])
            if not lower[edge] <= side <= upper[edge]:
                raise CertificateError(f"node {node} contradicts a split above it and does not say so")
            lower[edge] = upper[edge] = side
            node = int(self.parents[node])
        return lower, upper

    def _check_leaf(self, node: int) -> None:
        own = slice(int(self.dual_starts[node]), int(self.dual_starts[node + 1]))
        duals = np.zeros(len(self.starts) - 1)
        np.add.at(duals, self.dual_cuts[own], self.duals[own])
        lower, upper = self._box(node)
        empty = self.outcomes[node] == EMPTY
        costs = np.zeros(len(self.pairs)) if empty else -2.0 * self.weights
        constant = 0.0 if empty else self.constant
        value = dual_value(costs, constant, self.starts, self.edges, self.odd, duals, lower, upper)
        stated = float(self.node_bounds[node])
        # nan, where multipliers overflow, must not pass for true in any of these comparisons
        if not abs(value.bound - stated) <= 4.0 * value.margin < math.inf:
            raise CertificateError(
                f"the multipliers of node {node} prove {value.bound:.12g}, the certificate says {stated:.12g}"
            )
        if empty:
            if not value.bound > 0.0:
                raise CertificateError(f"node {node} is said to be empty, but its multipliers do not prove that")
            return
        reached = rounded_up(self.problem, value.bound)
        if self.outcomes[node] == SETTLED:
            reached = max(reached, settled_energy(self.problem, self.pairs, value, lower, upper, self.stated))
        if not reached >= self.stated:
            raise CertificateError(
                f"node {node} is proved to lie above {reached:.12g} only, the certificate states {self.stated:.12g}"
            )


def settled_energy(problem: Problem, pairs: I32, value: DualValue, lower: F64, upper: F64, target: float) -> float:
    """A true bound on the leaf: ``target`` or the energy of the one configuration that may lie below it, the lower.

    Edges whose wrong side costs so much that ``target`` is reached are settled. Minus infinity where they do not
    reach every spin.
    """
    size = len(problem)
    reduced = value.reduced
    fixed = lower == upper
    settled = fixed | (value.bound + np.abs(reduced) * (1.0 - 1e-9) - value.margin >= target)
    side = np.where(fixed, lower, (reduced < 0).astype(np.float64))
    if problem.fields.any():
        vertices = size + 1
    else:
        vertices = size
        settled = settled & (pairs.max(axis=1, initial=0) < size)
    spins = np.zeros(vertices, np.int8)
    own = np.flatnonzero(settled)
    graph = sparse.coo_array(
        (np.concatenate([side[own], side[own]]) + 1.0, (pairs[own].T.ravel(), pairs[own][:, ::-1].T.ravel())),
        shape=(vertices, vertices),
    ).tocsr()
    order, parents = sparse.csgraph.breadth_first_order(graph, vertices - 1, directed=False)
    if len(order) < vertices:
        return -math.inf
    spins[order[0]] = 1
    for vertex in order[1:]:
        above = parents[vertex]
        spins[vertex] = spins[above] if graph[above, vertex] == 1.0 else -spins[above]
    return min(target, lower_energy(problem, spins[:size]))
