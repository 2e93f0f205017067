"""Good configurations for branch-and-bound: roundings of the program, and clusters of its undecided spins.

The clusters go to the chosen subsolver, conditioned on everything else, through the same engine and the same acceptance
rule (at temperature zero) as in neighbourhood search: so each call is a row like any other.
"""

from __future__ import annotations

import time
from collections.abc import Callable

import numpy as np
import numpy.typing as npt

from patchwalk.acceptance import judge
from patchwalk.bounds.cut_graph import CutGraph
from patchwalk.bounds.rounding import rounded
from patchwalk.clusters.conditioning import condition
from patchwalk.engine import answers, failed, prepared
from patchwalk.problem.ising import Problem
from patchwalk.records import Calls, Improvement, Round, Snapshot
from patchwalk.search.sweeps import descend, flip_accepted, metropolis_sweep
from patchwalk.search.temperature import GeometricCooling
from patchwalk.subsolvers.compiled import compiled
from patchwalk.subsolvers.contract import F64, I8, I32, I64, U64, ClusterBatch, Status, Subsolver
from patchwalk.subsolvers.draws import call_seeds, generator_for, next_below, next_unit, seed_for, stream_for

ROUND_OFF, CLUSTER, CALL, SWEEP, START = 11, 12, 13, 14, 15
"""Words that tell the streams of one run seed apart."""

RULE_NAME = "fractional"

WARM = 0.4
"""Where a cooling from the best configuration begins, in units of the median local field."""

SWEEPS_AT_ONCE = 100
"""An interrupt or the clock is looked at after so many sweeps."""

MOST_UPDATES = 4_000_000
"""Work that one cooling may take: sweeps times spins and couplings."""


