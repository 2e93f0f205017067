"""Calls of an anneal with noise on: what the device shows, what it would show without noise, and what that takes.

A call whose controls are imperfect evolves twice, as the device does and without noise for the hit probability to
compare with; misread spins need no second evolution. A dephased call follows a trajectory for every shot. Trajectories
have no law that is known, except for a few spins, where the density matrix gives it.
"""

from __future__ import annotations

from dataclasses import replace
from typing import TYPE_CHECKING

import numpy as np

from patchwalk.subsolvers import schedules
from patchwalk.subsolvers.anneal_rows import scaled_legs, steps_of_row
from patchwalk.subsolvers.anneal_trajectories import dephased_anneals, plan_dephased_anneals
from patchwalk.subsolvers.contract import F64, I64, ClusterBatch, Forecast, Proposals, refuse_oversize
from patchwalk.subsolvers.density import MATRIX_SPINS, density_updates, dephased_laws
from patchwalk.subsolvers.drivers import hop_scale
from patchwalk.subsolvers.propagate import level_table
from patchwalk.subsolvers.ramp import UNIFORM, make_rooms
from patchwalk.subsolvers.spectrum import configuration_number

if TYPE_CHECKING:
    from patchwalk.subsolvers.anneal_calls import Anneal


def noisy_proposals(anneal: Anneal, batch: ClusterBatch) -> Proposals:
    """The answer to a batch, with the noise of each call's own seed."""
    refuse_oversize(anneal.name, batch.size, anneal.max_spins, "exact simulation (2^k amplitudes)")
    acting = anneal.noise.disturbed(batch)
    if anneal.noise.dephasing > 0.0:
        laws, more = known_laws(anneal, batch, acting)
        seen, quiet = _dephased(anneal, batch, acting), anneal.measured(batch, batch)
        return _with_more(anneal.noise.reported(batch, seen, quiet, laws), _updates(quiet) + more)
    at_end = np.empty((len(batch), 1, 1 << batch.size))
    seen = anneal.measured(batch, acting, at_end)
    if acting is batch:
        return anneal.noise.reported(batch, seen, seen, at_end[:, 0])
    quiet = anneal.measured(batch, batch)
    return _with_more(anneal.noise.reported(batch, seen, quiet, at_end[:, 0]), _updates(quiet))


def noisy_forecast(anneal: Anneal, batch: ClusterBatch) -> Forecast:
    """Bytes and work of :func:`noisy_proposals`; jumps are counted from the seeds themselves."""
    refuse_oversize(anneal.name, batch.size, anneal.max_spins, "exact simulation (2^k amplitudes)")
    quiet = anneal.quiet_forecast(batch)
    updates = quiet.work.amplitude_updates
    assert updates is not None
    numbers = (len(batch) + 2) << batch.size  # the laws
    if anneal.noise.dephasing > 0.0:
        _, passes = _trajectories(anneal, batch, batch, forecast=True)
        updates = updates + (passes << batch.size)
        if batch.size <= MATRIX_SPINS:
            updates = updates + _matrix_work(anneal, batch)
            numbers += 20 << 2 * batch.size
    elif anneal.noise.disturbs:
        updates = 2 * updates
    return Forecast(bytes=quiet.bytes + 8 * numbers, work=replace(quiet.work, amplitude_updates=updates))


def known_laws(anneal: Anneal, batch: ClusterBatch, acting: ClusterBatch) -> tuple[F64 | None, I64]:
    """Laws f64 (B, 2^k) of one shot before it is read, None where they are not known.

    With it the amplitude updates i64 (B,) of the density matrices, where these give the law.
    """
    nothing = np.zeros(len(batch), np.int64)
    if anneal.noise.dephasing == 0.0:
        return anneal.final_laws(batch, acting), nothing
    if batch.size > MATRIX_SPINS:
        return None, nothing
    assert acting.couplings is not None
    schedule, time_scale, a_scale = anneal.scaled_schedule(batch)
    legs, knots = schedules.legs_array(schedule), anneal.knots(batch, schedule, a_scale)
    jump_rates, laws = _jump_rates(anneal, batch), np.empty((len(batch), 1 << batch.size))
    for row in range(len(batch)):
        levels = level_table(acting.fields[row], acting.couplings[row])
        own_legs = scaled_legs(legs, time_scale[row], a_scale[row])
        half_width, steps = steps_of_row(
            levels, 0.0, np.empty(5), anneal.mover, batch.size, own_legs, knots[min(row, len(knots) - 1)],
            anneal.tolerance, anneal.most_steps, make_rooms(len(levels)), np.empty(3),
        )  # fmt: skip
        start = configuration_number(batch.spins[row]) if anneal.from_incumbent else UNIFORM
        laws[row] = dephased_laws(levels, anneal.mover, steps, start, jump_rates[row])[-1]
        nothing[row] = density_updates(batch.size, anneal.mover, half_width, steps, jump_rates[row])
    return laws, nothing


