"""The rules ``frustrated`` and ``disputed``: clusters that follow a trail through the configuration.

``frustrated`` grows along bonds that the spins violate, J_ij s_i s_j > 0; ``disputed`` through spins on which two good
configurations differ (on a problem without fields: after the better of the two alignments), as in Houdayer, Eur. Phys.
J. B 22 (2001) 479, where such domains are exchanged whole. Where a trail ends, one spin beside the cluster joins, and
it goes on from there.

The whole problem is never looked at: a start is one of a few spins drawn, and where what is looked for is rare, a
limited stretch of spins is read through as well.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from patchwalk.clusters.growing import (
    CANDIDATES,
    MISSES_ALLOWED,
    balls,
    block,
    copy_rising,
    locked_view,
    next_unvisited,
    room_for,
)
from patchwalk.problem.ising import Problem
from patchwalk.subsolvers.compiled import compiled
from patchwalk.subsolvers.contract import F64, I8, I32, I64, U64
from patchwalk.subsolvers.draws import next_below, stream_for

if TYPE_CHECKING:
    from patchwalk.clusters.rules import Marks, View

STRETCH = 1 << 16
"""Spins that a round reads through, one after the other, when none of those drawn had what was looked for."""

OVERLAP_SAMPLE = 4096
"""From this size on the overlap of two configurations is judged by as many spins drawn; only its sign matters."""


@dataclass(frozen=True)
class TrailRule:
    """Clusters grown along bonds that the spins violate, or through spins on which two good configurations differ."""

    name: str
    disputed: bool
    looks_at_spins: bool = True

    def pick(self, problem: Problem, size: int, wanted: int, seed: int, marks: Marks, view: View) -> tuple[I32, ...]:
        """Up to ``wanted`` clusters that do not touch, i32 (B, size), members rising in each row."""
        if self.disputed and len(view.elites) < 2:
            return (balls(problem, size, wanted, seed, marks),)
        stream = stream_for(seed)
        one, other, sign = _two_of(view.elites, marks, stream) if self.disputed else (view.spins, view.spins, 1)
        members = room_for(problem, size, wanted)
        found = _pick_along(
            problem.row_starts, problem.neighbours, problem.couplings, locked_view(one), locked_view(other), sign,
            self.disputed, members, stream, marks.blocked, marks.visited, marks.queue, marks.turn,
        )  # fmt: skip
        return (members[:found],)


def _two_of(elites: I8, marks: Marks, stream: U64) -> tuple[I8, I8, int]:
    """Two different rows drawn, and the sign that aligns the second with the first where a global flip is free."""
    first = next_below(stream, len(elites))
    second = next_below(stream, len(elites) - 1)
    one, other = elites[first], elites[second + (second >= first)]
    return one, other, _alignment(locked_view(one), locked_view(other), stream) if marks.flip_is_free else 1


@compiled
def _alignment(one: I8, other: I8, stream: U64) -> int:
    """1 where two configurations are more alike than opposite, else -1."""
    overlap, size = 0, len(one)
    for spin in range(min(size, OVERLAP_SAMPLE)):
        place = spin if size <= OVERLAP_SAMPLE else next_below(stream, size)
        overlap += one[place] * other[place]
    return 1 if overlap >= 0 else -1


@compiled
def _pick_along(
    row_starts: I64, neighbours: I32, couplings: F64, one: I8, other: I8, sign: int, disputed: bool, members: I32,
    stream: U64, blocked: I64, visited: I64, queue: I32, turn: I64,
) -> int:  # fmt: skip
    """Fill ``members`` i32 (B, k) along a trail; returns how many rows there are.

    ``one`` and ``sign * other`` are the two configurations that are compared where ``disputed``, else ``one`` is the
    configuration whose violated bonds are followed.
    """
    turn[0] += 1
    this_round = turn[0]
    count, size = members.shape
    left = np.array([next_below(stream, len(one)), min(STRETCH, len(one))])
    found, misses = 0, 0
    while found < count and misses < MISSES_ALLOWED:
        turn[0] += 1
        filled = 0
        while filled < size:
            start = _trail_head(
                row_starts, neighbours, couplings, one, other, sign, disputed, left,
                found == 0, stream, blocked, this_round, visited, turn[0],
            )  # fmt: skip
            if start < 0:
                break
            visited[start] = turn[0]
            queue[filled] = start
            filled = _follow(
                row_starts, neighbours, couplings, one, other, sign, disputed, size,
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
def _leads_on(
    neighbours: I32, couplings: F64, one: I8, other: I8, sign: int, disputed: bool, spin: int, edge: int
) -> bool:
    """Whether the trail goes on from ``spin`` along this entry of its row."""
    end = neighbours[edge]
    if disputed:
        return one[end] != sign * other[end]
    return couplings[edge] * one[spin] * one[end] > 0.0


@compiled
def _on_trail(
    row_starts: I64, neighbours: I32, couplings: F64, one: I8, other: I8, sign: int, disputed: bool,
    blocked: I64, this_round: int, spin: int,
) -> bool:  # fmt: skip
    """Whether a trail may start here: the spin is disputed, or has a violated bond that could be followed."""
    if disputed:
        return one[spin] != sign * other[spin]
    for edge in range(row_starts[spin], row_starts[spin + 1]):
        if blocked[neighbours[edge]] != this_round and couplings[edge] * one[spin] * one[neighbours[edge]] > 0.0:
            return True
    return False


@compiled
def _trail_head(
    row_starts: I64, neighbours: I32, couplings: F64, one: I8, other: I8, sign: int, disputed: bool, left: I64,
    must: bool, stream: U64, blocked: I64, this_round: int, visited: I64, attempt: int,
) -> int:  # fmt: skip
    """A free spin on a trail: drawn, or the next one in what is ``left`` of the stretch (where, and how many spins).

    Where there is none, any free spin that was drawn; -1 where none was, unless one ``must`` be found.
    """
    fallback = -1
    for _ in range(CANDIDATES):
        spin = next_below(stream, len(one))
        if blocked[spin] != this_round and visited[spin] != attempt:
            fallback = spin
            if _on_trail(row_starts, neighbours, couplings, one, other, sign, disputed, blocked, this_round, spin):
                return spin
    while left[1] > 0:
        spin = left[0]
        left[0] = spin + 1 if spin + 1 < len(one) else 0
        left[1] -= 1
        free = blocked[spin] != this_round and visited[spin] != attempt
        if free and _on_trail(row_starts, neighbours, couplings, one, other, sign, disputed, blocked, this_round, spin):
            return spin
    if fallback < 0 and must:
        fallback = next_unvisited(visited, attempt, next_below(stream, len(one)))
    return fallback


@compiled
def _follow(
    row_starts: I64, neighbours: I32, couplings: F64, one: I8, other: I8, sign: int, disputed: bool, size: int,
    stream: U64, blocked: I64, this_round: int, visited: I64, attempt: int, queue: I32, filled: int,
) -> int:  # fmt: skip
    """Step after step along the trail from the spin at ``queue[filled]``; returns how many spins there are.

    The last step gives as many random spins as are still wanted. Where a trail ends, a spin beside the cluster joins.
    """
    begin, end = filled, filled + 1
    while end < size:
        after = end
        for place in range(begin, end):
            spin = queue[place]
            for edge in range(row_starts[spin], row_starts[spin + 1]):
                new = neighbours[edge]
                if visited[new] == attempt or blocked[new] == this_round:
                    continue
                if _leads_on(neighbours, couplings, one, other, sign, disputed, spin, edge):
                    visited[new] = attempt
                    queue[after] = new
                    after += 1
        if after == end:
            aside = _beside(row_starts, neighbours, stream, blocked, this_round, visited, attempt, queue[filled:end])
            if aside < 0:
                return end
            visited[aside] = attempt
            queue[end] = aside
            after += 1
        for place in range(end, min(size, after)):
            if after > size:
                swap = place + next_below(stream, after - place)
                queue[place], queue[swap] = queue[swap], queue[place]
        begin, end = end, min(size, after)
    return end


@compiled
def _beside(
    row_starts: I64, neighbours: I32, stream: U64, blocked: I64, this_round: int, visited: I64, attempt: int,
    cluster: I32,
) -> int:  # fmt: skip
    """A free neighbour of the cluster, whatever the bond, from a random place on; -1 for none."""
    place = next_below(stream, len(cluster))
    for _ in range(len(cluster)):
        begin, stop = row_starts[cluster[place]], row_starts[cluster[place] + 1]
        edge = begin + next_below(stream, stop - begin)
        for _ in range(begin, stop):
            spin = neighbours[edge]
            if visited[spin] != attempt and blocked[spin] != this_round:
                return spin
            edge = edge + 1 if edge + 1 < stop else begin
        place = place + 1 if place + 1 < len(cluster) else 0
    return -1
