"""A Metropolis chain inside the cluster, cooled from hot to cold.

Metropolis et al., J. Chem. Phys. 21 (1953) 1087; cooled as in Kirkpatrick, Gelatt & Vecchi, Science 220 (1983) 671.
"""

from __future__ import annotations

import math
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
    Edges,
    Forecast,
    Proposals,
    Work,
    all_well,
    refuse_oversize,
)
from patchwalk.subsolvers.draws import next_unit
from patchwalk.subsolvers.uniform import require_shots

TIE_CHANCE = 0.9
"""A flip that leaves the energy as it is gets made this often; always, and domain walls would travel with the sweep."""


@dataclass(frozen=True)
class Metropolis:
    """``shots`` independent chains from the incumbent, each ``sweeps`` sweeps long.

    The temperature falls geometrically from ``hot`` to ``cold``, both in units of the cluster's typical local field
    (root mean square over its spins of sqrt(h_i^2 + sum_j J_ij^2)); the last configuration is the shot.
    """

    sweeps: int = 32
    hot: float = 1.0
    cold: float = 0.1
    shots: int = 1

    name: ClassVar[str] = "metropolis"
    max_spins: ClassVar[int] = 1_000_000
    deterministic: ClassVar[bool] = True
    balance: ClassVar[Balance] = "none"

    def __post_init__(self) -> None:
        require_shots(self.name, self.shots)
        if not isinstance(self.sweeps, int) or not 1 <= self.sweeps <= 10_000_000:
            raise ValueError(f"metropolis: sweeps is {self.sweeps!r}; give a whole number from 1 to 10,000,000")
        if not 0 < self.cold <= self.hot < math.inf:
            raise ValueError(f"metropolis: hot is {self.hot!r} and cold {self.cold!r}; give hot >= cold > 0")

    def prepare(self, sample: ClusterBatch) -> Self:
        self.propose(sample.rows(0, 1))
        return self

    def forecast(self, batch: ClusterBatch) -> Forecast:
        pairs = batch.size**2 if batch.edges is None else 2 * len(batch.edges.weights)
        return Forecast(bytes=16 * pairs + 32 * batch.size, work=self._work(batch))

    def propose(self, batch: ClusterBatch) -> Proposals:
        refuse_oversize(self.name, batch.size, self.max_spins, "a chain inside a cluster")
        outcomes = np.empty((len(batch), self.shots, batch.size), np.int8)
        edges = batch.edges if batch.edges is not None else _edges_of(batch)
        _run_chains(
            batch.fields, edges.offsets, edges.pairs, edges.weights, batch.spins, batch.seeds,
            self.sweeps, self.hot, self.cold, outcomes,
        )  # fmt: skip
        status, messages = all_well(len(batch))
        return Proposals(outcomes, self._work(batch), status, messages)

    def _work(self, batch: ClusterBatch) -> Work:
        rows = len(batch)
        return Work(
            shots=np.full(rows, self.shots, np.int64),
            spin_updates=np.full(rows, self.shots * self.sweeps * batch.size, np.int64),
        )


def _edges_of(batch: ClusterBatch) -> Edges:
    """The dense couplings of a batch as edges."""
    assert batch.couplings is not None
    rows, first, second = np.nonzero(np.triu(batch.couplings, 1))
    return Edges(
        offsets=np.searchsorted(rows, np.arange(len(batch) + 1)),
        pairs=np.stack([first, second], axis=1),
        weights=batch.couplings[rows, first, second],
    )


@compiled
def _run_chains(
    fields: F64,
    offsets: I64,
    pairs: I32,
    weights: F64,
    spins: I8,
    seeds: U64,
    sweeps: int,
    hot: float,
    cold: float,
    outcomes: I8,
) -> None:
    rows, size = fields.shape
    stream = np.empty(1, np.uint64)
    local, start_local = np.empty(size), np.empty(size)
    starts = np.empty(size + 1, np.int64)
    for row in range(rows):
        stream[0] = seeds[row]
        own_pairs, own_weights = pairs[offsets[row] : offsets[row + 1]], weights[offsets[row] : offsets[row + 1]]
        neighbours = np.empty(2 * len(own_weights), np.int32)
        strengths = np.empty(2 * len(own_weights))
        _list_neighbours(own_pairs, own_weights, starts, neighbours, strengths)
        squares = 0.0
        for i in range(size):
            start_local[i] = fields[row, i]
            squares += fields[row, i] ** 2
            for place in range(starts[i], starts[i + 1]):
                start_local[i] += strengths[place] * spins[row, neighbours[place]]
                squares += strengths[place] ** 2
        scale = np.sqrt(squares / size)
        for shot in range(outcomes.shape[1]):
            chain = outcomes[row, shot]
            chain[:] = spins[row]
            local[:] = start_local
            for sweep in range(sweeps):
                fraction = sweep / max(1, sweeps - 1)
                temperature = scale * hot * (cold / hot) ** fraction
                _sweep(chain, local, starts, neighbours, strengths, temperature, stream)


@compiled
def _list_neighbours(pairs: I32, weights: F64, starts: I64, neighbours: I32, strengths: F64) -> None:
    starts[:] = 0
    for edge in range(len(weights)):
        starts[pairs[edge, 0] + 1] += 1
        starts[pairs[edge, 1] + 1] += 1
    for i in range(len(starts) - 1):
        starts[i + 1] += starts[i]
    filled = starts[:-1].copy()
    for edge in range(len(weights)):
        for side in range(2):
            spin, other = pairs[edge, side], pairs[edge, 1 - side]
            neighbours[filled[spin]] = other
            strengths[filled[spin]] = weights[edge]
            filled[spin] += 1


@compiled
def _sweep(
    chain: I8, local: F64, starts: I64, neighbours: I32, strengths: F64, temperature: float, stream: U64
) -> None:
    """One Metropolis sweep in place; ``local`` holds h_i + sum_j J_ij s_j and is kept up to date."""
    for i in range(len(chain)):
        rise = -2.0 * chain[i] * local[i]
        if rise >= 0.0:
            chance = TIE_CHANCE if rise == 0.0 else np.exp(-rise / temperature)
            if next_unit(stream) >= chance:
                continue
        chain[i] = -chain[i]
        for place in range(starts[i], starts[i + 1]):
            local[neighbours[place]] += 2.0 * strengths[place] * chain[i]