def trajectory_errors(anneal: Anneal, batch: ClusterBatch, acting: ClusterBatch) -> F64:
    """Estimated errors (B,) of the law of each call's worst shot, given its jumps."""
    return _trajectories(anneal, batch, acting, forecast=False)[0]


def _dephased(anneal: Anneal, batch: ClusterBatch, acting: ClusterBatch) -> Proposals:
    """What a dephased anneal shows, every shot by a trajectory of its own."""
    assert acting.couplings is not None
    schedule, time_scale, a_scale = anneal.scaled_schedule(batch)
    rows, ends = len(batch), schedule.duration * time_scale
    outcomes = np.empty((rows, anneal.shots, batch.size), np.int8)
    errors, passes = np.empty(rows), np.empty(rows, np.int64)
    dephased_anneals(
        acting.fields, acting.couplings, batch.spins, batch.seeds, anneal.from_incumbent, anneal.mover,
        schedules.legs_array(schedule), anneal.knots(batch, schedule, a_scale), time_scale, a_scale, anneal.tolerance,
        anneal.most_steps, _jump_rates(anneal, batch), outcomes, errors, passes,
    )  # fmt: skip
    status, messages = anneal.verdicts(errors)
    times = np.repeat(ends[:, None], anneal.shots, axis=1)
    return Proposals(outcomes, anneal.work(batch, passes, ends), status, messages, times=times)


def _jump_rates(anneal: Anneal, batch: ClusterBatch) -> F64:
    """Z jumps (B,) per spin and unit of time."""
    rates: F64 = anneal.noise.dephasing * (anneal.rates(batch) / hop_scale(anneal.mover, batch.size))
    return rates


def _trajectories(anneal: Anneal, batch: ClusterBatch, acting: ClusterBatch, forecast: bool) -> tuple[F64, I64]:
    """Errors (B,) of the worst shots and passes (B,) of all, from the energies or from half their expected spread."""
    assert acting.couplings is not None
    schedule, time_scale, a_scale = anneal.scaled_schedule(batch)
    if forecast:
        legs, half_widths = anneal.stand_ins(batch, schedule)
        knots = np.zeros((1, 2, 3))
    else:
        legs, half_widths = schedules.legs_array(schedule), np.empty(0)
        knots = anneal.knots(batch, schedule, a_scale)
    errors, passes = np.empty(len(batch)), np.empty(len(batch), np.int64)
    plan_dephased_anneals(
        acting.fields, acting.couplings, batch.seeds, anneal.shots, half_widths, anneal.mover, legs, knots, time_scale,
        a_scale, anneal.tolerance, anneal.most_steps, _jump_rates(anneal, batch), errors, passes,
    )  # fmt: skip
    return errors, passes


def _matrix_work(anneal: Anneal, batch: ClusterBatch) -> I64:
    """Amplitude updates (B,) of the density matrices, from half the expected spread of the levels."""
    schedule, time_scale, a_scale = anneal.scaled_schedule(batch)
    legs, half_widths = anneal.stand_ins(batch, schedule)
    jump_rates, updates, rooms = _jump_rates(anneal, batch), np.empty(len(batch), np.int64), make_rooms(1)
    for row in range(len(batch)):
        half_width, steps = steps_of_row(
            np.empty(0), half_widths[row], np.empty(5), anneal.mover, batch.size,
            scaled_legs(legs, time_scale[row], a_scale[row]), np.zeros((2, 3)), anneal.tolerance, anneal.most_steps,
            rooms, np.empty(3),
        )  # fmt: skip
        updates[row] = density_updates(batch.size, anneal.mover, half_width, steps, jump_rates[row])
    return updates


def _with_more(answer: Proposals, updates: I64) -> Proposals:
    """The answer with this much more work."""
    assert answer.work.amplitude_updates is not None
    return replace(answer, work=replace(answer.work, amplitude_updates=answer.work.amplitude_updates + updates))


def _updates(answer: Proposals) -> I64:
    assert answer.work.amplitude_updates is not None
    return answer.work.amplitude_updates
