"""A continuous-time quantum walk on a cluster's configurations, simulated exactly.

The walker starts in the uniform superposition, or in the incumbent, and moves under ``H = -hopping * sum_i X_i + H_P``
with the cluster's energies on the diagonal (Farhi & Gutmann, PRA 58 (1998) 915, from memory; walks on spin glasses
are common practice). It is measured once per shot, at a time drawn from a few equally spaced ones.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import ClassVar, Literal, Self

import numpy as np

from patchwalk.subsolvers.compiled import compiled
from patchwalk.subsolvers.contract import (
    F64,
    I8,
    I64,
    U64,
    Balance,
    ClusterBatch,
    Forecast,
    Proposals,
    Work,
    all_well,
    refuse_oversize,
)
from patchwalk.subsolvers.draws import next_below, next_unit
from patchwalk.subsolvers.drivers import heuristic_hopping, level_spread
from patchwalk.subsolvers.propagate import expected_applications, walk_law
from patchwalk.subsolvers.spectrum import (
    cluster_energies,
    configuration_number,
    tie_tolerance,
    write_configuration,
)
from patchwalk.subsolvers.uniform import require_shots

Times = float | tuple[float, float] | list[float]


@dataclass(frozen=True)
class Walk:
    """One walk per call, measured ``shots`` times independently.

    ``start`` is ``"uniform"`` or ``"incumbent"``. ``hopping`` is ``"heuristic"`` (span/(2k), from the couplings
    alone) or a rate in energy units; ``hopping_factor`` multiplies either. Measuring times: one number, or an
    interval ``[lo, hi]`` cut into ``times`` equally spaced times, ends included, one drawn per shot; in units of
    1/energy as ``time``, or in units of 1/hopping as ``time_in_hops``, which is what counts where ``time`` is not
    given.
    """

    start: Literal["uniform", "incumbent"] = "uniform"
    driver: Literal["hypercube"] = "hypercube"
    hopping: float | Literal["heuristic"] = "heuristic"
    hopping_factor: float = 1.0
    time: Times | None = None
    time_in_hops: Times = (0.75, 1.5)
    times: int = 8
    shots: int = 1

    name: ClassVar[str] = "walk"
    max_spins: ClassVar[int] = 20
    deterministic: ClassVar[bool] = True

    def __post_init__(self) -> None:
        require_shots(self.name, self.shots)
        if self.start not in ("uniform", "incumbent"):
            raise ValueError(f"walk: start is {self.start!r}; it is uniform or incumbent")
        if self.driver != "hypercube":
            raise ValueError(f"walk: driver is {self.driver!r}; it is hypercube (single flips)")
        if self.hopping != "heuristic" and not _positive(self.hopping):
            raise ValueError(f"walk: hopping is {self.hopping!r}; it is heuristic or a positive rate in energy units")
        if not _positive(self.hopping_factor):
            raise ValueError(f"walk: hopping_factor is {self.hopping_factor!r}; it is a positive number")
        if not isinstance(self.times, int) or not 1 <= self.times <= 1000:
            raise ValueError(f"walk: times is {self.times!r}; give a whole number of measuring times from 1 to 1000")
        for name in ("time", "time_in_hops"):
            if getattr(self, name) is not None:
                object.__setattr__(self, name, _interval(name, getattr(self, name)))

    @property
    def balance(self) -> Balance:
        if self.shots > 1:
            return "none"
        return "symmetric" if self.start == "incumbent" else "ratio"

    def prepare(self, sample: ClusterBatch) -> Self:
        self._refuse_oversize(sample)
        self.propose(sample.rows(0, 1))
        return self

    def forecast(self, batch: ClusterBatch) -> Forecast:
        self._refuse_oversize(batch)
        rates, times = self._rates(batch), self._measuring_times(batch)
        span = 2 * batch.size * rates / self.hopping_factor if self.hopping == "heuristic" else _spans(batch)
        applications = np.array(
            [expected_applications(span[row], batch.size, rates[row], times[row].max()) for row in range(len(batch))],
            np.int64,
        )
        vectors = 3 * times.shape[1] + 8
        return Forecast(bytes=vectors * 8 << batch.size, work=self._work(batch, applications, times.mean(axis=1)))

    def propose(self, batch: ClusterBatch) -> Proposals:
        self._refuse_oversize(batch)
        assert batch.couplings is not None
        rows = len(batch)
        rates, times = self._rates(batch), self._measuring_times(batch)
        outcomes = np.empty((rows, self.shots, batch.size), np.int8)
        drawn = np.empty((rows, self.shots))
        hit, log_ratio, applications = np.empty(rows), np.empty(rows), np.empty(rows, np.int64)
        _walk_and_measure(
            batch.fields, batch.couplings, batch.spins, batch.seeds, rates, times, self.start == "incumbent",
            outcomes, drawn, hit, log_ratio, applications,
        )  # fmt: skip
        status, messages = all_well(rows)
        return Proposals(
            outcomes,
            self._work(batch, applications, drawn.mean(axis=1)),
            status,
            messages,
            log_ratio=log_ratio if self.balance == "ratio" else None,
            times=drawn,
            hit_probability=hit,
            noiseless_hit=hit,
        )

    def distribution(self, batch: ClusterBatch) -> F64:
        """The law of one shot, averaged over its measuring times: f64 (B, 2^k)."""
        times = self._measuring_times(batch)
        return np.stack([self.laws(batch.rows(b, b + 1), times[b]).mean(axis=1)[0] for b in range(len(batch))])

    def laws(self, batch: ClusterBatch, times: F64) -> F64:
        """The law of one shot measured at each of ``times`` (M,), in units of 1/energy: f64 (B, M, 2^k)."""
        self._refuse_oversize(batch)
        assert batch.couplings is not None
        rates = self._rates(batch)
        moments = np.ascontiguousarray(times, np.float64)
        laws = np.empty((len(batch), len(moments), 1 << batch.size))
        energies = np.empty(1 << batch.size)
        for row in range(len(batch)):
            cluster_energies(batch.fields[row], batch.couplings[row], energies)
            start = configuration_number(batch.spins[row]) if self.start == "incumbent" else -1
            walk_law(energies, rates[row], start, moments, laws[row])
        return laws

    def _refuse_oversize(self, batch: ClusterBatch) -> None:
        refuse_oversize(self.name, batch.size, self.max_spins, "exact simulation (2^k amplitudes)")

    def _rates(self, batch: ClusterBatch) -> F64:
        assert batch.couplings is not None
        rates = np.empty(len(batch))
        if self.hopping == "heuristic":
            heuristic_hopping(batch.fields, batch.couplings, level_spread(batch.size), rates)
        else:
            rates[:] = self.hopping
        return rates * self.hopping_factor

    def _measuring_times(self, batch: ClusterBatch) -> F64:
        """Measuring times of every call: f64 (B, M), in units of 1/energy."""
        given = self.time if self.time is not None else self.time_in_hops
        assert isinstance(given, tuple)
        lowest, highest = given
        count = self.times if highest > lowest else 1
        moments = np.array([lowest + (highest - lowest) * i / max(1, count - 1) for i in range(count)])
        if self.time is not None:
            return np.tile(moments, (len(batch), 1))
        return moments[None, :] / self._rates(batch)[:, None]

    def _work(self, batch: ClusterBatch, applications: I64, mean_time: F64) -> Work:
        rows = len(batch)
        return Work(
            shots=np.full(rows, self.shots, np.int64),
            evolution_time=mean_time * self.shots,
            amplitude_updates=applications << batch.size,
            energies=np.full(rows, 1 << batch.size, np.int64),
        )


def _positive(value: object) -> bool:
    return isinstance(value, (int, float)) and not isinstance(value, bool) and math.isfinite(value) and value > 0


def _interval(name: str, value: object) -> tuple[float, float]:
    """The interval that a time setting names, as (lo, hi)."""
    ends = list(value) if isinstance(value, (list, tuple)) else [value, value]
    numbers = [float(end) for end in ends if isinstance(end, (int, float)) and not isinstance(end, bool)]
    if len(ends) != 2 or len(numbers) != 2 or not 0 <= numbers[0] <= numbers[1] < math.inf:
        raise ValueError(f"walk: {name} is {value!r}; give a time of at least 0, or an interval [lo, hi] that rises")
    return numbers[0], numbers[1]


def _spans(batch: ClusterBatch) -> F64:
    """An upper bound of the spread of every cluster's energies: 2 (sum |J| + sum |h|)."""
    assert batch.couplings is not None
    return np.abs(batch.couplings).sum(axis=(1, 2)) + 2 * np.abs(batch.fields).sum(axis=1)


