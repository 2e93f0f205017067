"""A Metropolis chain inside the cluster: cooled from hot to cold, or held at the temperature of the call.

Metropolis et al., J. Chem. Phys. 21 (1953) 1087; cooled as in Kirkpatrick, Gelatt & Vecchi, Science 220 (1983) 671.
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
from patchwalk.subsolvers.draws import happens, next_unit
from patchwalk.subsolvers.neighbours import (
    TIE_CHANCE,
    edges_of,
    find_local_fields,
    list_neighbours,
    turn,
    typical_field,
)
from patchwalk.subsolvers.uniform import require_shots


@dataclass(frozen=True)
class Metropolis:
    """``shots`` independent chains from the incumbent, each ``sweeps`` sweeps long; the last configuration is the shot.

    With ``draw="minimum"`` the temperature falls geometrically from ``hot`` to ``cold``, both in units of the
    cluster's typical local field (root mean square over its spins of sqrt(h_i^2 + sum_j J_ij^2)). With
    ``draw="boltzmann"`` it is the call's own, and sweeps alternate in direction, so that a whole number of
    there-and-back pairs is reversible: the ratio of proposal densities is that of the Boltzmann weights, and every
    move is accepted. ``sweeps`` is then even.
    """

    draw: Literal["minimum", "boltzmann"] = "minimum"
    sweeps: int = 32
    hot: float = 1.0
    cold: float = 0.05
    shots: int = 1

    name: ClassVar[str] = "metropolis"
    max_spins: ClassVar[int] = 1_000_000
    deterministic: ClassVar[bool] = True

    def __post_init__(self) -> None:
        require_shots(self.name, self.shots)
        if self.draw not in ("minimum", "boltzmann"):
            raise ValueError(f"metropolis: draw is {self.draw!r}; it is minimum or boltzmann")
        if not isinstance(self.sweeps, int) or not 1 <= self.sweeps <= 10_000_000:
            raise ValueError(f"metropolis: sweeps is {self.sweeps!r}; give a whole number from 1 to 10,000,000")
        if self.draw == "boltzmann" and self.sweeps % 2:
            raise ValueError(
                f"metropolis: sweeps is {self.sweeps}; a reversible chain goes there and back, give an even number"
            )
        if not 0 < self.cold <= self.hot < math.inf:
            raise ValueError(f"metropolis: hot is {self.hot!r} and cold {self.cold!r}; give hot >= cold > 0")

    @property
    def balance(self) -> Balance:
        return "ratio" if self.draw == "boltzmann" and self.shots == 1 else "none"

    def prepare(self, sample: ClusterBatch) -> Self:
        self.propose(sample.rows(0, 1))
        return self

    def forecast(self, batch: ClusterBatch) -> Forecast:
        pairs = batch.size**2 if batch.edges is None else 2 * len(batch.edges.weights)
        return Forecast(bytes=16 * pairs + 32 * batch.size, work=self._work(batch))

    def propose(self, batch: ClusterBatch) -> Proposals:
        refuse_oversize(self.name, batch.size, self.max_spins, "a chain inside a cluster")
        outcomes = np.empty((len(batch), self.shots, batch.size), np.int8)
        rises = np.empty(len(batch))
        edges = edges_of(batch)
        _run_chains(
            batch.fields, edges.offsets, edges.pairs, edges.weights, batch.spins, batch.seeds, batch.temperature,
            self.draw == "boltzmann", self.sweeps, self.hot, self.cold, outcomes, rises,
        )  # fmt: skip
        status, messages = all_well(len(batch))
        ratio = None
        if self.balance == "ratio":
            warm = batch.temperature > 0
            ratio = np.divide(rises, batch.temperature, out=np.full(len(batch), np.nan), where=warm)
        return Proposals(outcomes, self._work(batch), status, messages, log_ratio=ratio)

    def _work(self, batch: ClusterBatch) -> Work:
        rows = len(batch)
        return Work(
            shots=np.full(rows, self.shots, np.int64),
            spin_updates=np.full(rows, self.shots * self.sweeps * batch.size, np.int64),
        )


@compiled
def _run_chains(
    fields: F64,
    offsets: I64,
    pairs: I32,
    weights: F64,
    spins: I8,
    seeds: U64,
    temperatures: F64,
    held: bool,
    sweeps: int,
    hot: float,
    cold: float,
    outcomes: I8,
    rises: F64,
) -> None:
    """Fill outcomes (B, m, k) and the energy by which the last shot of each row lies above the incumbent (B,)."""
    rows, size = fields.shape
    stream = np.empty(1, np.uint64)
    local, start_local = np.empty(size), np.empty(size)
    starts = np.empty(size + 1, np.int64)
    for row in range(rows):
        stream[0] = seeds[row]
        own_pairs, own_weights = pairs[offsets[row] : offsets[row + 1]], weights[offsets[row] : offsets[row + 1]]
        neighbours, strengths = np.empty(2 * len(own_weights), np.int32), np.empty(2 * len(own_weights))
        list_neighbours(own_pairs, own_weights, starts, neighbours, strengths)
        find_local_fields(fields[row], spins[row], starts, neighbours, strengths, start_local)
        scale = typical_field(fields[row], starts, strengths)
        for shot in range(outcomes.shape[1]):
            chain = outcomes[row, shot]
            chain[:] = spins[row]
            local[:] = start_local
            rises[row] = 0.0
            for sweep in range(sweeps):
                temperature = temperatures[row]
                if not held:
                    temperature = scale * hot * (cold / hot) ** (sweep / max(1, sweeps - 1))
                backwards = held and sweep % 2 == 1
                rises[row] += _sweep(chain, local, starts, neighbours, strengths, temperature, backwards, stream)


@compiled
def _sweep(
    chain: I8,
    local: F64,
    starts: I64,
    neighbours: I32,
    strengths: F64,
    temperature: float,
    backwards: bool,
    stream: U64,
) -> float:
    """One sweep in place; ``local`` holds h_i + sum_j J_ij s_j and is kept up to date; returns the energy change."""
    change = 0.0
    hopeless, coldness = 40.0 * temperature, 1.0 / temperature
    for step in range(len(chain)):
        i = len(chain) - 1 - step if backwards else step
        rise = -2.0 * chain[i] * local[i]
        if rise > 0.0:
            if rise > hopeless or not happens(stream, rise * coldness):
                continue
        elif rise == 0.0 and next_unit(stream) >= TIE_CHANCE:
            continue
        change += rise
        turn(i, chain, local, starts, neighbours, strengths)
    return change
