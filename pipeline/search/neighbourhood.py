"""Large-neighbourhood search: rounds of cluster calls interleaved with Metropolis sweeps.

Shaw, CP 1998, LNCS 1520, 417, with a Metropolis rule in place of "improve only". One round picks clusters that do not
touch, conditions them on everything else, hands them to the subsolver, accepts or refuses every answer on its own,
and then sweeps the whole problem. Every decision rests on seeds and counted work; only a budget in seconds lets the
clock in.
"""

from __future__ import annotations

import time
from collections.abc import Callable, Iterator
from dataclasses import dataclass

import numpy as np

from patchwalk.acceptance import judge
from patchwalk.clusters.conditioning import condition
from patchwalk.clusters.rules import ClusterRule, Marks
from patchwalk.engine import Answered, answers, failed, prepared, release
from patchwalk.problem.ising import Problem
from patchwalk.records import Calls, Improvement, Round, Snapshot
from patchwalk.search.sweeps import descend, flip_accepted, metropolis_sweep
from patchwalk.search.temperature import GeometricCooling
from patchwalk.subsolvers.contract import I8, I32, ClusterBatch, Status, Subsolver
from patchwalk.subsolvers.draws import call_seeds, generator_for, seed_for, stream_for

START, RULE, SWEEP, CALL = 1, 2, 3, 4
"""Words that tell the streams of one run seed apart."""

REFRESH_ROUNDS = 1000
"""Local fields and energy are derived afresh after this many rounds, so that rounding cannot pile up."""


@dataclass(frozen=True)
class Ends:
    """When to stop, whichever comes first: cluster calls, sweeps, seconds (without compiling), a target energy."""

    calls: int | None = None
    sweeps: int | None = None
    seconds: float | None = None
    energy: float | None = None


@dataclass(frozen=True)
class Plan:
    """How to search. ``failures`` is how many calls in a row may fail before the run gives up."""

    rule: ClusterRule
    cluster_size: int
    clusters_per_round: int
    sweeps_per_round: int
    cooling: GeometricCooling
    ends: Ends
    failures: int = 100


