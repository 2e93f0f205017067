"""Shortest half paths: the heap that finds them, and the closed walk behind two of them that meet."""

from __future__ import annotations

import numpy as np

from patchwalk.bounds.walks import tree_path
from patchwalk.subsolvers.compiled import compiled
from patchwalk.subsolvers.contract import F64, I8, I32


@compiled
def sift_down(keys: F64, nodes: I32, filled: int) -> None:
    """Take the first entry off a heap of ``filled + 1`` and put the last one in its place."""
    key, node = keys[filled], nodes[filled]
    place = 0
    while True:
        child = 2 * place + 1
        if child >= filled:
            break
        if child + 1 < filled and keys[child + 1] < keys[child]:
            child += 1
        if keys[child] >= key:
            break
        keys[place], nodes[place] = keys[child], nodes[child]
        place = child
    keys[place], nodes[place] = key, node


@compiled
def sift_up(keys: F64, nodes: I32, filled: int, key: float, node: int) -> None:
    """Add an entry to a heap of ``filled``."""
    place = filled
    while place > 0:
        above = (place - 1) // 2
        if keys[above] <= key:
            break
        keys[place], nodes[place] = keys[above], nodes[above]
        place = above
    keys[place], nodes[place] = key, node


@compiled
def unfold(
    best_from: int, best_to: int, best_edge: int, back_node: I32, back_edge: I32, heads: I32, tails: I32,
    comp: I32, parity: I8, parent: I32, parent_edge: I32, depth: I32, x: F64, vertices: I32, edges: I32, odd: I8,
    half: I32,
) -> int:  # fmt: skip
    """The closed walk behind a meeting of two half paths, in the edges of the whole graph; returns its length."""
    # contracted edges in order with the sense in which each changes the copy, both halves laid end to end
    size = len(parent)
    chain, change = np.empty(4 * size + 8, np.int32), np.empty(4 * size + 8, np.int8)
    places = np.empty(4 * size + 8, np.int32)  # the component in which each step begins
    count = 0
    node = best_from
    while back_node[node] >= 0:
        chain[count], change[count] = back_edge[node], (node ^ back_node[node]) & 1
        places[count] = back_node[node] >> 1
        node = back_node[node]
        count += 1
    for k in range(count // 2):
        other = count - 1 - k
        chain[k], chain[other] = chain[other], chain[k]
        change[k], change[other] = change[other], change[k]
        places[k], places[other] = places[other], places[k]
    if best_edge >= 0:
        chain[count], change[count] = best_edge, (best_from ^ best_to) & 1
        places[count] = best_from >> 1
        count += 1
        node = best_to ^ 1
    else:
        node = best_from ^ 1
    while back_node[node] >= 0:
        chain[count], change[count] = back_edge[node], (node ^ back_node[node]) & 1
        places[count] = node >> 1
        node = back_node[node]
        count += 1
    first = chain[0]
    start = heads[first] if comp[heads[first]] == places[0] else tails[first]
    here, length = start, 0
    limit = len(edges) - size - 2
    for k in range(count):
        e = chain[k]
        near = heads[e] if comp[heads[e]] == places[k] else tails[e]
        far = tails[e] if near == heads[e] else heads[e]
        steps = tree_path(here, near, parent, parent_edge, depth, vertices[length:], edges[length:], half)
        for j in range(length, length + steps):
            odd[j] = 1 if x[edges[j]] > 0.5 else 0
        length += steps
        vertices[length], edges[length] = near, e
        odd[length] = change[k] ^ parity[near] ^ parity[far]
        length += 1
        here = far
        if length > limit:
            return 0
    steps = tree_path(here, start, parent, parent_edge, depth, vertices[length:], edges[length:], half)
    for j in range(length, length + steps):
        odd[j] = 1 if x[edges[j]] > 0.5 else 0
    return length + steps
