"""Calls of a walk with noise on: what the device shows, what it would show without noise, and what that takes.

A noisy call evolves up to three times: as the device does, without noise for the hit probability to compare with, and
for its own law averaged over the measuring times, from which its hit probability comes. Trajectories have no law that
is known, except for a few spins, where the density matrix gives it.
"""

from __future__ import annotations

from dataclasses import replace
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt

from patchwalk.subsolvers.contract import F64, I64, ClusterBatch, Forecast, Proposals, Work
from patchwalk.subsolvers.density import MATRIX_SPINS, constant_steps, density_updates, dephased_laws
from patchwalk.subsolvers.drivers import driver_range, hop_scale, weight_sums
from patchwalk.subsolvers.hamiltonian import times_together
from patchwalk.subsolvers.precision import Plan, applications_needed, double_error
from patchwalk.subsolvers.propagate import level_table, new_workspace
from patchwalk.subsolvers.trajectories import dephased_shots, plan_trajectories

if TYPE_CHECKING:
    from patchwalk.subsolvers.walk import Walk


def noisy_proposals(walk: Walk, batch: ClusterBatch) -> Proposals:
    """The answer to a batch, with the noise of each call's own seed."""
    acting, quiet = walk.noise.disturbed(batch), walk.measured(batch, batch)
    seen, spent = quiet, _updates(quiet.work)
    if walk.noise.dephasing > 0.0:
        seen = _dephased(walk, batch, acting)
    elif acting is not batch:
        seen = walk.measured(batch, acting)
    if seen is not quiet:
        spent = spent + _updates(seen.work)
    laws, more = known_laws(walk, batch, acting)
    answer = walk.noise.reported(batch, seen, quiet, laws)
    log_ratio = seen.log_ratio if walk.balance == "ratio" else None
    return replace(answer, log_ratio=log_ratio, work=replace(seen.work, amplitude_updates=spent + more))


def known_laws(walk: Walk, batch: ClusterBatch, acting: ClusterBatch) -> tuple[F64 | None, I64]:
    """Laws f64 (B, 2^k) of one shot before it is read, None where they are not known; amplitude updates i64 (B,)."""
    if walk.noise.dephasing == 0.0:
        return walk.average_laws(batch, acting)
    if batch.size > MATRIX_SPINS:
        return None, np.zeros(len(batch), np.int64)
    assert acting.couplings is not None
    plan, laws = walk.plan(batch, acting), np.empty((len(batch), 1 << batch.size))
    jump_rates = _jump_rates(walk, plan, batch.size)
    for row in range(len(batch)):
        levels, origin = level_table(acting.fields[row], acting.couplings[row]), walk.origin(batch, row)
        steps = constant_steps(plan.rates[row], np.sort(plan.times[row]))
        laws[row] = dephased_laws(levels, plan.driver, steps, origin, jump_rates[row]).mean(axis=0)
    return laws, _matrix_work(acting, plan, jump_rates)


def noisy_forecast(walk: Walk, batch: ClusterBatch) -> Forecast:
    """Bytes and work of :func:`noisy_proposals`; trajectories are counted from the seeds themselves."""
    acting, quiet = walk.noise.disturbed(batch), walk.forecast_for(batch, batch)
    seen, spent = quiet, _updates(quiet.work)
    numbers = len(batch) << batch.size  # the laws
    if walk.noise.dephasing > 0.0:
        plan = walk.plan(batch, acting)
        applications, _ = _trajectories(walk, batch, acting, plan)
        spent = spent + walk.updates(applications, batch.size)
        numbers += 4 << batch.size
        if batch.size <= MATRIX_SPINS:
            spent = spent + _matrix_work(acting, plan, _jump_rates(walk, plan, batch.size))
            numbers += 20 << 2 * batch.size
    else:
        if acting is not batch:
            seen = walk.forecast_for(batch, acting)
            spent = spent + _updates(seen.work)
        more, together = _law_work(walk, batch, acting)
        spent = spent + more
        numbers += together << batch.size
    work = replace(quiet.work, amplitude_updates=spent)
    return Forecast(bytes=max(quiet.bytes, seen.bytes) + 8 * numbers, work=work)