class NeighbourhoodSearch:
    """One run on one problem from one seed. Iterate over :meth:`rounds`; then read ``status``, ``message``,
    ``best_spins``.
    """

    def __init__(
        self,
        problem: Problem,
        subsolver: Subsolver,
        plan: Plan,
        seed: int,
        start: I8 | None = None,
        interrupted: Callable[[], bool] = lambda: False,
    ) -> None:
        self.problem, self.subsolver, self.plan, self.seed = problem, subsolver, plan, seed
        self.interrupted = interrupted
        self.status, self.message = "budget", ""
        self.round = self.calls = self.sweeps = 0
        self.failed_calls = self._failures_in_a_row = 0
        given = start if start is not None else _random_spins(len(problem), seed)
        self.spins = given.copy()
        self.energy = problem.energy(self.spins)
        self.local_fields = problem.local_fields(self.spins)
        self.best_energy, self.best_spins = self.energy, self.spins.copy()
        self._marks = Marks.for_problem(problem)
        self._places: I32 = np.full(len(problem), -1, np.int32)
        self._graph = (problem.row_starts, problem.neighbours, problem.couplings)
        self._improvements = [Improvement(self.energy, "start", 0, 0, 0, 0.0)]
        self._began = time.perf_counter()

    def prepare(self) -> None:
        """Compile everything and let the subsolver calibrate on sample clusters, before the clock starts."""
        members = self._members(self.plan.clusters_per_round)
        self.subsolver = prepared(self.subsolver, self._question(0.0, members))
        rehearsal = NeighbourhoodSearch(_ring(2 * self.plan.cluster_size + 2), self.subsolver, self.plan, self.seed)
        batch = rehearsal._question(0.0, rehearsal._members(1))
        rehearsal._settle(rehearsal._members(1), Answered(0, batch, failed(batch, "rehearsal"), 0.0))
        rehearsal._sweep(0.0)
        rehearsal._polish()

    def rounds(self) -> Iterator[Round]:
        """Search until an end is reached, one round at a time; then the subsolver is let go."""
        self._began = time.perf_counter()
        try:
            while not self._ended():
                yield self._one_round()
        finally:
            release(self.subsolver)
        if self.plan.sweeps_per_round:
            self._polish()

    def take_improvements(self) -> tuple[Improvement, ...]:
        """The new best energies since the last call of this method, in order."""
        taken = tuple(self._improvements)
        self._improvements.clear()
        return taken

    def snapshot(self) -> Snapshot:
        """The state between two rounds."""
        return Snapshot(
            self.round, self.calls, self.sweeps, self.energy, self.spins.copy(), self.local_fields.copy(),
            self.best_energy, self.best_spins.copy(),
        )  # fmt: skip

    @property
    def elapsed(self) -> float:
        """Seconds since the search began, compiling apart."""
        return time.perf_counter() - self._began

    @property
    def stage(self) -> float:
        """The fraction of the budget spent: of the counted budgets where there are any, else of the seconds."""
        ends = self.plan.ends
        spent = [done / limit for done, limit in ((self.calls, ends.calls), (self.sweeps, ends.sweeps)) if limit]
        if not spent and ends.seconds:
            spent = [self.elapsed / ends.seconds]
        return min(1.0, max(spent, default=0.0))

    def _ended(self) -> bool:
        ends, tolerance = self.plan.ends, self.problem.tie_tolerance
        if ends.energy is not None and self.best_energy <= ends.energy + tolerance:
            self.status, self.message = "target_reached", "the target was reached"
        elif self.interrupted():
            self.status, self.message = "interrupted", "interrupted; this is the best configuration so far"
        elif self._failures_in_a_row >= self.plan.failures:
            self.status = "error"
            self.message = f"{self._failures_in_a_row} calls failed in a row; the last said: {self.message}"
        elif ends.calls is not None and self.calls >= ends.calls:
            self.message = f"the budget of {ends.calls:,} calls is spent"
        elif ends.sweeps is not None and self.sweeps >= ends.sweeps:
            self.message = f"the budget of {ends.sweeps:,} sweeps is spent"
        elif self._out_of_time():
            self.message = f"the budget of {ends.seconds:g} seconds is spent"
        else:
            return False
        return True

    def _out_of_time(self) -> bool:
        return self.plan.ends.seconds is not None and self.elapsed >= self.plan.ends.seconds

    def _one_round(self) -> Round:
        stage = self.stage
        temperature = self.plan.cooling.at(stage)
        wanted = self.plan.clusters_per_round
        if self.plan.ends.calls is not None:
            wanted = min(wanted, self.plan.ends.calls - self.calls)
        calls = self._call(temperature, wanted)
        self._note_best("clusters")
        self._sweep(temperature)
        self.round += 1
        if self.round % REFRESH_ROUNDS == 0:
            self.local_fields = self.problem.local_fields(self.spins)
            self.energy = self.problem.energy(self.spins)
        return Round(self.round - 1, stage, temperature, calls, self.energy, self.take_improvements())

    def _members(self, wanted: int) -> I32:
        seed = seed_for(self.seed, RULE, self.round)
        return self.plan.rule.pick(self.problem, self.plan.cluster_size, wanted, seed, self._marks)

    def _question(self, temperature: float, members: I32) -> ClusterBatch:
        base = np.uint64(seed_for(self.seed, CALL, 0, self.round))  # 0: the one replica
        seeds = call_seeds(base, len(members))
        return condition(self.problem, members, self.spins, self.local_fields, temperature, seeds, self._places)

    def _call(self, temperature: float, wanted: int) -> tuple[Calls, ...]:
        """One batch of cluster calls, slice by slice; between slices an interrupt or the clock may end it."""
        members = self._members(wanted)
        done = []
        for answered in answers(self.subsolver, self._question(temperature, members)):
            done.append(self._settle(members, answered))
            if self.interrupted() or self._out_of_time():
                break
        return tuple(done)

    def _settle(self, members: I32, answered: Answered) -> Calls:
        """Accept or refuse the answers of one slice and bring the configuration up to date."""
        batch, proposals = answered.batch, answered.proposals
        own = members[answered.start : answered.start + len(batch)]
        chosen, change, accepted = judge(batch, proposals)
        gained = np.where(accepted, change, 0.0)
        before = self.energy + np.concatenate([[0.0], np.cumsum(gained)])
        self.energy = float(before[-1])
        flip_accepted(*self._graph, self.spins, self.local_fields, own, proposals.outcomes, chosen, accepted)
        self.calls += len(batch)
        self._count_failures(proposals.status, proposals.messages)
        return Calls(own, batch, proposals, chosen, change, accepted, before[:-1], answered.start, answered.seconds)

    def _count_failures(self, status: np.typing.NDArray[np.uint8], messages: tuple[str, ...]) -> None:
        bad = np.flatnonzero(status == Status.FAILED)
        self.failed_calls += len(bad)
        if not len(bad):
            self._failures_in_a_row = 0
            return
        self.message = messages[bad[-1]]
        well = np.flatnonzero(status != Status.FAILED)
        trailing = len(status) - 1 - well[-1] if len(well) else self._failures_in_a_row + len(status)
        self._failures_in_a_row = int(trailing)

    def _sweep(self, temperature: float) -> None:
        for sweep in range(self.plan.sweeps_per_round):
            if self.interrupted() or self._out_of_time() or self.sweeps == self.plan.ends.sweeps:
                break
            stream = stream_for(self.seed, SWEEP, self.round, sweep)
            self.energy += metropolis_sweep(*self._graph, self.spins, self.local_fields, temperature, stream)
            self.sweeps += 1
            self._note_best("sweeps")

    def _polish(self) -> None:
        """Bring the best configuration down to where no single flip lowers it."""
        local_fields = self.problem.local_fields(self.best_spins)
        spins = self.best_spins.copy()
        if descend(*self._graph, spins, local_fields, self.problem.tie_tolerance) < 0.0:
            self.spins, self.local_fields, self.energy = spins, local_fields, self.problem.energy(spins)
            self._note_best("descent")

    def _note_best(self, finder: str) -> None:
        if self.energy < self.best_energy - self.problem.tie_tolerance:
            self.best_energy = self.energy
            self.best_spins[:] = self.spins
            self._improvements.append(
                Improvement(self.energy, finder, self.round, self.calls, self.sweeps, self.elapsed)
            )


def _ring(size: int) -> Problem:
    """A small problem to compile the loop's kernels on."""
    spins = np.arange(size)
    return Problem.from_arrays(spins, np.roll(spins, -1), np.ones(size))


def _random_spins(size: int, seed: int) -> I8:
    words = generator_for(seed, START).integers(0, 2, size, dtype=np.int8)
    return 1 - 2 * words
