"""Anneals of a cluster, simulated exactly: forward, reverse, and blends of an anneal with a walk.

The state evolves under ``H(t) = -A(t) sum_i X_i + B(t) H_P`` with the cluster's energies on the diagonal of H_P, and
is measured at the end (Kadowaki & Nishimori, PRE 58 (1998) 5355; Farhi et al., quant-ph/0001106, both from memory).
A is in units of the hopping rate that a walk would use, B is 1 where the problem acts in full, so that a schedule
means the same on weak and strong clusters. Noise: noise.py, as far as noisy_anneal.py follows it.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, field
from pathlib import Path
from typing import ClassVar, Literal, Self

import numpy as np

from patchwalk.subsolvers import schedules
from patchwalk.subsolvers.anneal_rows import anneal_rows, plan_rows
from patchwalk.subsolvers.contract import (
    F64,
    I8,
    I64,
    Balance,
    ClusterBatch,
    Forecast,
    Proposals,
    Status,
    Work,
    refuse_oversize,
)
from patchwalk.subsolvers.drivers import (
    DRIVERS,
    Driver,
    driver_matrix,
    heuristic_hopping,
    hop_scale,
    level_spread,
)
from patchwalk.subsolvers.noise import Noise, noise_of
from patchwalk.subsolvers.ramp import workspace_bytes
from patchwalk.subsolvers.spectrum import cluster_energies
from patchwalk.subsolvers.uniform import require_shots

FINEST_TOLERANCE = 1e-11
"""Rounding alone moves a law by nearly this much."""


@dataclass(frozen=True)
class _Anneal:
    """What all anneals are told.

    ``duration`` is in units of 1/energy, ``duration_in_hops`` in hops (1/hopping, see ``drivers.py``); at most one of
    them is given.
    ``hopping`` is ``"heuristic"`` (span/(2k), from the couplings alone) or a rate in energy units; ``hopping_factor``
    multiplies either. ``driver`` takes the place of sum_i X_i, as for a walk. ``shots`` measurements are drawn
    independently from the law at the end. ``tolerance`` bounds the total variation distance of that law to the exact
    one; a call whose estimate is above it is ``TRUNCATED``. On curved schedules ``most_steps`` limits what it may cost.

    ``control_error``, ``precision_bits`` and ``readout_flip`` are the noise of a device (noise.py), off unless given;
    ``dephasing`` is refused, which only walks can follow. Schedules are those of the cluster as it was meant.
    :meth:`laws` and :meth:`distribution` stay without noise; :meth:`noisy_distribution` has it.
    """

    duration: float | None = None
    duration_in_hops: float | None = None
    hopping: float | Literal["heuristic"] = "heuristic"
    hopping_factor: float = 1.0
    driver: Driver = "hypercube"
    shots: int = 1
    tolerance: float = 1e-6
    most_steps: int = 100_000
    dephasing: float = 0.0
    control_error: float = 0.0
    precision_bits: int | None = None
    readout_flip: float = 0.0

    name: ClassVar[str]
    max_spins: ClassVar[int] = 22
    deterministic: ClassVar[bool] = True
    from_incumbent: ClassVar[bool] = False
    default_in_hops: ClassVar[float]
    noise: Noise = field(init=False, repr=False, compare=False)

    def __post_init__(self) -> None:
        require_shots(self.name, self.shots)
        if self.duration is not None and self.duration_in_hops is not None:
            raise ValueError(f"{self.name}: duration and duration_in_hops are both given; give one of them")
        for key in ("duration", "duration_in_hops"):
            if getattr(self, key) is not None:
                self._require(key, _number(getattr(self, key)) and getattr(self, key) > 0, "a time above 0")
        self._require(
            "hopping",
            self.hopping == "heuristic" or (_number(self.hopping) and float(self.hopping) > 0),
            "heuristic or a positive rate in energy units",
        )
        if self.driver not in DRIVERS:
            raise ValueError(f"{self.name}: driver is {self.driver!r}; it is one of {', '.join(DRIVERS)}")
        self._require("hopping_factor", _number(self.hopping_factor) and self.hopping_factor > 0, "a positive number")
        self._require(
            "tolerance",
            _number(self.tolerance) and FINEST_TOLERANCE <= self.tolerance <= 0.1,
            f"a total variation distance from {FINEST_TOLERANCE} (double precision gives no better) to 0.1",
        )
        whole = isinstance(self.most_steps, int) and not isinstance(self.most_steps, bool)
        self._require("most_steps", whole and 1 <= self.most_steps <= 10_000_000, "a whole number from 1 to 10,000,000")
        object.__setattr__(self, "noise", noise_of(self))
        if self.noise.dephasing > 0.0:
            raise ValueError(
                f"{self.name}: dephasing is {self.dephasing!r}; trajectories are followed at constant fields only: "
                "leave it at 0, or use the subsolver walk"
            )

    def _require(self, key: str, good: bool, wanted: str) -> None:
        if not good:
            raise ValueError(f"{self.name}: {key} is {getattr(self, key)!r}; give {wanted}")

    @property
    def balance(self) -> Balance:
        return self.noise.balance(self.quiet_balance)

    @property
    def quiet_balance(self) -> Balance:
        """What is promised without noise."""
        return "none"

    def schedule_for(self, spins: int) -> schedules.Schedule:
        """The schedule on clusters of this size."""
        raise NotImplementedError

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
        schedule, time_scale, a_scale = self._checked(batch)
        legs, knots = schedules.legs_array(schedule), np.zeros((1, 2, 3))
        if schedule.needs_gap:  # not found for a forecast: a search among a few dozen stands in
            legs[:, -1] = schedules.search_angle(32)
        assert batch.couplings is not None
        half_widths = np.empty(len(batch))
        heuristic_hopping(batch.fields, batch.couplings, level_spread(batch.size), half_widths)
        half_widths *= batch.size  # half the expected span of the levels
        _, passes = self._planned(batch, half_widths, legs, knots, time_scale, a_scale)
        bytes_needed = workspace_bytes(1 << batch.size) + len(batch) * self.shots * (batch.size + 8)
        return Forecast(bytes=bytes_needed, work=self._work(batch, passes, schedule.duration * time_scale))

    def measured(self, batch: ClusterBatch, acting: ClusterBatch, laws: F64 | None = None) -> Proposals:
        """Anneals of ``acting`` at the rates of ``batch``; the two differ where controls are imperfect.

        ``laws`` f64 (B, 1, 2^k) receives the law of every call, where it is given.
        """
        schedule, time_scale, _ = self._checked(batch)
        outcomes = np.empty((len(batch), self.shots, batch.size), np.int8)
        ends = schedule.duration * time_scale
        laws = np.empty((1, 1, 1 << batch.size)) if laws is None else laws
        hit, errors, passes = self._run(batch, ends[:, None], laws, outcomes, acting)
        late = errors > self.tolerance
        return Proposals(
            outcomes,
            self._work(batch, passes, ends),
            np.where(late, Status.TRUNCATED, Status.OK).astype(np.uint8),
            tuple(self._excuse(error) if bad else "" for error, bad in zip(errors, late, strict=True)),
            times=np.repeat(ends[:, None], self.shots, axis=1),
            hit_probability=hit,
            noiseless_hit=hit,
        )

    def distribution(self, batch: ClusterBatch) -> F64:
        """The law of one shot without noise: f64 (B, 2^k)."""
        return self._final_laws(batch, batch)

    def noisy_distribution(self, batch: ClusterBatch) -> F64:
        """The same with the noise of each call's own seed: f64 (B, 2^k)."""
        refuse_oversize(self.name, batch.size, self.max_spins, "exact simulation (2^k amplitudes)")
        laws = self._final_laws(batch, self.noise.disturbed(batch))
        return np.stack([self.noise.law_as_read(law) for law in laws])

    def _final_laws(self, batch: ClusterBatch, acting: ClusterBatch) -> F64:
        schedule, time_scale, _ = self._checked(batch)
        laws = np.empty((len(batch), 1, 1 << batch.size))
        self._run(batch, (schedule.duration * time_scale)[:, None], laws, acting=acting)
        return laws[:, 0]

    def laws(self, batch: ClusterBatch, times: F64) -> F64:
        """The law of one shot measured early, at each of ``times`` (M,) in units of 1/energy: f64 (B, M, 2^k).

        Raises ``ValueError`` for times outside the anneal.
        """
        schedule, time_scale, _ = self._checked(batch)
        moments = np.atleast_1d(np.ascontiguousarray(times, np.float64))
        shortest = float((schedule.duration * time_scale).min())
        if moments.ndim != 1 or not moments.size or not np.all((moments >= 0) & (moments <= shortest * (1 + 1e-12))):
            raise ValueError(f"{self.name}: times is {times!r}; give times from 0 to {shortest}, the end of the anneal")
        order = np.argsort(moments, kind="stable")
        laws = np.empty((len(batch), len(moments), 1 << batch.size))
        self._run(batch, np.tile(moments[order], (len(batch), 1)), laws)
        return laws[:, np.argsort(order)]

    def estimated_errors(self, batch: ClusterBatch) -> F64:
        """The estimates (B,), for each call, of the total variation distance between its law and the exact one."""
        schedule, time_scale, a_scale = self._checked(batch)
        legs, knots = schedules.legs_array(schedule), self._knots(batch, schedule, a_scale)
        acting = self.noise.disturbed(batch)
        return self._planned(acting, np.empty(0), legs, knots, time_scale, a_scale)[0]

    @property
    def _mover(self) -> int:
        return DRIVERS.index(self.driver)

    def _unit(self) -> tuple[float, bool]:
        """The duration that counts, and whether it is in hops."""
        if self.duration is not None:
            return float(self.duration), False
        return float(self.default_in_hops if self.duration_in_hops is None else self.duration_in_hops), True

    def _checked(self, batch: ClusterBatch) -> tuple[schedules.Schedule, F64, F64]:
        """The schedule and its scales (B,) of time and A, once the batch is known to fit."""
        refuse_oversize(self.name, batch.size, self.max_spins, "exact simulation (2^k amplitudes)")
        assert batch.couplings is not None
        rates = np.empty(len(batch))
        if self.hopping == "heuristic":
            heuristic_hopping(batch.fields, batch.couplings, level_spread(batch.size), rates)
            rates *= hop_scale(self._mover, batch.size)
        else:
            rates[:] = self.hopping
        schedule = self.schedule_for(batch.size)
        return schedule, *schedule.scales(rates * self.hopping_factor, hop_scale(self._mover, batch.size))

    def _knots(self, batch: ClusterBatch, schedule: schedules.Schedule, a_scale: F64) -> F64:
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
            batch.fields, batch.couplings, half_widths, self._mover, legs, knots, time_scale, a_scale,
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
        schedule, time_scale, a_scale = self._checked(batch)
        acting = acting or batch
        assert acting.couplings is not None
        if outcomes is None:
            outcomes = np.empty((len(batch), 0, batch.size), np.int8)
        hit, errors, passes = np.empty(len(batch)), np.empty(len(batch)), np.empty(len(batch), np.int64)
        anneal_rows(
            acting.fields, acting.couplings, batch.spins, batch.seeds, self.from_incumbent, self._mover,
            schedules.legs_array(schedule), self._knots(batch, schedule, a_scale), time_scale, a_scale,
            self.tolerance, self.most_steps, np.ascontiguousarray(times),
            laws, outcomes, hit, errors, passes,
        )  # fmt: skip
        return hit, errors, passes

    def _work(self, batch: ClusterBatch, passes: I64, durations: F64) -> Work:
        rows = len(batch)
        return Work(
            shots=np.full(rows, self.shots, np.int64),
            evolution_time=durations * self.shots,
            amplitude_updates=passes << batch.size,
            energies=np.full(rows, 1 << batch.size, np.int64),
        )

    def _excuse(self, error: float) -> str:
        return (
            f"{self.name}: the law may be off by {error:.1e} in total variation, {self.tolerance:.1e} was asked for; "
            "raise most_steps, or tolerance"
        )


