"""The tables of variable elimination: filled on the way forward, drawn from on the way back.

The table of a spin holds, for every configuration of its scope, what the spins eliminated so far contribute: the
lowest energy ``E`` that they can reach, and a weight ``w``, so that their Boltzmann sum is ``w exp(-E / T)``. With the
lowest energy apart, nothing overflows or vanishes at any temperature, and at zero temperature ``w`` counts the minima.
Bit p of a table's index says whether the p-th spin of the scope is -1; its first spin, the next to go, is the lowest
bit. A spin's partial sums for both its values are worked off in short blocks that stay in the nearest cache.

Where keeping all tables takes too much memory, the order is cut into stretches: only tables that reach beyond their
stretch are kept, and the others are filled a second time on the way back.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np

from patchwalk.subsolvers.compiled import compiled
from patchwalk.subsolvers.contract import F64, I8, I32, I64, U64
from patchwalk.subsolvers.draws import next_unit
from patchwalk.subsolvers.elimination_layout import Layout, receiver
from patchwalk.subsolvers.elimination_order import Plan
from patchwalk.subsolvers.elimination_ranked import Ranked, by_rank, chance_of_up
from patchwalk.subsolvers.spectrum import boltzmann_factor

BLOCK_BITS = 7
"""Entries of a table are worked off in blocks of 2^BLOCK_BITS."""


class Bench(NamedTuple):
    """Room to work on one block.

    The spin's own field energy f64 (2^b,); sums and weights for its two values f64 (2, 2^b); the bit of every rank in
    the scope. For each table received, where its entries are found: ``steps`` i64 (received, w) for the bits of the
    scope one by one, ``offsets`` i32 (received, 2^b) for the low ones together, and whether it is ``straight``, that
    is, its entries follow those of the block.
    """

    own: F64
    sums: F64
    weights: F64
    bit_of: I64
    steps: I64
    offsets: I32
    straight: I8


@compiled
def eliminate(
    plan: Plan,
    layout: Layout,
    fields: F64,
    starts: I64,
    neighbours: I32,
    strengths: F64,
    temperature: float,
    tolerance: float,
    stream: U64,
    energies: F64,
    weights: F64,
    outcomes: I8,
) -> tuple[float, float]:
    """Draw ``outcomes`` i8 (m, k) from the Boltzmann law of a cluster, at temperature zero evenly from its minima.

    ``fields`` f64 (k,) and lists of neighbours make the cluster; at temperature zero, energies of the same scope's
    configuration tie within ``tolerance``. ``energies`` and ``weights`` f64 (room,) are scratch. Returns the lowest
    energy and the weight w of the whole cluster: its partition sum is w exp(-E / T), at temperature zero w is the
    number of minima.
    """
    cluster = by_rank(plan, fields, starts, neighbours, strengths)
    bench = _bench_for(plan)
    rate = 1.0 / temperature if temperature > 0.0 else np.inf
    lowest, weight = 0.0, 1.0
    last = len(layout.stretches) - 2
    for turn in range(2 * last + 2):
        back = turn > last
        stretch = 2 * last + 1 - turn if back else turn
        first, end = layout.stretches[stretch], layout.stretches[stretch + 1]
        for rank in range(first, end):
            if back and (stretch == last or layout.places[rank] < layout.kept):
                continue
            _fill(rank, plan, layout.places, cluster, rate, tolerance, energies, weights, bench)
            if not back and receiver(plan, rank) < 0:
                lowest += energies[layout.places[rank]]
                weight *= weights[layout.places[rank]]
        if back:
            for shot in range(len(outcomes)):
                for rank in range(end - 1, first - 1, -1):
                    chance = chance_of_up(
                        rank, plan, layout.places, cluster, rate, tolerance, energies, weights, outcomes[shot]
                    )
                    outcomes[shot, plan.order[rank]] = 1 if next_unit(stream) < chance else -1
    return lowest, weight


@compiled
def _bench_for(plan: Plan) -> Bench:
    size, width, most = len(plan.order), 1, 1
    for rank in range(size):
        width = max(width, plan.scope_starts[rank + 1] - plan.scope_starts[rank])
        received, giver = 0, plan.first_giver[rank]
        while giver >= 0:
            received, giver = received + 1, plan.next_giver[giver]
        most = max(most, received)
    block = 1 << min(width, BLOCK_BITS)
    return Bench(
        np.empty(block),
        np.empty((2, block)),
        np.empty((2, block)),
        np.empty(size, np.int64),
        np.empty((most, width), np.int64),
        np.empty((most, block), np.int32),
        np.empty(most, np.int8),
    )


@compiled
def _fill(
    rank: int,
    plan: Plan,
    places: I64,
    cluster: Ranked,
    rate: float,
    tolerance: float,
    energies: F64,
    weights: F64,
    bench: Bench,
) -> None:
    """Fill the table of one rank from those that it receives."""
    begin = plan.scope_starts[rank]
    width = plan.scope_starts[rank + 1] - begin
    low = min(width, BLOCK_BITS)
    block = 1 << low
    for bit in range(width):
        bench.bit_of[plan.scopes[begin + bit]] = bit
    _tabulate_own(rank, cluster, low, bench)
    _find_steps(rank, plan, width, low, bench)
    sums, products = bench.sums, bench.weights
    lone = plan.first_giver[rank] >= 0 and plan.next_giver[plan.first_giver[rank]] < 0 and bench.straight[0] != 0
    for number in range(1 << (width - low)):
        high = 0.0
        for edge in range(cluster.starts[rank], cluster.starts[rank + 1]):
            bit = bench.bit_of[cluster.later[edge]]
            if bit >= low:
                high += cluster.strengths[edge] * (1 - 2 * ((number >> (bit - low)) & 1))
        target = places[rank] + number * block
        lowest, heavy = energies[target : target + block], weights[target : target + block]
        received, giver = 0, plan.first_giver[rank]
        if giver < 0:
            for x in range(block):
                own = bench.own[x] + high
                sums[0, x], sums[1, x] = own, -own
                products[0, x], products[1, x] = 1.0, 1.0
        while giver >= 0:
            base = places[giver]
            for bit in range(low, width):
                base += bench.steps[received, bit] * ((number >> (bit - low)) & 1)
            if not bench.straight[received]:
                _gather(energies, weights, base, bench.offsets[received, :block], bench, high, received == 0)
            elif lone:
                _pass_along(energies[base:], weights[base:], bench.own[:block], high, rate, tolerance, lowest, heavy)
            elif received == 0:
                _begin_along(energies[base:], weights[base:], bench.own[:block], high, sums, products)
            else:
                _go_on_along(energies[base:], weights[base:], block, sums, products)
            received, giver = received + 1, plan.next_giver[giver]
        if not lone:
            _close(sums, products, rate, tolerance, lowest, heavy)


@compiled
def _tabulate_own(rank: int, cluster: Ranked, low: int, bench: Bench) -> None:
    """The energy of the spin at +1 in its own field and its couplings to the low bits of the scope."""
    own = bench.own
    own[0] = cluster.fields[rank]
    for edge in range(cluster.starts[rank], cluster.starts[rank + 1]):
        if bench.bit_of[cluster.later[edge]] < low:
            own[0] += cluster.strengths[edge]
    for bit in range(low):
        change = 0.0
        for edge in range(cluster.starts[rank], cluster.starts[rank + 1]):
            if bench.bit_of[cluster.later[edge]] == bit:
                change = -2.0 * cluster.strengths[edge]
        for x in range(1 << bit):
            own[(1 << bit) + x] = own[x] + change


@compiled
def _find_steps(rank: int, plan: Plan, width: int, low: int, bench: Bench) -> None:
    """How far apart the entries of the received tables lie; straight are those that follow all the low bits."""
    received, giver = 0, plan.first_giver[rank]
    while giver >= 0:
        for bit in range(width):
            bench.steps[received, bit] = 0
        begin = plan.scope_starts[giver]
        for place in range(begin + 1, plan.scope_starts[giver + 1]):
            bench.steps[received, bench.bit_of[plan.scopes[place]]] = 1 << (place - begin)
        offsets = bench.offsets[received]
        offsets[0] = 0
        straight = True
        for bit in range(low):
            step = bench.steps[received, bit]
            straight = straight and step == 2 << bit
            for x in range(1 << bit):
                offsets[(1 << bit) + x] = offsets[x] + step
        bench.straight[received] = straight
        received, giver = received + 1, plan.next_giver[giver]


@compiled
def _begin_along(energies: F64, weights: F64, own: F64, high: float, sums: F64, products: F64) -> None:
    up, down, up_weight, down_weight = sums[0], sums[1], products[0], products[1]
    for x in range(len(own)):
        up[x] = energies[2 * x] + (own[x] + high)
        down[x] = energies[2 * x + 1] - (own[x] + high)
    for x in range(len(own)):
        up_weight[x] = weights[2 * x]
        down_weight[x] = weights[2 * x + 1]


@compiled
def _go_on_along(energies: F64, weights: F64, block: int, sums: F64, products: F64) -> None:
    up, down, up_weight, down_weight = sums[0], sums[1], products[0], products[1]
    for x in range(block):
        up[x] += energies[2 * x]
        down[x] += energies[2 * x + 1]
    for x in range(block):
        up_weight[x] *= weights[2 * x]
        down_weight[x] *= weights[2 * x + 1]


@compiled
def _gather(energies: F64, weights: F64, base: int, offsets: I32, bench: Bench, high: float, first: bool) -> None:
    if first:
        for x in range(len(offsets)):
            own = bench.own[x] + high
            bench.sums[0, x], bench.sums[1, x] = own, -own
            bench.weights[0, x], bench.weights[1, x] = 1.0, 1.0
    for x in range(len(offsets)):
        place = base + offsets[x]
        bench.sums[0, x] += energies[place]
        bench.sums[1, x] += energies[place + 1]
        bench.weights[0, x] *= weights[place]
        bench.weights[1, x] *= weights[place + 1]


@compiled
def _close(sums: F64, products: F64, rate: float, tolerance: float, energies: F64, weights: F64) -> None:
    """The lower of the two energies of every entry, and the weight of both."""
    up, down, up_weight, down_weight = sums[0], sums[1], products[0], products[1]
    for x in range(len(energies)):
        energies[x] = min(up[x], down[x])
    if np.isinf(rate):
        for x in range(len(energies)):
            weights[x] = _count(down[x] - up[x], up_weight[x], down_weight[x], tolerance)
    else:
        for x in range(len(energies)):
            weights[x] = _weigh(down[x] - up[x], up_weight[x], down_weight[x], rate)


@compiled
def _pass_along(
    energies: F64, weights: F64, own: F64, high: float, rate: float, tolerance: float, lowest: F64, heavy: F64
) -> None:
    """All of it at once where one table is received and its entries follow those of the block: mostly, on lattices."""
    if np.isinf(rate):
        for x in range(len(own)):
            up, down = energies[2 * x] + (own[x] + high), energies[2 * x + 1] - (own[x] + high)
            lowest[x] = min(up, down)
            heavy[x] = _count(down - up, weights[2 * x], weights[2 * x + 1], tolerance)
    else:
        for x in range(len(own)):
            up, down = energies[2 * x] + (own[x] + high), energies[2 * x + 1] - (own[x] + high)
            lowest[x] = min(up, down)
            heavy[x] = _weigh(down - up, weights[2 * x], weights[2 * x + 1], rate)


@compiled
def _count(rise: float, up_weight: float, down_weight: float, tolerance: float) -> float:
    """The weight of whichever of two energies, ``rise`` apart, is the lower one, or of both where they tie."""
    return (up_weight if rise >= -tolerance else 0.0) + (down_weight if rise <= tolerance else 0.0)


@compiled
def _weigh(rise: float, up_weight: float, down_weight: float, rate: float) -> float:
    """The weight of two energies ``rise`` apart, in terms of the lower one.

    It is two factors that are chosen and not two weights, which the compiler would then fetch one by one.
    """
    factor = boltzmann_factor(rate * abs(rise))
    return up_weight * (factor if rise < 0.0 else 1.0) + down_weight * (1.0 if rise < 0.0 else factor)
