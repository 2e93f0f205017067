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
    cluster_energies,
    configuration_number,
    tie_tolerance,
    write_configuration,
)
from patchwalk.subsolvers.uniform import require_shots


@dataclass(frozen=True)
class Enumeration:
    """The minimum (drawn evenly where it is degenerate), or a Boltzmann draw at the call's temperature.

    ``draw`` is ``"minimum"`` or ``"boltzmann"``; at temperature zero the Boltzmann law is even over the minima. Two
    energies tie within 1e-9 (sum |J| + sum |h|).
    """

    draw: Literal["minimum", "boltzmann"] = "minimum"
    shots: int = 1

    name: ClassVar[str] = "enumeration"
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
            batch.fields, batch.couplings, batch.spins, temperature, batch.seeds, outcomes, hit, log_ratio
        )
        status, messages = all_well(rows)
        ratio = log_ratio if self.balance == "ratio" else None
        return Proposals(
            outcomes, self._work(batch), status, messages, log_ratio=ratio, hit_probability=hit, noiseless_hit=hit
        )

    def _work(self, batch: ClusterBatch) -> Work:
        rows = len(batch)
        return Work(shots=np.full(rows, self.shots, np.int64), energies=np.full(rows, 1 << batch.size, np.int64))


@compiled
def _draw_configurations(
    fields: F64,
    couplings: F64,
    spins: I8,
    temperature: F64,
    seeds: U64,
    outcomes: I8,
    hit: F64,
    log_ratio: F64,
) -> None:
    rows, size = fields.shape
    energies = np.empty(1 << size)
    stream = np.empty(1, np.uint64)
    for row in range(rows):
        stream[0] = seeds[row]
        cluster_energies(fields[row], couplings[row], energies)
        tolerance = tie_tolerance(fields[row], couplings[row])
        lowest = energies.min()
        cold = temperature[row] <= 0.0
        total, count = 0.0, 0
        for x in range(len(energies)):
            if energies[x] <= lowest + tolerance:
                count += 1
            if not cold:
                total += np.exp((lowest - energies[x]) / temperature[row])
        in_minima = 0.0
        for shot in range(outcomes.shape[1]):
            if cold:
                number = _minimum_of_rank(energies, lowest + tolerance, next_below(stream, count))
            else:
                number = _boltzmann_number(energies, lowest, temperature[row], next_unit(stream) * total)
            write_configuration(number, outcomes[row, shot])
        if cold:
            hit[row] = 1.0
            continue
        for x in range(len(energies)):
            if energies[x] <= lowest + tolerance:
                in_minima += np.exp((lowest - energies[x]) / temperature[row])
        hit[row] = in_minima / total
        before = energies[configuration_number(spins[row])]
        log_ratio[row] = (energies[configuration_number(outcomes[row, 0])] - before) / temperature[row]


@compiled
def _minimum_of_rank(energies: F64, ceiling: float, rank: int) -> int:
    for x in range(len(energies)):
        if energies[x] <= ceiling:
            if rank == 0:
                return x
            rank -= 1
    return len(energies) - 1


@compiled
def _boltzmann_number(energies: F64, lowest: float, temperature: float, threshold: float) -> int:
    running = 0.0
    last = 0
    for x in range(len(energies)):
        weight = np.exp((lowest - energies[x]) / temperature)
        running += weight
        if weight > 0.0:
            last = x
        if running > threshold:
            return x
    return last


def lowest_configurations(fields: F64, couplings: F64) -> tuple[float, I64]:
    """The exact minimum of one cluster and the numbers of all configurations that reach it.

    >>> lowest_configurations(np.zeros(2), np.array([[0.0, 1.0], [1.0, 0.0]]))
    (-1.0, array([1, 2]))
    """
    energies = np.empty(1 << len(fields))
    cluster_energies(fields, couplings, energies)
    lowest = float(energies.min())
    return lowest, np.flatnonzero(energies <= lowest + tie_tolerance(fields, couplings))