class Incumbent:
    """The best configuration known, and every way to a better one.

    ``improvements`` gathers new best energies with who found them: ``start``, ``sweeps``, ``rounding``, ``clusters`` or
    ``settled``.
    """

    def __init__(
        self,
        problem: Problem,
        graph: CutGraph,
        subsolver: Subsolver | None,
        cluster_size: int,
        seed: int,
        start: I8 | None,
    ) -> None:
        self.problem, self.graph, self.subsolver = problem, graph, subsolver
        self.cluster_size, self.seed = cluster_size, seed
        self.spins = start.copy() if start is not None else np.ones(len(problem), np.int8)
        self.energy = problem.energy(self.spins)
        self.round = self.calls = self.sweeps = self.failed_calls = 0
        self.improvements = [Improvement(self.energy, "start", 0, 0, 0, 0.0)]
        self.message = ""
        self._began = time.perf_counter()
        self._places: I32 = np.full(len(problem), -1, np.int32)
        self._csr = (problem.row_starts, problem.neighbours, problem.couplings)

    def take_improvements(self) -> tuple[Improvement, ...]:
        """The new best energies since the last call of this method, in order."""
        taken = tuple(self.improvements)
        self.improvements.clear()
        return taken

    def snapshot(self, seconds: float) -> Snapshot:
        """The configuration and the counts as the run file keeps them."""
        size = len(self.problem)
        return Snapshot(
            round=self.round, calls=self.calls, sweeps=self.sweeps, seconds=seconds, spins=self.spins[None].copy(),
            local_fields=self.problem.local_fields(self.spins)[None], energies=np.array([self.energy]),
            best_energy=self.energy, best_spins=self.spins.copy(), elites=np.empty((0, size), np.int8),
            counts=np.zeros(size, np.int64),
        )  # fmt: skip

    def round_of(self, number: int, stage: float, calls: tuple[Calls, ...]) -> Round:
        """The record of a round that is over, with the new best energies since the last one."""
        return Round(number, stage, np.zeros(1), calls, np.array([self.energy]), self.take_improvements())

    def begin(self) -> None:
        """Start the clock of the improvements."""
        self._began = time.perf_counter()

    def offer(self, spins: I8, finder: str) -> bool:
        """Take a configuration if it is better; returns whether it was."""
        energy = self.problem.energy(spins)
        if energy >= self.energy - self.problem.tie_tolerance:
            return False
        self.spins, self.energy = spins.copy(), energy
        seconds = time.perf_counter() - self._began
        self.improvements.append(Improvement(energy, finder, self.round, self.calls, self.sweeps, seconds))
        return True

    def cool(self, sweeps: int, stopped: Callable[[], bool]) -> None:
        """A slow cooling by ``sweeps`` Metropolis sweeps, fewer on large problems.

        In turn from a random configuration and, from below the glass transition, from the best one.
        """
        problem = self.problem
        wanted = min(sweeps, max(20, MOST_UPDATES // (len(problem) + problem.coupling_count)))
        again = self.round % 2 == 1
        cooling = GeometricCooling(WARM if again else 1.0, 0.05, problem.field_scale, 1)
        spins = (
            self.spins.copy()
            if again
            else 1 - 2 * generator_for(self.seed, START, self.round).integers(0, 2, len(problem), dtype=np.int8)
        )
        local_fields = problem.local_fields(spins)
        temperatures = np.array([cooling.temperature(sweep / wanted) for sweep in range(wanted)])
        stream = stream_for(self.seed, SWEEP, self.round)
        for first in range(0, wanted, SWEEPS_AT_ONCE):
            if stopped():
                break
            part = temperatures[first : first + SWEEPS_AT_ONCE]
            _sweep_down(*self._csr, spins, local_fields, part, stream)
            self.sweeps += len(part)
        descend(*self._csr, spins, problem.local_fields(spins), problem.tie_tolerance)
        self.offer(spins, "sweeps")

    def round_off(self, x: F64, tries: int = 4) -> I8:
        """The best of several roundings of a point of the program; it is offered and returned."""
        sides = rounded(self.graph, x, seed_for(self.seed, ROUND_OFF, self.round), tries)
        spins = self.graph.spins_of(sides)
        self.offer(spins, "rounding")
        return spins

    def ask(self, x: F64, spins: I8, wanted: int, stopped: Callable[[], bool]) -> tuple[Calls, ...]:
        """Clusters of undecided spins of ``spins``, answered by the subsolver; improved ``spins`` are offered."""
        if self.subsolver is None or wanted < 1:
            return ()
        members = self._members(x, wanted)
        spins, local_fields = spins.copy(), self.problem.local_fields(spins)
        whole = (spins[None], local_fields[None], np.array([self.problem.energy(spins)]))
        done = []
        for answered in answers(self.subsolver, self._question(members, spins, local_fields)):
            own = members[answered.start : answered.start + len(answered.batch)]
            chosen, change, accepted = judge(answered.batch, answered.proposals)
            first, before = np.zeros(len(own), np.int64), np.empty(len(own))
            flip_accepted(*self._csr, *whole, first, own, answered.proposals.outcomes, chosen, change, accepted, before)
            self.calls += len(own)
            self._count_failures(answered.proposals.status, answered.proposals.messages)
            done.append(
                Calls(
                    own, first, np.arange(answered.start, answered.start + len(own)), RULE_NAME,
                    self.subsolver, answered.batch, answered.proposals, chosen, change, accepted, before,
                    answered.seconds,
                )
            )  # fmt: skip
            if stopped():
                break
        self.offer(spins, "clusters")
        return tuple(done)

    def prepare(self) -> None:
        """Compile what is used here and let the subsolver calibrate on a sample."""
        spins, half = self.spins.copy(), np.full(len(self.graph.heads), 0.5)
        members = self._members(half, 1)
        fields = self.problem.local_fields(spins)
        if self.subsolver is not None:
            batch = self._question(members, spins, fields)
            self.subsolver = prepared(self.subsolver, batch)
            judge(batch, failed(batch, "rehearsal"))
            nobody, zero = np.zeros(1, np.bool_), np.zeros(1, np.int64)
            flip_accepted(
                *self._csr, spins[None], fields[None], np.zeros(1), zero, members, batch.spins[:, None, :].copy(), zero,
                np.zeros(1), nobody, np.empty(1),
            )  # fmt: skip
        _sweep_down(*self._csr, spins, fields, np.zeros(1), stream_for(0))
        descend(*self._csr, spins, fields, self.problem.tie_tolerance)
        rounded(self.graph, half, 0, 1)

    def _members(self, x: F64, wanted: int) -> I32:
        """Clusters that do not touch, i32 (B, k), grown along the edges that the program is least sure about."""
        problem, graph = self.problem, self.graph
        size = min(self.cluster_size, len(problem))
        members = np.empty((max(1, min(wanted, len(problem) // size)), size), np.int32)
        stream = stream_for(self.seed, CLUSTER, self.round)
        doubt = np.minimum(x, 1.0 - x)
        arrays = (graph.starts, graph.neighbours, graph.edges, doubt)
        found = _grow_undecided(len(problem), *arrays, members, stream)
        return members[:found]

    def _question(self, members: I32, spins: I8, local_fields: F64) -> ClusterBatch:
        seeds = call_seeds(np.uint64(seed_for(self.seed, CALL, self.round)), len(members))
        return condition(self.problem, members, spins, local_fields, 0.0, seeds, self._places)

    def _count_failures(self, status: npt.NDArray[np.uint8], messages: tuple[str, ...]) -> None:
        bad = np.flatnonzero(status == Status.FAILED)
        self.failed_calls += len(bad)
        if len(bad):
            self.message = messages[bad[-1]]


@compiled
def _sweep_down(
    row_starts: I64, neighbours: I32, couplings: F64, spins: I8, local_fields: F64, temperatures: F64, stream: U64
) -> None:
    """A sweep at each of the temperatures."""
    for temperature in temperatures:
        metropolis_sweep(row_starts, neighbours, couplings, spins, local_fields, temperature, stream)


@compiled
def _grow_undecided(spins: int, starts: I64, neighbours: I32, edges: I32, doubt: F64, members: I32, stream: U64) -> int:
    """Fill rows of ``members`` (rising); returns how many. At least one row is always filled.

    A cluster begins at the most undecided spin of several drawn at random, and takes in, again and again, the neighbour
    along the most undecided edge (random among ties); where it is shut in, it goes on at another random spin.
    """
    state = np.zeros(spins, np.int8)  # 1 in a cluster or next to one of this batch
    pull = np.empty(spins)
    inside = np.zeros(spins, np.bool_)
    found = 0
    while found < len(members):
        pull[:] = -1.0
        inside[:] = False
        filled, stuck = 0, False
        while filled < members.shape[1]:
            best, strongest = -1, -1.0
            for spin in range(spins):
                if pull[spin] > strongest and not inside[spin]:
                    best, strongest = spin, pull[spin]
            if best < 0:
                best = _undecided_start(spins, starts, edges, doubt, state, inside, found == 0, stream)
                if best < 0:
                    stuck = True
                    break
            inside[best] = True
            members[found, filled] = best
            filled += 1
            for place in range(starts[best], starts[best + 1]):
                other = neighbours[place]
                if other < spins and not inside[other] and state[other] == 0:
                    pull[other] = max(pull[other], doubt[edges[place]] + 1e-3 * next_unit(stream))
        if stuck:
            break
        row = members[found]
        row.sort()
        for spin in row:
            state[spin] = 1
            for place in range(starts[spin], starts[spin + 1]):
                if neighbours[place] < spins:
                    state[neighbours[place]] = 1
        found += 1
    return found


@compiled
def _undecided_start(
    spins: int, starts: I64, edges: I32, doubt: F64, state: I8, inside: npt.NDArray[np.bool_], must: bool, stream: U64
) -> int:
    """The spin with the most undecided edges of 16 drawn at random; -1 where all of them are taken."""
    best, most = -1, -1.0
    for _ in range(16):
        spin = next_below(stream, spins)
        if inside[spin] or state[spin]:
            continue
        total = 1e-6 * next_unit(stream)
        for place in range(starts[spin], starts[spin + 1]):
            total += doubt[edges[place]]
        if total > most:
            best, most = spin, total
    if best < 0 and must:
        for spin in range(spins):
            if not inside[spin] and state[spin] == 0:
                return spin
    return best
