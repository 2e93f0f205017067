"""All 2^k energies of a cluster: its exact minimum, or an exact draw from the Boltzmann law.

The reference that every other subsolver is measured against, and at small k the strongest rival there is.
"""

from __future__ import annotations

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
from patchwalk.subsolvers.spectrum import (
    LANES,
    boltzmann_factor,
    cluster_energies,
    configuration_number,
    count_ties,
    lowest_of,
    tie_tolerance,
    write_configuration,
)
from patchwalk.subsolvers.uniform import require_shots

BLOCK = 1024
"""Energies whose counts and sums are kept together, so that a draw looks through one block and not through all."""


@dataclass(frozen=True)
class Enumeration:
    """The minimum (drawn evenly where it is degenerate), or a Boltzmann draw at the call's temperature.

    ``draw`` is ``"minimum"`` or ``"boltzmann"``; at temperature zero the Boltzmann law is even over the minima. Two
    energies tie within 1e-9 (sum |J| + sum |h|).
    """

    draw: Literal["minimum", "boltzmann"] = "minimum"
    shots: int = 1

    name: ClassVar[str] = "enumeration"
    concurrent: ClassVar[bool] = True
    reports: ClassVar[tuple[str, ...]] = ("hit probability",)
    max_spins: ClassVar[int] = 24
    deterministic: ClassVar[bool] = True

    def __post_init__(self) -> None:
        require_shots(self.name, self.shots)
        if self.draw not in ("minimum", "boltzmann"):
            raise ValueError(f"enumeration: draw is {self.draw!r}; it is minimum or boltzmann")

    @property
    def balance(self) -> Balance:
        return "ratio" if self.draw == "boltzmann" and self.shots == 1 else "none"

    def prepare(self, sample: ClusterBatch) -> Self:
        refuse_oversize(self.name, sample.size, self.max_spins, "listing all 2^k energies")
        self.propose(sample.rows(0, 1))
        return self

    def forecast(self, batch: ClusterBatch) -> Forecast:
        return Forecast(bytes=8 << batch.size, work=self._work(batch))

    def propose(self, batch: ClusterBatch) -> Proposals:
        refuse_oversize(self.name, batch.size, self.max_spins, "listing all 2^k energies")
        assert batch.couplings is not None
        rows = len(batch)
        outcomes = np.empty((rows, self.shots, batch.size), np.int8)
        hit, log_ratio = np.empty(rows), np.full(rows, np.nan)
        boltzmann = self.draw == "boltzmann"
        temperature = batch.temperature if boltzmann else np.zeros(rows)
        _draw_configurations(
            batch.fields, batch.couplings, batch.spins, temperature, batch.seeds, np.empty(1 << batch.size),
            outcomes, hit, log_ratio,
        )  # fmt: skip
        status, messages = all_well(rows)
        ratio = log_ratio if self.balance == "ratio" else None
        return Proposals(
            outcomes, self._work(batch), status, messages, log_ratio=ratio, hit_probability=hit, noiseless_hit=hit
        )

    def minima(self, batch: ClusterBatch) -> tuple[F64, I64]:
        """The lowest energy f64 (B,) of every cluster, and how many configurations i64 (B,) have it."""
        refuse_oversize(self.name, batch.size, self.max_spins, "listing all 2^k energies")
        assert batch.couplings is not None
        lowest, count = np.empty(len(batch)), np.empty(len(batch), np.int64)
        _find_minima(batch.fields, batch.couplings, np.empty(1 << batch.size), lowest, count)
        return lowest, count

    def _work(self, batch: ClusterBatch) -> Work:
        rows = len(batch)
        return Work(shots=np.full(rows, self.shots, np.int64), energies=np.full(rows, 1 << batch.size, np.int64))


@compiled
def _find_minima(fields: F64, couplings: F64, energies: F64, lowest: F64, count: I64) -> None:
    ties = np.empty(1, np.int64)
    for row in range(len(fields)):
        cluster_energies(fields[row], couplings[row], energies)
        lowest[row] = lowest_of(energies)
        count_ties(energies, lowest[row] + tie_tolerance(fields[row], couplings[row]), ties)
        count[row] = ties[0]


