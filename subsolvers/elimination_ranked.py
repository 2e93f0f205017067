"""A cluster in the order of its elimination, and the chance of each spin once all later ones are drawn."""

from __future__ import annotations

from typing import NamedTuple

import numpy as np

from patchwalk.subsolvers.compiled import compiled
from patchwalk.subsolvers.contract import F64, I8, I32, I64
from patchwalk.subsolvers.elimination_order import Plan
from patchwalk.subsolvers.spectrum import boltzmann_factor


class Ranked(NamedTuple):
    """A cluster with its spins renamed to their ranks: fields f64 (k,), and each rank's couplings to later ones,
    ``later[starts[r] : starts[r + 1]]`` of these ``strengths``.
    """

    fields: F64
    starts: I64
    later: I32
    strengths: F64


@compiled
def by_rank(plan: Plan, fields: F64, starts: I64, neighbours: I32, strengths: F64) -> Ranked:
    """The cluster of these fields and lists of neighbours, renamed to ranks."""
    size = len(fields)
    ranks, ranked_fields = np.empty(size, np.int32), np.empty(size)
    for rank in range(size):
        ranks[plan.order[rank]] = rank
        ranked_fields[rank] = fields[plan.order[rank]]
    later_starts = np.zeros(size + 1, np.int64)
    later, later_strengths = np.empty(len(neighbours) // 2, np.int32), np.empty(len(neighbours) // 2)
    filled = 0
    for rank in range(size):
        for edge in range(starts[plan.order[rank]], starts[plan.order[rank] + 1]):
            if ranks[neighbours[edge]] > rank:
                later[filled] = ranks[neighbours[edge]]
                later_strengths[filled] = strengths[edge]
                filled += 1
        later_starts[rank + 1] = filled
    return Ranked(ranked_fields, later_starts, later, later_strengths)


@compiled
def chance_of_up(
    rank: int,
    plan: Plan,
    places: I64,
    cluster: Ranked,
    rate: float,
    tolerance: float,
    energies: F64,
    weights: F64,
    spins: I8,
) -> float:
    """The chance that a spin is +1, given all later ones."""
    up = cluster.fields[rank]
    for edge in range(cluster.starts[rank], cluster.starts[rank + 1]):
        up += cluster.strengths[edge] * spins[plan.order[cluster.later[edge]]]
    down = -up
    up_weight = down_weight = 1.0
    giver = plan.first_giver[rank]
    while giver >= 0:
        place, begin = places[giver], plan.scope_starts[giver]
        for other in range(begin + 1, plan.scope_starts[giver + 1]):
            if spins[plan.order[plan.scopes[other]]] < 0:
                place += 1 << (other - begin)
        up += energies[place]
        down += energies[place + 1]
        up_weight *= weights[place]
        down_weight *= weights[place + 1]
        giver = plan.next_giver[giver]
    rise = down - up
    if np.isinf(rate):
        up_weight *= rise >= -tolerance
        down_weight *= rise <= tolerance
    elif rise >= 0.0:
        down_weight *= boltzmann_factor(rate * rise)
    else:
        up_weight *= boltzmann_factor(-rate * rise)
    return up_weight / (up_weight + down_weight)
