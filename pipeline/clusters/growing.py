"""The rules that look at couplings only: ``ball`` and ``scattered``, and what every growing rule needs.

Kernels fill ``members`` i32 (B, k) and return how many rows they filled. The marks of a round and of an attempt are
numbers that are never used twice, so that nothing needs clearing between rounds.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import TYPE_CHECKING, TypeVar

import numpy as np

from patchwalk.problem.ising import Problem
from patchwalk.subsolvers.compiled import compiled
from patchwalk.subsolvers.contract import F64, I8, I32, I64, U64
from patchwalk.subsolvers.draws import next_below, stream_for

if TYPE_CHECKING:
    from patchwalk.clusters.rules import Marks

MISSES_ALLOWED = 8
"""A round is full once this many attempts in a row found no room for another cluster."""

CANDIDATES = 16
"""Spins drawn for the start of a cluster that is to have something; the best of them is taken."""

A = TypeVar("A", F64, I8, I64)

BlindKernel = Callable[[I64, I32, int, I32, U64, I64, I64, I32, I64], int]


def balls(problem: Problem, size: int, wanted: int, seed: int, marks: Marks) -> I32:
    """Breadth-first balls round random spins, i32 (B, size)."""
    return _picked(_pick_balls, problem, size, wanted, seed, marks)


def scattered(problem: Problem, size: int, wanted: int, seed: int, marks: Marks) -> I32:
    """Spins drawn wherever they lie, i32 (B, size)."""
    return _picked(_pick_scattered, problem, size, wanted, seed, marks)


def room_for(problem: Problem, size: int, wanted: int) -> I32:
    """An array for ``wanted`` clusters, or for as many as the problem can hold at most."""
    return np.empty((max(1, min(wanted, len(problem) // size)), size), np.int32)


def locked_view(array: A) -> A:
    """The same numbers, read-only: kernels are compiled for one kind of array."""
    locked = array.view()
    locked.flags.writeable = False
    return locked


def _picked(kernel: BlindKernel, problem: Problem, size: int, wanted: int, seed: int, marks: Marks) -> I32:
    members = room_for(problem, size, wanted)
    found = kernel(
        problem.row_starts, problem.neighbours, size, members, stream_for(seed),
        marks.blocked, marks.visited, marks.queue, marks.turn,
    )  # fmt: skip
    return members[:found]


@compiled
def copy_rising(queue: I32, cluster: I32) -> None:
    """The first spins of the queue in rising order, by insertion: few spins, and quick to compile."""
    for place in range(len(cluster)):
        slot = place
        while slot > 0 and cluster[slot - 1] > queue[place]:
            cluster[slot] = cluster[slot - 1]
            slot -= 1
        cluster[slot] = queue[place]


@compiled
def block(row_starts: I64, neighbours: I32, cluster: I32, blocked: I64, turn: int) -> None:
    """Keep the cluster and everything it touches out of this round's other clusters."""
    for spin in cluster:
        blocked[spin] = turn
        for place in range(row_starts[spin], row_starts[spin + 1]):
            blocked[neighbours[place]] = turn


@compiled
def _pick_balls(
    row_starts: I64,
    neighbours: I32,
    size: int,
    members: I32,
    stream: U64,
    blocked: I64,
    visited: I64,
    queue: I32,
    turn: I64,
) -> int:
    """Breadth-first balls round random spins; the last shell gives as many random spins as are still wanted.

    Where a component is exhausted before the ball is full, it goes on round another random spin.
    """
    turn[0] += 1
    this_round = turn[0]
    spins = len(row_starts) - 1
    found, misses = 0, 0
    while found < len(members) and misses < MISSES_ALLOWED:
        turn[0] += 1
        filled = 0
        seeds_missed = 0
        while filled < size and seeds_missed < MISSES_ALLOWED:
            centre = next_below(stream, spins)
            if blocked[centre] == this_round or visited[centre] == turn[0]:
                seeds_missed += 1
                if found > 0 or seeds_missed < MISSES_ALLOWED:
                    continue
                centre = next_unvisited(visited, turn[0], centre)
            seeds_missed = 0
            visited[centre] = turn[0]
            queue[filled] = centre
            filled = _grow(row_starts, neighbours, size, stream, blocked, this_round, visited, turn[0], queue, filled)
        if filled < size:
            misses += 1
            continue
        misses = 0
        copy_rising(queue, members[found])
        block(row_starts, neighbours, members[found], blocked, this_round)
        found += 1
    return found


@compiled
def _grow(
    row_starts: I64,
    neighbours: I32,
    size: int,
    stream: U64,
    blocked: I64,
    this_round: int,
    visited: I64,
    attempt: int,
    queue: I32,
    filled: int,
) -> int:
    """Shell after shell round the spin at ``queue[filled]`` until the cluster has ``size`` spins; returns how many it
    has.
    """
    shell_start, shell_end = filled, filled + 1
    while shell_end > shell_start and shell_end < size:
        end = shell_end
        for place in range(shell_start, shell_end):
            for edge in range(row_starts[queue[place]], row_starts[queue[place] + 1]):
                spin = neighbours[edge]
                if visited[spin] != attempt and blocked[spin] != this_round:
                    visited[spin] = attempt
                    queue[end] = spin
                    end += 1
        if end > size:
            for place in range(shell_end, size):
                other = place + next_below(stream, end - place)
                queue[place], queue[other] = queue[other], queue[place]
            return size
        shell_start, shell_end = shell_end, end
    return shell_end


@compiled
def next_unvisited(visited: I64, attempt: int, spin: int) -> int:
    while visited[spin] == attempt:
        spin = spin + 1 if spin + 1 < len(visited) else 0
    return spin


@compiled
def _pick_scattered(
    row_starts: I64,
    neighbours: I32,
    size: int,
    members: I32,
    stream: U64,
    blocked: I64,
    visited: I64,
    queue: I32,
    turn: I64,
) -> int:
    """Spins drawn at random, wherever they lie."""
    turn[0] += 1
    this_round = turn[0]
    spins = len(row_starts) - 1
    found, misses = 0, 0
    while found < len(members) and misses < MISSES_ALLOWED:
        turn[0] += 1
        filled, missed = 0, 0
        while filled < size and missed < MISSES_ALLOWED * size:
            spin = next_below(stream, spins)
            if blocked[spin] == this_round or visited[spin] == turn[0]:
                missed += 1
                if found > 0 or missed < MISSES_ALLOWED * size:
                    continue
                missed = 0
                spin = next_unvisited(visited, turn[0], spin)
            visited[spin] = turn[0]
            queue[filled] = spin
            filled += 1
        if filled < size:
            misses += 1
            continue
        misses = 0
        copy_rising(queue, members[found])
        block(row_starts, neighbours, members[found], blocked, this_round)
        found += 1
    return found
