"""How an anneal answers a batch: its schedule scaled to every cluster, evolved, measured, forecast.

Calls with noise are answered in noisy_anneal.py.
"""

from __future__ import annotations

from typing import Self

import numpy as np

from patchwalk.subsolvers import schedules
from patchwalk.subsolvers.anneal_rows import anneal_rows, plan_rows
from patchwalk.subsolvers.anneal_settings import AnnealSettings
from patchwalk.subsolvers.contract import (
    F64,
    I8,
    I64,
    U8,
    ClusterBatch,
    Forecast,
    Proposals,
    Status,
    Work,
    refuse_oversize,
)
from patchwalk.subsolvers.drivers import DRIVERS, driver_matrix, heuristic_hopping, hop_scale, level_spread
from patchwalk.subsolvers.ramp import workspace_bytes
from patchwalk.subsolvers.spectrum import cluster_energies


class Anneal(AnnealSettings):
    """What all anneals do with what they are told; the schedule is each one's own."""

    def prepare(self, sample: ClusterBatch) -> Self:
        self.propose(sample.rows(0, 1))
        return self

    def forecast(self, batch: ClusterBatch) -> Forecast:
        if self.noise.off:
            return self.quiet_forecast(batch)
        # noise is loaded where it is asked for, here and below: nobody else waits for it
        from patchwalk.subsolvers.noisy_anneal import noisy_forecast

        return noisy_forecast(self, batch)

    def propose(self, batch: ClusterBatch) -> Proposals:
        if self.noise.off:
            return self.measured(batch, batch)
        from patchwalk.subsolvers.noisy_anneal import noisy_proposals

        return noisy_proposals(self, batch)

    def quiet_forecast(self, batch: ClusterBatch) -> Forecast:
        """The forecast of :meth:`measured` where no laws are kept."""
        schedule, time_scale, a_scale = self.scaled_schedule(batch)
        legs, half_widths = self.stand_ins(batch, schedule)
        _, passes = self._planned(batch, half_widths, legs, np.zeros((1, 2, 3)), time_scale, a_scale)
        bytes_needed = workspace_bytes(1 << batch.size) + len(batch) * self.shots * (batch.size + 8)
        return Forecast(bytes=bytes_needed, work=self.work(batch, passes, schedule.duration * time_scale))

    def stand_ins(self, batch: ClusterBatch, schedule: schedules.Schedule) -> tuple[F64, F64]:
        """Legs (L, 7) without curves of one's own, and half the expected span of the levels (B,): for forecasts."""
        assert batch.couplings is not None
        legs, half_widths = schedules.legs_array(schedule), np.empty(len(batch))
        if schedule.needs_gap:  # not found for a forecast: a search among a few dozen stands in
            legs[:, -1] = schedules.search_angle(32)
        heuristic_hopping(batch.fields, batch.couplings, level_spread(batch.size), half_widths)
        return legs, half_widths * batch.size

    def measured(self, batch: ClusterBatch, acting: ClusterBatch, laws: F64 | None = None) -> Proposals:
        """Anneals of ``acting`` at the rates of ``batch``; the two differ where controls are imperfect.

        ``laws`` f64 (B, 1, 2^k) receives the law of every call, where it is given.
        """
        schedule, time_scale, _ = self.scaled_schedule(batch)
        outcomes = np.empty((len(batch), self.shots, batch.size), np.int8)
        ends = schedule.duration * time_scale
        laws = np.empty((1, 1, 1 << batch.size)) if laws is None else laws
        hit, errors, passes = self._run(batch, ends[:, None], laws, outcomes, acting)
        status, messages = self.verdicts(errors)
        return Proposals(
            outcomes,
            self.work(batch, passes, ends),
            status,
            messages,
            times=np.repeat(ends[:, None], self.shots, axis=1),
            hit_probability=hit,
            noiseless_hit=hit,
        )

    def distribution(self, batch: ClusterBatch) -> F64:
        """The law of one shot without noise: f64 (B, 2^k)."""
        return self.final_laws(batch, batch)

    def noisy_distribution(self, batch: ClusterBatch) -> F64:
        """The same with the noise of each call's own seed: f64 (B, 2^k).

        Raises ``ValueError`` where only samples are known: dephasing of more than 4 spins.
        """
        from patchwalk.subsolvers.noisy_anneal import known_laws

        refuse_oversize(self.name, batch.size, self.max_spins, "exact simulation (2^k amplitudes)")
        laws, _ = known_laws(self, batch, self.noise.disturbed(batch))
        if laws is None:
            raise ValueError(f"{self.name}: the law of {batch.size} dephased spins is only sampled; use propose")
        return np.stack([self.noise.law_as_read(law) for law in laws])

    def final_laws(self, batch: ClusterBatch, acting: ClusterBatch) -> F64:
        """Laws f64 (B, 2^k) of one shot before it is read, without dephasing, where ``acting`` acts as ``batch``."""
        schedule, time_scale, _ = self.scaled_schedule(batch)
        laws = np.empty((len(batch), 1, 1 << batch.size))
        self._run(batch, (schedule.duration * time_scale)[:, None], laws, acting=acting)
        return laws[:, 0]

    def laws(self, batch: ClusterBatch, times: F64) -> F64:
        """The law of one shot measured early, at each of ``times`` (M,) in units of 1/energy: f64 (B, M, 2^k).

        Raises ``ValueError`` for times outside the anneal.
        """
        schedule, time_scale, _ = self.scaled_schedule(batch)
        moments = np.atleast_1d(np.ascontiguousarray(times, np.float64))
        shortest = float((schedule.duration * time_scale).min())
        if moments.ndim != 1 or not moments.size or not np.all((moments >= 0) & (moments <= shortest * (1 + 1e-12))):
            raise ValueError(f"{self.name}: times is {times!r}; give times from 0 to {shortest}, the end of the anneal")
        order = np.argsort(moments, kind="stable")
        laws = np.empty((len(batch), len(moments), 1 << batch.size))
        self._run(batch, np.tile(moments[order], (len(batch), 1)), laws)
        return laws[:, np.argsort(order)]

    def estimated_errors(self, batch: ClusterBatch) -> F64:
        """The estimates (B,), for each call, of the total variation distance between its law and the exact one.

        With dephasing the largest of its shots, each given the jumps that its seed draws.
        """
        if self.noise.dephasing > 0.0:
            from patchwalk.subsolvers.noisy_anneal import trajectory_errors

            return trajectory_errors(self, batch, self.noise.disturbed(batch))
        schedule, time_scale, a_scale = self.scaled_schedule(batch)
        legs, knots = schedules.legs_array(schedule), self.knots(batch, schedule, a_scale)
        acting = self.noise.disturbed(batch)
        return self._planned(acting, np.empty(0), legs, knots, time_scale, a_scale)[0]

    @property
    def mover(self) -> int:
        """The driver as a number, for kernels."""
        return DRIVERS.index(self.driver)

    def scaled_schedule(self, batch: ClusterBatch) -> tuple[schedules.Schedule, F64, F64]:
        """The schedule and its scales (B,) of time and A, once the batch is known to fit."""
        refuse_oversize(self.name, batch.size, self.max_spins, "exact simulation (2^k amplitudes)")
        schedule = self.schedule_for(batch.size)
        return schedule, *schedule.scales(self.rates(batch), hop_scale(self.mover, batch.size))

    def rates(self, batch: ClusterBatch) -> F64:
        """Hopping rates (B,) in energy units."""
        assert batch.couplings is not None
        rates = np.empty(len(batch))
        if self.hopping == "heuristic":
            heuristic_hopping(batch.fields, batch.couplings, level_spread(batch.size), rates)
            rates *= hop_scale(self.mover, batch.size)
        else:
            rates[:] = self.hopping
        return rates * self.hopping_factor

    def knots(self, batch: ClusterBatch, schedule: schedules.Schedule, a_scale: F64) -> F64:
        """Curves (B, K, 3) of every cluster, or a single empty one where the schedule needs none."""
        if not schedule.needs_gap:
            return np.zeros((1, 2, 3))
        assert batch.couplings is not None
        knots = np.empty((len(batch), schedules.KNOTS, 3))
        matrix = driver_matrix(self.driver, batch.size)
        energies = np.empty(1 << batch.size)
        for row in range(len(batch)):
            cluster_energies(batch.fields[row], batch.couplings[row], energies)
            knots[row] = schedules.gap_knots(energies, a_scale[row], matrix)
        return knots

    def _planned(
        self, batch: ClusterBatch, half_widths: F64, legs: F64, knots: F64, time_scale: F64, a_scale: F64
    ) -> tuple[F64, I64]:
        """Estimated errors (B,) and passes (B,), from half the spreads (B,) of the energies or from the energies."""
        assert batch.couplings is not None
        errors, passes = np.empty(len(batch)), np.empty(len(batch), np.int64)
        plan_rows(
            batch.fields, batch.couplings, half_widths, self.mover, legs, knots, time_scale, a_scale,
            self.tolerance, self.most_steps, errors, passes,
        )  # fmt: skip
        return errors, passes

    def _run(
        self,
        batch: ClusterBatch,
        times: F64,
        laws: F64,
        outcomes: I8 | None = None,
        acting: ClusterBatch | None = None,
    ) -> tuple[F64, F64, I64]:
        """Evolve every row to its rising times (B, M); returns hit probabilities, estimated errors and passes, (B,).

        What evolves is ``acting``, the batch itself where it is left out, on schedules that are made for ``batch``.
        Fills ``laws`` (B, M, 2^k), or uses it over and over where it has one row, and ``outcomes`` (B, m, k).
        """
        schedule, time_scale, a_scale = self.scaled_schedule(batch)
        acting = acting or batch
        assert acting.couplings is not None
        if outcomes is None:
            outcomes = np.empty((len(batch), 0, batch.size), np.int8)
        hit, errors, passes = np.empty(len(batch)), np.empty(len(batch)), np.empty(len(batch), np.int64)
        anneal_rows(
            acting.fields, acting.couplings, batch.spins, batch.seeds, self.from_incumbent, self.mover,
            schedules.legs_array(schedule), self.knots(batch, schedule, a_scale), time_scale, a_scale,
            self.tolerance, self.most_steps, np.ascontiguousarray(times),
            laws, outcomes, hit, errors, passes,
        )  # fmt: skip
        return hit, errors, passes

    def work(self, batch: ClusterBatch, passes: I64, durations: F64) -> Work:
        rows = len(batch)
        return Work(
            shots=np.full(rows, self.shots, np.int64),
            evolution_time=durations * self.shots,
            amplitude_updates=passes << batch.size,
            energies=np.full(rows, 1 << batch.size, np.int64),
        )

    def verdicts(self, errors: F64) -> tuple[U8, tuple[str, ...]]:
        """Status (B,) and messages of calls whose laws may be off by these errors (B,)."""
        late = errors > self.tolerance
        return np.where(late, Status.TRUNCATED, Status.OK).astype(np.uint8), tuple(
            f"{self.name}: the law may be off by {error:.1e} in total variation, {self.tolerance:.1e} was asked for; "
            "raise most_steps, or tolerance"
            if bad
            else ""
            for error, bad in zip(errors, late, strict=True)
        )
