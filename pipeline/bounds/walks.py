"""Closed walks of a graph taken apart: into simple cycles, and these along their chords.

Kernels of :mod:`patchwalk.bounds.separation`.
"""

from __future__ import annotations

import numpy as np

from patchwalk.subsolvers.compiled import compiled
from patchwalk.subsolvers.contract import F64, I8, I32, I64


@compiled
def tree_path(a: int, b: int, parent: I32, parent_edge: I32, depth: I32, vertices: I32, edges: I32, half: I32) -> int:
    """The path from ``a`` to ``b`` within their tree: its vertices but the last, and its edges; returns its length."""
    length, behind = 0, 0
    while a != b:
        if depth[a] >= depth[b]:
            vertices[length], edges[length] = a, parent_edge[a]
            length += 1
            a = parent[a]
        else:
            half[behind] = b
            behind += 1
            b = parent[b]
    for k in range(behind - 1, -1, -1):
        vertices[length], edges[length] = parent[half[k]], parent_edge[half[k]]
        length += 1
    return length


@compiled
def store_cycles(
    length: int, vertices: I32, edges: I32, odd: I8, starts: I64, neighbours: I32, edge_of: I32, x: F64, least: float,
    scratch: I64, offsets: I64, out_edges: I32, out_odd: I8, found: int,
) -> int:  # fmt: skip
    """Store the broken simple chordless cycles of a closed walk; returns how many cuts there are, or minus one minus
    that once there is no room left. ``scratch`` is -1 everywhere and left so.
    """
    path_v, path_e, path_o = np.empty(length + 1, np.int32), np.empty(length, np.int32), np.empty(length, np.int8)
    top = 0
    for k in range(length + 1):
        v = vertices[k] if k < length else vertices[0]
        if scratch[v] >= 0:  # a simple cycle closes here
            begin = scratch[v]
            if top - begin >= 3:
                found = _store_simple(
                    path_v[begin:top], path_e[begin:top], path_o[begin:top], starts, neighbours, edge_of, x, least,
                    offsets, out_edges, out_odd, found,
                )  # fmt: skip
                if found < 0:
                    break
            for j in range(begin, top):
                scratch[path_v[j]] = -1
            top = begin
        if k < length:
            scratch[v] = top
            path_v[top], path_e[top], path_o[top] = v, edges[k], odd[k]
            top += 1
    for j in range(top):
        scratch[path_v[j]] = -1
    return found


@compiled
def _store_simple(
    vertices: I32, edges: I32, odd: I8, starts: I64, neighbours: I32, edge_of: I32, x: F64, least: float,
    offsets: I64, out_edges: I32, out_odd: I8, found: int,
) -> int:  # fmt: skip
    """Cut one simple cycle along its chords: each of the two parts gets the chord in the sense that makes it odd, and
    the two violations add up to that of the whole.
    """
    size = len(vertices)
    where = np.full(len(starts) - 1, -1, np.int32) if size > 64 else np.full(1, -1, np.int32)
    waiting_v, waiting_e, waiting_o = [vertices.copy()], [edges.copy()], [odd.copy()]
    while len(waiting_v) > 0:
        cycle_v, cycle_e, cycle_o = waiting_v.pop(), waiting_e.pop(), waiting_o.pop()
        length = len(cycle_v)
        broken, count = 1.0, 0
        for k in range(length):
            broken += x[cycle_e[k]] - 1.0 if cycle_o[k] else -x[cycle_e[k]]
            count += cycle_o[k]
        if count % 2 == 0 or broken <= least:
            continue
        if len(where) > 1:
            for k in range(length):
                where[cycle_v[k]] = k
        begin, end, chord = -1, -1, -1
        if length > 3:
            for k in range(length):
                for place in range(starts[cycle_v[k]], starts[cycle_v[k] + 1]):
                    j = -1
                    if len(where) > 1:
                        j = where[neighbours[place]]
                    else:
                        for i in range(k + 2, length):
                            if cycle_v[i] == neighbours[place]:
                                j = i
                                break
                    if j > k + 1 and j - k < length - 1:
                        begin, end, chord = k, j, edge_of[place]
                        break
                if chord >= 0:
                    break
        if len(where) > 1:
            for k in range(length):
                where[cycle_v[k]] = -1
        if chord < 0:
            first = offsets[found]
            if found + 1 >= len(offsets) or first + length > len(out_edges):
                return -found - 1
            for k in range(length):
                out_edges[first + k], out_odd[first + k] = cycle_e[k], cycle_o[k]
            found += 1
            offsets[found] = first + length
            continue
        inner = end - begin
        one_v, one_e, one_o = np.empty(inner + 1, np.int32), np.empty(inner + 1, np.int32), np.empty(inner + 1, np.int8)
        one_v[: inner + 1], one_e[:inner], one_o[:inner] = (
            cycle_v[begin : end + 1],
            cycle_e[begin:end],
            cycle_o[begin:end],
        )
        outer = length - inner
        two_v, two_e, two_o = np.empty(outer + 1, np.int32), np.empty(outer + 1, np.int32), np.empty(outer + 1, np.int8)
        for k in range(outer):
            place = (end + k) % length
            two_v[k], two_e[k], two_o[k] = cycle_v[place], cycle_e[place], cycle_o[place]
        two_v[outer] = cycle_v[begin]
        one_e[inner], two_e[outer] = chord, chord
        one_odd = 0
        for k in range(inner):
            one_odd += one_o[k]
        one_o[inner] = 1 - one_odd % 2
        two_o[outer] = one_odd % 2
        waiting_v.append(one_v)
        waiting_e.append(one_e)
        waiting_o.append(one_o)
        waiting_v.append(two_v)
        waiting_e.append(two_e)
        waiting_o.append(two_o)
    return found