@compiled
def _walk_and_measure(
    fields: F64,
    couplings: F64,
    spins: I8,
    seeds: U64,
    rates: F64,
    times: F64,
    from_incumbent: bool,
    outcomes: I8,
    drawn: F64,
    hit: F64,
    log_ratio: F64,
    applications: I64,
) -> None:
    rows, size = fields.shape
    moments = times.shape[1]
    energies = np.empty(1 << size)
    law = np.empty((moments, 1 << size))
    totals = np.empty(moments)
    stream = np.empty(1, np.uint64)
    for row in range(rows):
        stream[0] = seeds[row]
        cluster_energies(fields[row], couplings[row], energies)
        before = configuration_number(spins[row])
        start = before if from_incumbent else -1
        applications[row] = walk_law(energies, rates[row], start, times[row], law)
        hit[row] = _minimum_share(energies, energies.min() + tie_tolerance(fields[row], couplings[row]), law, totals)
        for shot in range(outcomes.shape[1]):
            moment = next_below(stream, moments)
            number = _draw(law[moment], next_unit(stream) * totals[moment])
            write_configuration(number, outcomes[row, shot])
            drawn[row, shot] = times[row, moment]
            if shot == 0:
                log_ratio[row] = np.log(law[moment, before]) - np.log(law[moment, number])


@compiled
def _minimum_share(energies: F64, ceiling: float, law: F64, totals: F64) -> float:
    """Probability of the configurations at or below the ceiling, averaged over times; fills the totals of each law."""
    share = 0.0
    for moment in range(len(law)):
        total, low = 0.0, 0.0
        for x in range(len(energies)):
            total += law[moment, x]
            if energies[x] <= ceiling:
                low += law[moment, x]
        totals[moment] = total
        share += low / total
    return share / len(law)


@compiled
def _draw(law: F64, threshold: float) -> int:
    running = 0.0
    last = 0
    for x in range(len(law)):
        running += law[x]
        if law[x] > 0.0:
            last = x
        if running > threshold:
            return x
    return last
