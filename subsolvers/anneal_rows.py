"""The rows of a batch of anneals, one after the other in one compiled loop."""

from __future__ import annotations

import numpy as np

from patchwalk.subsolvers.compiled import compiled
from patchwalk.subsolvers.contract import F64, I8, I64, U64
from patchwalk.subsolvers.draws import next_unit
from patchwalk.subsolvers.ramp import UNIFORM, centre_of, follow_steps, make_rooms, norm_shape
from patchwalk.subsolvers.spectrum import (
    cluster_energies,
    configuration_number,
    tie_tolerance,
    write_configuration,
)
from patchwalk.subsolvers.steps import A_END, END, USUAL_SHAPE, plan_steps

NEGLECTED = 0.25
"""The share of the tolerance that the series of all steps may leave out; rounding may take as much, a bend half."""


@compiled
def scaled_legs(legs: F64, time_scale: float, a_scale: float) -> F64:
    """The legs in units of energy and 1/energy."""
    absolute = np.empty(legs.shape)
    for leg in range(len(legs)):
        for column in range(legs.shape[1]):
            scale = time_scale if column <= END else a_scale if column <= A_END else 1.0
            absolute[leg, column] = legs[leg, column] * scale
    return absolute


@compiled
def steps_of_row(
    energies: F64, half_width: float, shape: F64, mover: int, spins: int, legs: F64, knots: F64, tolerance: float,
    most_steps: int, rooms: F64, report: F64,
) -> tuple[float, F64]:  # fmt: skip
    """Half the spread of a row's energies, which are centred in place, and the steps through its legs.

    Without energies (an empty array) the steps of a forecast, from the given ``half_width`` alone.
    """
    if len(energies) > 0:
        _, half_width = centre_of(energies, energies)
        norm_shape(energies, half_width, mover, rooms, shape)
    else:
        for place in range(5):
            shape[place] = USUAL_SHAPE[place]
    return half_width, plan_steps(
        energies,
        half_width,
        shape,
        1 << spins,
        mover,
        legs,
        knots,
        tolerance,
        NEGLECTED * tolerance,
        most_steps,
        report,
    )


@compiled
def plan_rows(
    fields: F64, couplings: F64, half_widths: F64, mover: int, legs: F64, knots: F64, time_scale: F64, a_scale: F64,
    tolerance: float, most_steps: int, errors: F64, passes: I64,
) -> None:  # fmt: skip
    """What each row's steps come to: from its energies, or, where ``half_widths`` are given, from those alone."""
    rows, spins = fields.shape
    forecast = len(half_widths) > 0
    energies, report, shape = np.empty(0 if forecast else 1 << spins), np.empty(3), np.empty(5)
    rooms = make_rooms(1 if forecast else 1 << spins)
    for row in range(rows):
        if not forecast:
            cluster_energies(fields[row], couplings[row], energies)
        steps_of_row(
            energies, half_widths[row] if forecast else 0.0, shape, mover, spins,
            scaled_legs(legs, time_scale[row], a_scale[row]), knots[min(row, len(knots) - 1)], tolerance, most_steps,
            rooms, report,
        )  # fmt: skip
        errors[row], passes[row] = report[0], int(report[1])


@compiled
def anneal_rows(
    fields: F64, couplings: F64, spins: I8, seeds: U64, from_incumbent: bool, mover: int, legs: F64, knots: F64,
    time_scale: F64, a_scale: F64, tolerance: float, most_steps: int, times: F64,
    laws: F64, outcomes: I8, hit: F64, errors: F64, passes: I64,
) -> None:  # fmt: skip
    """Laws at the rising times (B, M) of each row, kept where ``laws`` (., M, N) has room, and shots from the last."""
    rows, size = fields.shape
    energies, report, shape = np.empty(1 << size), np.empty(3), np.empty(5)
    stream = np.empty(1, np.uint64)
    rooms, imaginary = make_rooms(1 << size), np.empty((times.shape[1], 1 << size))
    for row in range(rows):
        cluster_energies(fields[row], couplings[row], energies)
        start = configuration_number(spins[row]) if from_incumbent else UNIFORM
        own_legs, own_knots = scaled_legs(legs, time_scale[row], a_scale[row]), knots[min(row, len(knots) - 1)]
        law = laws[min(row, len(laws) - 1)]
        half_width, steps = steps_of_row(
            energies, 0.0, shape, mover, size, own_legs, own_knots, tolerance, most_steps, rooms, report
        )
        passes[row] = follow_steps(
            energies, half_width, shape, mover, own_legs, own_knots, steps, NEGLECTED * tolerance, start, times[row],
            rooms, law, imaginary,
        )  # fmt: skip
        errors[row] = report[0]
        for moment in range(len(law)):
            for number in range(1 << size):
                law[moment, number] = law[moment, number] ** 2 + imaginary[moment, number] ** 2
        hit[row] = _minimum_share(energies, tie_tolerance(fields[row], couplings[row]), law[len(law) - 1])
        stream[0] = seeds[row]
        draw_shots(law[len(law) - 1], stream, outcomes[row])


@compiled
def _minimum_share(energies: F64, tied: float, law: F64) -> float:
    """The probability of the configurations whose energy is within ``tied`` of the lowest."""
    low, total = 0.0, 0.0
    ceiling = np.inf
    for energy in energies:
        ceiling = min(ceiling, energy + tied)
    for number in range(len(law)):
        total += law[number]
        if energies[number] <= ceiling:
            low += law[number]
    return low / total


@compiled
def draw_shots(law: F64, stream: U64, shots: I8) -> None:
    """Independent configurations (m, k) from the law."""
    total = law.sum()
    for shot in range(len(shots)):
        threshold = next_unit(stream) * total
        running, drawn = 0.0, 0
        for number in range(len(law)):
            running += law[number]
            if law[number] > 0.0:
                drawn = number
            if running > threshold:
                break
        write_configuration(drawn, shots[shot])
