"""Problems of a networkx graph in one call; nodes come in the graph's order and are named by it.

Directions are ignored, parallel edges are one edge (their weights add up where edges have weights).
"""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

from patchwalk.problem import encodings
from patchwalk.problem.ising import Problem

if TYPE_CHECKING:
    import networkx as nx

Pairs = list[tuple[int, int]]


def maxcut(graph: nx.Graph, weight: str = "weight") -> Problem:
    """Two parts that cut the most weight: ``weight`` is an edge attribute, 1 where absent."""
    return Problem.from_networkx(graph, kind="maxcut", weight=weight)


def independent_set(graph: nx.Graph, weight: str = "weight") -> Problem:
    """Nodes no two of which are joined, of most weight: ``weight`` is a node attribute, 1 where absent."""
    return encodings.encode_independent_set(*_nodes(graph, weight), names=_names(graph))


def vertex_cover(graph: nx.Graph, weight: str = "weight") -> Problem:
    """Nodes that touch every edge, of least weight: ``weight`` is a node attribute, 1 where absent."""
    return encodings.encode_vertex_cover(*_nodes(graph, weight), names=_names(graph))


def colouring(graph: nx.Graph, colours: int) -> Problem:
    """A colour for every node, so that no two that are joined have one colour."""
    return encodings.encode_colouring(_edges(graph), colours, len(graph), names=_names(graph))


def balanced_partition(graph: nx.Graph, weight: str = "weight") -> Problem:
    """Two parts of equal size that cut the least weight: ``weight`` is an edge attribute, 1 where absent."""
    weights = [float(data.get(weight, 1.0)) for _, _, data in graph.edges(data=True)]
    return encodings.encode_balanced_partition(_edges(graph), weights, len(graph), names=_names(graph))


def _names(graph: nx.Graph) -> list[str]:
    return [str(node) for node in graph]


def _edges(graph: nx.Graph) -> Pairs:
    place: dict[Any, int] = {node: index for index, node in enumerate(graph)}
    return [(place[one], place[other]) for one, other in graph.edges()]


def _nodes(graph: nx.Graph, weight: str) -> tuple[Pairs, list[float]]:
    return _edges(graph), [float(data.get(weight, 1.0)) for _, data in graph.nodes(data=True)]
