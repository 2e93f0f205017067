"""In which order to eliminate the spins of a cluster, and which tables that takes.

Eliminating a spin leaves a table over the later spins it is tied to, its *scope*. The size of the largest scope is the
width of the order, and 2^width bounds time and memory. The best order is hard to find, so several are tried and the
one with the fewest table entries is taken: layer by layer, towards either of two spins far apart or away from the
side farthest from them, and the greedy order that adds the fewest couplings (minimum fill). On a strip of a lattice
the first kind is as narrow as the strip. Everything here looks at the graph alone.

Variable elimination: Dechter, Artif. Intell. 113 (1999) 41.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
import numpy.typing as npt

from patchwalk.subsolvers.compiled import compiled
from patchwalk.subsolvers.contract import I32, I64
from patchwalk.subsolvers.minimum_fill import fill_least

FILL_WORTH = 512
"""Finding the order of minimum fill takes as long as about so many table entries a spin, and is tried above that."""

USUAL_LIMIT = 20
"""The width up to which elimination works unless told otherwise: tables of 2^20 entries."""

Flags = npt.NDArray[np.bool_]


class Plan(NamedTuple):
    """An order of elimination and its scopes; a spin is called by its rank in the order.

    ``order`` i32 (k,) holds the spins. The scope of rank r, ranks above r, rising, is
    ``scopes[scope_starts[r] : scope_starts[r + 1]]``. Its table is received by the first rank in its scope; the ranks
    that rank r receives from are ``first_giver[r]``, ``next_giver`` of that, and so on down to -1.
    """

    order: I32
    scope_starts: I64
    scopes: I32
    first_giver: I32
    next_giver: I32


@compiled
def find_plan(starts: I64, neighbours: I32, limit: int) -> Plan:
    """The best plan found for the graph of these lists of neighbours; one of width up to ``limit`` goes first."""
    order = np.empty(len(starts) - 1, np.int32)
    ends = _far_ends(starts, neighbours, 0)
    best = Plan(order, starts, neighbours, order, order)
    for attempt in range(5):
        if attempt < 4:
            _by_layers(starts, neighbours, ends[attempt % 2], attempt >= 2, order)
        else:
            budget = table_entries(best) if width_of(best) <= limit else np.inf
            if budget <= FILL_WORTH * len(order) or not fill_least(starts, neighbours, limit, budget, order):
                break
        plan = _plan_for(starts, neighbours, order)
        if attempt == 0 or _goes_before(plan, best, limit):
            best = plan
    return best


@compiled
def fits_within(starts: I64, neighbours: I32, limit: int) -> bool:
    """Whether the plan found for this graph is of width up to ``limit``; mostly the first order tried tells."""
    order = np.empty(len(starts) - 1, np.int32)
    ends = _far_ends(starts, neighbours, 0)
    for attempt in range(4):
        _by_layers(starts, neighbours, ends[attempt % 2], attempt >= 2, order)
        if width_of(_plan_for(starts, neighbours, order)) <= limit:
            return True
    return fill_least(starts, neighbours, limit, np.inf, order)


@compiled
def width_of(plan: Plan) -> int:
    """The size of the largest scope."""
    width = 0
    for rank in range(len(plan.order)):
        width = max(width, plan.scope_starts[rank + 1] - plan.scope_starts[rank])
    return width


@compiled
def table_entries(plan: Plan) -> float:
    """Entries of all tables together, as a float because they may be astronomically many."""
    entries = 0.0
    for rank in range(len(plan.order)):
        entries += 2.0 ** (plan.scope_starts[rank + 1] - plan.scope_starts[rank])
    return entries


@compiled
def _goes_before(one: Plan, other: Plan, limit: int) -> bool:
    if (width_of(one) <= limit) != (width_of(other) <= limit):
        return width_of(one) <= limit
    return table_entries(one) < table_entries(other)


@compiled
def _far_ends(starts: I64, neighbours: I32, spin: int) -> tuple[int, int]:
    """Two spins far apart: the last ones that breadth-first searches reach, the second from the first."""
    first = second = int(spin)
    queue = np.empty(len(starts) - 1, np.int64)
    for _ in range(3):
        seen = np.zeros(len(starts) - 1, np.bool_)
        queue[0] = second
        seen[second] = True
        head, tail = 0, 1
        while head < tail:
            for edge in range(starts[queue[head]], starts[queue[head] + 1]):
                if not seen[neighbours[edge]]:
                    seen[neighbours[edge]] = True
                    queue[tail] = neighbours[edge]
                    tail += 1
            head += 1
        first, second = second, queue[tail - 1]
    return first, second


@compiled
def _by_layers(starts: I64, neighbours: I32, pole: int, away: bool, order: I32) -> None:
    """The order that takes the spins by breadth-first layers, in each of them always the one with the fewest unseen
    neighbours: towards ``pole``, or ``away`` from all spins that are farthest from it, which may be a whole side.
    """
    size = len(order)
    seen, unseen = np.zeros(size, np.bool_), starts[1:] - starts[:-1]
    layers, layer_of = np.empty(size, np.int32), np.full(size, -1, np.int64)
    begin, next_spin = 0, 0
    while begin < size:
        layers[begin] = pole
        if begin > 0:
            while layer_of[next_spin] >= 0:
                next_spin += 1
            layers[begin] = _far_ends(starts, neighbours, next_spin)[1]
        end = _list_layers(starts, neighbours, layers, layer_of, begin, begin + 1)
        for place in range((end - begin) // 2):
            layers[begin + place], layers[end - 1 - place] = layers[end - 1 - place], layers[begin + place]
        if away:
            side = _layer_end(layers, layer_of, begin, end)
            for place in range(begin, end):
                layer_of[layers[place]] = -1
            end = _list_layers(starts, neighbours, layers, layer_of, begin, side)
        while begin < end:
            layer_end = _layer_end(layers, layer_of, begin, end)
            for place in range(begin, layer_end):
                chosen = place
                for other in range(place + 1, layer_end):
                    if unseen[layers[other]] < unseen[layers[chosen]]:
                        chosen = other
                spin = layers[chosen]
                layers[chosen] = layers[place]
                order[place] = spin
                _see(starts, neighbours, spin, seen, unseen)
                for edge in range(starts[spin], starts[spin + 1]):
                    _see(starts, neighbours, neighbours[edge], seen, unseen)
            begin = layer_end


@compiled
def _list_layers(starts: I64, neighbours: I32, layers: I32, layer_of: I64, begin: int, end: int) -> int:
    """Append the breadth-first layers round the spins ``layers[begin:end]``; returns where they end."""
    for place in range(begin, end):
        layer_of[layers[place]] = 0
    head = begin
    while head < end:
        for edge in range(starts[layers[head]], starts[layers[head] + 1]):
            if layer_of[neighbours[edge]] < 0:
                layer_of[neighbours[edge]] = layer_of[layers[head]] + 1
                layers[end] = neighbours[edge]
                end += 1
        head += 1
    return end


@compiled
def _layer_end(layers: I32, layer_of: I64, begin: int, end: int) -> int:
    """Where the layer that begins at ``begin`` ends."""
    place = begin
    while place < end and layer_of[layers[place]] == layer_of[layers[begin]]:
        place += 1
    return place


@compiled
def _see(starts: I64, neighbours: I32, spin: int, seen: Flags, unseen: I64) -> None:
    """Note that a spin belongs to the front, or did before."""
    if not seen[spin]:
        seen[spin] = True
        for edge in range(starts[spin], starts[spin + 1]):
            unseen[neighbours[edge]] -= 1


@compiled
def _plan_for(starts: I64, neighbours: I32, order: I32) -> Plan:
    """The scopes of an order: a spin's later neighbours and whatever the tables that it receives are about."""
    size = len(order)
    rank_of = np.empty(size, np.int32)
    for rank in range(size):
        rank_of[order[rank]] = rank
    scope_starts, scopes = np.zeros(size + 1, np.int64), np.empty(16 * size, np.int32)
    nobody = np.full(size, -1, np.int32)
    first_giver, next_giver, marked = nobody.copy(), nobody.copy(), nobody
    for rank in range(size):
        begin = end = scope_starts[rank]
        if end + size > len(scopes):
            longer = np.empty(2 * len(scopes) + size, np.int32)
            for place in range(end):
                longer[place] = scopes[place]
            scopes = longer
        giver = first_giver[rank]
        marked[rank] = rank
        while giver >= 0:
            for place in range(scope_starts[giver], scope_starts[giver + 1]):
                end = _note(scopes[place], rank, marked, scopes, end)
            giver = next_giver[giver]
        for edge in range(starts[order[rank]], starts[order[rank] + 1]):
            end = _note(rank_of[neighbours[edge]], rank, marked, scopes, end)
        _sort(scopes[begin:end])
        scope_starts[rank + 1] = end
        if end > begin:
            next_giver[rank] = first_giver[scopes[begin]]
            first_giver[scopes[begin]] = rank
    return Plan(order.copy(), scope_starts, scopes[: scope_starts[size]].copy(), first_giver, next_giver)


@compiled
def _note(other: int, rank: int, marked: I32, scopes: I32, end: int) -> int:
    """Put a rank beyond ``rank`` into its scope unless it is there already."""
    if other > rank and marked[other] != rank:
        marked[other] = rank
        scopes[end] = other
        return end + 1
    return end


@compiled
def _sort(values: I32) -> None:
    """Insertion sort, quick where nearly everything is in place already."""
    for place in range(1, len(values)):
        value = values[place]
        while place > 0 and values[place - 1] > value:
            values[place] = values[place - 1]
            place -= 1
        values[place] = value
