"""Moves within groups of spins of which exactly one is -1: the -1 goes from one member to another.

A single flip leaves such a group, and its penalty then makes the second flip, back in, all but impossible at low
temperature. A move of two flips stays inside. The other member is drawn evenly, so that a move is as likely to be
proposed as the one that undoes it, and Metropolis' rule then keeps the Boltzmann law.
"""

from __future__ import annotations

import numpy as np

from patchwalk.subsolvers.compiled import compiled
from patchwalk.subsolvers.contract import F64, I8, I32, I64, U64
from patchwalk.subsolvers.draws import happens, next_below, next_unit
from patchwalk.subsolvers.neighbours import TIE_CHANCE, turn


@compiled
def coupling_between(spin: int, other: int, row_starts: I64, neighbours: I32, couplings: F64) -> float:
    """The coupling of two spins, 0 where they have none; neighbours rise within a row."""
    begin, end = row_starts[spin], row_starts[spin + 1]
    place = begin + np.searchsorted(neighbours[begin:end], other)
    return float(couplings[place]) if place < end and neighbours[place] == other else 0.0


@compiled
def only_member_down(members: I32, spins: I8) -> int:
    """The place in ``members`` of the one spin that is -1; -1 where none or several are."""
    found = -1
    for place in range(len(members)):
        if spins[members[place]] < 0:
            if found >= 0:
                return -1
            found = place
    return found


@compiled
def group_sweep(
    row_starts: I64,
    neighbours: I32,
    couplings: F64,
    group_starts: I64,
    group_members: I32,
    spins: I8,
    local_fields: F64,
    temperature: float,
    stream: U64,
) -> float:
    """One move proposed in every group in order, in place; returns the energy change.

    Group g is ``group_members[group_starts[g]:group_starts[g+1]]``, i64 (groups+1,) and i32. Groups in which not
    exactly one spin is -1 are left as they are, and groups may share spins. Ties as in ``metropolis_sweep``.
    """
    change = 0.0
    coldness = 1.0 / temperature
    for group in range(len(group_starts) - 1):
        members = group_members[group_starts[group] : group_starts[group + 1]]
        down = only_member_down(members, spins)
        if down < 0 or len(members) < 2:
            continue
        place = next_below(stream, len(members) - 1)
        spin, other = members[down], members[place + (place >= down)]
        # both flips alone, less what each reckons with of the other: their product stays as it is
        rise = 2.0 * (local_fields[spin] - local_fields[other])
        rise -= 4.0 * coupling_between(spin, other, row_starts, neighbours, couplings)
        if rise > 0.0:
            if temperature == 0.0 or not happens(stream, rise * coldness):
                continue
        elif rise == 0.0 and next_unit(stream) >= TIE_CHANCE:
            continue
        change += rise
        turn(spin, spins, local_fields, row_starts, neighbours, couplings)
        turn(other, spins, local_fields, row_starts, neighbours, couplings)
    return change
