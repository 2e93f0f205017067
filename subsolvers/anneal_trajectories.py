"""Dephased anneals by quantum trajectories: the steps of an anneal, cut wherever Z strikes.

As in trajectories.py the jumps come at a constant rate, whatever the state (Dalibard, Castin & Molmer, PRL 68 (1992)
580). A piece of a step has the same drives as the step itself, or, where these are curved, drives of its own that are
straightened over a shorter time and therefore nearer to the curve. A piece in the first half of the time is the exact
transpose of its mirror image in the second, as whole steps are: along a schedule that is its own mirror image the
trajectory with mirrored jumps, as likely as the first, has the transposed matrix, and proposals stay symmetric.
"""

from __future__ import annotations

import numpy as np

from patchwalk.subsolvers.anneal_rows import NEGLECTED, draw_shots, scaled_legs, steps_of_row
from patchwalk.subsolvers.compiled import compiled
from patchwalk.subsolvers.contract import F64, I8, I64, U64
from patchwalk.subsolvers.draws import combine, next_below
from patchwalk.subsolvers.ramp import UNIFORM, leg_at, make_rooms, start_from, take_step
from patchwalk.subsolvers.spectrum import cluster_energies, configuration_number
from patchwalk.subsolvers.steps import (
    BEGIN,
    END,
    PASSES,
    ROUNDING,
    adds_up,
    count_passes,
    moving_norm,
    straighten,
)
from patchwalk.subsolvers.trajectories import JUMPS, next_jump, strike


@compiled
def follow_pieces(
    centred: F64, half_width: float, shape: F64, size: int, mover: int, legs: F64, knots: F64, steps: F64,
    neglected: float, place: int, begin: float, end: float, rooms: F64, real: F64, imaginary: F64, cost: F64,
) -> int:  # fmt: skip
    """Take the state from one time to another within the steps; returns the step that contains the later time.

    ``place`` is the step that contains the earlier one. ``neglected`` is what all series from the first leg to the
    last may leave out. Adds to ``cost`` (2,) the error made, of series and rounding, and the passes. An empty state is
    not moved, and the cost only counted.
    """
    moving, total = moving_norm(size, mover), legs[-1, END] - legs[0, BEGIN]
    piece, peak = np.empty(7), np.empty(1)
    here = begin
    while here < end:
        there = min(end, steps[place, END])
        straighten(legs[leg_at(legs, steps[place, BEGIN])], knots, here, there, piece)
        adding_up = adds_up(piece, legs)
        left_out = neglected * ((there - here) / total)
        cost[1] += count_passes(piece, adding_up, moving, half_width, shape, left_out, peak)
        cost[0] += left_out + ROUNDING * (peak[0] + piece[PASSES])
        if len(real) > 0:
            take_step(centred, mover, piece, adding_up, rooms, real, imaginary)
        here = there
        if here == steps[place, END]:
            place += 1
    return place


@compiled
def follow_anneal_trajectory(
    centred: F64, half_width: float, shape: F64, spins: int, mover: int, legs: F64, knots: F64, steps: F64,
    neglected: float, start: int, jump_rate: float, jumps: U64, rooms: F64, real: F64, imaginary: F64, cost: F64,
) -> None:  # fmt: skip
    """Leave the last state of one trajectory in ``real`` and ``imaginary``, and in ``cost`` what it took.

    ``jump_rate`` is per spin and 1/energy, ``jumps`` the stream that strikes; see :func:`follow_pieces` for the rest.
    """
    cost[:] = 0.0
    if len(real) > 0:
        start_from(start, real, imaginary)
    here, end, place = legs[0, BEGIN], legs[-1, END], 0
    while here < end:
        there = next_jump(jumps, spins * jump_rate, here)
        place = follow_pieces(
            centred, half_width, shape, 1 << spins, mover, legs, knots, steps, neglected, place, here, min(there, end),
            rooms, real, imaginary, cost,
        )  # fmt: skip
        if there < end:
            strike(next_below(jumps, spins), real, imaginary)
        here = there


