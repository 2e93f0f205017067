"""Planar problems without fields, solved outright: a minimum-weight perfect matching of frustrated plaquettes.

Bieche, Maynard, Rammal & Uhry, J. Phys. A 13 (1980) 2553. Bonds that a configuration leaves unsatisfied cross the faces
of the plane embedding so that every frustrated face meets an odd number of them and every other face an even number.
The cheapest such set consists of shortest paths that join the frustrated faces in pairs.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import networkx as nx
import numpy as np
from scipy import sparse

from patchwalk.bounds.energy_step import energy_levels, lower_energy, rounded_up
from patchwalk.problem.ising import Problem
from patchwalk.subsolvers.contract import F64, I8

MOST_FRUSTRATED = 400
"""Frustrated faces up to which :func:`planar_minimum` is worth trying: matching takes their third power in time."""


@dataclass(frozen=True, eq=False)
class PlanarMinimum:
    """``spins`` i8 (n,) of lowest energy, that ``energy``, and ``lower_bound``, which is it up to rounding.

    The bound is the energy itself for integer couplings. For real ones matching compares sums in floating point, whose
    rounding (2^-52 of all sizes together) is taken off.
    """

    spins: I8
    energy: float
    lower_bound: float


def is_planar(problem: Problem) -> bool:
    """Whether the problem has no field and a graph that can be drawn without crossings."""
    if np.any(problem.fields) or problem.coupling_count > max(0, 3 * len(problem) - 6) > 0:
        return False
    return bool(nx.check_planarity(_graph(problem))[0])


def planar_minimum(problem: Problem) -> PlanarMinimum:
    """The ground state of a planar problem without fields; raises ``ValueError`` for any other.

    >>> ring = Problem.from_arrays([0, 1, 2], [1, 2, 0], [1, 1, 2])
    >>> planar_minimum(ring).energy
    -2.0
    """
    if np.any(problem.fields):
        raise ValueError("matching solves planar problems without fields; this one has fields")
    planar, embedding = nx.check_planarity(_graph(problem))
    if not planar:
        raise ValueError("matching solves planar problems; the graph of this one has no drawing without crossings")
    unsatisfied = _cheapest_set(problem, embedding)
    spins = _spins_of(problem, unsatisfied)
    energy = problem.energy(spins)
    rounding = 2.0**-52 * 4.0 * len(problem) * float(np.abs(problem.couplings).sum())
    bound = rounded_up(problem, lower_energy(problem, spins) - rounding, energy_levels(problem))
    return PlanarMinimum(spins, energy, bound)


def frustrated_faces(problem: Problem) -> int:
    """How many faces of the drawing a planar problem cannot satisfy."""
    _, embedding = nx.check_planarity(_graph(problem))
    return sum(odd for odd, _ in _faces(problem, embedding))


def _graph(problem: Problem) -> nx.Graph:
    graph = nx.Graph()
    graph.add_nodes_from(range(len(problem)))
    rows = np.repeat(np.arange(len(problem)), np.diff(problem.row_starts))
    once = rows < problem.neighbours
    graph.add_edges_from(zip(rows[once].tolist(), problem.neighbours[once].tolist(), strict=True))
    return graph


def _faces(problem: Problem, embedding: nx.PlanarEmbedding) -> list[tuple[bool, list[tuple[int, int]]]]:
    """Every face: whether it is frustrated (an odd number of positive bonds), and its directed edges."""
    matrix = problem.matrix
    positive = {(int(u), int(v)) for u, v in zip(*matrix.nonzero(), strict=True) if matrix[u, v] > 0}
    seen: set[tuple[int, int]] = set()
    faces = []
    for u, v in embedding.edges():
        if (u, v) in seen:
            continue
        nodes = embedding.traverse_face(u, v, mark_half_edges=seen)
        around = list(zip(nodes, nodes[1:] + nodes[:1], strict=True))
        faces.append((sum(edge in positive for edge in around) % 2 == 1, around))
    return faces


def _cheapest_set(problem: Problem, embedding: nx.PlanarEmbedding) -> set[tuple[int, int]]:
    """The bonds (u < v) left unsatisfied in a ground state."""
    faces = _faces(problem, embedding)
    face_of = {edge: number for number, (_, around) in enumerate(faces) for edge in around}
    odd = [number for number, (is_odd, _) in enumerate(faces) if is_odd]
    if not odd:
        return set()
    cheapest: dict[tuple[int, int], tuple[float, tuple[int, int]]] = {}
    rows = np.repeat(np.arange(len(problem)), np.diff(problem.row_starts))
    for u, v, coupling in zip(rows.tolist(), problem.neighbours.tolist(), problem.couplings.tolist(), strict=True):
        one, two = face_of[u, v], face_of[v, u]
        if u < v and one != two:  # a bond with one face on both sides lies on no cycle and is always satisfied
            for pair in ((one, two), (two, one)):
                if pair not in cheapest or abs(coupling) < cheapest[pair][0]:
                    cheapest[pair] = abs(coupling), (u, v)
    lengths, before = _shortest(cheapest, len(faces), odd)
    complete = nx.Graph()
    for i in range(len(odd)):
        for j in range(i):
            if math.isfinite(lengths[i, odd[j]]):
                complete.add_edge(i, j, weight=float(lengths[i, odd[j]]))
    unsatisfied: set[tuple[int, int]] = set()
    for i, j in nx.min_weight_matching(complete):
        face = odd[j]
        while face != odd[i]:
            above = int(before[i, face])
            unsatisfied ^= {cheapest[face, above][1]}
            face = above
    return unsatisfied


def _shortest(
    cheapest: dict[tuple[int, int], tuple[float, tuple[int, int]]], count: int, odd: list[int]
) -> tuple[F64, np.typing.NDArray[np.int32]]:
    """Distances (odd, faces) from the frustrated faces through the cheapest bonds, and the face before each."""
    pairs = np.array(list(cheapest), np.int64).reshape(-1, 2)
    weights = np.array([weight for weight, _ in cheapest.values()])
    dual = sparse.coo_array((weights, (pairs[:, 0], pairs[:, 1])), shape=(count, count)).tocsr()
    lengths, before = sparse.csgraph.dijkstra(dual, indices=odd, return_predecessors=True)
    return lengths, before


def _spins_of(problem: Problem, unsatisfied: set[tuple[int, int]]) -> I8:
    """The configuration in which exactly these bonds are unsatisfied."""
    spins = np.zeros(len(problem), np.int8)
    for root in range(len(problem)):
        if spins[root]:
            continue
        spins[root] = 1
        waiting = [root]
        while waiting:
            u = waiting.pop()
            for place in range(problem.row_starts[u], problem.row_starts[u + 1]):
                v = int(problem.neighbours[place])
                if not spins[v]:
                    opposite = (problem.couplings[place] > 0) != ((min(u, v), max(u, v)) in unsatisfied)
                    spins[v] = -spins[u] if opposite else spins[u]
                    waiting.append(v)
    return spins
