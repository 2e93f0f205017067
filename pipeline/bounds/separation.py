"""Odd-cycle inequalities that a point of the linear program breaks, found by shortest paths.

A cut meets every cycle an even number of times, so for a cycle C and an odd part F of it
``x(F) - x(C minus F) <= |F| - 1`` (Barahona & Mahjoub, Math. Program. 36 (1986) 157). Let every vertex have two copies;
an edge keeps the copy at length ``x_e`` and changes it at length ``1 - x_e``. A path from one copy of a vertex to the
other that is shorter than 1 is a broken inequality, and the shortest one is found by a search to radius 1/2 only, for
the second half of the path is a mirror image.

Edges at 0 or 1 are contracted first. What is left is small, and a contradiction among them is a broken
inequality by itself. Closed walks are taken apart into simple cycles, and these along chords.
"""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from patchwalk.bounds.cut_graph import CutGraph
from patchwalk.bounds.cuts import Cuts
from patchwalk.bounds.half_paths import sift_down, sift_up, unfold
from patchwalk.bounds.walks import store_cycles, tree_path
from patchwalk.subsolvers.compiled import compiled
from patchwalk.subsolvers.contract import F64, I8, I32, I64

SETTLED = (0.03, 1e-3, 1e-6)
"""An edge this close to 0 or 1 is contracted while cycles are sought: coarsely at first, finer where that finds too
few. Violations are always measured at the true point.
"""

COVER = 8
"""No search starts at a vertex that found cycles have passed this often (every passage counts twice)."""

FEW = 0.05
"""Cuts per vertex with which a coarse search is content."""


def violated_cuts(graph: CutGraph, x: F64, least: float = 1e-4, each_edge: int = 8, most: int = 20_000) -> Cuts:
    """Cuts that ``x`` f64 (m,) breaks by more than ``least``, the worst first, ``each_edge`` through an edge at most.

    Empty only if no odd-cycle inequality is broken by more than ``least`` plus what the finest contraction hides
    (1e-6 for every edge of the cycle).
    """
    x = np.clip(x, 0.0, 1.0)
    cuts = Cuts.none()
    for settled in SETTLED:
        cuts = cuts.joined(_found(graph, x, settled, least, most))
        if len(cuts) >= FEW * graph.vertices:
            break
    if not len(cuts):
        return cuts
    broken = np.add.reduceat(np.where(cuts.odd, x[cuts.edges] - 1.0, -x[cuts.edges]), cuts.offsets[:-1]) + 1.0
    order = np.argsort(-broken, kind="stable")
    taken = _thin_out(cuts.offsets, cuts.edges, cuts.odd, order, each_edge, len(x))
    return cuts.chosen(order[taken])


def _found(graph: CutGraph, x: F64, settled: float, least: float, most: int) -> Cuts:
    room = 64 * most
    offsets, edges, odd = np.zeros(most + 1, np.int64), np.empty(room, np.int32), np.empty(room, np.int8)
    arrays = (graph.starts, graph.neighbours, graph.edges, graph.heads, graph.tails)
    found = _find(*arrays, x, settled, least, offsets, edges, odd)
    offsets = offsets[: found + 1].copy()
    return Cuts(offsets, edges[: offsets[-1]].copy(), odd[: offsets[-1]].copy())


@compiled
def _thin_out(offsets: I64, edges: I32, odd: I8, order: I64, each_edge: int, count: int) -> npt.NDArray[np.bool_]:
    """Which cuts to keep, the best first: none twice, and no edge in more than ``each_edge``."""
    used = np.zeros(count, np.int64)
    taken = np.zeros(len(order), np.bool_)
    slots = 1
    while slots < 4 * len(order):
        slots *= 2
    table = np.full(slots, -1, np.int64)
    hashes = np.zeros(len(order), np.uint64)
    for place in range(len(order)):
        cut = order[place]
        first, last = offsets[cut], offsets[cut + 1]
        word = np.uint64(0)
        crowded = False
        for k in range(first, last):
            crowded = crowded or used[edges[k]] >= each_edge
            z = np.uint64(2 * np.int64(edges[k]) + odd[k] + 1) * np.uint64(0x9E3779B97F4A7C15)
            z = (z ^ (z >> np.uint64(30))) * np.uint64(0xBF58476D1CE4E5B9)
            word += z ^ (z >> np.uint64(31))
        if crowded:
            continue
        slot = np.int64(word & np.uint64(slots - 1))
        twin = False
        while table[slot] >= 0:
            twin = twin or hashes[table[slot]] == word
            slot = (slot + 1) & (slots - 1)
        if twin:
            continue
        table[slot] = place
        hashes[place] = word
        taken[place] = True
        for k in range(first, last):
            used[edges[k]] += 1
    return taken


