"""Exact variable elimination: the minimum or an exact Boltzmann draw of clusters of hundreds of spins.

Spins are summed out one after the other. What it takes grows as 2^width, the width being how many spins a table is
about: about the shorter side of a strip of a lattice, whatever the longer one. The classical answer to ask for first
on sparse problems, and as a heat-bath move on a whole strip an exact way to sample them.

Dechter, Artif. Intell. 113 (1999) 41; sampling low-width subgraphs: Hamze & de Freitas, UAI 2004.
"""

from __future__ import annotations

import threading
from collections.abc import Iterator
from dataclasses import dataclass
from typing import ClassVar, Literal, Self

import numpy as np

from patchwalk.subsolvers.compiled import compiled
from patchwalk.subsolvers.contract import (
    F64,
    I8,
    I32,
    I64,
    Balance,
    ClusterBatch,
    Forecast,
    Proposals,
    Status,
    Work,
    refuse_oversize,
)
from patchwalk.subsolvers.elimination_layout import Layout
from patchwalk.subsolvers.elimination_order import USUAL_LIMIT, Plan
from patchwalk.subsolvers.elimination_plans import planned
from patchwalk.subsolvers.elimination_tables import eliminate
from patchwalk.subsolvers.neighbours import Lists, edges_of, lists_of
from patchwalk.subsolvers.spectrum import TIE_SHARE
from patchwalk.subsolvers.uniform import require_shots

WIDEST = 26
"""No larger ``max_width`` is accepted: single tables of 2^26 entries, 1 GB with their weights."""

KEPT_ROOM = 1 << 23
"""Tables of up to so many entries (128 MB with their weights) keep their memory between calls."""


@dataclass(frozen=True)
class Elimination:
    """The minimum (drawn evenly where it is degenerate), or a Boltzmann draw at the call's temperature.

    ``draw`` is ``"minimum"`` or ``"boltzmann"``; at temperature zero the Boltzmann law is even over the minima. A
    cluster for which no order of elimination of width up to ``max_width`` is found fails, with the width that was
    found. Two energies tie within 1e-9 (sum |J| + sum |h|), shared out among the k decisions that make a minimum.
    """

    draw: Literal["minimum", "boltzmann"] = "minimum"
    shots: int = 1
    max_width: int = USUAL_LIMIT

    name: ClassVar[str] = "elimination"
    concurrent: ClassVar[bool] = True
    max_spins: ClassVar[int] = 1000  # weights reach 2^k and must stay finite
    deterministic: ClassVar[bool] = True

    def __post_init__(self) -> None:
        require_shots(self.name, self.shots)
        if self.draw not in ("minimum", "boltzmann"):
            raise ValueError(f"elimination: draw is {self.draw!r}; it is minimum or boltzmann")
        whole = isinstance(self.max_width, int) and not isinstance(self.max_width, bool)
        if not whole or not 1 <= self.max_width <= WIDEST:
            raise ValueError(
                f"elimination: max_width is {self.max_width!r}; give a whole number from 1 to {WIDEST} "
                "(2^max_width table entries)"
            )

    @property
    def balance(self) -> Balance:
        return "ratio" if self.draw == "boltzmann" and self.shots == 1 else "none"

    def prepare(self, sample: ClusterBatch) -> Self:
        refuse_oversize(self.name, sample.size, self.max_spins, "variable elimination")
        self.propose(sample.rows(0, 1))
        self.propose(_PAIR)  # compiles the rest where the sample is too wide
        return self

    def forecast(self, batch: ClusterBatch) -> Forecast:
        refuse_oversize(self.name, batch.size, self.max_spins, "variable elimination")
        entries, room = np.zeros(len(batch), np.int64), 0
        for row, graph in enumerate(_graphs(batch)):
            tables = planned(graph, self.max_width).tables
            if tables is not None:
                _, layout = tables
                entries[row], room = layout.entries, max(room, layout.room)
        return Forecast(bytes=16 * room + len(batch) * self.shots * batch.size, work=self._work(entries))

    def propose(self, batch: ClusterBatch) -> Proposals:
        refuse_oversize(self.name, batch.size, self.max_spins, "variable elimination")
        rows = len(batch)
        outcomes = np.empty((rows, self.shots, batch.size), np.int8)
        outcomes[:] = batch.spins[:, None, :]
        temperature = batch.temperature if self.draw == "boltzmann" else np.zeros(rows)
        entries, status, messages = np.zeros(rows, np.int64), np.zeros(rows, np.uint8), [""] * rows
        log_ratio = np.full(rows, np.nan)
        for row, graph in enumerate(_graphs(batch)):
            width, tables = planned(graph, self.max_width)
            if tables is None:
                status[row], messages[row] = Status.FAILED, self._too_wide(width)
                continue
            plan, layout = tables
            entries[row] = layout.entries
            _solve(batch, row, graph, plan, layout, float(temperature[row]), outcomes[row])
            if temperature[row] > 0.0:
                change = _energy_change(batch.fields[row], *graph, batch.spins[row], outcomes[row, 0])
                log_ratio[row] = change / temperature[row]
        hit = None if self.draw == "boltzmann" else np.where(status == Status.OK, 1.0, np.nan)
        ratio = log_ratio if self.balance == "ratio" else None
        return Proposals(
            outcomes, self._work(entries), status, tuple(messages), ratio, hit_probability=hit, noiseless_hit=hit
        )

    def minima(self, batch: ClusterBatch) -> tuple[F64, F64]:
        """The lowest energy of every cluster and how many configurations have it, f64 (B,) each; nan where too wide."""
        lowest, count = np.full(len(batch), np.nan), np.full(len(batch), np.nan)
        nothing = np.empty((0, batch.size), np.int8)
        for row, graph in enumerate(_graphs(batch)):
            tables = planned(graph, self.max_width).tables
            if tables is not None:
                lowest[row], count[row] = _solve(batch, row, graph, *tables, 0.0, nothing)
        return lowest, count

    def _too_wide(self, width: int) -> str:
        return (
            f"elimination: this cluster needs width {width}, the limit is {self.max_width} (2^w table entries); "
            "use smaller or thinner clusters, e.g. rule strip"
        )

    def _work(self, entries: I64) -> Work:
        return Work(shots=np.full(len(entries), self.shots, np.int64), table_entries=entries)


