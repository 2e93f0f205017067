"""A Metropolis chain inside the cluster: cooled from hot to cold, or held at the temperature of the call.

Metropolis et al., J. Chem. Phys. 21 (1953) 1087; cooled as in Kirkpatrick, Gelatt & Vecchi, Science 220 (1983) 671.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import ClassVar, Literal, Self

import numpy as np

from patchwalk.subsolvers.contract import (
    F64,
    I8,
    I32,
    I64,
    Balance,
    ClusterBatch,
    Forecast,
    Proposals,
    Work,
    all_well,
    refuse_oversize,
)
from patchwalk.subsolvers.lockstep import LANES, room_for_packs
from patchwalk.subsolvers.metropolis_chains import run_abreast, run_alone
from patchwalk.subsolvers.neighbours import list_edges, with_matrices
from patchwalk.subsolvers.uniform import require_shots

FEW = 2
"""So many chains take less time one after the other than side by side, which takes as long as with eight."""


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
    concurrent: ClassVar[bool] = True
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
        refuse_oversize(self.name, sample.size, self.max_spins, "a chain inside a cluster")
        one = with_matrices(sample.rows(0, 1))
        for alone in (0, self.shots) if one.couplings is not None else (self.shots,):
            self._run(one, alone)
        return self

    def forecast(self, batch: ClusterBatch) -> Forecast:
        pairs = 8 * (batch.size + 3) * batch.size if batch.edges is None else 2 * len(batch.edges.weights)
        return Forecast(bytes=16 * pairs + 48 * batch.size, work=self._work(batch))

    def propose(self, batch: ClusterBatch) -> Proposals:
        refuse_oversize(self.name, batch.size, self.max_spins, "a chain inside a cluster")
        batch = with_matrices(batch)
        outcomes, rises = self._run(batch, self._alone(batch))
        status, messages = all_well(len(batch))
        ratio = None
        if self.balance == "ratio":
            warm = batch.temperature > 0
            ratio = np.divide(rises, batch.temperature, out=np.full(len(batch), np.nan), where=warm)
        return Proposals(outcomes, self._work(batch), status, messages, log_ratio=ratio)

    def _run(self, batch: ClusterBatch, alone: int) -> tuple[I8, F64]:
        """Outcomes (B, m, k), and by how much the last shot of each row lies above the incumbent (B,).

        The last ``alone`` chains, which change nothing but the speed, are run one after the other.
        """
        outcomes, rises = np.empty((len(batch), self.shots, batch.size), np.int8), np.empty(len(batch))
        factors = self.hot * (self.cold / self.hot) ** (np.arange(self.sweeps) / max(1, self.sweeps - 1))
        call = (batch.spins, batch.seeds, batch.temperature, factors, self.draw == "boltzmann")
        chains = len(batch) * self.shots
        if alone < chains:
            assert batch.couplings is not None
            room = room_for_packs(batch.size * (batch.size + 3))
            run_abreast((0, chains - alone), batch.fields, batch.couplings, *call, room, outcomes, rises)
        if alone > 0:
            first = (chains - alone) // self.shots
            run_alone((chains - alone, chains), batch.fields, _edges_from(batch, first), *call, outcomes, rises)
        return outcomes, rises

    def _alone(self, batch: ClusterBatch) -> int:
        """How many chains to run one after the other: all where couplings are lists, a few left over from eights."""
        chains = len(batch) * self.shots
        if batch.couplings is None:
            return chains
        return chains % LANES if chains % LANES <= FEW else 0

    def _work(self, batch: ClusterBatch) -> Work:
        rows = len(batch)
        return Work(
            shots=np.full(rows, self.shots, np.int64),
            spin_updates=np.full(rows, self.shots * self.sweeps * batch.size, np.int64),
        )


def _edges_from(batch: ClusterBatch, first: int) -> tuple[I64, I32, F64]:
    """Offsets, pairs and weights of the rows from ``first`` on."""
    if batch.couplings is not None:
        return list_edges(batch.couplings[first:])
    assert batch.edges is not None
    own = batch.edges.rows(first, len(batch))
    return own.offsets, own.pairs, own.weights
