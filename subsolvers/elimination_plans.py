"""Plans of elimination, kept for a while: what forecasts a cluster and what then answers it need the same one.

A plan is a function of the cluster's graph and the limit alone, so that it makes no difference to an answer whether it
was remembered, or which clusters came before.
"""

from __future__ import annotations

from functools import lru_cache
from typing import NamedTuple

import numpy as np

from patchwalk.subsolvers.elimination_layout import Layout, lay_out
from patchwalk.subsolvers.elimination_order import Plan, find_plan, width_of
from patchwalk.subsolvers.neighbours import Lists

KEPT_PLANS = 256
"""So many plans are remembered, those used last. With their graphs they take up to 50 MB, mostly far less."""

LONGEST_KEPT = 20_000
"""Graphs with more neighbours in all are planned every time: what is that dense is mostly too wide."""


class Planned(NamedTuple):
    """The width found for a graph, and, unless that is above the limit, its plan and the places of its tables."""

    width: int
    tables: tuple[Plan, Layout] | None


def planned(lists: Lists, limit: int) -> Planned:
    """What it takes to eliminate a cluster with these lists of neighbours; a width up to ``limit`` is looked for."""
    plan = _planned if len(lists.neighbours) <= LONGEST_KEPT else _planned.__wrapped__
    return plan(lists.starts.tobytes(), lists.neighbours.tobytes(), limit)


@lru_cache(maxsize=KEPT_PLANS)
def _planned(starts: bytes, neighbours: bytes, limit: int) -> Planned:
    # copies, because kernels are compiled for arrays that can be written to
    plan = find_plan(np.frombuffer(starts, np.int64).copy(), np.frombuffer(neighbours, np.int32).copy(), limit)
    width = width_of(plan)
    return Planned(width, (plan, lay_out(plan)) if width <= limit else None)
