"""One replica of a dense problem: spins in order, decided a row of lanes ahead, rows of a full matrix on a flip."""

from __future__ import annotations

import numpy as np

from patchwalk.subsolvers.compiled import compiled
from patchwalk.subsolvers.contract import F64, I8, U64
from patchwalk.subsolvers.draws import GOLDEN
from patchwalk.subsolvers.lanes_bits import against_spins, load_lanes, lowest_bit, spread
from patchwalk.subsolvers.lanes_decisions import draws_after, flips_that_happen

LANES = 32


@compiled
def sweep_matrix(matrix: F64, spins: I8, local_fields: F64, coldness: float, stream: U64, sweeps: int) -> float:
    """Sweep all spins in order, in place; returns the energy change. ``matrix`` (n, n) is symmetric, zero diagonal.

    The decisions of 32 spins are taken at once, as if none of them flipped. The first that does flip stands; those of
    the spins after it are taken again, from the same random numbers and the new local fields, so that the outcome is
    that of one spin after the other.
    """
    none = np.uint32(0)
    size = len(spins)
    twice_cold, state = spread(none, 2.0 * coldness), stream[0]
    last_fields, last_spins = np.zeros(LANES), np.zeros(LANES, np.int8)
    change = 0.0
    for _ in range(sweeps):
        for row in range(0, size, LANES):
            draws = draws_after(none, state)
            state += np.uint64(LANES // 2) * GOLDEN
            count = min(LANES, size - row)
            open_lanes = np.uint32((np.uint64(1) << np.uint64(count)) - np.uint64(1))
            while True:
                if count == LANES:
                    halves = against_spins(load_lanes(none, local_fields, row), load_lanes(none, spins, row))
                else:
                    last_fields[:count] = local_fields[row:]
                    last_spins[:count] = spins[row:]
                    halves = against_spins(load_lanes(none, last_fields, 0), load_lanes(none, last_spins, 0))
                flips = np.uint32(flips_that_happen(none, halves, twice_cold, draws) & open_lanes)
                if not flips:
                    break
                lane = lowest_bit(flips)
                open_lanes = np.uint32(open_lanes & ~((np.uint64(2) << lane) - np.uint64(1)))
                spin = np.uint64(row) + lane
                change -= 2.0 * spins[spin] * local_fields[spin]
                spins[spin] = -spins[spin]
                twice = 2.0 * spins[spin]
                for other in range(size):
                    local_fields[other] += twice * matrix[spin, other]
    stream[0] = state
    return change


@compiled
def fields_from_matrix(matrix: F64, fields: F64, spins: I8) -> F64:
    """The local fields (n,) of a configuration, to the bit what ``Problem.local_fields`` gives, in vector loops."""
    local_fields = np.zeros(len(spins))
    for other in range(len(spins)):
        for spin in range(len(spins)):
            local_fields[spin] += matrix[other, spin] * spins[other]
    return local_fields + fields
