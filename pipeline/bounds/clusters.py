"""The cluster bound: exact minima of overlapping clusters, with multipliers on what they share.

Fields and couplings are shared out among the clusters that contain them. Whatever the shares, as long as they add up,

    E >= offset + sum_c min_x E_c(x),

because every cluster may choose its spins alone (Lagrangian decomposition: Guignard & Kim, Math. Program. 39 (1987)
215; for graphical models Wainwright, Jaakkola & Willsky, IEEE Trans. Inf. Theory 51 (2005) 3697; both from memory). The
shares are found by climbing the smoothed minima -T ln Z_c while T falls. A share is right where clusters agree on the
mean of every spin and product they have in common.

Where it beats the rest (computed here): on geometric graphs, full of small dense parts, such as beacons. Their gap at
n = 150, seeds 1 to 3, was 0.04 to 0.07 %, against 2.0 to 3.8 % by odd cycles, 4.6 to 5.0 % by the semidefinite bound
and 0.4 to 0.5 % with odd cuts on it, which takes five times longer. On lattices and random graphs of low degree odd
cycles are at least as good, and where all spins are coupled the semidefinite bound is far better.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt
from scipy import sparse

from patchwalk.bounds.ascent import ascend
from patchwalk.bounds.cluster_certificate import checked_clusters
from patchwalk.bounds.cluster_dual import center, cluster_minima, grow_clusters, list_cluster_pairs, smoothed_minima
from patchwalk.problem.ising import Problem
from patchwalk.subsolvers.contract import F64, I32, I64

LARGEST = 20
CLOSED, MOST_PATHS = 0.3, 5e7
"""Paths of two couplings, most of all whose ends are counted, and the share with coupled ends that promises much."""

HOTTEST, COLDEST, COOLING = 0.5, 0.003, 0.55
"""Temperatures in units of the typical local field: the first, the last, and the factor between rounds."""


@dataclass(frozen=True, eq=False)
class ClusterBound:
    """``lower_bound`` on E and the ``arrays`` that prove it (:mod:`patchwalk.bounds.cluster_certificate`).

    ``evaluations`` says how often all clusters were listed for it.
    """

    lower_bound: float
    arrays: dict[str, npt.NDArray[Any]]
    evaluations: int

    @property
    def proof(self) -> str:
        """What proves the bound, in words."""
        sizes = np.diff(self.arrays["member_starts"])
        if len(sizes) == 1:
            return f"the exact minimum of all {sizes[0]:,} spins, eliminated one after the other"
        return (
            f"exact minima of {len(sizes):,} overlapping clusters of up to {sizes.max()} spins, with multipliers on "
            "what they share"
        )


def cluster_bound(
    problem: Problem,
    *,
    cluster_size: int = 10,
    overlap: int = 10,
    steps: int = 30,
    stopped: Callable[[], bool] = lambda: False,
) -> ClusterBound:
    """The bound of clusters of ``cluster_size`` spins grown around every spin that is in fewer than ``overlap``.

    At most ``steps`` a temperature; ends early, with what it has, when ``stopped()``. Raises ``ValueError`` for
    clusters beyond 20 spins.

    >>> triangle = Problem.from_arrays([0, 1, 2], [1, 2, 0], [1, 1, 1])
    >>> round(cluster_bound(triangle, cluster_size=3).lower_bound, 9)
    -1.0
    """
    if not 2 <= cluster_size <= LARGEST:
        raise ValueError(f"cluster_size is {cluster_size}: all 2^k energies are listed, give 2 to {LARGEST} spins")
    if overlap < 1:
        raise ValueError(f"overlap is {overlap}: every spin must be in one cluster at least")
    grown = distinct(*grow_clusters(problem.row_starts, problem.neighbours, cluster_size, overlap))
    shared = _Shared(problem, *with_loners(*grown, len(problem)))
    best, evaluations = shared.even_shares(), 0
    highest = shared.bound(best)

    def look(point: F64, slope: F64) -> float:
        nonlocal best, highest, evaluations
        value, bound = smoothed_minima(*shared.layout, point, temperature, slope)
        center(shared.keys, shared.counts, slope, shared.sums)
        evaluations += 1
        if bound > highest:
            best, highest = point.copy(), bound
        return value

    scale = problem.field_scale or 1.0
    point, temperature = best.copy(), HOTTEST * scale
    while temperature > COLDEST * scale:
        point = ascend(look, stopped, point, len(point), temperature, steps)
        temperature *= COOLING
        if stopped():
            break
    arrays = shared.packed(best)
    return ClusterBound(checked_clusters(problem, arrays), arrays, evaluations)


def promising(problem: Problem) -> bool:
    """Whether clusters may prove more than odd cycles: where neighbours of a spin are mostly neighbours themselves.

    That share is above 0.4 on geometric graphs, 0 on the usual lattices, and next to nothing on random graphs.
    """
    degrees = np.diff(problem.row_starts).astype(np.float64)
    paths = float(degrees @ (degrees - 1.0))
    if not 0.0 < paths <= MOST_PATHS:
        return False
    links = sparse.csr_array(
        (np.ones(len(problem.neighbours)), problem.neighbours, problem.row_starts), shape=2 * (len(problem),)
    )
    return float((links @ links).multiply(links).sum()) >= CLOSED * paths


def distinct(starts: I64, members: I32) -> tuple[I64, I32]:
    """The same clusters, each once."""
    sizes = np.diff(starts)
    rows = np.full((len(sizes), int(sizes.max(initial=1))), -1, np.int32)
    rows[np.repeat(np.arange(len(sizes)), sizes), np.arange(len(members)) - np.repeat(starts[:-1], sizes)] = members
    kept = np.sort(np.unique(rows, axis=0, return_index=True)[1])
    held = rows[kept]
    return np.concatenate([[0], np.cumsum(sizes[kept])]).astype(np.int64), held[held >= 0]


def with_loners(starts: I64, members: I32, spins: int) -> tuple[I64, I32]:
    """The same clusters, and one of its own for each of the ``spins`` that is in none."""
    alone = np.setdiff1d(np.arange(spins, dtype=np.int32), members)
    return np.concatenate([starts, starts[-1] + 1 + np.arange(len(alone))]), np.concatenate([members, alone])


class _Shared:
    """Which cluster holds which field and coupling.

    ``layout`` is what the kernels take; ``keys`` i64 says for every share which field (0 to n-1) or coupling (n and
    more, by its place in the problem's rows) it is a share of; ``counts`` how many shares each has.
    """

    def __init__(self, problem: Problem, starts: I64, members: I32) -> None:
        pair_starts, firsts, seconds, places = list_cluster_pairs(
            problem.row_starts, problem.neighbours, starts, members
        )
        self.layout, self.members = (starts, pair_starts, firsts, seconds), members
        size = len(problem)
        self.keys = np.concatenate([members.astype(np.int64), size + places])
        self.counts = np.bincount(self.keys, minlength=size + len(problem.couplings))
        self.sums = np.empty(len(self.counts))
        self.wholes = np.concatenate([problem.fields, problem.couplings])

    def even_shares(self) -> F64:
        return np.asarray(self.wholes[self.keys] / self.counts[self.keys])

    def bound(self, shares: F64) -> float:
        """The sum of minima without regard to rounding or the offset."""
        minima = np.empty(len(self.layout[0]) - 1)
        cluster_minima(*self.layout, shares, minima)
        return float(minima.sum())

    def packed(self, shares: F64) -> dict[str, npt.NDArray[Any]]:
        """The certificate of shares that add up but for rounding, which the first share of each whole takes on."""
        starts, pair_starts, firsts, seconds = self.layout
        order = np.argsort(self.keys, kind="stable")
        begins = np.flatnonzero(np.diff(self.keys[order], prepend=-1))
        exact = shares.copy()
        for own in np.split(order, begins[1:]):
            exact[own[0]] = math.fsum([self.wholes[self.keys[own[0]]], *(-shares[own[1:]]).tolist()])
        base = np.repeat(starts[:-1], np.diff(pair_starts))
        return {
            "member_starts": starts,
            "members": self.members,
            "field_shares": exact[: len(self.members)],
            "pair_starts": pair_starts,
            "pairs": np.stack([self.members[base + firsts], self.members[base + seconds]], axis=1),
            "coupling_shares": exact[len(self.members) :],
        }
