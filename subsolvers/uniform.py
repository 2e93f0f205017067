"""A configuration drawn uniformly at random: what every other subsolver must beat."""

from __future__ import annotations

from dataclasses import dataclass
from typing import ClassVar, Self

import numpy as np

from patchwalk.subsolvers.compiled import compiled
from patchwalk.subsolvers.contract import (
    I8,
    U64,
    Balance,
    ClusterBatch,
    Forecast,
    Proposals,
    Work,
    all_well,
    refuse_oversize,
)
from patchwalk.subsolvers.neighbours import scatter


@dataclass(frozen=True)
class Uniform:
    """``shots`` independent uniform configurations of every cluster, whatever its energies."""

    shots: int = 1

    name: ClassVar[str] = "uniform"
    concurrent: ClassVar[bool] = True
    max_spins: ClassVar[int] = 1_000_000
    deterministic: ClassVar[bool] = True

    def __post_init__(self) -> None:
        require_shots(self.name, self.shots)

    @property
    def balance(self) -> Balance:
        return "symmetric" if self.shots == 1 else "none"

    def prepare(self, sample: ClusterBatch) -> Self:
        self.propose(sample.rows(0, 1))
        return self

    def forecast(self, batch: ClusterBatch) -> Forecast:
        return Forecast(bytes=len(batch) * self.shots * batch.size, work=self._work(batch))

    def propose(self, batch: ClusterBatch) -> Proposals:
        refuse_oversize(self.name, batch.size, self.max_spins, "a random configuration")
        outcomes = np.empty((len(batch), self.shots, batch.size), np.int8)
        _draw_spins(batch.seeds, outcomes)
        status, messages = all_well(len(batch))
        return Proposals(outcomes, self._work(batch), status, messages)

    def _work(self, batch: ClusterBatch) -> Work:
        rows = len(batch)
        return Work(
            shots=np.full(rows, self.shots, np.int64),
            spin_updates=np.full(rows, self.shots * batch.size, np.int64),
        )


def require_shots(name: str, shots: object) -> None:
    """Raise ``ValueError`` unless ``shots`` is a whole number from 1 to a million."""
    if not isinstance(shots, int) or isinstance(shots, bool) or not 1 <= shots <= 1_000_000:
        raise ValueError(f"{name}: shots is {shots!r}; give a whole number from 1 to 1,000,000")


@compiled
def _draw_spins(seeds: U64, outcomes: I8) -> None:
    rows, shots, _ = outcomes.shape
    stream = np.empty(1, np.uint64)
    for row in range(rows):
        stream[0] = seeds[row]
        for shot in range(shots):
            scatter(outcomes[row, shot], stream)
