"""Rules closed over groups: where exactly one spin of a group should be down, the group is called so that it can move.

Half a group cannot change sensibly: the spin that is down must be there to come up when another goes down. Whatever
clusters a rule has picked, its spins join one after the other, in random order, each with the whole of its groups, and
of the groups that those touch; what does not fit is left out, so that clusters of one round may differ in size.

Where a spin's groups, taken together, are larger than a cluster may be, part of them must do: the spin, the members of
its groups that are down at present, and in the room left, at random, spins of whose groups every one has its down
member in the cluster. Of one large group that is its down member and others; of the rows and columns of an assignment
it is a square of them. That looks at the spins, and a rule that may have to do it says so.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, NamedTuple

import numpy as np
from scipy import sparse
from scipy.sparse.csgraph import connected_components

from patchwalk.clusters.growing import block
from patchwalk.problem.ising import Problem
from patchwalk.subsolvers.compiled import compiled
from patchwalk.subsolvers.contract import I8, I32, I64, U64
from patchwalk.subsolvers.draws import next_below, stream_for

if TYPE_CHECKING:
    from patchwalk.clusters.rules import ClusterRule, Marks, View

CLOSING = 1
"""The word that tells the stream of closing from that of the rule."""


class Membership(NamedTuple):
    """Which spin is in which group: rows ``starts``/``members`` of groups, ``places``/``groups`` of spins.

    ``reach`` i32 (n,) is how many spins a spin takes with it, itself included, when all groups that hang together stay
    whole.
    """

    starts: I64
    members: I32
    places: I64
    groups: I32
    reach: I32


@dataclass(frozen=True, eq=False)
class WholeGroups:
    """A rule whose clusters are closed over the groups of a problem."""

    rule: ClusterRule
    membership: Membership
    looks_at_spins: bool

    @property
    def name(self) -> str:
        return self.rule.name

    def pick(self, problem: Problem, size: int, wanted: int, seed: int, marks: Marks, view: View) -> tuple[I32, ...]:
        """Clusters of at most ``size`` spins: an array i32 (B, k) for every k that occurs, in rising order."""
        picked = self.rule.pick(problem, size, wanted, seed, marks, view)
        stream, touched = stream_for(seed, CLOSING), np.zeros(len(self.membership.starts) - 1, np.int64)
        marks.turn[0] += 1
        this_round = int(marks.turn[0])
        by_size: dict[int, list[I32]] = {}
        for cores in picked:
            closed, lengths = np.empty((len(cores), size), np.int32), np.zeros(len(cores), np.int64)
            _close(
                problem.row_starts, problem.neighbours, self.membership, cores, view.spins, stream, this_round,
                marks.blocked, marks.visited, marks.queue, marks.turn, touched, closed, lengths,
            )  # fmt: skip
            for length in np.unique(lengths[lengths > 0]).tolist():
                by_size.setdefault(length, []).append(closed[lengths == length, :length])
        return tuple(np.ascontiguousarray(np.concatenate(by_size[length])) for length in sorted(by_size))


def closed_over_groups(rule: ClusterRule, problem: Problem, size: int) -> ClusterRule:
    """The rule for clusters of at most ``size`` spins of this problem; the rule itself where there are no groups."""
    if not problem.groups:
        return rule
    membership = _membership(problem.groups, len(problem))
    too_large = bool(np.any(membership.reach > size))
    return WholeGroups(rule, membership, rule.looks_at_spins or too_large)


def _membership(groups: tuple[I32, ...], size: int) -> Membership:
    starts = np.concatenate([[0], np.cumsum([len(group) for group in groups])]).astype(np.int64)
    members = np.concatenate(groups).astype(np.int32)
    numbers = np.repeat(np.arange(len(groups), dtype=np.int32), np.diff(starts))
    order = np.argsort(members, kind="stable")
    places = np.searchsorted(members[order], np.arange(size + 1)).astype(np.int64)
    edges = sparse.coo_array((np.ones(len(members)), (members, numbers + size)), shape=(size + len(groups),) * 2)
    _, labels = connected_components(edges, directed=False)
    reach = np.bincount(labels[:size], minlength=labels.max() + 1)[labels[:size]]
    return Membership(starts, members, places, numbers[order], reach.astype(np.int32))


@compiled
def _close(
    row_starts: I64,
    neighbours: I32,
    membership: Membership,
    cores: I32,
    spins: I8,
    stream: U64,
    this_round: int,
    blocked: I64,
    visited: I64,
    queue: I32,
    turn: I64,
    touched: I64,
    closed: I32,
    lengths: I64,
) -> None:
    """Write row after row of ``closed`` and how many spins it has, 0 where nothing was left to take."""
    size = closed.shape[1]
    for row in range(len(cores)):
        turn[0] += 1
        attempt = turn[0]
        core = cores[row].copy()
        filled = 0
        for place in range(len(core)):
            other = place + next_below(stream, len(core) - place)
            core[place], core[other] = core[other], core[place]
            spin = core[place]
            if filled == size or visited[spin] == attempt or blocked[spin] == this_round:
                continue
            if membership.reach[spin] > size:
                end = _join_in_part(membership, spin, spins, queue, filled, size, visited, attempt, touched)
            elif membership.reach[spin] > size - filled:
                continue
            else:
                end = _join_whole(membership, spin, queue, filled, visited, attempt)
            if _may_stay(queue, filled, end, size, blocked, this_round):
                filled = end
                if membership.reach[spin] > size:
                    filled = _fill_up(
                        membership, queue, filled, size, blocked, this_round, visited, attempt, touched, stream
                    )
            else:
                _leave(membership, queue, filled, end, size, visited, attempt, touched)
        lengths[row] = filled
        closed[row, :filled] = np.sort(queue[:filled])
        block(row_starts, neighbours, closed[row, :filled], blocked, this_round)


@compiled
def _may_stay(queue: I32, filled: int, end: int, size: int, blocked: I64, this_round: int) -> bool:
    """Whether what has joined fits and touches no other cluster of the round."""
    if end > size:
        return False
    touching = 0
    for place in range(filled, end):
        touching += blocked[queue[place]] == this_round
    return touching == 0


@compiled
def _leave(
    membership: Membership, queue: I32, filled: int, end: int, size: int, visited: I64, attempt: int, touched: I64
) -> None:
    """Take back what has joined; groups that only it had touched are so no longer."""
    for place in range(filled, end):
        visited[queue[place]] = 0
        for slot in range(membership.places[queue[place]], membership.places[queue[place] + 1]):
            touched[membership.groups[slot]] = 0
    for place in range(filled):
        if membership.reach[queue[place]] > size:
            for slot in range(membership.places[queue[place]], membership.places[queue[place] + 1]):
                touched[membership.groups[slot]] = attempt


@compiled
def _join_whole(membership: Membership, spin: int, queue: I32, filled: int, visited: I64, attempt: int) -> int:
    """Queue a spin and all that hangs together with it; returns the end of the queue."""
    visited[spin] = attempt
    queue[filled] = spin
    end = filled + 1
    place = filled
    while place < end:
        for slot in range(membership.places[queue[place]], membership.places[queue[place] + 1]):
            group = membership.groups[slot]
            for member in membership.members[membership.starts[group] : membership.starts[group + 1]]:
                if visited[member] != attempt:
                    visited[member] = attempt
                    queue[end] = member
                    end += 1
        place += 1
    return end


@compiled
def _join_in_part(
    membership: Membership,
    spin: int,
    spins: I8,
    queue: I32,
    filled: int,
    size: int,
    visited: I64,
    attempt: int,
    touched: I64,
) -> int:
    """Queue a spin and the down members of its groups, and theirs, up to one too many; returns the end of the queue.

    The first of a cluster takes only as many as fit.
    """
    visited[spin] = attempt
    queue[filled] = spin
    end = filled + 1
    place = filled
    while place < end:
        for slot in range(membership.places[queue[place]], membership.places[queue[place] + 1]):
            group = membership.groups[slot]
            touched[group] = attempt
            for member in membership.members[membership.starts[group] : membership.starts[group + 1]]:
                if spins[member] < 0 and visited[member] != attempt and end < size + (filled > 0):
                    visited[member] = attempt
                    queue[end] = member
                    end += 1
        place += 1
    return end


@compiled
def _fill_up(
    membership: Membership,
    queue: I32,
    filled: int,
    size: int,
    blocked: I64,
    this_round: int,
    visited: I64,
    attempt: int,
    touched: I64,
    stream: U64,
) -> int:
    """Give the room left to spins all of whose groups are touched, at random; returns the end of the queue."""
    end = filled
    for place in range(filled):
        for slot in range(membership.places[queue[place]], membership.places[queue[place] + 1]):
            group = membership.groups[slot]
            if touched[group] != attempt:
                continue
            for member in membership.members[membership.starts[group] : membership.starts[group + 1]]:
                if visited[member] == attempt or blocked[member] == this_round:
                    continue
                complete = True
                for own in range(membership.places[member], membership.places[member + 1]):
                    complete = complete and touched[membership.groups[own]] == attempt
                if complete:
                    visited[member] = attempt
                    queue[end] = member
                    end += 1
    for place in range(filled, min(end, size)):
        other = place + next_below(stream, end - place)
        queue[place], queue[other] = queue[other], queue[place]
    for place in range(size, end):
        visited[queue[place]] = 0
    return min(end, size)