@dataclass(frozen=True)
class Forward(_Anneal):
    """From the uniform superposition, with the transverse field giving way to the problem.

    ``schedule`` is ``"linear"``; ``"gap"``, at a speed that follows the cluster's own gap (k up to 8); ``"search"``,
    the closed form of the same for a search among 2^k; or a TOML file with columns time, A and B, which then sets the
    duration as well. No promise is made for sampling.

    The default duration of 6 hops is where hops to a minimum were fewest: duration x ln(0.01) / ln(1 - p) was 34, 106
    and 117 at 3 hops, 23, 60 and 64 at 6, 22, 57 and 65 at 10, 26, 70 and 85 at 20, for mean hit probabilities p over
    40 clusters each: 3 x 3 patches of a +-J and of a Gaussian lattice, and 10 spins of a fully connected glass.
    """

    schedule: str = "linear"

    name: ClassVar[str] = "forward"
    default_in_hops: ClassVar[float] = 6.0
    _table: schedules.Schedule | None = field(default=None, init=False, repr=False)

    def __post_init__(self) -> None:
        super().__post_init__()
        if not isinstance(self.schedule, str) or not (
            self.schedule in ("linear", "gap", "search") or self.schedule.endswith(".toml")
        ):
            raise ValueError(
                f"forward: schedule is {self.schedule!r}; it is linear, gap, search, or a .toml file with columns "
                "time, A and B"
            )
        if self.schedule.endswith(".toml"):
            if self.duration is not None or self.duration_in_hops is not None:
                raise ValueError(f"forward: {self.schedule} has its own times; leave duration out")
            object.__setattr__(self, "_table", schedules.read_table(Path(self.schedule)))

    def schedule_for(self, spins: int) -> schedules.Schedule:
        if self._table is not None:
            return self._table
        duration, in_hops = self._unit()
        if self.schedule == "search":
            return schedules.search(duration, in_hops, 1 << spins)
        if self.schedule == "gap":
            refuse_oversize("forward", spins, schedules.GAP_SPINS, "schedule=gap (dense diagonalisation)")
            return schedules.by_gap(duration, in_hops)
        return schedules.linear(duration, in_hops)


