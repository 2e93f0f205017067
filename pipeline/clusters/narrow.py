"""Whether variable elimination can answer a cluster with tables of a given width, before it is asked to."""

from __future__ import annotations

import numpy as np

from patchwalk.subsolvers.compiled import compiled
from patchwalk.subsolvers.contract import I32, I64
from patchwalk.subsolvers.elimination_order import fits_within


@compiled
def is_narrow(starts: I64, neighbours: I32, cluster: I32, widest: int) -> bool:
    """Whether elimination finds an order of width up to ``widest`` for these spins of a problem, i32 (k,), any order.

    The problem is given by its lists of neighbours. The cluster's own are made as elimination makes them: spins
    renamed to their places in rising order, neighbours rising, so that it will find the very same order.
    """
    if len(cluster) <= widest + 1:
        return True
    members = np.sort(cluster)
    inner_starts, room = np.zeros(len(members) + 1, np.int64), 0
    for spin in members:
        room += min(starts[spin + 1] - starts[spin], len(members))
    inner, filled = np.empty(room, np.int32), 0
    for place in range(len(members)):
        for edge in range(starts[members[place]], starts[members[place] + 1]):
            other = np.searchsorted(members, neighbours[edge])
            if other < len(members) and members[other] == neighbours[edge]:
                inner[filled] = other
                filled += 1
        inner_starts[place + 1] = filled
    return fits_within(inner_starts, inner[:filled], widest)


@compiled
def longest_narrow(starts: I64, neighbours: I32, queue: I32, guess: int, widest: int) -> int:
    """About how many of the first spins in ``queue`` make a cluster of width up to ``widest``, found by halving.

    ``guess`` is tried first.
    """
    narrow, wide = min(len(queue), widest + 1), len(queue)
    tried = guess if narrow < guess < wide else (narrow + wide) // 2
    while wide - narrow > 1 + len(queue) // 32:
        if is_narrow(starts, neighbours, queue[:tried], widest):
            narrow = tried
        else:
            wide = tried
        tried = (narrow + wide) // 2
    return narrow