@compiled
def _find(
    starts: I64, neighbours: I32, edge_of: I32, heads: I32, tails: I32, x: F64, settled: float, least: float,
    offsets: I64, out_edges: I32, out_odd: I8,
) -> int:  # fmt: skip
    """Fill ``offsets``, ``out_edges`` and ``out_odd`` with broken cuts; returns how many."""
    size, count = len(starts) - 1, len(x)
    comp, parity = np.full(size, -1, np.int32), np.zeros(size, np.int8)
    parent, parent_edge, depth = np.full(size, -1, np.int32), np.full(size, -1, np.int32), np.zeros(size, np.int32)
    in_tree = np.zeros(count, np.bool_)
    queue = np.empty(size, np.int32)
    comps = 0
    for root in range(size):  # contract edges at 0 or 1, breadth first, so that tree paths are short
        if comp[root] >= 0:
            continue
        comp[root] = comps
        queue[0] = root
        begin, end = 0, 1
        while begin < end:
            u = queue[begin]
            begin += 1
            for place in range(starts[u], starts[u + 1]):
                v, e = neighbours[place], edge_of[place]
                if comp[v] < 0 and (x[e] < settled or x[e] > 1.0 - settled):
                    comp[v] = comps
                    parity[v] = parity[u] ^ (1 if x[e] > 0.5 else 0)
                    parent[v], parent_edge[v], depth[v] = u, e, depth[u] + 1
                    in_tree[e] = True
                    queue[end] = v
                    end += 1
        comps += 1

    found = 0
    walk_vertices, walk_edges = np.empty(8 * size + 16, np.int32), np.empty(8 * size + 16, np.int32)
    scratch = np.full(size, -1, np.int64)
    half_walk = np.empty(8 * size + 16, np.int32)
    walk_odd = np.empty(8 * size + 16, np.int8)
    live = 0
    live_starts = np.zeros(comps + 1, np.int64)
    for e in range(count):
        a, b = heads[e], tails[e]
        if comp[a] != comp[b]:
            live_starts[comp[a] + 1] += 1
            live_starts[comp[b] + 1] += 1
            live += 1
        elif not in_tree[e]:
            twisted = parity[a] ^ parity[b]
            wrong = x[e] if twisted == 0 else 1.0 - x[e]
            if wrong > least:  # the edge and the tree path between its ends
                length = tree_path(a, b, parent, parent_edge, depth, walk_vertices, walk_edges, half_walk)
                walk_edges[length] = e
                walk_vertices[length] = b
                for k in range(length):
                    walk_odd[k] = 1 if x[walk_edges[k]] > 0.5 else 0
                walk_odd[length] = 1 - twisted
                found = store_cycles(
                    length + 1, walk_vertices, walk_edges, walk_odd, starts, neighbours, edge_of, x, least, scratch,
                    offsets, out_edges, out_odd, found,
                )  # fmt: skip
                if found < 0:
                    return -found - 1
    for c in range(comps):
        live_starts[c + 1] += live_starts[c]
    filled = live_starts[:-1].copy()
    live_to, live_edge, live_straight = np.empty(2 * live, np.int32), np.empty(2 * live, np.int32), np.empty(2 * live)
    for e in range(count):
        a, b = comp[heads[e]], comp[tails[e]]
        if a != b:
            straight = x[e] if parity[heads[e]] == parity[tails[e]] else 1.0 - x[e]
            live_to[filled[a]], live_edge[filled[a]], live_straight[filled[a]] = b, e, straight
            filled[a] += 1
            live_to[filled[b]], live_edge[filled[b]], live_straight[filled[b]] = a, e, straight
            filled[b] += 1

    nodes = 2 * comps
    distance, mark = np.empty(nodes), np.full(nodes, -1, np.int64)
    done = np.full(nodes, -1, np.int64)
    back_node, back_edge = np.empty(nodes, np.int32), np.empty(nodes, np.int32)
    heap_key, heap_node = np.empty(4 * live + nodes + 16), np.empty(4 * live + nodes + 16, np.int32)
    covered = np.zeros(comps, np.int64)
    for root in range(comps):
        if live_starts[root + 1] == live_starts[root] or covered[root] >= COVER:
            continue
        heap_key[0], heap_node[0] = 0.0, 2 * root
        distance[2 * root], mark[2 * root] = 0.0, root
        back_node[2 * root], back_edge[2 * root] = -1, -1
        filled_heap = 1
        best, best_from, best_to, best_edge = 1.0 - least, -1, -1, -1
        while filled_heap > 0:
            key, node = heap_key[0], heap_node[0]
            if 2.0 * key >= best:  # whatever is met from here on is longer
                break
            filled_heap -= 1
            sift_down(heap_key, heap_node, filled_heap)
            if done[node] == root:
                continue
            done[node] = root
            if done[node ^ 1] == root and key + distance[node ^ 1] < best:
                best, best_from, best_to, best_edge = key + distance[node ^ 1], node, node, -1
            for place in range(live_starts[node >> 1], live_starts[(node >> 1) + 1]):
                e = live_edge[place]
                straight = live_straight[place]
                for crossing in range(2):
                    target = 2 * live_to[place] + ((node & 1) ^ crossing)
                    length = key + (straight if crossing == 0 else 1.0 - straight)
                    if done[target ^ 1] == root and e != back_edge[node] and length + distance[target ^ 1] < best:
                        best, best_from, best_to, best_edge = length + distance[target ^ 1], node, target, e
                    if 2.0 * length > best or done[target] == root:
                        continue
                    if mark[target] != root or length < distance[target]:
                        mark[target], distance[target] = root, length
                        back_node[target], back_edge[target] = node, e
                        sift_up(heap_key, heap_node, filled_heap, length, target)
                        filled_heap += 1
        if best_from < 0:
            continue
        length = unfold(
            best_from, best_to, best_edge, back_node, back_edge, heads, tails, comp, parity, parent, parent_edge,
            depth, x, walk_vertices, walk_edges, walk_odd, half_walk,
        )  # fmt: skip
        before = found
        found = store_cycles(
            length, walk_vertices, walk_edges, walk_odd, starts, neighbours, edge_of, x, least, scratch, offsets,
            out_edges, out_odd, found,
        )  # fmt: skip
        if found < 0:
            return -found - 1
        for k in range(offsets[before], offsets[found]):
            e = out_edges[k]
            if comp[heads[e]] != comp[tails[e]]:
                covered[comp[heads[e]]] += 1
                covered[comp[tails[e]]] += 1
    return found
