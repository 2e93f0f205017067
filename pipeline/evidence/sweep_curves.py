"""What plain sweeps would have gained in the place of a call: the rival ``none``.

From the whole configuration that stood before the call, the problem is swept at the call's temperature, for budgets
worth the call's own cost c and c/4, c/16, ... at the fixed price of a spin update. The drop is the mean decrease of
the energy of the whole problem. Spins come in rising order, beginning anywhere: less than a sweep is a random stretch
of the spins, as long as the budget pays for. The rule for one spin is that of the carrier between the rounds
(``search/sweeps.py``); moves inside groups of spins are left out.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import NamedTuple

import numpy as np

from patchwalk.cost import PRICES
from patchwalk.problem.ising import Problem
from patchwalk.subsolvers.compiled import compiled
from patchwalk.subsolvers.contract import F64, I8, I32, I64, U64
from patchwalk.subsolvers.draws import happens, next_below, next_unit, stream_for
from patchwalk.subsolvers.neighbours import TIE_CHANCE, turn

BUDGETS = 6
"""How many budgets a curve has, each a quarter of the one before."""

REPETITIONS = 8
"""How often the sweeps of a call are repeated."""

MOST_UPDATES = 1 << 22
"""Spin updates that a repetition takes at most (some 20 ms); of dearer calls the curve begins at a quarter, or a
sixteenth, ... of the cost."""

SWEEPS_WORD = 0x7377656570730000


class CallName(NamedTuple):
    """What tells a call of a run from all others."""

    round: int
    replica: int
    place: int


@dataclass(frozen=True, eq=False)
class StateBefore:
    """The whole configuration before a call, not to be changed: ``spins`` i8 (n,), ``local_fields`` f64 (n,).

    ``temperature`` in energy units, ``seed`` and ``cost`` (seconds at the fixed prices) are the call's.
    """

    call: CallName
    spins: I8
    local_fields: F64
    temperature: float
    seed: int
    cost: float


@dataclass(frozen=True, eq=False)
class SweepCurve:
    """``budgets`` f64 (J,), falling, in seconds; ``updates`` i64 (J,) of spins; ``drops`` f64 (R, J), one a repetition.

    ``whole`` tells whether the first budget is the call's full cost.
    """

    budgets: F64
    updates: I64
    drops: F64
    whole: bool


def sweep_curve(problem: Problem, state: StateBefore, repetitions: int = REPETITIONS) -> SweepCurve:
    """The energy decreases of repeated sweeps from one state; budgets below one spin update are left out."""
    dearest = state.cost
    while dearest > MOST_UPDATES * PRICES["spin_updates"]:
        dearest /= 4.0
    budgets = dearest / 4.0 ** np.arange(BUDGETS)
    updates = np.floor(budgets / PRICES["spin_updates"] + 1e-9).astype(np.int64)
    kept = updates > 0
    kept[0] = True  # a call without counted work is worth no sweeping at all
    budgets, updates = budgets[kept], updates[kept]
    drops = np.empty((repetitions, len(budgets)))
    _sweep_repeatedly(
        problem.row_starts, problem.neighbours, problem.couplings, state.spins, state.local_fields,
        state.temperature, updates[::-1].copy(), stream_for(state.seed, SWEEPS_WORD), drops,
    )  # fmt: skip
    return SweepCurve(budgets, updates, drops[:, ::-1], dearest == state.cost)


@compiled
def _sweep_repeatedly(
    row_starts: I64, neighbours: I32, couplings: F64, spins: I8, local_fields: F64, temperature: float, updates: I64,
    stream: U64, drops: F64,
) -> None:  # fmt: skip
    """Fill ``drops`` (R, J) with the decreases after so many ``updates`` (J,), rising, always from the same state."""
    size = len(spins)
    for turn_number in range(len(drops)):
        own_spins, own_fields = spins.copy(), local_fields.copy()
        spin = next_below(stream, size)
        change, done = 0.0, 0
        for budget in range(len(updates)):
            count = updates[budget] - done
            change += _sweep_on(
                row_starts, neighbours, couplings, own_spins, own_fields, temperature, spin, count, stream
            )
            spin = (spin + count) % size
            done = updates[budget]
            drops[turn_number, budget] = -change


@compiled
def _sweep_on(
    row_starts: I64, neighbours: I32, couplings: F64, spins: I8, local_fields: F64, temperature: float, first: int,
    count: int, stream: U64,
) -> float:  # fmt: skip
    """``count`` Metropolis updates, spin after spin from ``first`` on, in place; returns the energy change."""
    change, spin = 0.0, first
    hopeless, coldness = 40.0 * temperature, 1.0 / temperature
    for _ in range(count):
        rise = -2.0 * spins[spin] * local_fields[spin]
        if rise > 0.0:
            flips = rise <= hopeless and happens(stream, rise * coldness)
        else:
            flips = rise < 0.0 or next_unit(stream) < TIE_CHANCE
        if flips:
            change += rise
            turn(spin, spins, local_fields, row_starts, neighbours, couplings)
        spin += 1
        if spin == len(spins):
            spin = 0
    return change
