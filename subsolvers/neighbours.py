"""A cluster as lists of neighbours: what every method that flips one spin at a time works on, sparse or dense."""

from __future__ import annotations

from dataclasses import replace
from typing import NamedTuple

import numpy as np

from patchwalk.subsolvers.compiled import compiled
from patchwalk.subsolvers.contract import DENSE_LIMIT, F64, I8, I32, I64, U64, ClusterBatch, Edges
from patchwalk.subsolvers.draws import next_word


class Lists(NamedTuple):
    """One cluster's lists of neighbours: those of spin i stand at ``starts[i]`` to ``starts[i+1]``.

    ``starts`` i64 (k+1,); ``neighbours`` i32 and ``strengths`` f64 (2E,), every edge once from either end.
    """

    starts: I64
    neighbours: I32
    strengths: F64


def edges_of(batch: ClusterBatch) -> Edges:
    """The couplings of a batch as edges, whichever way they came; of dense ones in rising order."""
    if batch.edges is not None:
        return batch.edges
    assert batch.couplings is not None
    return Edges(*list_edges(batch.couplings))


def with_matrices(batch: ClusterBatch) -> ClusterBatch:
    """The same batch, with dense couplings if its clusters are small enough for that."""
    if batch.edges is None or batch.size > DENSE_LIMIT:
        return batch
    couplings = np.zeros((len(batch), batch.size, batch.size))
    row = np.repeat(np.arange(len(batch)), np.diff(batch.edges.offsets))
    first, second = batch.edges.pairs.T
    couplings[row, first, second] = couplings[row, second, first] = batch.edges.weights
    return replace(batch, couplings=couplings, edges=None)


@compiled
def list_edges(couplings: F64) -> tuple[I64, I32, F64]:
    """Offsets, pairs and weights of dense couplings (B, k, k), pairs rising in each row."""
    rows, size = couplings.shape[:2]
    offsets, count = np.zeros(rows + 1, np.int64), 0
    for row in range(rows):
        for first in range(size):
            for second in range(first + 1, size):
                count += couplings[row, first, second] != 0.0
        offsets[row + 1] = count
    pairs, weights = np.empty((count, 2), np.int32), np.empty(count)
    edge = 0
    for row in range(rows):
        for first in range(size):
            for second in range(first + 1, size):
                if couplings[row, first, second] != 0.0:
                    pairs[edge, 0], pairs[edge, 1] = first, second
                    weights[edge] = couplings[row, first, second]
                    edge += 1
    return offsets, pairs, weights


TIE_CHANCE = 0.9
"""How often a Metropolis sweep flips where the energy stays as it is; any chance keeps detailed balance."""


@compiled
def lists_of(offsets: I64, pairs: I32, weights: F64, row: int, size: int) -> Lists:
    """The lists of neighbours of one row of a batch, from its edges."""
    begin, end = offsets[row], offsets[row + 1]
    starts = np.empty(size + 1, np.int64)
    neighbours, strengths = np.empty(2 * (end - begin), np.int32), np.empty(2 * (end - begin))
    list_neighbours(pairs[begin:end], weights[begin:end], starts, neighbours, strengths)
    return Lists(starts, neighbours, strengths)


@compiled
def list_neighbours(pairs: I32, weights: F64, starts: I64, neighbours: I32, strengths: F64) -> None:
    """Lists of neighbours from pairs (E, 2): those of spin i stand at ``starts[i]`` to ``starts[i+1]``."""
    starts[:] = 0
    for edge in range(len(weights)):
        starts[pairs[edge, 0] + 1] += 1
        starts[pairs[edge, 1] + 1] += 1
    for i in range(len(starts) - 1):
        starts[i + 1] += starts[i]
    filled = starts[:-1].copy()
    for edge in range(len(weights)):
        for side in range(2):
            spin, other = pairs[edge, side], pairs[edge, 1 - side]
            neighbours[filled[spin]] = other
            strengths[filled[spin]] = weights[edge]
            filled[spin] += 1


@compiled
def find_local_fields(fields: F64, spins: I8, starts: I64, neighbours: I32, strengths: F64, local: F64) -> None:
    """Fill ``local`` (k,) with h_i + sum_j J_ij s_j."""
    for i in range(len(spins)):
        local[i] = fields[i]
        for place in range(starts[i], starts[i + 1]):
            local[i] += strengths[place] * spins[neighbours[place]]


@compiled
def turn(spin: int, spins: I8, local: F64, starts: I64, neighbours: I32, strengths: F64) -> None:
    """Flip one spin and bring its neighbours' local fields up to date."""
    spins[spin] = -spins[spin]
    change = 2.0 * spins[spin]
    for place in range(starts[spin], starts[spin + 1]):
        local[neighbours[place]] += change * strengths[place]


@compiled
def typical_field(fields: F64, starts: I64, strengths: F64) -> float:
    """Root mean square over spins of sqrt(h_i^2 + sum_j J_ij^2), the unit of temperature inside a cluster."""
    squares = 0.0
    for i in range(len(fields)):
        squares += fields[i] ** 2
        for place in range(starts[i], starts[i + 1]):
            squares += strengths[place] ** 2
    return float(np.sqrt(squares / len(fields)))


@compiled
def scatter(spins: I8, stream: U64) -> None:
    """A uniformly random configuration."""
    word = np.uint64(0)
    for i in range(len(spins)):
        if i % 64 == 0:
            word = next_word(stream)
        spins[i] = 1 - 2 * np.int8(word & np.uint64(1))
        word >>= np.uint64(1)