@compiled
def dephased_anneals(
    fields: F64, couplings: F64, spins: I8, seeds: U64, from_incumbent: bool, mover: int, legs: F64, knots: F64,
    time_scale: F64, a_scale: F64, tolerance: float, most_steps: int, jump_rates: F64, outcomes: I8, errors: F64,
    passes: I64,
) -> None:  # fmt: skip
    """Answer a batch, every shot by a trajectory of its own; ``jump_rates`` (B,) are per spin and 1/energy.

    Fills ``outcomes`` (B, m, k), drawn with the thresholds of the noiseless anneal, the largest estimated error (B,) of
    a shot's law given its jumps, and the passes (B,) of all shots.
    """
    rows, size = fields.shape
    energies, shape, report, cost = np.empty(1 << size), np.empty(5), np.empty(3), np.empty(2)
    real, imaginary, law = np.empty(1 << size), np.empty(1 << size), np.empty(1 << size)
    stream, jumps, rooms = np.empty(1, np.uint64), np.empty(1, np.uint64), make_rooms(1 << size)
    for row in range(rows):
        cluster_energies(fields[row], couplings[row], energies)
        own_legs, own_knots = scaled_legs(legs, time_scale[row], a_scale[row]), knots[min(row, len(knots) - 1)]
        half_width, steps = steps_of_row(
            energies, 0.0, shape, mover, size, own_legs, own_knots, tolerance, most_steps, rooms, report
        )
        start = configuration_number(spins[row]) if from_incumbent else UNIFORM
        stream[0], jumps[0] = seeds[row], combine(seeds[row], JUMPS)
        errors[row], passes[row] = 0.0, 0
        for shot in range(outcomes.shape[1]):
            follow_anneal_trajectory(
                energies, half_width, shape, size, mover, own_legs, own_knots, steps, NEGLECTED * tolerance, start,
                jump_rates[row], jumps, rooms, real, imaginary, cost,
            )  # fmt: skip
            errors[row] = max(errors[row], report[2] + cost[0])
            passes[row] += int(cost[1])
            for number in range(1 << size):
                law[number] = real[number] ** 2 + imaginary[number] ** 2
            draw_shots(law, stream, outcomes[row, shot : shot + 1])


@compiled
def plan_dephased_anneals(
    fields: F64, couplings: F64, seeds: U64, shots: int, half_widths: F64, mover: int, legs: F64, knots: F64,
    time_scale: F64, a_scale: F64, tolerance: float, most_steps: int, jump_rates: F64, errors: F64, passes: I64,
) -> None:  # fmt: skip
    """Errors and passes of :func:`dephased_anneals`, which the seeds tell, as jumps do not depend on the state.

    From the energies, or, where ``half_widths`` are given, from those alone.
    """
    rows, size = fields.shape
    forecast = len(half_widths) > 0
    energies, shape, report, cost = np.empty(0 if forecast else 1 << size), np.empty(5), np.empty(3), np.empty(2)
    jumps, rooms, nothing = np.empty(1, np.uint64), make_rooms(1 if forecast else 1 << size), np.empty(0)
    for row in range(rows):
        if not forecast:
            cluster_energies(fields[row], couplings[row], energies)
        own_legs, own_knots = scaled_legs(legs, time_scale[row], a_scale[row]), knots[min(row, len(knots) - 1)]
        half_width, steps = steps_of_row(
            energies, half_widths[row] if forecast else 0.0, shape, mover, size, own_legs, own_knots, tolerance,
            most_steps, rooms, report,
        )  # fmt: skip
        jumps[0] = combine(seeds[row], JUMPS)
        errors[row], passes[row] = 0.0, 0
        for _ in range(shots):
            follow_anneal_trajectory(
                energies, half_width, shape, size, mover, own_legs, own_knots, steps, NEGLECTED * tolerance, UNIFORM,
                jump_rates[row], jumps, rooms, nothing, nothing, cost,
            )  # fmt: skip
            errors[row] = max(errors[row], report[2] + cost[0])
            passes[row] += int(cost[1])
