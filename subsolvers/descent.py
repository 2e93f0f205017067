"""Greedy descent with restarts: the steepest single flip, again and again, until none lowers the energy.

The plainest local search there is (common practice): what a method must beat to be worth its cost.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import ClassVar, Self

import numpy as np

from patchwalk.subsolvers.compiled import compiled
from patchwalk.subsolvers.contract import (
    F64,
    I8,
    I32,
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
from patchwalk.subsolvers.neighbours import edges_of, find_local_fields, lists_of, scatter, turn
from patchwalk.subsolvers.uniform import require_shots


@dataclass(frozen=True)
class Descent:
    """Each of ``shots`` shots is the lowest end of ``restarts`` descents from random configurations."""

    restarts: int = 4
    shots: int = 1

    name: ClassVar[str] = "descent"
    concurrent: ClassVar[bool] = True
    max_spins: ClassVar[int] = 1_000_000
    deterministic: ClassVar[bool] = True
    balance: ClassVar[Balance] = "none"

    def __post_init__(self) -> None:
        require_shots(self.name, self.shots)
        if not isinstance(self.restarts, int) or not 1 <= self.restarts <= 1_000_000:
            raise ValueError(f"descent: restarts is {self.restarts!r}; give a whole number from 1 to 1,000,000")

    def prepare(self, sample: ClusterBatch) -> Self:
        self.propose(sample.rows(0, 1))
        return self

    def forecast(self, batch: ClusterBatch) -> Forecast:
        flips = 1 + 0.4 * batch.size  # a random configuration comes to rest after about so many (computed here)
        looks = np.full(len(batch), int(self.shots * self.restarts * flips * batch.size), np.int64)
        pairs = batch.size**2 if batch.edges is None else 2 * len(batch.edges.weights)
        return Forecast(bytes=16 * pairs + 32 * batch.size, work=self._work(looks))

    def propose(self, batch: ClusterBatch) -> Proposals:
        refuse_oversize(self.name, batch.size, self.max_spins, "a descent")
        outcomes = np.empty((len(batch), self.shots, batch.size), np.int8)
        looks = np.zeros(len(batch), np.int64)
        edges = edges_of(batch)
        _run_descents(
            batch.fields, edges.offsets, edges.pairs, edges.weights, batch.seeds, self.restarts, outcomes, looks
        )
        status, messages = all_well(len(batch))
        return Proposals(outcomes, self._work(looks), status, messages)

    def _work(self, looks: I64) -> Work:
        return Work(shots=np.full(len(looks), self.shots, np.int64), spin_updates=looks)


@compiled
def _run_descents(
    fields: F64, offsets: I64, pairs: I32, weights: F64, seeds: U64, restarts: int, outcomes: I8, looks: I64
) -> None:
    rows, size = fields.shape
    stream = np.empty(1, np.uint64)
    local, spins = np.empty(size), np.empty(size, np.int8)
    for row in range(rows):
        stream[0] = seeds[row]
        starts, neighbours, strengths = lists_of(offsets, pairs, weights, row, size)
        for shot in range(outcomes.shape[1]):
            lowest = np.inf
            for _ in range(restarts):
                scatter(spins, stream)
                find_local_fields(fields[row], spins, starts, neighbours, strengths, local)
                looks[row] += _descend(spins, local, starts, neighbours, strengths)
                energy = 0.0
                for i in range(size):
                    energy += 0.5 * (fields[row, i] + local[i]) * spins[i]
                if energy < lowest:
                    lowest = energy
                    outcomes[row, shot] = spins


@compiled
def _descend(spins: I8, local: F64, starts: I64, neighbours: I32, strengths: F64) -> int:
    """Flip the spin that lowers the energy most until none does; returns how many flips were weighed."""
    looks = 0
    for _ in range(100 * len(spins) + 1000):  # rounding could make a tie look like a fall for ever
        steepest, spin = 0.0, -1
        for i in range(len(spins)):
            rise = -2.0 * spins[i] * local[i]
            if rise < steepest:
                steepest, spin = rise, i
        looks += len(spins)
        if spin < 0:
            break
        turn(spin, spins, local, starts, neighbours, strengths)
    return looks
