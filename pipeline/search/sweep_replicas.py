"""Many replicas side by side: one lane each, their spins as the bits of one word per site.

A local field is summed afresh from the neighbours' spins whenever a spin is visited: it costs one masked subtraction
per neighbour and row of lanes, takes as long at any temperature, and leaves no rounding to pile up. Where couplings
and fields are small whole multiples of one number the sums run in float32, and are exact; elsewhere in float64.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from patchwalk.problem.ising import Problem
from patchwalk.search.sweep_tables import U32, Batches, batches_of, common_unit
from patchwalk.subsolvers.compiled import compiled
from patchwalk.subsolvers.contract import F64, I8, I32, I64, U64
from patchwalk.subsolvers.lanes_bits import (
    add_lanes,
    add_where,
    against_bits,
    less_where,
    load_lanes,
    spread,
    store_lanes,
    with_spins,
)
from patchwalk.subsolvers.lanes_decisions import (
    coldness_at,
    flips_that_happen,
    lower_half,
    next_states,
    upper_half,
    words_of,
)

Floats = npt.NDArray[np.float32] | F64
Words = npt.NDArray[np.uint16] | U32

NARROW, WIDE = 16, 32
TILE = 64
"""Sites whose local fields are turned from one row per site into one row per replica at a time."""

STRETCH = 2048
"""Sites packed into words at a time, so that the words stay in cache while replica after replica adds its bit."""

EXACT = 2.0**23
"""Twice this many units is where float32 stops counting in ones."""


@dataclass(frozen=True, eq=False)
class LaneTables:
    """A problem in the order of its batches, in units of ``unit`` energies.

    ``row_starts`` i64 (n+1,) and ``neighbours`` u32 (nnz,) as in a problem, ``quadruples`` (nnz,) four times the
    couplings, ``highest`` (n,) twice the local field where all spins are +1: a neighbour that is -1 takes a quadruple
    off. Floats are float32 where that is exact.
    """

    batches: Batches
    row_starts: I64
    neighbours: U32
    quadruples: Floats
    highest: Floats
    unit: float


def lane_tables(problem: Problem, batches: Batches | None = None) -> LaneTables:
    """Lay a problem out for :func:`sweep_lanes`."""
    batches = batches_of(problem) if batches is None else batches
    # within one batch a lane adds up the rises of as many flips as there are spins, each at most twice a local field
    unit = common_unit(problem, EXACT / max(1, batches.longest))
    dtype = np.dtype(np.float64 if unit is None else np.float32)
    unit = 1.0 if unit is None else unit
    places = np.empty(len(problem), np.uint32)
    places[batches.order] = np.arange(len(problem), dtype=np.uint32)
    degrees = np.diff(problem.row_starts)[batches.order]
    row_starts = np.concatenate([[0], np.cumsum(degrees)]).astype(np.int64)
    neighbours = np.empty(len(problem.neighbours), np.uint32)
    quadruples, highest = np.empty(len(neighbours), dtype), np.empty(len(problem), dtype)
    _lay_out(
        batches.order, places, problem.row_starts, problem.neighbours, problem.couplings, problem.fields, unit,
        row_starts, neighbours, quadruples, highest,
    )  # fmt: skip
    return LaneTables(batches, row_starts, neighbours, quadruples, highest, unit)


@compiled
def _lay_out(
    order: U32,
    places: U32,
    row_starts: I64,
    neighbours: I32,
    couplings: F64,
    fields: F64,
    unit: float,
    new_starts: I64,
    new_neighbours: U32,
    quadruples: Floats,
    highest: Floats,
) -> None:
    for place in range(len(order)):
        spin, entry = order[place], new_starts[place]
        total = fields[spin] / unit
        for old in range(row_starts[spin], row_starts[spin + 1]):
            coupling = couplings[old] / unit
            new_neighbours[entry] = places[neighbours[old]]
            quadruples[entry] = 4.0 * coupling
            total += coupling
            entry += 1
        highest[place] = 2.0 * total


def sweep_side_by_side(
    problem: Problem,
    tables: LaneTables,
    spins: I8,
    local_fields: F64 | None,
    temperatures: F64,
    seeds: U64,
    sweeps: int,
) -> F64:
    """Sweep R replicas (R, n) in place; returns their energy changes f64 (R,). See ``Carrier.sweep_replicas``."""
    replicas = len(spins)
    changes = np.zeros(replicas)
    for first in range(0, replicas, WIDE):
        count = min(WIDE, replicas - first)
        width = NARROW if count <= NARROW else WIDE
        own = slice(first, first + count)
        coldness = np.full(width, -np.inf)
        coldness[:count] = [coldness_at(temperature) for temperature in temperatures[own]]
        states, gained = np.zeros(width, np.uint64), np.zeros(width)
        states[:count] = seeds[own]
        words: Words = np.zeros(len(problem), np.uint16) if width == NARROW else np.zeros(len(problem), np.uint32)
        gather_bits(spins[own], words)
        bits: Words = words[tables.batches.order]
        scaled = _in_kind(coldness * tables.unit, tables.highest)
        sweep_lanes(
            tables.row_starts, tables.neighbours, tables.quadruples, tables.highest, tables.batches.starts, bits,
            states, scaled, gained, sweeps,
        )  # fmt: skip
        words[tables.batches.order] = bits
        scatter_bits(words, spins[own])
        if local_fields is not None:
            fields_from_bits(
                problem.row_starts, problem.neighbours.view(np.uint32), problem.couplings, problem.fields, words,
                local_fields[own],
            )  # fmt: skip
        changes[own] = gained[:count] * tables.unit
    return changes


def _in_kind(numbers: F64, like: Floats) -> Floats:
    with np.errstate(over="ignore"):  # beyond float32 it is as cold as can be
        return numbers.astype(np.float32) if like.dtype == np.float32 else numbers


@compiled
def sweep_lanes(
    row_starts: I64,
    neighbours: U32,
    quadruples: Floats,
    highest: Floats,
    batch_starts: I64,
    bits: Words,
    states: U64,
    coldness: Floats,
    changes: F64,
    sweeps: int,
) -> None:
    """Sweep as many replicas as a word of ``bits`` (n,) has bits, in place; adds energy changes to ``changes``.

    ``states`` are the replicas' random streams; a word of a stream serves two spins, 32 bits each. Lanes never mix.
    The order of batches keeps neighbours apart in time, so that the processor can work on several spins at once.
    """
    none, nothing = bits.dtype.type(0), highest.dtype.type(0)
    state, cold = load_lanes(none, states, 0), load_lanes(none, coldness, 0)
    total = load_lanes(none, changes, 0)
    words = words_of(state)
    for _ in range(sweeps):
        for batch in range(len(batch_starts) - 1):
            gained = spread(none, nothing)
            for spin in range(batch_starts[batch], batch_starts[batch + 1]):
                if spin & 1 == 0:
                    state = next_states(state)
                    words = words_of(state)
                else:
                    words = upper_half(words)
                rises = spread(none, highest[spin])
                for entry in range(row_starts[spin], row_starts[spin + 1]):
                    rises = less_where(rises, bits[neighbours[entry]], quadruples[entry])
                rises = against_bits(rises, bits[spin])
                flips = flips_that_happen(none, rises, cold, lower_half(words))
                bits[spin] ^= flips
                gained = add_where(gained, flips, rises)
            total = add_lanes(total, gained)
    store_lanes(changes, 0, total)


@compiled
def gather_bits(spins: I8, words: Words) -> None:
    """Set bit r of ``words`` (n,) wherever ``spins`` (R, n) of replica r is -1; the words begin as zeros.

    Slices, here and below, tell numba that no index is negative: only then do these loops run in vectors.
    """
    for begin in range(0, len(words), STRETCH):
        part = words[begin : begin + STRETCH]
        for replica in range(len(spins)):
            row, bit = spins[replica, begin : begin + STRETCH], np.int32(1) << np.int32(replica)
            for site in range(len(part)):
                part[site] |= words.dtype.type((np.int32(row[site]) >> np.int32(7)) & bit)


@compiled
def scatter_bits(words: Words, spins: I8) -> None:
    """Fill ``spins`` (R, n) from the bits of ``words`` (n,)."""
    for begin in range(0, len(words), STRETCH):
        part = words[begin : begin + STRETCH]
        for replica in range(len(spins)):
            row, bit = spins[replica, begin : begin + STRETCH], np.uint32(1) << np.uint32(replica)
            for site in range(len(part)):
                row[site] = np.int8(-1) if part[site] & bit else np.int8(1)


@compiled
def fields_from_bits(
    row_starts: I64, neighbours: U32, couplings: F64, fields: F64, words: Words, local_fields: F64
) -> None:
    """Fill ``local_fields`` (R, n) from the spins in ``words`` (n,), to the bit what ``Problem.local_fields`` gives."""
    none = words.dtype.type(0)
    tile = np.empty((TILE, NARROW if words.itemsize == 2 else WIDE))
    flat = tile.reshape(-1)
    for begin in range(0, len(words), TILE):
        for index in range(min(TILE, len(words) - begin)):
            site, total = begin + index, spread(none, 0.0)
            for entry in range(row_starts[site], row_starts[site + 1]):
                total = with_spins(total, words[neighbours[entry]], couplings[entry])
            store_lanes(flat, index * tile.shape[1], add_lanes(spread(none, fields[site]), total))
        for replica in range(len(local_fields)):
            row, column = local_fields[replica, begin : begin + TILE], tile[:, replica]
            for index in range(len(row)):
                row[index] = column[index]