def trajectory_errors(walk: Walk, batch: ClusterBatch, acting: ClusterBatch) -> F64:
    """Estimated errors (B,) of the state at the end of the trajectory with most jumps."""
    plan = walk.plan(batch, acting)
    _, pieces = _trajectories(walk, batch, acting, plan)
    errors: F64 = double_error(plan.reach) + double_error(0.0 * plan.reach) * (pieces - 1)
    return errors


def _dephased(walk: Walk, batch: ClusterBatch, acting: ClusterBatch) -> Proposals:
    """What a dephased walk shows, every shot by a trajectory of its own."""
    assert acting.couplings is not None
    plan, rows = walk.plan(batch, acting), len(batch)
    outcomes, drawn = np.empty((rows, walk.shots, batch.size), np.int8), np.empty((rows, walk.shots))
    applications = np.empty(rows, np.int64)
    dephased_shots(
        acting.fields, acting.couplings, batch.spins, batch.seeds, plan.rates, plan.times,
        _jump_rates(walk, plan, batch.size), plan.driver, walk.start == "incumbent",
        new_workspace(plan.driver, batch.size, 1), outcomes, drawn, applications,
    )  # fmt: skip
    status, messages = walk.verdicts(trajectory_errors(walk, batch, acting))
    work = Work(
        shots=np.full(rows, walk.shots, np.int64),
        evolution_time=drawn.sum(axis=1),
        amplitude_updates=walk.updates(applications, batch.size),
        energies=np.full(rows, 1 << batch.size, np.int64),
    )
    return Proposals(outcomes, work, status, messages, times=drawn)


def _jump_rates(walk: Walk, plan: Plan, size: int) -> F64:
    """Z jumps (B,) per spin and unit of time."""
    rates: F64 = walk.noise.dephasing * (plan.rates / hop_scale(plan.driver, size))
    return rates


def _half_widths(acting: ClusterBatch, plan: Plan) -> F64:
    """Bounds (B,) of half the width of each spectrum."""
    assert acting.couplings is not None
    lowest, highest = driver_range(plan.driver, acting.size)
    resting = np.empty(len(acting))
    weight_sums(acting.fields, acting.couplings, resting)
    widths: F64 = 0.5 * (highest - lowest) * plan.rates + resting
    return widths


def _trajectories(walk: Walk, batch: ClusterBatch, acting: ClusterBatch, plan: Plan) -> tuple[I64, I64]:
    """Applications of H (B,) of all trajectories, and the most pieces (B,) of one."""
    applications, pieces = np.empty(len(batch), np.int64), np.empty(len(batch), np.int64)
    plan_trajectories(
        batch.seeds, batch.size, walk.shots, _half_widths(acting, plan), plan.times,
        _jump_rates(walk, plan, batch.size), applications, pieces,
    )  # fmt: skip
    return applications, pieces


def _matrix_work(acting: ClusterBatch, plan: Plan, jump_rates: F64) -> I64:
    """Amplitude updates (B,) of the density matrices, from a bound of the levels."""
    assert acting.couplings is not None
    resting, updates = np.empty(len(acting)), np.empty(len(acting), np.int64)
    weight_sums(acting.fields, acting.couplings, resting)
    for row in range(len(acting)):
        steps = constant_steps(plan.rates[row], np.sort(plan.times[row]))
        updates[row] = density_updates(acting.size, plan.driver, resting[row], steps, jump_rates[row])
    return updates


def _law_work(walk: Walk, batch: ClusterBatch, acting: ClusterBatch) -> tuple[I64, int]:
    """Amplitude updates (B,) of the laws averaged over the measuring times, and the vectors that this takes."""
    if walk.time == "infinite":
        return _updates(walk.forecast_for(batch, acting).work), 0
    plan = walk.plan(batch, acting)
    together = times_together(batch.size, plan.times.shape[1], 8)
    recursions = -(-plan.times.shape[1] // together)
    everywhere_double = np.zeros(len(batch), np.bool_)
    applications = applications_needed(plan.reach, everywhere_double) * recursions
    return walk.updates(applications, batch.size), 3 * together + 5


def _updates(work: Work) -> npt.NDArray[np.int64]:
    assert work.amplitude_updates is not None
    return work.amplitude_updates