@compiled
def _draw_configurations(
    fields: F64,
    couplings: F64,
    spins: I8,
    temperature: F64,
    seeds: U64,
    energies: F64,
    outcomes: I8,
    hit: F64,
    log_ratio: F64,
) -> None:
    """One row after the other; ``energies`` f64 (2^k,) is scratch."""
    stream = np.empty(1, np.uint64)
    block = min(len(energies), BLOCK)
    ties, sums = np.empty(len(energies) // block, np.int64), np.empty(len(energies) // block)
    for row in range(len(fields)):
        stream[0] = seeds[row]
        cluster_energies(fields[row], couplings[row], energies)
        lowest = lowest_of(energies)
        ceiling = lowest + tie_tolerance(fields[row], couplings[row])
        count_ties(energies, ceiling, ties)
        rate = 1.0 / temperature[row] if temperature[row] > 0.0 else np.inf
        if np.isinf(rate):
            count = ties.sum()
            for shot in range(outcomes.shape[1]):
                number = _minimum_of_rank(energies, ties, ceiling, next_below(stream, count))
                write_configuration(number, outcomes[row, shot])
            hit[row] = 1.0
            continue
        _sum_factors(energies, lowest, rate, sums)
        total = sums.sum()
        for shot in range(outcomes.shape[1]):
            number = _boltzmann_number(energies, sums, lowest, rate, next_unit(stream) * total)
            write_configuration(number, outcomes[row, shot])
        hit[row] = _sum_minima(energies, ties, lowest, ceiling, rate) / total
        before = energies[configuration_number(spins[row])]
        log_ratio[row] = (energies[configuration_number(outcomes[row, 0])] - before) / temperature[row]


@compiled
def _minimum_of_rank(energies: F64, ties: I64, ceiling: float, rank: int) -> int:
    block = len(energies) // len(ties)
    part = 0
    while rank >= ties[part]:
        rank -= ties[part]
        part += 1
    for x in range(part * block, (part + 1) * block):
        if energies[x] <= ceiling:
            if rank == 0:
                return x
            rank -= 1
    return len(energies) - 1


@compiled
def _sum_factors(energies: F64, lowest: float, rate: float, sums: F64) -> None:
    """Boltzmann factors, relative to the lowest energy, summed block by block."""
    block = len(energies) // len(sums)
    lanes = np.empty(min(LANES, block))
    for part in range(len(sums)):
        lanes[:] = 0.0
        for first in range(part * block, (part + 1) * block, len(lanes)):
            here = energies[first : first + len(lanes)]
            for x in range(len(lanes)):
                lanes[x] += boltzmann_factor((here[x] - lowest) * rate)
        sums[part] = lanes.sum()


@compiled
def _boltzmann_number(energies: F64, sums: F64, lowest: float, rate: float, threshold: float) -> int:
    """The configuration at which the running sum of all factors passes ``threshold``, the block first."""
    block = len(energies) // len(sums)
    part = 0
    while part < len(sums) - 1 and threshold >= sums[part]:
        threshold -= sums[part]
        part += 1
    running, last = 0.0, part * block
    for x in range(part * block, (part + 1) * block):
        factor = boltzmann_factor((energies[x] - lowest) * rate)
        running += factor
        if factor > 0.0:
            last = x
        if running > threshold:
            return x
    return last


@compiled
def _sum_minima(energies: F64, ties: I64, lowest: float, ceiling: float, rate: float) -> float:
    """The Boltzmann factors of all minima, looked up where there are any."""
    block = len(energies) // len(ties)
    total = 0.0
    for part in range(len(ties)):
        if ties[part] > 0:
            for x in range(part * block, (part + 1) * block):
                if energies[x] <= ceiling:
                    total += boltzmann_factor((energies[x] - lowest) * rate)
    return total


def lowest_configurations(fields: F64, couplings: F64) -> tuple[float, I64]:
    """The exact minimum of one cluster and the numbers of all configurations that reach it.

    >>> lowest_configurations(np.zeros(2), np.array([[0.0, 1.0], [1.0, 0.0]]))
    (-1.0, array([1, 2]))
    """
    energies = np.empty(1 << len(fields))
    cluster_energies(fields, couplings, energies)
    lowest = lowest_of(energies)
    return lowest, np.flatnonzero(energies <= lowest + tie_tolerance(fields, couplings))
