"""A continuous-time quantum walk on a cluster's configurations, simulated exactly.

The walker starts in the uniform superposition, or in the incumbent, and moves under ``H = -hopping * D + H_P`` with
the cluster's energies on the diagonal of H_P (Farhi & Gutmann, PRA 58 (1998) 915, from memory; walks on spin glasses
are common practice). It is measured once per shot, at a time drawn from a few equally spaced ones.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, field, replace
from typing import ClassVar, Literal, Self

import numpy as np
import numpy.typing as npt

from patchwalk.subsolvers.calibration import best_factor, few_clusters
from patchwalk.subsolvers.contract import (
    F64,
    I64,
    U8,
    Balance,
    ClusterBatch,
    Forecast,
    Proposals,
    Status,
    Work,
    refuse_oversize,
)
from patchwalk.subsolvers.drivers import DRIVERS, Driver, heuristic_hopping, hop_scale, level_spread
from patchwalk.subsolvers.hamiltonian import times_together, workspace_size
from patchwalk.subsolvers.longtime import DENSE_SPINS, long_time_bytes, long_time_law, long_time_updates
from patchwalk.subsolvers.measured import measure_laws, walk_and_measure, watched_entries
from patchwalk.subsolvers.noise import Noise, noise_of
from patchwalk.subsolvers.precision import DOUBLE_FLOOR, Plan, applications_needed, plan_calls
from patchwalk.subsolvers.propagate import level_table, new_workspace, walk_law
from patchwalk.subsolvers.spectrum import configuration_number
from patchwalk.subsolvers.uniform import require_shots

Times = float | tuple[float, float] | list[float]


@dataclass(frozen=True)
class Walk:
    """One walk per call, measured ``shots`` times independently.

    ``start`` is ``"uniform"`` or ``"incumbent"``; ``driver`` is ``"hypercube"`` (single flips), ``"complete"`` (any
    configuration to any other) or ``"pairs"`` (single and double flips). ``hopping`` is ``"heuristic"`` (as strong as
    the levels are expected to be wide, from the couplings alone: drivers.py), ``"calibrated"`` or a rate in energy
    units; ``hopping_factor`` multiplies any of them. Calibration happens in :meth:`prepare`, which chooses the factor
    on the heuristic rate that gives the lowest mean energy of shots on sample clusters; before that it is the
    heuristic rate.

    Measuring times: one number, or an interval ``[lo, hi]`` cut into ``times`` equally spaced times, ends included,
    one drawn per shot; in units of 1/energy as ``time``, or in hops (1/hopping on the hypercube) as ``time_in_hops``,
    which is what counts where ``time`` is not given. ``time="infinite"`` is the average over an endless interval, up
    to 11 spins; the times drawn are then inf.

    ``tolerance`` bounds the total variation distance between the law of a shot and the exact one. It decides between
    single and double precision, call by call. A call that misses it all the same is ``TRUNCATED``; :meth:`errors`
    says what each call's error is estimated to be. :meth:`laws` and :meth:`distribution` are always in double
    precision.

    ``dephasing``, ``control_error``, ``precision_bits`` and ``readout_flip`` are the noise of a device: noise.py. All
    are off unless given. :meth:`laws` and :meth:`distribution` stay without noise; :meth:`noisy_distribution` has it.
    """

    start: Literal["uniform", "incumbent"] = "uniform"
    driver: Driver = "hypercube"
    hopping: float | Literal["heuristic", "calibrated"] = "heuristic"
    hopping_factor: float = 1.0
    time: Times | Literal["infinite"] | None = None
    time_in_hops: Times = (0.65, 1.05)
    times: int = 8
    shots: int = 1
    tolerance: float = 1e-6
    dephasing: float = 0.0
    control_error: float = 0.0
    precision_bits: int | None = None
    readout_flip: float = 0.0

    name: ClassVar[str] = "walk"
    concurrent: ClassVar[bool] = True
    deterministic: ClassVar[bool] = True
    noise: Noise = field(init=False, repr=False, compare=False)

    def __post_init__(self) -> None:
        require_shots(self.name, self.shots)
        if self.start not in ("uniform", "incumbent"):
            raise ValueError(f"walk: start is {self.start!r}; it is uniform or incumbent")
        if self.driver not in DRIVERS:
            raise ValueError(f"walk: driver is {self.driver!r}; it is hypercube, complete or pairs")
        if self.hopping not in ("heuristic", "calibrated") and not _positive(self.hopping):
            raise ValueError(
                f"walk: hopping is {self.hopping!r}; it is heuristic, calibrated or a positive rate in energy units"
            )
        if not _positive(self.hopping_factor):
            raise ValueError(f"walk: hopping_factor is {self.hopping_factor!r}; it is a positive number")
        if not isinstance(self.times, int) or not 1 <= self.times <= 1000:
            raise ValueError(f"walk: times is {self.times!r}; give a whole number of measuring times from 1 to 1000")
        if not _positive(self.tolerance) or not DOUBLE_FLOOR <= self.tolerance < 1.0:
            raise ValueError(
                f"walk: tolerance is {self.tolerance!r}; double precision gives {DOUBLE_FLOOR:g} at best, "
                "and 1 would be no bound"
            )
        for name in ("time", "time_in_hops"):
            given = getattr(self, name)
            if given is not None and (name, given) != ("time", "infinite"):
                object.__setattr__(self, name, _interval(name, given))
        object.__setattr__(self, "noise", noise_of(self))
        if self.noise.dephasing > 0.0 and self.time == "infinite":
            raise ValueError(
                f'walk: dephasing is {self.dephasing!r} and time is "infinite"; in the end every configuration is then '
                "equally likely: give a finite time, or use the subsolver uniform"
            )

    @property
    def max_spins(self) -> int:
        return DENSE_SPINS if self.time == "infinite" else 22

    @property
    def balance(self) -> Balance:
        if self.shots > 1:
            return "none"
        return self.noise.balance("symmetric" if self.start == "incumbent" else "ratio")

    def prepare(self, sample: ClusterBatch) -> Self:
        self._refuse_oversize(sample)
        ready = self
        if self.hopping == "calibrated":
            few = few_clusters(sample)
            factor = best_factor(few, lambda factor: self._with_factor(factor).distribution(few))
            ready = self._with_factor(factor)
        for tolerance in (DOUBLE_FLOOR, 0.5):  # both precisions: calls to come may need the other one
            replace(ready, tolerance=tolerance).propose(sample.rows(0, 1))
        return ready

    def forecast(self, batch: ClusterBatch) -> Forecast:
        """Upper bounds, whatever the levels turn out to be; but a very large cluster (k >= 18) of which more than a
        few thousand configurations are minima may take further recursions, one for every few measuring times.
        """
        self._refuse_oversize(batch)
        if self.noise.off:
            return self.forecast_for(batch, batch)
        # noise is loaded where it is asked for, here and below: nobody else waits for it
        from patchwalk.subsolvers.noisy_walk import noisy_forecast

        return noisy_forecast(self, batch)

    def propose(self, batch: ClusterBatch) -> Proposals:
        self._refuse_oversize(batch)
        if self.noise.off:
            return self.measured(batch, batch)
        from patchwalk.subsolvers.noisy_walk import noisy_proposals

        return noisy_proposals(self, batch)

    def forecast_for(self, batch: ClusterBatch, acting: ClusterBatch) -> Forecast:
        """The forecast of :meth:`measured`."""
        size, rows = batch.size, len(batch)
        if self.time == "infinite":
            return Forecast(bytes=long_time_bytes(size), work=self._endless_work(batch))
        plan = self.plan(batch, acting)
        applications = applications_needed(plan.reach, plan.single)
        moments = plan.times.shape[1]
        in_full = min(self.shots, moments)
        recursions = -(-in_full // times_together(size, in_full, 8))
        watched = watched_entries(1 << size)
        numbers = (1 << size) + workspace_size(plan.driver, size, moments, 8) + (2 + 1 / moments) * watched
        numbers += (applications.max() + 4) * (moments + 1) + 4 * moments + 4 * rows * self.shots
        work = self._work(batch, applications * recursions, plan.times.mean(axis=1))
        return Forecast(bytes=int(8 * numbers) + rows * self.shots * size, work=work)

    def measured(self, batch: ClusterBatch, acting: ClusterBatch) -> Proposals:
        """Walks on ``acting`` at the rates and times of ``batch``; the two differ where controls are imperfect."""
        assert acting.couplings is not None
        rows = len(batch)
        outcomes = np.empty((rows, self.shots, batch.size), np.int8)
        drawn = np.empty((rows, self.shots))
        hit, log_ratio, applications = np.empty(rows), np.empty(rows), np.empty(rows, np.int64)
        incumbent = self.start == "incumbent"
        if self.time == "infinite":
            drawn[:] = np.inf
            laws = self.average_laws(batch, acting)[0]
            measure_laws(acting.fields, acting.couplings, batch.spins, batch.seeds, laws, outcomes, hit, log_ratio)
            work, status, messages = self._endless_work(batch), np.zeros(rows, np.uint8), ("",) * rows
        else:
            plan = self.plan(batch, acting, exact_spans=True)
            for single in (False, True):
                members = np.flatnonzero(plan.single == single)
                if len(members):
                    walk_and_measure(
                        members, acting.fields, acting.couplings, batch.spins, batch.seeds, plan.rates, plan.times,
                        plan.driver, incumbent, new_workspace(plan.driver, batch.size, plan.times.shape[1], single),
                        outcomes, drawn, hit, log_ratio, applications,
                    )  # fmt: skip
            work = self._work(batch, applications, drawn.mean(axis=1))
            status, messages = self.verdicts(plan.errors)
        return Proposals(
            outcomes,
            work,
            status,
            messages,
            log_ratio=log_ratio if self.balance == "ratio" else None,
            times=drawn,
            hit_probability=hit,
            noiseless_hit=hit,
        )

    def plan(self, batch: ClusterBatch, acting: ClusterBatch | None = None, exact_spans: bool = False) -> Plan:
        """Rates, times, precision and error of every call, where ``acting`` acts in its place: see precision.py."""
        rates = self._rates(batch)
        kind, times = DRIVERS.index(self.driver), self._measuring_times(batch, rates)
        return plan_calls(acting or batch, kind, rates, times, self.tolerance, exact_spans)

    def errors(self, batch: ClusterBatch) -> F64:
        """Estimated total variation distance (B,) between the law that each call draws from and the exact one."""
        self._refuse_oversize(batch)
        if self.time == "infinite":
            return np.full(len(batch), DOUBLE_FLOOR)
        if self.noise.dephasing > 0.0:
            from patchwalk.subsolvers.noisy_walk import trajectory_errors

            return trajectory_errors(self, batch, self.noise.disturbed(batch))
        return self.plan(batch, self.noise.disturbed(batch), exact_spans=True).errors

    def distribution(self, batch: ClusterBatch) -> F64:
        """The law of one shot without noise, averaged over its measuring times: f64 (B, 2^k)."""
        self._refuse_oversize(batch)
        return self.average_laws(batch, batch)[0]

    def noisy_distribution(self, batch: ClusterBatch) -> F64:
        """The same with the noise of each call's own seed: f64 (B, 2^k).

        Raises ``ValueError`` where only samples are known: dephasing of more than 4 spins.
        """
        from patchwalk.subsolvers.noisy_walk import known_laws

        self._refuse_oversize(batch)
        laws, _ = known_laws(self, batch, self.noise.disturbed(batch))
        if laws is None:
            raise ValueError(f"walk: the law of {batch.size} dephased spins is only sampled; use propose")
        return np.stack([self.noise.law_as_read(law) for law in laws])

    def average_laws(self, batch: ClusterBatch, acting: ClusterBatch) -> tuple[F64, I64]:
        """Laws f64 (B, 2^k) averaged over measuring times, as in :meth:`measured`; amplitude updates i64 (B,)."""
        rates, updates = self._rates(batch), np.full(len(batch), long_time_updates(batch.size))
        averages = np.zeros((len(batch), 1 << batch.size))
        if self.time == "infinite":
            for row in range(len(batch)):
                origin = self.origin(batch, row)
                averages[row] = long_time_law(levels_of(acting, row), rates[row], self.driver, origin)
            return averages, updates
        times = self._measuring_times(batch, rates)
        together = times_together(batch.size, times.shape[1], 8)
        for row in range(len(batch)):
            updates[row] = 0
            for begin in range(0, times.shape[1], together):
                group = times[row, begin : begin + together]
                laws = np.empty((len(group), 1 << batch.size))
                updates[row] += self._fill(laws, batch, acting, row, rates[row], group)
                averages[row] += laws.sum(axis=0)
        averages /= times.shape[1]
        return averages, self.updates(updates, batch.size)

    def laws(self, batch: ClusterBatch, times: npt.ArrayLike) -> F64:
        """The law of one shot measured at each of ``times`` (M,), in units of 1/energy: f64 (B, M, 2^k)."""
        refuse_oversize(self.name, batch.size, 22, "exact simulation (2^k amplitudes)")
        moments = np.atleast_1d(np.array(times, np.float64))
        if moments.ndim != 1 or not np.all((moments >= 0) & np.isfinite(moments)):
            raise ValueError(f"walk: times is {times!r}; give finite times of at least 0, in units of 1/energy")
        rates = self._rates(batch)
        laws = np.empty((len(batch), len(moments), 1 << batch.size))
        for row in range(len(batch)):
            self._fill(laws[row], batch, batch, row, rates[row], moments)
        return laws

    def _fill(self, laws: F64, batch: ClusterBatch, acting: ClusterBatch, row: int, rate: float, times: F64) -> int:
        """Fill ``laws`` f64 (M, 2^k) with those of one row at these times; returns the applications of H."""
        kind = DRIVERS.index(self.driver)
        return walk_law(levels_of(acting, row), rate, self.origin(batch, row), times, laws, kind)

    def _refuse_oversize(self, batch: ClusterBatch) -> None:
        reason = "exact simulation (2^k amplitudes)"
        if self.time == "infinite":
            reason = 'time="infinite" (diagonalisation of a 2^k x 2^k matrix)'
        refuse_oversize(self.name, batch.size, self.max_spins, reason)

    def _with_factor(self, factor: float) -> Self:
        """This walk at so many times its heuristic hopping rate."""
        return replace(self, hopping="heuristic", hopping_factor=self.hopping_factor * factor)

    def _rates(self, batch: ClusterBatch) -> F64:
        assert batch.couplings is not None
        rates = np.empty(len(batch))
        if isinstance(self.hopping, str):
            heuristic_hopping(batch.fields, batch.couplings, level_spread(batch.size), rates)
            rates *= hop_scale(DRIVERS.index(self.driver), batch.size)
        else:
            rates[:] = self.hopping
        return rates * self.hopping_factor

    def _measuring_times(self, batch: ClusterBatch, rates: F64) -> F64:
        """Measuring times of every call: f64 (B, M), in units of 1/energy."""
        given = self.time if self.time is not None else self.time_in_hops
        assert isinstance(given, tuple)
        lowest, highest = given
        count = self.times if highest > lowest else 1
        moments = np.array([lowest + (highest - lowest) * i / max(1, count - 1) for i in range(count)])
        if self.time is not None:
            return np.tile(moments, (len(batch), 1))
        return moments[None, :] / (rates / hop_scale(DRIVERS.index(self.driver), batch.size))[:, None]

    def verdicts(self, errors: F64) -> tuple[U8, tuple[str, ...]]:
        """Status (B,) and messages of calls whose laws have these estimated errors (B,)."""
        missed = errors > self.tolerance
        status = np.where(missed, Status.TRUNCATED, Status.OK).astype(np.uint8)
        return status, tuple(
            f"walk: the law's error is estimated at {error:.1e}, above the tolerance {self.tolerance:g}; "
            "measure earlier or ask for less"
            if above
            else ""
            for error, above in zip(errors, missed, strict=True)
        )

    def origin(self, batch: ClusterBatch, row: int) -> int:
        """Where a walk starts: a configuration's number, or -1 for the uniform superposition."""
        return configuration_number(batch.spins[row]) if self.start == "incumbent" else -1

    def _endless_work(self, batch: ClusterBatch) -> Work:
        return Work(
            shots=np.full(len(batch), self.shots, np.int64),
            amplitude_updates=np.full(len(batch), long_time_updates(batch.size), np.int64),
            energies=np.full(len(batch), 1 << batch.size, np.int64),
        )

    def _work(self, batch: ClusterBatch, applications: I64, mean_time: F64) -> Work:
        rows = len(batch)
        return Work(
            shots=np.full(rows, self.shots, np.int64),
            evolution_time=mean_time * self.shots,
            amplitude_updates=self.updates(applications, batch.size),
            energies=np.full(rows, 1 << batch.size, np.int64),
        )

    def updates(self, applications: I64, size: int) -> I64:
        """Amplitude updates in so many applications of H."""
        return applications * (2 if self.driver == "pairs" else 1) << size


def levels_of(batch: ClusterBatch, row: int) -> F64:
    """All energies of one row, f64 (2^k,)."""
    assert batch.couplings is not None
    return level_table(batch.fields[row], batch.couplings[row])


def _positive(value: object) -> bool:
    return isinstance(value, (int, float)) and not isinstance(value, bool) and math.isfinite(value) and value > 0


def _interval(name: str, value: object) -> tuple[float, float]:
    """The interval that a time setting names, as (lo, hi)."""
    ends = list(value) if isinstance(value, (list, tuple)) else [value, value]
    numbers = [float(end) for end in ends if isinstance(end, (int, float)) and not isinstance(end, bool)]
    if len(ends) != 2 or len(numbers) != 2 or not 0 <= numbers[0] <= numbers[1] < math.inf:
        raise ValueError(f"walk: {name} is {value!r}; give a time of at least 0, or an interval [lo, hi] that rises")
    return numbers[0], numbers[1]
