"""The rules ``loose`` and ``stale``: clusters round the spins of weakest local field, or of the fewest calls.

``loose`` grows balls round spins with weak local fields, the last shell giving its weakest. ``stale`` starts at a spin
that was seldom called and takes seldom called neighbours one by one: in whole shells, one sublattice would always stay
behind (tried on a square lattice).

Nothing is ever sorted: a start is the lowest of a few spins drawn, and so is every further spin.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from patchwalk.clusters.growing import (
    CANDIDATES,
    MISSES_ALLOWED,
    block,
    copy_rising,
    locked_view,
    next_unvisited,
    room_for,
)
from patchwalk.problem.ising import Problem
from patchwalk.subsolvers.compiled import compiled
from patchwalk.subsolvers.contract import F64, I32, I64, U64
from patchwalk.subsolvers.draws import next_below, stream_for

if TYPE_CHECKING:
    from patchwalk.clusters.rules import Marks, View

TASTERS = 4
"""Spins queued that are compared for every place that is left in a cluster."""


@dataclass(frozen=True)
class RankRule:
    """Clusters round the spins of weakest local field, or of the fewest calls."""

    name: str
    weakest: bool
    looks_at_spins: bool

    def pick(self, problem: Problem, size: int, wanted: int, seed: int, marks: Marks, view: View) -> tuple[I32, ...]:
        """Up to ``wanted`` clusters that do not touch, i32 (B, size), members rising in each row."""
        members = room_for(problem, size, wanted)
        found = _pick_lowest(
            problem.row_starts, problem.neighbours, locked_view(view.local_fields), locked_view(view.counts),
            self.weakest, members, stream_for(seed), marks.blocked, marks.visited, marks.queue, marks.turn,
        )  # fmt: skip
        return (members[:found],)


@compiled
def _pick_lowest(
    row_starts: I64, neighbours: I32, local_fields: F64, counts: I64, weakest: bool, members: I32,
    stream: U64, blocked: I64, visited: I64, queue: I32, turn: I64,
) -> int:  # fmt: skip
    """Fill ``members`` i32 (B, k) round spins of low rank; returns how many rows there are."""
    turn[0] += 1
    this_round = turn[0]
    count, size = members.shape
    found, misses = 0, 0
    while found < count and misses < MISSES_ALLOWED:
        turn[0] += 1
        filled = 0
        while filled < size:
            start = _lowest_drawn(
                local_fields, counts, weakest, found == 0, stream, blocked, this_round, visited, turn[0]
            )
            if start < 0:
                break
            visited[start] = turn[0]
            queue[filled] = start
            filled = _gather(
                row_starts, neighbours, local_fields, counts, weakest, size,
                stream, blocked, this_round, visited, turn[0], queue, filled,
            )  # fmt: skip
        if filled < size:
            misses += 1
            continue
        misses = 0
        copy_rising(queue, members[found])
        block(row_starts, neighbours, members[found], blocked, this_round)
        found += 1
    return found


@compiled
def _rank(local_fields: F64, counts: I64, weakest: bool, spin: int) -> float:
    """What is to be low, and nothing is lower than zero."""
    return abs(local_fields[spin]) if weakest else float(counts[spin])


@compiled
def _lowest_drawn(
    local_fields: F64, counts: I64, weakest: bool, must: bool, stream: U64,
    blocked: I64, this_round: int, visited: I64, attempt: int,
) -> int:  # fmt: skip
    """The lowest of the free spins among a few drawn; -1 where none was free, unless one ``must`` be found."""
    best, lowest = -1, np.inf
    for _ in range(CANDIDATES):
        spin = next_below(stream, len(counts))
        rank = _rank(local_fields, counts, weakest, spin)
        if rank < lowest and blocked[spin] != this_round and visited[spin] != attempt:
            best, lowest = spin, rank
    if best < 0 and must:
        best = next_unvisited(visited, attempt, next_below(stream, len(counts)))
    return best


@compiled
def _gather(
    row_starts: I64, neighbours: I32, local_fields: F64, counts: I64, weakest: bool, size: int,
    stream: U64, blocked: I64, this_round: int, visited: I64, attempt: int, queue: I32, filled: int,
) -> int:  # fmt: skip
    """Low neighbours of the spin at ``queue[filled]``, one by one or shell by shell; returns how many spins there are.

    For counts, the neighbours of every newcomer are queued before the next is chosen; for fields, whole shells join
    as long as there is room.
    """
    begin, end, after = filled, filled + 1, filled + 1
    while end < size:
        for place in range(begin, end):
            for edge in range(row_starts[queue[place]], row_starts[queue[place] + 1]):
                new = neighbours[edge]
                if visited[new] != attempt and blocked[new] != this_round:
                    visited[new] = attempt
                    queue[after] = new
                    after += 1
        if after == end:
            return end
        stop = min(size, after) if weakest else end + 1
        for place in range(end, stop if stop < after else end):
            best, lowest = place, np.inf
            for _ in range(TASTERS):
                drawn = place + next_below(stream, after - place)
                rank = _rank(local_fields, counts, weakest, queue[drawn])
                if rank < lowest:
                    best, lowest = drawn, rank
            queue[place], queue[best] = queue[best], queue[place]
        begin, end = end, stop
    return end
