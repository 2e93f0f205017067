"""The rules that are led by something: violated bonds, weak fields, disagreement of good configurations, counts.

``frustrated`` grows along bonds that the present configuration violates, J_ij s_i s_j > 0; ``disputed`` through spins
on which two good configurations differ (on a problem without fields: after the better of the two alignments), as in
Houdayer, Eur. Phys. J. B 22 (2001) 479, where such domains are exchanged whole. Where nothing leads on, one spin beside
the cluster joins, and it goes on from there. ``loose`` grows balls round spins with weak local fields, the last shell
giving its weakest. ``stale`` starts at a spin that was seldom called and takes seldom called neighbours one by one: in
whole shells, one sublattice would always stay behind (tried on a square lattice).

No rule ever orders the whole problem: a start is the best of a few spins drawn, and where what is looked for is rare, a
limited stretch of spins is read through as well. Work is proportional to the clusters made.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, NamedTuple, TypeVar

import numpy as np

from patchwalk.clusters.growing import MISSES_ALLOWED, balls, block, copy_rising, next_unvisited, room_for
from patchwalk.problem.ising import Problem
from patchwalk.subsolvers.compiled import compiled
from patchwalk.subsolvers.contract import F64, I8, I32, I64, U64
from patchwalk.subsolvers.draws import next_below, stream_for

if TYPE_CHECKING:
    from patchwalk.clusters.rules import Marks, View

A = TypeVar("A", F64, I8, I64)

FRUSTRATED, LOOSE, DISPUTED, STALE = 0, 1, 2, 3

CANDIDATES = 64
"""Spins drawn for a start; the best of them is taken, or the first that could not be better."""

STRETCH = 1 << 16
"""Spins that a round reads through, one after the other, when none of those drawn had what was looked for."""

TASTERS = 4
"""Spins of the last shell that are compared for every place that is left in a cluster."""

OVERLAP_SAMPLE = 4096
"""From this size on the overlap of two configurations is judged by as many spins drawn; only its sign matters."""


class Scene(NamedTuple):
    """What a kernel reads: the couplings, the view, and the two good configurations ``first`` and ``sign * second``."""

    guide: int
    row_starts: I64
    neighbours: I32
    couplings: F64
    spins: I8
    local_fields: F64
    counts: I64
    first: I8
    second: I8
    sign: int


class Scratch(NamedTuple):
    """Marks of a round: see :class:`patchwalk.clusters.rules.Marks`; ``left`` is where to read on, and how far."""

    blocked: I64
    visited: I64
    queue: I32
    turn: I64
    left: I64


@dataclass(frozen=True)
class GuidedRule:
    """A rule whose clusters start and grow where its guide says."""

    name: str
    guide: int
    looks_at_spins: bool

    def pick(self, problem: Problem, size: int, wanted: int, seed: int, marks: Marks, view: View) -> tuple[I32, ...]:
        """Up to ``wanted`` clusters that do not touch, i32 (B, size), members rising in each row."""
        disputed = self.guide == DISPUTED
        if disputed and len(view.elites) < 2:
            return (balls(problem, size, wanted, seed, marks),)
        stream = stream_for(seed)
        first, second, sign = _two_of(view.elites, marks, stream) if disputed else (view.spins, view.spins, 1)
        scene = Scene(
            self.guide, problem.row_starts, problem.neighbours, problem.couplings, _locked(view.spins),
            _locked(view.local_fields), _locked(view.counts), _locked(first), _locked(second), sign,
        )  # fmt: skip
        left = np.array([next_below(stream, len(problem)), min(STRETCH, len(problem))])
        members = room_for(problem, size, wanted)
        found = _pick_guided(
            scene, members, stream, Scratch(marks.blocked, marks.visited, marks.queue, marks.turn, left)
        )
        return (members[:found],)


GUIDED = (
    GuidedRule("frustrated", FRUSTRATED, looks_at_spins=True),
    GuidedRule("loose", LOOSE, looks_at_spins=True),
    GuidedRule("disputed", DISPUTED, looks_at_spins=True),
    GuidedRule("stale", STALE, looks_at_spins=False),
)


def _two_of(elites: I8, marks: Marks, stream: U64) -> tuple[I8, I8, int]:
    """Two different rows drawn, and the sign that aligns the second with the first where a global flip is free."""
    one = next_below(stream, len(elites))
    other = next_below(stream, len(elites) - 1)
    first, second = elites[one], elites[other + (other >= one)]
    sign = _alignment(_locked(first), _locked(second), stream) if marks.flip_is_free else 1
    return first, second, sign


def _locked(array: A) -> A:
    """The same numbers, read-only: kernels are compiled for one kind of array."""
    locked = array.view()
    locked.flags.writeable = False
    return locked


@compiled
def _alignment(first: I8, second: I8, stream: U64) -> int:
    """1 where two configurations are more alike than opposite, else -1."""
    overlap, size = 0, len(first)
    for spin in range(min(size, OVERLAP_SAMPLE)):
        place = spin if size <= OVERLAP_SAMPLE else next_below(stream, size)
        overlap += first[place] * second[place]
    return 1 if overlap >= 0 else -1


@compiled
def _pick_guided(scene: Scene, members: I32, stream: U64, scratch: Scratch) -> int:
    """Fill ``members`` i32 (B, k) with clusters; returns how many there are."""
    turn, queue = scratch.turn, scratch.queue
    turn[0] += 1
    this_round = turn[0]
    count, size = members.shape
    found, misses = 0, 0
    while found < count and misses < MISSES_ALLOWED:
        turn[0] += 1
        filled = 0
        while filled < size:
            start = _start(scene, scratch, this_round, found == 0, stream)
            if start < 0:
                break
            scratch.visited[start] = turn[0]
            queue[filled] = start
            if scene.guide == STALE:
                filled = _grow_singly(scene, scratch, this_round, size, filled, stream)
            else:
                filled = _grow(scene, scratch, this_round, size, filled, stream)
        if filled < size:
            misses += 1
            continue
        misses = 0
        copy_rising(queue, members[found])
        block(scene.row_starts, scene.neighbours, members[found], scratch.blocked, this_round)
        found += 1
    return found


@compiled
def _free(scratch: Scratch, this_round: int, spin: int) -> bool:
    """Whether a spin is in no cluster of the round, next to none, and not in the one that is being made."""
    return scratch.blocked[spin] != this_round and scratch.visited[spin] != scratch.turn[0]


@compiled
def _rank(scene: Scene, scratch: Scratch, this_round: int, spin: int) -> float:
    """How good a spin is to start from: the lower the better, and nothing is better than zero."""
    if scene.guide == LOOSE:
        return abs(scene.local_fields[spin])
    if scene.guide == STALE:
        return float(scene.counts[spin])
    if scene.guide == DISPUTED:
        return 1.0 if scene.first[spin] == scene.sign * scene.second[spin] else 0.0
    for edge in range(scene.row_starts[spin], scene.row_starts[spin + 1]):
        if _leads_on(scene, spin, edge) and _free(scratch, this_round, scene.neighbours[edge]):
            return 0.0
    return 1.0


@compiled
def _leads_on(scene: Scene, spin: int, edge: int) -> bool:
    """Whether the cluster grows from ``spin`` along this entry of its row."""
    other = scene.neighbours[edge]
    if scene.guide == FRUSTRATED:
        return scene.couplings[edge] * scene.spins[spin] * scene.spins[other] > 0.0
    if scene.guide == DISPUTED:
        return scene.first[other] != scene.sign * scene.second[other]
    return True


@compiled
def _start(scene: Scene, scratch: Scratch, this_round: int, must: bool, stream: U64) -> int:
    """A free spin to start from, the best of a few drawn; -1 where none was free, unless one ``must`` be found."""
    size = len(scene.spins)
    best, best_rank = -1, np.inf
    for _ in range(CANDIDATES):
        spin = next_below(stream, size)
        if not _free(scratch, this_round, spin):
            continue
        rank = _rank(scene, scratch, this_round, spin)
        if rank < best_rank:
            best, best_rank = spin, rank
            if rank == 0.0:
                return best
    if scene.guide == FRUSTRATED or scene.guide == DISPUTED:
        spin = _read_on(scene, scratch, this_round)
        best = spin if spin >= 0 else best
    if best < 0 and must:
        best = next_unvisited(scratch.visited, scratch.turn[0], next_below(stream, size))
    return best


@compiled
def _read_on(scene: Scene, scratch: Scratch, this_round: int) -> int:
    """The next free spin that has what is looked for, in what is left of the round's stretch; -1 for none."""
    left = scratch.left
    while left[1] > 0:
        spin = left[0]
        left[0] = spin + 1 if spin + 1 < len(scene.spins) else 0
        left[1] -= 1
        if _free(scratch, this_round, spin) and _rank(scene, scratch, this_round, spin) == 0.0:
            return spin
    return -1