class _Tables(threading.local):
    """Memory for tables, each thread's own, kept from call to call; every entry is written before it is read.

    Getting fresh pages cleared would take longer than eliminating a strip.
    """

    def __init__(self) -> None:
        self.energies, self.weights = np.empty(0), np.empty(0)

    def with_room(self, entries: int) -> tuple[F64, F64]:
        """Energies and weights f64 (at least ``entries``,)."""
        if entries > KEPT_ROOM:
            return np.empty(entries), np.empty(entries)
        if entries > len(self.energies):
            self.energies, self.weights = np.empty(entries), np.empty(entries)
        return self.energies, self.weights


_TABLES = _Tables()


def _solve(
    batch: ClusterBatch, row: int, graph: Lists, plan: Plan, layout: Layout, temperature: float, outcomes: I8
) -> tuple[float, float]:
    """Eliminate one row and draw its outcomes i8 (m, k); returns the lowest energy and its weight."""
    weight = float(np.abs(batch.fields[row]).sum() + np.abs(graph.strengths).sum() / 2)
    stream = np.array([batch.seeds[row]], np.uint64)
    return eliminate(
        plan, layout, batch.fields[row], *graph, temperature, TIE_SHARE * weight / batch.size, stream,
        *_TABLES.with_room(layout.room), outcomes,
    )  # fmt: skip


def _graphs(batch: ClusterBatch) -> Iterator[Lists]:
    """The lists of neighbours of one row after the other."""
    edges = edges_of(batch)
    for row in range(len(batch)):
        yield lists_of(edges.offsets, edges.pairs, edges.weights, row, batch.size)


@compiled
def _energy_change(fields: F64, starts: I64, neighbours: I32, strengths: F64, before: I8, after: I8) -> float:
    """The energy of one configuration minus that of another."""
    change = 0.0
    for spin in range(len(fields)):
        change += fields[spin] * (after[spin] - before[spin])
        for edge in range(starts[spin], starts[spin + 1]):
            other = neighbours[edge]
            if other > spin:
                change += strengths[edge] * (after[spin] * after[other] - before[spin] * before[other])
    return change


_PAIR = ClusterBatch(
    fields=np.zeros((1, 2)),
    spins=np.ones((1, 2), np.int8),
    temperature=np.ones(1),
    seeds=np.zeros(1, np.uint64),
    couplings=np.ones((1, 2, 2)) - np.eye(2),
)
"""Two coupled spins."""
