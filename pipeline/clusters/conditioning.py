"""Conditioning: the frozen boundary folded into a cluster's fields.

With every spin outside the cluster held, the whole energy differs from the cluster's own energy by a constant, so an
energy change inside the cluster is the energy change of the problem, exactly.
"""

from __future__ import annotations

from typing import Any

import numpy as np
import numpy.typing as npt

from patchwalk.problem.ising import Problem
from patchwalk.subsolvers.compiled import compiled
from patchwalk.subsolvers.contract import DENSE_LIMIT, F64, I8, I32, I64, U64, ClusterBatch, Edges


def condition(
    problem: Problem,
    members: I32,
    spins: I8,
    local_fields: F64,
    temperature: float | F64,
    seeds: U64,
    places: I32,
    replicas: I64 | None = None,
) -> ClusterBatch:
    """The clusters ``members`` i32 (B, k), conditioned on everything else.

    ``spins`` i8 and ``local_fields`` f64, which holds h_i + sum_j J_ij s_j of the whole configuration, are (n,), or
    (R, n) with ``replicas`` i64 (B,) saying which of the R configurations a cluster was cut from. ``temperature`` is
    one for all or f64 (B,); ``places`` i32 (n,) is scratch that is -1 everywhere and left so. Couplings come dense up
    to k = 64 and as edges above.
    """
    rows, size = members.shape
    if replicas is None:
        spins, local_fields, replicas = spins[None], local_fields[None], np.zeros(rows, np.int64)
    fields, own = np.empty((rows, size)), np.empty((rows, size), np.int8)
    temperatures = temperature if isinstance(temperature, np.ndarray) else np.full(rows, temperature, np.float64)
    graph = (problem.row_starts, problem.neighbours, problem.couplings)
    if size <= DENSE_LIMIT:
        couplings = np.zeros((rows, size, size))
        _fold_dense(*graph, members, replicas, spins, local_fields, places, fields, own, couplings)
        _lock(fields, own, couplings)
        return ClusterBatch(fields, own, temperatures, seeds, couplings=couplings)
    offsets = np.zeros(rows + 1, np.int64)
    _count_inner(*graph[:2], members, places, offsets)
    pairs, weights = np.empty((offsets[-1], 2), np.int32), np.empty(offsets[-1])
    _fold_sparse(*graph, members, replicas, spins, local_fields, places, fields, own, offsets, pairs, weights)
    _lock(fields, own, offsets, pairs, weights)
    return ClusterBatch(fields, own, temperatures, seeds, edges=Edges(offsets, pairs, weights))


def _lock(*arrays: npt.NDArray[Any]) -> None:
    """Nobody else holds these arrays: a batch takes what is read-only as it is and copies the rest."""
    for array in arrays:
        array.flags.writeable = False


@compiled
def _coupling(neighbours: I32, couplings: F64, first: int, last: int, spin: int) -> float:
    """The coupling to ``spin`` in one row of the matrix, by bisection; zero where there is none."""
    while first < last:
        middle = (first + last) // 2
        if neighbours[middle] < spin:
            first = middle + 1
        elif neighbours[middle] > spin:
            last = middle
        else:
            return couplings[middle]
    return 0.0


@compiled
def _fold_dense(
    row_starts: I64,
    neighbours: I32,
    couplings: F64,
    members: I32,
    replicas: I64,
    all_spins: I8,
    all_local_fields: F64,
    places: I32,
    fields: F64,
    own: I8,
    inner: F64,
) -> None:
    size = members.shape[1]
    for row in range(len(members)):
        cluster = members[row]
        spins, local_fields = all_spins[replicas[row]], all_local_fields[replicas[row]]
        for i in range(size):
            places[cluster[i]] = i
        for i in range(size):
            spin = cluster[i]
            own[row, i] = spins[spin]
            field = local_fields[spin]
            first, last = row_starts[spin], row_starts[spin + 1]
            if last - first > 8 * size:  # a dense row: look the members up instead of reading all of it
                for j in range(size):
                    coupling = _coupling(neighbours, couplings, first, last, cluster[j])
                    inner[row, i, j] = coupling
                    field -= coupling * spins[cluster[j]]
            else:
                for edge in range(first, last):
                    place = places[neighbours[edge]]
                    if place >= 0:
                        inner[row, i, place] = couplings[edge]
                        field -= couplings[edge] * spins[neighbours[edge]]
            fields[row, i] = field
        for i in range(size):
            places[cluster[i]] = -1


@compiled
def _count_inner(row_starts: I64, neighbours: I32, members: I32, places: I32, offsets: I64) -> None:
    for row in range(len(members)):
        offsets[row + 1] = offsets[row]
        for i in range(members.shape[1]):
            places[members[row, i]] = i
        for i in range(members.shape[1]):
            for edge in range(row_starts[members[row, i]], row_starts[members[row, i] + 1]):
                if places[neighbours[edge]] > i:
                    offsets[row + 1] += 1
        for i in range(members.shape[1]):
            places[members[row, i]] = -1


@compiled
def _fold_sparse(
    row_starts: I64,
    neighbours: I32,
    couplings: F64,
    members: I32,
    replicas: I64,
    all_spins: I8,
    all_local_fields: F64,
    places: I32,
    fields: F64,
    own: I8,
    offsets: I64,
    pairs: I32,
    weights: F64,
) -> None:
    size = members.shape[1]
    for row in range(len(members)):
        slot = offsets[row]
        spins, local_fields = all_spins[replicas[row]], all_local_fields[replicas[row]]
        for i in range(size):
            places[members[row, i]] = i
        for i in range(size):
            spin = members[row, i]
            own[row, i] = spins[spin]
            field = local_fields[spin]
            for edge in range(row_starts[spin], row_starts[spin + 1]):
                place = places[neighbours[edge]]
                if place >= 0:
                    field -= couplings[edge] * spins[neighbours[edge]]
                if place > i:
                    pairs[slot, 0] = i
                    pairs[slot, 1] = place
                    weights[slot] = couplings[edge]
                    slot += 1
            fields[row, i] = field
        for i in range(size):
            places[members[row, i]] = -1
