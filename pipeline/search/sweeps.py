"""Single-spin Metropolis sweeps over the whole problem: the classical carrier between cluster calls.

Local fields are carried along, so that a refused flip costs one comparison and an accepted one a walk over the
spin's neighbours. Metropolis et al., J. Chem. Phys. 21 (1953) 1087.
"""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from patchwalk.subsolvers.compiled import compiled
from patchwalk.subsolvers.contract import F64, I8, I32, I64, U64
from patchwalk.subsolvers.draws import happens, next_unit
from patchwalk.subsolvers.neighbours import TIE_CHANCE, turn


@compiled
def metropolis_sweep(
    row_starts: I64,
    neighbours: I32,
    couplings: F64,
    spins: I8,
    local_fields: F64,
    temperature: float,
    stream: U64,
) -> float:
    """One sweep over all spins in order, in place; returns the energy change.

    At temperature zero no flip that raises the energy is made. One that leaves it as it is is made nine times in ten:
    were it always made, the domain walls of a chain would travel with the sweep and never meet (computed here, ring
    of 100 spins); were it made half the time, glasses of +-J couplings would cool worse.
    """
    change = 0.0
    hopeless = 40.0 * temperature  # exp(-40) is below any chance worth a random number
    coldness = 1.0 / temperature
    for spin in range(len(spins)):
        rise = -2.0 * spins[spin] * local_fields[spin]
        if rise > 0.0:
            if rise > hopeless or not happens(stream, rise * coldness):
                continue
        elif rise == 0.0 and next_unit(stream) >= TIE_CHANCE:
            continue
        change += rise
        turn(spin, spins, local_fields, row_starts, neighbours, couplings)
    return change


@compiled
def descend(row_starts: I64, neighbours: I32, couplings: F64, spins: I8, local_fields: F64, tolerance: float) -> float:
    """Flip spins in order while any flip lowers the energy by more than ``tolerance``; returns the energy change."""
    change = 0.0
    moving = True
    while moving:
        moving = False
        for spin in range(len(spins)):
            rise = -2.0 * spins[spin] * local_fields[spin]
            if rise < -tolerance:
                change += rise
                turn(spin, spins, local_fields, row_starts, neighbours, couplings)
                moving = True
    return change


@compiled
def flip_accepted(
    row_starts: I64,
    neighbours: I32,
    couplings: F64,
    spins: I8,
    local_fields: F64,
    members: I32,
    outcomes: I8,
    chosen: I64,
    accepted: npt.NDArray[np.bool_],
) -> None:
    """Put the chosen outcomes (B, m, k) of all accepted calls into the configuration."""
    for row in range(len(members)):
        if not accepted[row]:
            continue
        for i in range(members.shape[1]):
            if spins[members[row, i]] != outcomes[row, chosen[row], i]:
                turn(members[row, i], spins, local_fields, row_starts, neighbours, couplings)
