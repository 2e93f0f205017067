"""The whole problem as one cluster, where an order of elimination keeps tables small: the bound is then exact.

Narrow are trees, strips of lattices, and whatever lies along a line, such as beacons on a coast, however many.
"""

from __future__ import annotations

from typing import Any

import numpy as np
import numpy.typing as npt

from patchwalk.bounds.cluster_certificate import checked_clusters, eliminated
from patchwalk.bounds.clusters import ClusterBound
from patchwalk.bounds.planar import is_planar
from patchwalk.problem.ising import Problem
from patchwalk.subsolvers.contract import I8, I32
from patchwalk.subsolvers.minimum_fill import fill_least

WIDTH, ENTRIES = 18, 2.0**22
"""Narrow means tables over at most so many spins, and at most so many entries in all: a tenth of a second."""

MOST_SPINS = 20_000
"""The order of minimum fill is looked for on a matrix of bits: 50 MB."""


def narrow_order(problem: Problem) -> I32 | None:
    """The spins in an order of elimination that keeps tables small, i32 (n,), or None where none is found.

    None as well where odd cycles leave no gap: without couplings, and on planar problems without fields, which have no
    minor of the complete graph of five vertices (Barahona & Mahjoub, Math. Program. 36 (1986) 157).
    """
    if len(problem) > MOST_SPINS or not problem.coupling_count or is_planar(problem):
        return None
    order = np.empty(len(problem), np.int32)
    found = fill_least(problem.row_starts.copy(), problem.neighbours.copy(), WIDTH, ENTRIES, order)
    return order if found else None


def narrow_minimum(problem: Problem, order: I32) -> tuple[I8, ClusterBound]:
    """Spins i8 (n,) of lowest energy, by elimination in this order, and the bound that proves it.

    >>> ring = Problem.from_arrays([0, 1, 2, 3, 4], [1, 2, 3, 4, 0], [1.0] * 5, fields=[0.5] * 5)
    >>> spins, bound = narrow_minimum(ring, narrow_order(ring))
    >>> bound.lower_bound, ring.energy(spins)
    (-3.5, -3.5)
    """
    rows = np.repeat(np.arange(len(problem), dtype=np.int32), np.diff(problem.row_starts))
    once = rows < problem.neighbours
    arrays: dict[str, npt.NDArray[Any]] = {
        "member_starts": np.array([0, len(problem)], np.int64),
        "members": order,
        "field_shares": problem.fields[order],
        "pair_starts": np.array([0, np.count_nonzero(once)], np.int64),
        "pairs": np.stack([rows[once], problem.neighbours[once]], axis=1),
        "coupling_shares": problem.couplings[once],
    }
    _, found = eliminated(order, arrays["field_shares"], arrays["pairs"], arrays["coupling_shares"])
    spins = np.empty(len(problem), np.int8)
    spins[order] = found
    return spins, ClusterBound(checked_clusters(problem, arrays), arrays, 1)
