"""Tabu search inside a cluster: always the best single flip that is not forbidden, and remember the best place seen.

Glover, ORSA J. Comput. 1 (1989) 190. A flipped spin is forbidden for ``tenure`` steps, give or take a random third,
unless flipping it leads below everything seen so far.
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
from patchwalk.subsolvers.draws import next_below
from patchwalk.subsolvers.neighbours import edges_of, find_local_fields, lists_of, scatter, turn
from patchwalk.subsolvers.uniform import require_shots


@dataclass(frozen=True)
class Tabu:
    """``shots`` independent searches of ``steps`` flips each; 0 steps stands for 4 k.

    The first begins at the incumbent, the others at random configurations. ``tenure`` is in steps; 0 stands for 2k/5,
    at most 20 (computed here: from k/4 down the search falls back into the valley it came from).
    """

    steps: int = 0
    tenure: int = 0
    shots: int = 1

    name: ClassVar[str] = "tabu"
    concurrent: ClassVar[bool] = True
    max_spins: ClassVar[int] = 1_000_000
    deterministic: ClassVar[bool] = True
    balance: ClassVar[Balance] = "none"

    def __post_init__(self) -> None:
        require_shots(self.name, self.shots)
        for name in ("steps", "tenure"):
            value = getattr(self, name)
            if not isinstance(value, int) or not 0 <= value <= 100_000_000:
                raise ValueError(f"tabu: {name} is {value!r}; give a whole number from 1, or 0 for the default")

    def prepare(self, sample: ClusterBatch) -> Self:
        self.propose(sample.rows(0, 1))
        return self

    def forecast(self, batch: ClusterBatch) -> Forecast:
        pairs = batch.size**2 if batch.edges is None else 2 * len(batch.edges.weights)
        return Forecast(bytes=16 * pairs + 48 * batch.size, work=self._work(batch))

    def propose(self, batch: ClusterBatch) -> Proposals:
        refuse_oversize(self.name, batch.size, self.max_spins, "tabu search")
        outcomes = np.empty((len(batch), self.shots, batch.size), np.int8)
        tenure = self.tenure or max(1, min(2 * batch.size // 5, 20))
        edges = edges_of(batch)
        _run_searches(
            batch.fields, edges.offsets, edges.pairs, edges.weights, batch.spins, batch.seeds, self._steps(batch),
            min(tenure, batch.size - 1), outcomes,
        )  # fmt: skip
        status, messages = all_well(len(batch))
        return Proposals(outcomes, self._work(batch), status, messages)

    def _steps(self, batch: ClusterBatch) -> int:
        return self.steps or 4 * batch.size

    def _work(self, batch: ClusterBatch) -> Work:
        rows = len(batch)
        return Work(
            shots=np.full(rows, self.shots, np.int64),
            spin_updates=np.full(rows, self.shots * self._steps(batch) * batch.size, np.int64),
        )


@compiled
def _run_searches(
    fields: F64,
    offsets: I64,
    pairs: I32,
    weights: F64,
    incumbents: I8,
    seeds: U64,
    steps: int,
    tenure: int,
    outcomes: I8,
) -> None:
    rows, size = fields.shape
    stream = np.empty(1, np.uint64)
    local, spins, free_at = np.empty(size), np.empty(size, np.int8), np.empty(size, np.int64)
    for row in range(rows):
        stream[0] = seeds[row]
        starts, neighbours, strengths = lists_of(offsets, pairs, weights, row, size)
        for shot in range(outcomes.shape[1]):
            spins[:] = incumbents[row]
            if shot > 0:
                scatter(spins, stream)
            find_local_fields(fields[row], spins, starts, neighbours, strengths, local)
            outcomes[row, shot] = spins
            free_at[:] = 0
            height, lowest = 0.0, 0.0  # above the configuration that the search began with
            for step in range(steps):
                spin = _best_allowed(spins, local, free_at, step, height - lowest)
                height -= 2.0 * spins[spin] * local[spin]
                turn(spin, spins, local, starts, neighbours, strengths)
                free_at[spin] = step + 1 + tenure + next_below(stream, 1 + tenure // 3)
                if height < lowest:
                    lowest = height
                    outcomes[row, shot] = spins


@compiled
def _best_allowed(spins: I8, local: F64, free_at: I64, step: int, above: float) -> int:
    """The flip of least rise among free spins and those leading below the lowest seen; the first freed if none."""
    least, chosen, first_freed = np.inf, -1, 0
    for i in range(len(spins)):
        rise = -2.0 * spins[i] * local[i]
        if (free_at[i] <= step or rise < -above) and rise < least:
            least, chosen = rise, i
        if free_at[i] < free_at[first_freed]:
            first_freed = i
    return chosen if chosen >= 0 else first_freed
