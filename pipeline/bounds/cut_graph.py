"""The problem as weights on the edges of a graph, the form in which cuts and matchings see it.

A configuration splits the spins in two. Let ``x_e`` be 1 where edge ``e`` joins the two sides (opposite spins) and 0
where it does not; then ``E = constant - 2 sum_e w_e x_e``, with couplings as weights. A field is a coupling to one
more spin that always points up, the *pole*, numbered ``n``.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from patchwalk.problem.ising import Problem
from patchwalk.subsolvers.contract import F64, I8, I32, I64


@dataclass(frozen=True, eq=False)
class CutGraph:
    """Vertices are the ``spins`` of the problem and, where there are fields, the pole.

    ``heads`` < ``tails`` i32 (m,) and ``weights`` f64 (m,) are the edges, sorted; ``starts`` i64 (vertices + 1,),
    ``neighbours`` i32 (2m,) and ``edges`` i32 (2m,) the rows of the graph with the number of each edge.
    ``constant`` is the energy with no edge cut, offset included.
    """

    spins: int
    vertices: int
    heads: I32
    tails: I32
    weights: F64
    starts: I64
    neighbours: I32
    edges: I32
    constant: float

    @property
    def costs(self) -> F64:
        """By how much the energy rises when an edge is cut: -2 w, exactly."""
        return -2.0 * self.weights

    def sides(self, spins: I8) -> I8:
        """The side (+1 or -1) of every vertex, i8 (vertices,), the pole being +1."""
        return np.concatenate([spins, np.ones(self.vertices - self.spins, np.int8)])

    def spins_of(self, sides: I8) -> I8:
        """The configuration behind the sides: turned round as a whole where the pole is -1."""
        if self.vertices > self.spins and sides[-1] < 0:
            sides = -sides
        return np.ascontiguousarray(sides[: self.spins])

    def cut_of(self, sides: I8) -> F64:
        """1.0 for every edge that joins the two sides, else 0.0: f64 (m,)."""
        return (sides[self.heads] != sides[self.tails]).astype(np.float64)


def cut_graph(problem: Problem) -> CutGraph:
    """The graph of a problem.

    >>> triangle = Problem.from_arrays([0, 1, 2], [1, 2, 0], [1, 1, 1], fields=[0.5, 0, 0])
    >>> graph = cut_graph(triangle)
    >>> graph.vertices, graph.heads.tolist(), graph.tails.tolist(), graph.constant
    (4, [0, 0, 0, 1], [1, 2, 3, 2], 3.5)
    """
    size = len(problem)
    rows = np.repeat(np.arange(size, dtype=np.int32), np.diff(problem.row_starts))
    once = rows < problem.neighbours
    fielded = np.flatnonzero(problem.fields).astype(np.int32)
    heads = np.concatenate([rows[once], fielded])
    tails = np.concatenate([problem.neighbours[once], np.full(len(fielded), size, np.int32)])
    weights = np.concatenate([problem.couplings[once], problem.fields[fielded]])
    order = np.lexsort((tails, heads))
    heads, tails, weights = heads[order], tails[order], weights[order]
    vertices = size + bool(len(fielded))
    ends, others = np.concatenate([heads, tails]), np.concatenate([tails, heads])
    numbers = np.tile(np.arange(len(heads), dtype=np.int32), 2)
    row_order = np.lexsort((others, ends))
    starts = np.concatenate([[0], np.cumsum(np.bincount(ends, minlength=vertices))]).astype(np.int64)
    return CutGraph(
        spins=size,
        vertices=vertices,
        heads=heads,
        tails=tails,
        weights=weights,
        starts=starts,
        neighbours=np.ascontiguousarray(others[row_order]),
        edges=np.ascontiguousarray(numbers[row_order]),
        constant=math.fsum([problem.offset, *weights.tolist()]),
    )