@compiled
def _grow(scene: Scene, scratch: Scratch, this_round: int, size: int, filled: int, stream: U64) -> int:
    """Shell after shell from the spin at ``queue[filled]``, where the guide leads; returns how many spins there are."""
    queue, visited, attempt = scratch.queue, scratch.visited, scratch.turn[0]
    begin, end = filled, filled + 1
    while end < size:
        after = end
        for place in range(begin, end):
            after = _look_round(scene, scratch, this_round, queue[place], after)
        if after == end:
            aside = _beside(scene, scratch, this_round, filled, end, stream)
            if aside < 0:
                return end
            visited[aside] = attempt
            queue[end] = aside
            after += 1
        if after > size:
            _choose(scene, queue, end, after, size, stream)
            return size
        begin, end = end, after
    return end


@compiled
def _grow_singly(scene: Scene, scratch: Scratch, this_round: int, size: int, filled: int, stream: U64) -> int:
    """Neighbour after neighbour of all spins so far, the best of a few drawn each; returns how many spins there are."""
    end = after = filled + 1
    while end < size:
        after = _look_round(scene, scratch, this_round, scratch.queue[end - 1], after)
        if after == end:
            return end
        _choose(scene, scratch.queue, end, after, end + 1, stream)
        end += 1
    return end


