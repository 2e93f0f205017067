"""The rule ``strip``: clusters that variable elimination can answer exactly, however many spins they hold.

A front runs through the graph, breadth-first layer after layer, and is never wider than a limit. It begins as a piece
of a layer round some distant spin, with the layer before it kept out, so that it runs one way. Of every new layer the
spins that touch the cluster most may join, and the others are kept out for good. Eliminated in the order in which its
spins joined, such a cluster needs no table of more than ``width`` spins. On a lattice it is a long, solid strip.

Where a front ends before the cluster is full, all that it touched is kept out and another one starts elsewhere, and
where nothing else is left, among the spins kept out, which may tie fronts together. The width is therefore looked up in
the order that elimination will choose, and a cluster that turns out too wide ends earlier.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from patchwalk.clusters.narrow import is_narrow, longest_narrow
from patchwalk.problem.ising import Problem
from patchwalk.subsolvers.compiled import compiled
from patchwalk.subsolvers.contract import I32, I64, U64
from patchwalk.subsolvers.draws import next_below, stream_for
from patchwalk.subsolvers.elimination_order import USUAL_LIMIT

if TYPE_CHECKING:
    from patchwalk.clusters.rules import Marks

ATTEMPTS = 8
"""A round is full once this many clusters in a row found no room; a start is drawn this often among all spins."""

RANKS = 8
"""Ties of a spin in the front are told apart up to one fewer."""

JOINED, KEPT_OUT, TAKEN = -1, -2, -3
"""What a negative number in ``contacts`` says: in the cluster, kept out of it, in or next to one of this round's other
clusters. The spins that may join have zero or more: how many of their neighbours are in the cluster."""


@dataclass(frozen=True)
class StripRule:
    """Clusters grown behind a front of at most ``width`` spins; only the graph is looked at.

    No cluster needs tables of more than ``widest`` spins in the order that elimination chooses. Where none of the size
    asked for can be grown so, the clusters of a round are shorter, all alike, down to ``widest`` + 1 spins.
    """

    width: int = 12
    widest: int = USUAL_LIMIT
    name: str = "strip"
    looks_at_spins: bool = False

    def pick(self, problem: Problem, size: int, count: int, seed: int, marks: Marks) -> I32:
        """Up to ``count`` clusters that do not touch, i32 (B, size) or shorter, members rising in each row."""
        starts, neighbours, stream = problem.row_starts, problem.neighbours, stream_for(seed)
        contacts = np.zeros(len(problem), np.int32)
        count, misses = max(1, min(count, len(problem) // size)), 0
        found: list[I32] = []
        while len(found) < count and misses < ATTEMPTS:
            queue = marks.queue[:size]
            filled, apart = _grow(
                starts, neighbours, self.width, not found, contacts, marks.visited, stream, queue, marks.turn
            )
            fits = filled == size and is_narrow(problem, np.sort(queue), self.widest)
            if not found and not fits:
                size, fits = longest_narrow(problem, queue, apart, self.widest), True
            _release(starts, neighbours, queue[:filled], contacts, False)
            misses = 0 if fits else misses + 1
            if fits:
                _release(starts, neighbours, queue[:size], contacts, True)
                found.append(np.sort(queue[:size]))
        return np.stack(found)


@compiled
def _grow(
    starts: I64, neighbours: I32, width: int, must: bool, contacts: I32, visited: I64, stream: U64, queue: I32,
    turn: I64,
) -> tuple[int, int]:  # fmt: skip
    """Grow one cluster into ``queue``, in full if it ``must``, and mark it in ``contacts``.

    Returns how many spins it has, and how many of them belong to fronts that do not touch each other.
    """
    filled, apart = 0, len(queue)
    while filled < len(queue):
        begin, start = filled, _start(contacts, must, stream)
        if start < 0:
            break
        if contacts[start] == KEPT_OUT:
            apart = min(apart, begin)
        length = min(len(queue) - filled, max(1, width - 1))
        front = _first_layer(starts, neighbours, start, length, contacts, visited, turn, stream)
        wall = turn[0]
        for spin in front:
            filled = _join(starts, neighbours, spin, contacts, queue, filled)
        filled = _run(starts, neighbours, width, contacts, visited, wall, stream, queue, len(front), filled)
        turn[0] += width
        for spin in queue[begin:filled]:
            for edge in range(starts[spin], starts[spin + 1]):
                if contacts[neighbours[edge]] >= 0:
                    contacts[neighbours[edge]] = KEPT_OUT
    return filled, apart


@compiled
def _start(contacts: I32, must: bool, stream: U64) -> int:
    """A spin for a front to start from, drawn among the free ones, else among those kept out; -1 for none.

    Drawing is given up after a while; if a cluster ``must`` be found, the next possible spin is taken.
    """
    for tries in range(2 * ATTEMPTS):
        spin = next_below(stream, len(contacts))
        if contacts[spin] >= 0 or (contacts[spin] == KEPT_OUT and tries >= ATTEMPTS):
            return spin
    if not must:
        return -1
    spin = next_below(stream, len(contacts))
    while contacts[spin] == JOINED:
        spin = spin + 1 if spin + 1 < len(contacts) else 0
    return spin


@compiled
def _first_layer(
    starts: I64, neighbours: I32, start: int, length: int, contacts: I32, visited: I64, turn: I64, stream: U64
) -> I32:
    """Up to ``length`` spins round ``start``, all in one layer round a distant spin; keeps out the layer before it."""
    contacts[start] = max(contacts[start], 0)
    near = np.empty(min(8 * length * length, len(contacts) // 2) + 1, np.int32)
    count, depth = _spread(starts, neighbours, start, 2 * length, contacts, visited, turn, near)
    pole = _walk_outwards(starts, neighbours, start, depth, visited, turn, stream)
    _spread(starts, neighbours, pole, depth, contacts, visited, turn, np.empty(4 * len(near), np.int32))
    front = np.empty(length, np.int32)
    front[0] = start
    found = 1
    for spin in near[1:count]:
        if found < length and visited[spin] == turn[0] + depth:
            front[found] = spin
            found += 1
    return front[:found]


@compiled
def _spread(
    starts: I64, neighbours: I32, spin: int, depth: int, contacts: I32, visited: I64, turn: I64, reached: I32
) -> tuple[int, int]:
    """Breadth-first through free spins from ``spin``, up to ``depth`` layers or until ``reached`` is full.

    Returns how many spins were reached and in how many layers; ``visited`` of layer d holds the turn plus d.
    """
    turn[0] += 1
    reached[0] = spin
    visited[spin] = turn[0]
    begin, end, layer = 0, 1, 0
    while layer < depth and end < len(reached):
        after = end
        for place in range(begin, end):
            for edge in range(starts[reached[place]], starts[reached[place] + 1]):
                other = neighbours[edge]
                if contacts[other] >= 0 and visited[other] < turn[0] and after < len(reached):
                    visited[other] = turn[0] + layer + 1
                    reached[after] = other
                    after += 1
        if after == end:
            break
        begin, end, layer = end, after, layer + 1
    return end, layer


@compiled
def _walk_outwards(starts: I64, neighbours: I32, spin: int, depth: int, visited: I64, turn: I64, stream: U64) -> int:
    """Where a random walk from ``spin`` ends that goes one layer further at every step, ``depth`` times if it can."""
    for layer in range(1, depth + 1):
        choices, chosen = 0, spin
        for edge in range(starts[spin], starts[spin + 1]):
            if visited[neighbours[edge]] == turn[0] + layer:
                choices += 1
                if next_below(stream, choices) == 0:
                    chosen = neighbours[edge]
        if choices == 0:
            break
        spin = chosen
    turn[0] += depth
    return spin


@compiled
def _run(
    starts: I64, neighbours: I32, width: int, contacts: I32, visited: I64, wall: int, stream: U64, queue: I32,
    length: int, filled: int,
) -> int:  # fmt: skip
    """Let the front, the last ``length`` spins in ``queue``, run until it ends or the queue is full.

    Returns how many spins the queue holds. A spin of the front stays open until all its neighbours are in or out, and
    no more than ``width`` are ever open.
    """
    begin = filled - length
    while begin < filled < len(queue):
        end = filled
        _thin_out(starts, neighbours, queue[begin:end], max(1, width - 1), contacts, visited, wall, stream)
        for place in range(begin, end):
            for edge in range(starts[queue[place]], starts[queue[place] + 1]):
                new = neighbours[edge]
                if contacts[new] < 0 or visited[new] >= wall:
                    continue
                if filled - place <= width and filled < len(queue):
                    filled = _join(starts, neighbours, new, contacts, queue, filled)
                else:
                    contacts[new] = KEPT_OUT
        begin = end
    return filled


@compiled
def _thin_out(
    starts: I64, neighbours: I32, layer: I32, room: int, contacts: I32, visited: I64, wall: int, stream: U64
) -> None:
    """Keep out all but ``room`` of the free spins next to a layer.

    Those stay that touch the cluster most; among several those next to a spin that itself touches it most, so that
    the body of the front is followed and not a loose end; then chance decides.
    """
    count = 0
    for spin in layer:
        count += starts[spin + 1] - starts[spin]
    around, score = np.empty(count, np.int32), np.empty(count, np.int32)
    count = 0
    for spin in layer:
        ties = 0
        for edge in range(starts[spin], starts[spin + 1]):
            ties += contacts[neighbours[edge]] == JOINED
        for edge in range(starts[spin], starts[spin + 1]):
            new = neighbours[edge]
            if contacts[new] >= 0 and visited[new] < wall:
                around[count], score[count] = new, RANKS * contacts[new] + min(ties, RANKS - 1)
                contacts[new] = KEPT_OUT
                count += 1
    for place in range(min(room, count)):
        if count > room:
            other = best = place + next_below(stream, count - place)
            for _ in range(place, count):
                if score[other] > score[best]:
                    best = other
                other = other + 1 if other + 1 < count else place
            around[place], around[best] = around[best], around[place]
            score[place], score[best] = score[best], score[place]
        contacts[around[place]] = score[place] // RANKS


@compiled
def _join(starts: I64, neighbours: I32, spin: int, contacts: I32, queue: I32, filled: int) -> int:
    contacts[spin] = JOINED
    queue[filled] = spin
    for edge in range(starts[spin], starts[spin + 1]):
        if contacts[neighbours[edge]] >= 0:
            contacts[neighbours[edge]] += 1
    return filled + 1


@compiled
def _release(starts: I64, neighbours: I32, cluster: I32, contacts: I32, full: bool) -> None:
    """Free what a cluster touched for the next one, or, if it is full, take it and its neighbours for good."""
    after = TAKEN if full else 0
    for spin in cluster:
        contacts[spin] = after
        for edge in range(starts[spin], starts[spin + 1]):
            if contacts[neighbours[edge]] != TAKEN:
                contacts[neighbours[edge]] = after
