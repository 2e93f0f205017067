"""The kernels of in-cluster Metropolis: eight chains side by side, or one along lists of neighbours.

Both make the same decisions from the same numbers and end the same to the last bit, so that it is a matter of speed
alone which of them a chain is run by. Chains are numbered row by row, shots within a row.
"""

from __future__ import annotations

import numpy as np

from patchwalk.subsolvers.allowances import TIE_ALLOWANCE, draw_allowances, open_streams
from patchwalk.subsolvers.compiled import compiled
from patchwalk.subsolvers.contract import F64, I8, I32, I64, U64
from patchwalk.subsolvers.lockstep import (
    LANES,
    Pack,
    add,
    add_product,
    anywhere,
    both,
    differ,
    either,
    load,
    multiply,
    not_above,
    spread,
    store,
    where,
)
from patchwalk.subsolvers.neighbours import find_local_fields, lists_of, turn, typical_field


@compiled
def run_alone(
    chains: tuple[int, int],
    fields: F64,
    edges: tuple[I64, I32, F64],
    spins: I8,
    seeds: U64,
    temperatures: F64,
    factors: F64,
    held: bool,
    outcomes: I8,
    rises: F64,
) -> None:
    """Run the chains from ``chains[0]`` to before ``chains[1]``, one after the other.

    In a sweep the temperature is ``factors`` f64 (sweeps,) times the typical field of the cluster, or, if ``held``, the
    row's own. Fills ``outcomes`` i8 (B, m, k) and ``rises`` f64 (B,), the energy by which the last shot of each row
    lies above the incumbent. ``edges`` are offsets, pairs and weights, those of the first chain's row first.
    """
    size, shots = outcomes.shape[2], outcomes.shape[1]
    states, allowances, local = np.empty(size, np.uint64), np.empty(size), np.empty(size)
    first = chains[0] // shots
    lists, listed = lists_of(*edges, 0, size), first
    for number in range(chains[0], chains[1]):
        row, shot = number // shots, number % shots
        if row > listed:
            lists, listed = lists_of(*edges, row - first, size), row
        starts, neighbours, strengths = lists
        chain = outcomes[row, shot]
        chain[:] = spins[row]
        find_local_fields(fields[row], chain, starts, neighbours, strengths, local)
        unit = temperatures[row] if held else typical_field(fields[row], starts, strengths)
        open_streams(seeds[row], shot, 0, 1, states)
        rises[row] = 0.0
        for sweep in range(len(factors)):
            draw_allowances(states, size, allowances)
            temperature = unit if held else unit * factors[sweep]
            backwards = held and sweep % 2 == 1
            for step in range(size):
                i = size - 1 - step if backwards else step
                rise = -2.0 * chain[i] * local[i]
                if rise <= temperature * allowances[i] and (rise != 0.0 or allowances[i] >= TIE_ALLOWANCE):
                    rises[row] += rise
                    turn(i, chain, local, starts, neighbours, strengths)


@compiled
def run_abreast(
    chains: tuple[int, int],
    fields: F64,
    couplings: F64,
    spins: I8,
    seeds: U64,
    temperatures: F64,
    factors: F64,
    held: bool,
    room: F64,
    outcomes: I8,
    rises: F64,
) -> None:
    """As ``run_alone``, eight at a time, with couplings f64 (B, k, k); an incomplete last group repeats its last chain.

    ``room`` f64 (k (k + 3), 8) is scratch.
    """
    size, shots = outcomes.shape[2], outcomes.shape[1]
    local, turned, allowances = room[:size], room[size : 2 * size], room[2 * size : 3 * size]
    strengths, unit = room[3 * size :], np.empty(LANES)
    starts, neighbours = np.empty(size + 1, np.int64), np.empty(size * size, np.int32)
    states, rows = np.empty(size * LANES, np.uint64), np.empty(LANES, np.int64)
    for first in range(chains[0], chains[1], LANES):
        for lane in range(LANES):
            chain = min(first + lane, chains[1] - 1)
            rows[lane] = chain // shots
            open_streams(seeds[rows[lane]], chain % shots, lane, LANES, states)
            unit[lane] = temperatures[rows[lane]]
            for i in range(size):
                turned[i, lane] = spins[rows[lane], i]
                local[i, lane] = fields[rows[lane], i]
        squares = _list_together(rows, couplings, local, starts, neighbours, strengths)
        if not held:
            store(unit, 0, squares)
            for lane in range(LANES):
                unit[lane] = np.sqrt(unit[lane] / size)
        for i in range(size):
            spin = load(turned, i)
            for place in range(starts[i], starts[i + 1]):
                j = neighbours[place]
                store(local, j, add_product(load(local, j), load(strengths, place), spin))
        height = spread(0.0)
        for sweep in range(len(factors)):
            draw_allowances(states, size, allowances.reshape(-1))
            temperature = load(unit, 0) if held else multiply(load(unit, 0), spread(factors[sweep]))
            backwards = held and sweep % 2 == 1
            height = _sweep_together(
                turned, local, starts, neighbours, strengths, allowances, temperature, backwards, height
            )
        store(unit, 0, height)
        for lane in range(min(LANES, chains[1] - first)):
            rises[rows[lane]] = unit[lane]
            for i in range(size):
                outcomes[rows[lane], (first + lane) % shots, i] = turned[i, lane]


@compiled
def _list_together(rows: I64, couplings: F64, local: F64, starts: I64, neighbours: I32, strengths: F64) -> Pack:
    """Lists of neighbours with the strengths of eight rows side by side, of all pairs coupled in any of them.

    Returns the sums of h_i^2 and J_ij^2 over i and j. ``strengths`` and ``neighbours`` have room for all k^2 pairs.
    """
    squares = spread(0.0)
    filled = 0
    for i in range(len(local)):
        starts[i] = filled
        squares = add(squares, multiply(load(local, i), load(local, i)))
        for lane in range(LANES):
            own = couplings[rows[lane], i]
            for j in range(len(own)):
                strengths[starts[i] + j, lane] = own[j]
        for j in range(len(local)):
            strength = load(strengths, starts[i] + j)
            squares = add(squares, multiply(strength, strength))
            store(strengths, filled, strength)  # in place: only entries read already are written over
            neighbours[filled] = j
            filled += anywhere(differ(strength, spread(0.0)))
    starts[len(local)] = filled
    return squares


@compiled
def _sweep_together(
    turned: F64,
    local: F64,
    starts: I64,
    neighbours: I32,
    strengths: F64,
    allowances: F64,
    temperature: Pack,
    backwards: bool,
    height: Pack,
) -> Pack:
    """One sweep of eight chains; ``turned`` f64 (k, 8) holds their spins; returns ``height`` with its change added."""
    size = len(turned)
    nothing, minus_two, tie_allowance = spread(0.0), spread(-2.0), spread(TIE_ALLOWANCE)
    for step in range(size):
        i = size - 1 - step if backwards else step
        spin, allowance = load(turned, i), load(allowances, i)
        flip = multiply(minus_two, spin)
        rise = multiply(flip, load(local, i))
        free = either(differ(rise, nothing), not_above(tie_allowance, allowance))
        accepted = both(free, not_above(rise, multiply(temperature, allowance)))
        if anywhere(accepted):
            flip = where(accepted, flip, nothing)
            store(turned, i, add(spin, flip))
            height = add(height, where(accepted, rise, nothing))
            for place in range(starts[i], starts[i + 1]):
                j = neighbours[place]
                store(local, j, add_product(load(local, j), load(strengths, place), flip))
    return height
