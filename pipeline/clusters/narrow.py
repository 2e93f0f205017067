"""Whether variable elimination can answer a cluster with tables of a given width, before it is asked to."""

from __future__ import annotations

import numpy as np

from patchwalk.problem.ising import Problem
from patchwalk.subsolvers.compiled import compiled
from patchwalk.subsolvers.contract import I32, I64
from patchwalk.subsolvers.elimination_order import fits_within


def is_narrow(problem: Problem, members: I32, widest: int) -> bool:
    """Whether elimination finds an order of width up to ``widest`` for these spins of a problem, i32 (k,), rising."""
    if len(members) <= widest + 1:
        return True
    return fits_within(*_lists_within(problem.row_starts, problem.neighbours, members), widest)


def longest_narrow(problem: Problem, queue: I32, guess: int, widest: int) -> int:
    """About how many of the first spins in ``queue`` make a cluster of width up to ``widest``, found by halving.

    ``guess`` is tried first.
    """
    narrow, wide = min(len(queue), widest + 1), len(queue)
    tried = guess if narrow < guess < wide else (narrow + wide) // 2
    while wide - narrow > 1 + len(queue) // 32:
        if is_narrow(problem, np.sort(queue[:tried]), widest):
            narrow = tried
        else:
            wide = tried
        tried = (narrow + wide) // 2
    return narrow


@compiled
def _lists_within(starts: I64, neighbours: I32, members: I32) -> tuple[I64, I32]:
    """Lists of neighbours of a cluster by itself, made as elimination makes them, so that it will find the same order.

    Spins are renamed to their places among the members, and neighbours rise.
    """
    own_starts, room = np.zeros(len(members) + 1, np.int64), 0
    for spin in members:
        room += min(starts[spin + 1] - starts[spin], len(members))
    own, filled = np.empty(room, np.int32), 0
    for place in range(len(members)):
        for edge in range(starts[members[place]], starts[members[place] + 1]):
            other = np.searchsorted(members, neighbours[edge])
            if other < len(members) and members[other] == neighbours[edge]:
                own[filled] = other
                filled += 1
        own_starts[place + 1] = filled
    return own_starts, own[:filled]
