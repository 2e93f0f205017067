"""Good configurations from a point of the linear program: a spanning tree of what it is surest about, single flips.

Edges are taken in the order of how far they are from undecided (x = 1/2), a little noise mixed in; those that join two
parts decide how these lie to each other. Whatever single flips still lower is then flipped (Barahona, Grotschel, Junger
& Reinelt, Oper. Res. 36 (1988) 493).
"""

from __future__ import annotations

import numpy as np

from patchwalk.bounds.cut_graph import CutGraph
from patchwalk.subsolvers.compiled import compiled
from patchwalk.subsolvers.contract import F64, I8, I32, I64, U64
from patchwalk.subsolvers.draws import next_unit, stream_for


def rounded(graph: CutGraph, x: F64, seed: int, tries: int = 4, noise: float = 0.3) -> I8:
    """The best of several roundings of ``x`` f64 (m,): the sides of all vertices, i8 (vertices,).

    The first is without noise; the same seed gives the same sides.
    """
    stream = stream_for(seed)
    best, lowest = np.ones(graph.vertices, np.int8), float(np.abs(graph.weights).sum()) + 1.0
    sides = np.empty(graph.vertices, np.int8)
    for attempt in range(tries):
        doubt = np.empty(len(x))
        _doubts(x, noise if attempt else 0.0, stream, doubt)
        order = np.argsort(doubt, kind="stable")
        _span(order, graph.heads, graph.tails, x, sides)
        energy = _flip_down(graph.starts, graph.neighbours, graph.edges, graph.weights, sides)
        if energy < lowest:
            best, lowest = sides.copy(), energy
    return best


@compiled
def _doubts(x: F64, noise: float, stream: U64, doubt: F64) -> None:
    for e in range(len(x)):
        doubt[e] = -abs(x[e] - 0.5) + noise * next_unit(stream)


@compiled
def _span(order: I64, heads: I32, tails: I32, x: F64, sides: I8) -> None:
    """Join parts along the edges in order; ``sides`` becomes the side of every vertex."""
    size = len(sides)
    leader, relative = np.arange(size), np.zeros(size, np.int8)
    for e in order:
        a, b = heads[e], tails[e]
        root_a, root_b = _lead(leader, relative, a), _lead(leader, relative, b)
        if root_a != root_b:
            leader[root_a] = root_b
            relative[root_a] = relative[a] ^ relative[b] ^ (1 if x[e] > 0.5 else 0)
    for v in range(size):
        _lead(leader, relative, v)
        sides[v] = 1 - 2 * relative[v]


@compiled
def _lead(leader: I64, relative: I8, vertex: int) -> int:
    """The leader of a vertex's part; the path is shortened and ``relative[vertex]`` made relative to the leader."""
    root, turn = vertex, 0
    while leader[root] != root:
        turn ^= relative[root]
        root = leader[root]
    while leader[vertex] != root and vertex != root:
        above, own = leader[vertex], relative[vertex]
        leader[vertex], relative[vertex] = root, turn
        turn ^= own
        vertex = above
    return root


@compiled
def _flip_down(starts: I64, neighbours: I32, edges: I32, weights: F64, sides: I8) -> float:
    """Flip vertices while that lowers the sum of weights times sides, which is returned."""
    size = len(sides)
    local = np.zeros(size)
    scale = 0.0
    for v in range(size):
        for place in range(starts[v], starts[v + 1]):
            local[v] += weights[edges[place]] * sides[neighbours[place]]
            scale = max(scale, abs(weights[edges[place]]))
    moving = True
    while moving:
        moving = False
        for v in range(size):
            if sides[v] * local[v] > 1e-9 * scale:
                moving = True
                sides[v] = -sides[v]
                for place in range(starts[v], starts[v + 1]):
                    local[neighbours[place]] += 2.0 * weights[edges[place]] * sides[v]
    energy = 0.0
    for v in range(size):
        energy += 0.5 * sides[v] * local[v]
    return energy