@dataclass(frozen=True)
class Reverse(_Anneal):
    """From the incumbent to a turning point, a pause there, and back.

    At the turning point A is ``1 - turning_point`` hoppings and B is ``turning_point``. The duration is that of the
    two legs together, ``leg_ratio`` the time of the way there over that of the way back, and ``pause`` comes on top,
    in the unit of the duration. With equal legs and one shot the proposal matrix is symmetric.

    Defaults by the measure given for :class:`Forward`, from 82 and 124 incumbents that a short Metropolis chain left
    outside the minima (Gaussian patches; fully connected): turning at 0.5, 0.6 and 0.7 with 3 hops took 219 and 461,
    208 and 361, 272 and 402 hops; 6 hops at 0.6 took 170 and 412. Pauses shift the best turning point upwards and gain
    little.
    """

    turning_point: float = 0.6
    pause: float = 0.0
    leg_ratio: float = 1.0

    name: ClassVar[str] = "reverse"
    default_in_hops: ClassVar[float] = 3.0
    from_incumbent: ClassVar[bool] = True

    def __post_init__(self) -> None:
        super().__post_init__()
        self._require(
            "turning_point", _number(self.turning_point) and 0 <= self.turning_point <= 1, "a number from 0 to 1"
        )
        self._require("pause", _number(self.pause) and self.pause >= 0, "a time of at least 0")
        self._require("leg_ratio", _number(self.leg_ratio) and 1e-6 <= self.leg_ratio <= 1e6, "a ratio around 1")

    @property
    def quiet_balance(self) -> Balance:
        return "symmetric" if self.shots == 1 and self.leg_ratio == 1.0 else "none"

    def schedule_for(self, spins: int) -> schedules.Schedule:  # noqa: ARG002
        duration, in_hops = self._unit()
        return schedules.there_and_back(duration, in_hops, self.turning_point, self.pause, self.leg_ratio)


