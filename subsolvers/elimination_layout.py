"""Where the tables of variable elimination are kept, all at once or stretch by stretch of the order."""

from __future__ import annotations

from typing import NamedTuple

import numpy as np

from patchwalk.subsolvers.compiled import compiled
from patchwalk.subsolvers.contract import I64
from patchwalk.subsolvers.elimination_order import Plan

KEPT_WHOLE = 1 << 22
"""Up to so many table entries in all, nothing is filled twice."""


class Layout(NamedTuple):
    """Where the tables are kept.

    ``places`` i64 (k,) are offsets of the tables by rank in an array of ``room`` entries, those from ``kept`` on shared
    by all stretches; ``stretches`` i64 (S+1,) bounds them in the order; ``entries`` are filled in all.
    """

    places: I64
    stretches: I64
    kept: int
    room: int
    entries: int


@compiled
def lay_out(plan: Plan) -> Layout:
    """Places for all tables of a plan."""
    size = len(plan.order)
    sizes = np.empty(size, np.int64)
    for rank in range(size):
        sizes[rank] = 1 << (plan.scope_starts[rank + 1] - plan.scope_starts[rank])
    total = sizes.sum()
    longest = total if total <= KEPT_WHOLE else np.int64(np.sqrt(float(total) * sizes.max()))
    stretches, places = np.zeros(size + 1, np.int64), np.empty(size, np.int64)
    count, inside = 0, 0
    for rank in range(size):
        if inside > 0 and inside + sizes[rank] > longest:
            count += 1
            stretches[count] = rank
            inside = 0
        inside += sizes[rank]
    count += 1
    stretches[count] = size
    kept, shared, entries = 0, 0, total
    for stretch in range(count):
        inside, end = 0, stretches[stretch + 1]
        for rank in range(stretches[stretch], end):
            if receiver(plan, rank) >= end:
                places[rank] = kept
                kept += sizes[rank]
            else:
                places[rank] = -1 - inside
                inside += sizes[rank]
        shared = max(shared, inside)
        entries += inside if stretch < count - 1 else 0
    for rank in range(size):
        if places[rank] < 0:
            places[rank] = kept - 1 - places[rank]
    return Layout(places, stretches[: count + 1].copy(), kept, kept + shared, entries)


@compiled
def receiver(plan: Plan, rank: int) -> int:
    """The rank that receives a rank's table, -1 where nothing is left to receive it."""
    first = plan.scope_starts[rank]
    return plan.scopes[first] if plan.scope_starts[rank + 1] > first else -1
