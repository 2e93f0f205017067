"""One replica of a sparse problem: batches of spins that do not touch, decided in lanes, flipped one by one.

A flip is a walk over a row of couplings. On problems too large for the cache it is these rows that take the time, so
that rows packed four bytes a neighbour (``sweep_tables.Palette``) are worth having wherever there are few different
couplings.
"""

from __future__ import annotations

import numpy as np

from patchwalk.search.sweep_tables import CODE_SHIFT, PLACE_MASK, U32
from patchwalk.subsolvers.compiled import compiled
from patchwalk.subsolvers.contract import F64, I8, I64, U64
from patchwalk.subsolvers.draws import GOLDEN
from patchwalk.subsolvers.lanes_bits import load_lanes, lowest_bit, prefetch_at, spread
from patchwalk.subsolvers.lanes_decisions import draws_after, flips_that_happen

LANES = 32
AHEAD = 8
"""How many flips ahead rows are asked for."""


@compiled
def choose_flips(
    batch: U32, coldness: float, spins: I8, local_fields: F64, stream: U64, rises: F64, chosen: U32
) -> tuple[int, float]:
    """Decide every spin of a batch: how many flip, and by how much the energy then changes.

    Which ones stands in ``chosen`` as places within the batch; it and ``rises`` are longer than the batch by LANES.
    """
    none = np.uint32(0)
    cold, state = spread(none, coldness), stream[0]
    for place in range(len(batch)):
        spin = batch[place]
        rises[place] = -2.0 * spins[spin] * local_fields[spin]
    count, change = 0, 0.0
    for row in range(0, len(batch), LANES):
        flips = flips_that_happen(none, load_lanes(none, rises, row), cold, draws_after(none, state))
        state += np.uint64(LANES // 2) * GOLDEN
        if len(batch) - row < LANES:
            flips = np.uint32(flips & ((np.uint32(1) << np.uint32(len(batch) - row)) - np.uint32(1)))
        while flips:
            place = row + int(lowest_bit(flips))
            flips = np.uint32(flips & (flips - np.uint32(1)))
            change += rises[place]
            chosen[count] = place
            count += 1
    stream[0] = state
    return count, change


@compiled
def sweep_listed(
    order: U32,
    batch_starts: I64,
    row_starts: I64,
    neighbours: U32,
    couplings: F64,
    spins: I8,
    local_fields: F64,
    coldness: float,
    stream: U64,
    sweeps: int,
) -> float:
    """Sweep all batches in order over a problem's own lists, in place; returns the energy change.

    ``coldness`` as in ``lanes_decisions``. Neighbours come unsigned: numba then need not look for negative indices,
    which makes a flip up to twice as fast.
    """
    longest = np.max(batch_starts[1:] - batch_starts[:-1])
    rises, chosen = np.zeros(longest + LANES), np.zeros(longest + LANES, np.uint32)
    change = 0.0
    for _ in range(sweeps):
        for number in range(len(batch_starts) - 1):
            batch = order[batch_starts[number] : batch_starts[number + 1]]
            count, gained = choose_flips(batch, coldness, spins, local_fields, stream, rises, chosen)
            change += gained
            for flip in range(count):
                soon = row_starts[batch[chosen[min(flip + AHEAD, count - 1)]]]
                prefetch_at(neighbours, soon)
                prefetch_at(couplings, soon)
                spin = batch[chosen[flip]]
                spins[spin] = -spins[spin]
                twice = 2.0 * spins[spin]
                for entry in range(row_starts[spin], row_starts[spin + 1]):
                    local_fields[neighbours[entry]] += twice * couplings[entry]
    return change


@compiled
def sweep_packed(
    order: U32,
    batch_starts: I64,
    row_starts: U32,
    words: U32,
    values: F64,
    spins: I8,
    local_fields: F64,
    coldness: float,
    stream: U64,
    sweeps: int,
) -> float:
    """The same, to the bit, over packed rows: ``row_starts`` (n+1,), ``words`` (nnz,) and ``values`` of a palette."""
    longest = np.max(batch_starts[1:] - batch_starts[:-1])
    rises, chosen = np.zeros(longest + LANES), np.zeros(longest + LANES, np.uint32)
    change = 0.0
    for _ in range(sweeps):
        for number in range(len(batch_starts) - 1):
            begin, end = batch_starts[number], batch_starts[number + 1]
            batch, rows = order[begin:end], row_starts[begin : end + 1]
            count, gained = choose_flips(batch, coldness, spins, local_fields, stream, rises, chosen)
            change += gained
            for flip in range(count):
                prefetch_at(words, rows[chosen[min(flip + AHEAD, count - 1)]])
                soon = rows[chosen[min(flip + AHEAD // 2, count - 1)] + np.uint32(1)]
                if soon > 0:  # the neighbour furthest on is the least likely in cache
                    prefetch_at(local_fields, words[soon - np.uint32(1)] & PLACE_MASK)
                place = chosen[flip]
                spin = batch[place]
                spins[spin] = -spins[spin]
                twice = 2.0 * spins[spin]
                for entry in range(rows[place], rows[place + np.uint32(1)]):
                    word = words[entry]
                    local_fields[word & PLACE_MASK] += twice * values[word >> CODE_SHIFT]
    return change
