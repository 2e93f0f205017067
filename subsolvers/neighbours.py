"""A cluster as lists of neighbours: what every method that flips one spin at a time works on, sparse or dense."""

from __future__ import annotations

import numpy as np

from patchwalk.subsolvers.compiled import compiled
from patchwalk.subsolvers.contract import F64, I8, I32, I64, U64, ClusterBatch, Edges
from patchwalk.subsolvers.draws import next_word


def edges_of(batch: ClusterBatch) -> Edges:
    """The couplings of a batch as edges, whichever way they came."""
    if batch.edges is not None:
        return batch.edges
    assert batch.couplings is not None
    rows, first, second = np.nonzero(np.triu(batch.couplings, 1))
    return Edges(
        offsets=np.searchsorted(rows, np.arange(len(batch) + 1)),
        pairs=np.stack([first, second], axis=1),
        weights=batch.couplings[rows, first, second],
    )


TIE_CHANCE = 0.9
"""How often a Metropolis sweep flips where the energy stays as it is; any chance keeps detailed balance."""


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