@compiled
def _look_round(scene: Scene, scratch: Scratch, this_round: int, spin: int, after: int) -> int:
    """Queue the free neighbours to which the guide leads from ``spin``; returns where the queue ends."""
    for edge in range(scene.row_starts[spin], scene.row_starts[spin + 1]):
        other = scene.neighbours[edge]
        if _leads_on(scene, spin, edge) and _free(scratch, this_round, other):
            scratch.visited[other] = scratch.turn[0]
            scratch.queue[after] = other
            after += 1
    return after


@compiled
def _beside(scene: Scene, scratch: Scratch, this_round: int, first: int, end: int, stream: U64) -> int:
    """A free neighbour, whatever the bond, of one of ``queue[first:end]``, from a random place on; -1 for none."""
    place = first + next_below(stream, end - first)
    for _ in range(first, end):
        spin = scratch.queue[place]
        begin, stop = scene.row_starts[spin], scene.row_starts[spin + 1]
        edge = begin + next_below(stream, stop - begin)
        for _ in range(begin, stop):
            if _free(scratch, this_round, scene.neighbours[edge]):
                return scene.neighbours[edge]
            edge = edge + 1 if edge + 1 < stop else begin
        place = place + 1 if place + 1 < end else first
    return -1


@compiled
def _choose(scene: Scene, queue: I32, end: int, after: int, size: int, stream: U64) -> None:
    """Fill ``queue[end:size]`` from what is queued up to ``after``: at random, or by the best of a few drawn each."""
    tasters = TASTERS if scene.guide == LOOSE or scene.guide == STALE else 1
    for place in range(end, size):
        best = place + next_below(stream, after - place)
        for _ in range(1, tasters):
            other = place + next_below(stream, after - place)
            if _prefers(scene, queue[other], queue[best]):
                best = other
        queue[place], queue[best] = queue[best], queue[place]


@compiled
def _prefers(scene: Scene, spin: int, other: int) -> bool:
    if scene.guide == LOOSE:
        return abs(scene.local_fields[spin]) < abs(scene.local_fields[other])
    return scene.counts[spin] < scene.counts[other]