@dataclass(frozen=True)
class Blend(_Anneal):
    """Between a walk and a forward anneal, from the uniform superposition.

    A falls from 1 hopping to ``1 - mix`` hoppings while B rises from ``1 - mix`` to 1: ``mix`` is 0 for a walk that is
    measured at the end, and 1 for the linear ramp (between the two as in Morley et al., PRA 99 (2019) 022339, from
    memory).

    Defaults by the measure and the clusters given for :class:`Forward`: mix 0.75 at 3 hops took 14, 43 and 52 hops,
    0.5 at 2 hops 15, 45 and 60, the walk at its best (0.75 hops) 12, 41 and 46, the ramp at its best 23, 57 and 64.
    """

    mix: float = 0.75

    name: ClassVar[str] = "blend"
    default_in_hops: ClassVar[float] = 3.0

    def __post_init__(self) -> None:
        super().__post_init__()
        self._require("mix", _number(self.mix) and 0 <= self.mix <= 1, "a number from 0 (walk) to 1 (linear ramp)")

    def schedule_for(self, spins: int) -> schedules.Schedule:  # noqa: ARG002
        duration, in_hops = self._unit()
        return schedules.blended(duration, in_hops, self.mix)


def _number(value: object) -> bool:
    return isinstance(value, (int, float)) and not isinstance(value, bool) and math.isfinite(value)
