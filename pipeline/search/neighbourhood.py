"""Large-neighbourhood search: rounds of cluster calls interleaved with Metropolis sweeps.

Shaw, CP 1998, LNCS 1520, 417, with a Metropolis rule in place of "improve only". One round picks clusters that do not
touch, conditions them on everything else, hands them to the subsolver, accepts or refuses every answer on its own,
and then sweeps the whole problem; with several replicas all of this happens in each, side by side. Every decision
rests on seeds and counted work; only a budget in seconds lets the clock in.
"""

from __future__ import annotations

import time
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from typing import TypeVar

import numpy as np

from patchwalk.acceptance import AcceptanceRule
from patchwalk.clusters.mixture import Mixture, RuleWeights
from patchwalk.clusters.policy import Policy
from patchwalk.engine import Answered, failed
from patchwalk.problem.ising import Problem
from patchwalk.records import Calls, Improvement, Round, Snapshot
from patchwalk.search.calling import Caller, Cut, Ready, Worth, rehearsing
from patchwalk.search.carrying import Carrying
from patchwalk.search.elites import Elites
from patchwalk.search.ends import Ends, Spent
from patchwalk.search.replicas import Replicas
from patchwalk.search.sweeps import descend
from patchwalk.search.temperature import Temperatures
from patchwalk.subsolvers.compiled import compiled
from patchwalk.subsolvers.complaints import value_complaint
from patchwalk.subsolvers.contract import F64, I8, I32, I64, Status, Subsolver
from patchwalk.subsolvers.draws import generator_for, seed_for
from patchwalk.subsolvers.registry import spelled, subsolver_from
from patchwalk.workers import Serial, Workers

FAILED = int(Status.FAILED)
RESTART, MIXTURE = 6, 7
"""Words that tell the streams of one run seed apart."""

A = TypeVar("A", F64, I8, I64)

REFRESH_ROUNDS = 1000
"""Local fields and energies are derived afresh after this many rounds, so that rounding cannot pile up."""


@dataclass(eq=False)
class Plan:
    """How to search; made afresh for every run, because rules and temperatures learn.

    ``replicas`` configurations are searched side by side. After ``restart_after`` rounds without a better energy of
    its own a replica goes on from one of the ``keep`` best configurations, which are ``distance`` spins apart or more.
    ``failures`` is how many calls in a row may fail before the run gives up.
    """

    policy: Policy
    rules: Mixture
    cluster_size: int
    clusters_per_round: int
    sweeps_per_round: int
    temperatures: Temperatures
    ends: Ends
    acceptance: AcceptanceRule = "metropolis"
    replicas: int = 1
    restart_after: int | None = None
    keep: int = 8
    distance: int = 1
    failures: int = 100


@dataclass(eq=False)
class Failures:
    """Calls that failed, in all and in a row, and what the last one said."""

    total: int = 0
    in_a_row: int = 0
    sentence: str = ""

    def count(self, calls: Calls) -> None:
        """Take in the statuses of one slice."""
        status = calls.proposals.status
        failed = status == FAILED
        if not failed.any():
            self.in_a_row = 0
            return
        bad, well = np.flatnonzero(failed), np.flatnonzero(~failed)
        self.total += len(bad)
        self.sentence = calls.proposals.messages[bad[-1]]
        self.in_a_row = len(status) - 1 - int(well[-1]) if len(well) else self.in_a_row + len(status)


class NeighbourhoodSearch:
    """One run on one problem from one seed. Iterate over :meth:`rounds`; then read ``status``, ``message``,
    ``best_spins``.
    """

    def __init__(
        self,
        problem: Problem,
        plan: Plan,
        seed: int,
        start: I8 | None = None,
        interrupted: Callable[[], bool] = lambda: False,
        workers: Workers | None = None,
    ) -> None:
        self.problem, self.plan, self.seed = problem, plan, seed
        self.interrupted = interrupted
        self.workers = Serial() if workers is None else workers
        self.status, self.message = "budget", ""
        self.round = self.calls = self.sweeps = 0
        self.failures = Failures()
        self.replicas = Replicas.random(problem, plan.replicas, seed)
        if start is not None:
            self.replicas.put(plan.replicas - 1, start)  # the coldest one, where temperatures differ
        self.caller = Caller(problem, plan.policy, plan.cluster_size, plan.acceptance, seed, self.workers)
        self.carrying = Carrying(problem, seed, self.workers)
        self.elites = Elites.none_yet(len(problem), plan.keep, plan.distance, not np.any(problem.fields))
        self.counts: I64 = np.zeros(len(problem), np.int64)
        self.rules = plan.rules.closed(problem, plan.cluster_size)
        self.weights = RuleWeights(self.rules)
        self.best_energy, self.best_spins = np.inf, self.replicas.spins[0].copy()
        self._own_best: F64 = np.full(plan.replicas, np.inf)
        self._rounds_without_own_gain: I64 = np.zeros(plan.replicas, np.int64)
        self._rounds_without_gain = 0
        self._improvements: list[Improvement] = []
        self._spent_before, self._began = 0.0, time.perf_counter()
        self._note_best("start")
        self._resume_point = self._state()

    @property
    def subsolver(self) -> Subsolver:
        """Who is asked, or the first of those who are."""
        return next(case.subsolver for case in self.caller.policy.cases if case.subsolver is not None)

    @property
    def energy(self) -> float:
        """The lowest energy among the present configurations."""
        return float(self.replicas.energies.min())

    @property
    def skipped(self) -> int:
        """Clusters for which the policy called nobody; they count as calls for the budget."""
        return self.caller.skipped

    def prepare(self) -> None:
        """Compile everything and let the subsolvers calibrate on sample clusters, before the clock starts."""
        temperatures = self.plan.temperatures.at(0.0)
        cuts = self._cuts(self.plan.clusters_per_round)
        cold = np.zeros_like(temperatures)
        self.caller.prepare([self.caller.question(cut, self.replicas, cold) for cut in cuts])
        self._rehearse()
        self.carrying.rehearse(self.replicas, temperatures)

    def _rehearse(self) -> None:
        """Compile the loop's kernels on a small ring."""
        caller = rehearsing(self.caller)
        ring, counts = Replicas.random(caller.problem, 1, 1), np.zeros(len(caller.problem), np.int64)
        cuts = [caller.cuts(rule, ring, 0, 1, counts, ring.spins) for rule in self.plan.rules.rules]
        for cut in cuts[0]:
            batch = caller.question(cut, ring, np.zeros(1))
            answered = Answered(0, batch, failed(batch, "rehearsal"), 0.0)
            value_complaint(answered.proposals)
            caller.settle(cut, answered, "rehearsal", self.subsolver, ring)
        _count(np.zeros((0, 1), np.int32), counts)
        descend(*_graph(caller.problem), ring.spins[0], ring.local_fields[0], 0.0)
        Elites.none_yet(len(caller.problem), 1, 1, symmetric=True).offer(0.0, ring.spins[0])

    def rounds(self) -> Iterator[Round]:
        """Search until an end is reached, one round at a time; then the subsolvers are let go."""
        self._began = time.perf_counter()
        try:
            while not self._ended():
                yield self._one_round()
        finally:
            self.caller.release()
        self._resume_point = self.snapshot()  # before the last descent, which no resumed run would know of
        if self.plan.sweeps_per_round:
            self._polish()

    def take_improvements(self) -> tuple[Improvement, ...]:
        """The new best energies since the last call of this method, in order."""
        taken = tuple(self._improvements)
        self._improvements.clear()
        return taken

    @property
    def elapsed(self) -> float:
        """Seconds spent searching, compiling apart, those before a resume included."""
        return self._spent_before + time.perf_counter() - self._began

    @property
    def spent(self) -> Spent:
        """What the ends are measured against."""
        return Spent(self.calls + self.skipped, self.sweeps, self.elapsed, self._rounds_without_gain)

    @property
    def stage(self) -> float:
        """The fraction of the budget spent."""
        return self.plan.ends.stage(self.spent)

    def _ended(self) -> bool:
        ends = self.plan.ends
        fired = ends.fired(self.spent)
        if ends.reached(self.best_energy, self.problem.tie_tolerance):
            self.status, self.message = "target_reached", "the target was reached"
        elif self.interrupted():
            self.status, self.message = "interrupted", "interrupted; this is the best configuration so far"
        elif self.failures.in_a_row >= self.plan.failures:
            self.status = "error"
            self.message = f"{self.failures.in_a_row} calls failed in a row; the last said: {self.failures.sentence}"
        elif fired is not None:
            self.status, self.message = fired
        else:
            return False
        return True

    def _must_stop(self) -> bool:
        return self.interrupted() or self.plan.ends.out_of_time(self.elapsed)

    def _one_round(self) -> Round:
        self._resume_point = self._state(self._resume_point)
        number, stage = self.round, self.stage
        temperatures = self.plan.temperatures.at(stage)
        calls = tuple(self._call(temperatures, stage))
        self._note_best("clusters")
        whole = self._sweep(temperatures)
        if whole:
            self._close_round(stage)
        return Round(number, stage, temperatures, calls, self.replicas.energies.copy(), self.take_improvements(), whole)

    def _cuts(self, wanted: int) -> list[Cut]:
        several = len(self.rules.rules) > 1
        self._drawn = self.rules.drawn(seed_for(self.seed, MIXTURE, self.round), self.weights) if several else 0
        rule = self.rules.rules[self._drawn]
        return self.caller.cuts(rule, self.replicas, self.round, wanted, self.counts, self.elites.spins)

    def _call(self, temperatures: F64, stage: float) -> Iterator[Calls]:
        """Cluster calls, slice by slice; between slices an interrupt or the clock may end them."""
        wanted = self.plan.clusters_per_round
        if self.plan.ends.calls is not None:
            wanted = min(wanted, self.plan.ends.calls - self.calls - self.skipped)
        cuts, worth, several = self._cuts(wanted), Worth(), len(self.rules.rules) > 1
        name = self.rules.rules[self._drawn].name
        for calls in self.caller.carry_out(cuts, name, self.replicas, temperatures, stage, self._must_stop):
            self.calls += len(calls)
            self.failures.count(calls)
            _count(calls.members, self.counts)
            if several:
                worth.count(np.maximum(0.0, -calls.change) * calls.accepted, calls)
            yield calls
        if several:
            self.weights.reward(self._drawn, *worth.of_the_round())

    def _sweep(self, temperatures: F64) -> bool:
        """The sweeps of a round; False where the round was cut short, here or before."""
        step = 1 if len(self.replicas) == 1 else self.plan.sweeps_per_round  # together, replicas sweep in one go
        for first in range(0, self.plan.sweeps_per_round, max(1, step)):
            if self.plan.ends.sweeps is not None and self.sweeps >= self.plan.ends.sweeps:
                break
            if self._must_stop():
                return False
            if self.plan.ends.sweeps is not None:
                step = min(step, -(-(self.plan.ends.sweeps - self.sweeps) // len(self.replicas)))
            self.carrying.sweep(self.replicas, temperatures, self.round, first, step)
            self.sweeps += step * len(self.replicas)
            self._note_best("sweeps")
        return not self._must_stop()

    def _close_round(self, stage: float) -> None:
        """What follows a whole round: trades of temperature, good configurations kept, restarts, fresh local fields."""
        self.plan.temperatures.watch(self.replicas.energies, stage, self.round)
        self._rounds_without_gain += 1
        for number, energy in enumerate(self.replicas.energies):
            if self.elites.wants(float(energy)):
                self.elites.offer(float(energy), self.replicas.spins[number])
        if self.plan.restart_after is not None:
            self._restart(self.plan.restart_after)
        self.round += 1
        if self.round % REFRESH_ROUNDS == 0:
            self.replicas.refresh()

    def _restart(self, patience: int) -> None:
        """Put replicas that stand still into one of the best distinct configurations."""
        better = self.replicas.energies < self._own_best - self.problem.tie_tolerance
        self._own_best = np.where(better, self.replicas.energies, self._own_best)
        self._rounds_without_own_gain = np.where(better, 0, self._rounds_without_own_gain + 1)
        for number in np.flatnonzero(self._rounds_without_own_gain >= patience).tolist():
            chosen = generator_for(self.seed, RESTART, self.round, number).integers(len(self.elites.spins))
            self.replicas.put(number, self.elites.spins[chosen])
            self._own_best[number], self._rounds_without_own_gain[number] = np.inf, 0

    def _polish(self) -> None:
        """Bring the best configuration down to where no single flip lowers it."""
        spins = self.best_spins.copy()
        local_fields = self.problem.local_fields(spins)
        if descend(*_graph(self.problem), spins, local_fields, self.problem.tie_tolerance) < 0.0:
            self.replicas.put(0, spins)
            self._note_best("descent")
        self.elites.offer(self.best_energy, self.best_spins)

    def _note_best(self, finder: str) -> None:
        lowest = int(np.argmin(self.replicas.energies))
        energy = float(self.replicas.energies[lowest])
        if energy < self.best_energy - self.problem.tie_tolerance:
            self.best_energy = energy
            self.best_spins = self.replicas.spins[lowest].copy()
            self._rounds_without_gain = 0
            spent = 0.0 if finder == "start" else self.elapsed
            self._improvements.append(Improvement(energy, finder, self.round, self.calls, self.sweeps, spent))

    def snapshot(self) -> Snapshot:
        """The state after the last whole round, from which a run can be resumed to the same bits."""
        return self._state() if self._resume_point.round != self.round else self._resume_point

    def _state(self, spare: Snapshot | None = None) -> Snapshot:
        """The state as it is now; in the arrays of ``spare``, which nobody looks at any more, if there is one."""
        details = {
            "temperatures": self.plan.temperatures.as_state(),
            "rules": self.weights.as_state(),
            "skipped": self.skipped,
            "failed_calls": self.failures.total,
            "failed_in_a_row": self.failures.in_a_row,
            "rounds_without_gain": self._rounds_without_gain,
            "own_best": self._own_best.tolist(),
            "rounds_without_own_gain": self._rounds_without_own_gain.tolist(),
            "elite_energies": self.elites.energies.tolist(),
            "ready": [(one.case, one.size, spelled(one.subsolver)) for one in self.caller.by_size or ()],
        }
        replicas = self.replicas
        return Snapshot(
            self.round, self.calls, self.sweeps, self.elapsed,
            _copied(replicas.spins, spare.spins if spare else None),
            _copied(replicas.local_fields, spare.local_fields if spare else None),
            _copied(replicas.energies, spare.energies if spare else None),
            float(self.best_energy), self.best_spins, self.elites.spins,
            _copied(self.counts, spare.counts if spare else None), details,
        )  # fmt: skip

    def go_on_from(self, state: Snapshot) -> None:
        """Take up a run where :meth:`snapshot` left it."""
        details = state.details
        self.round, self.calls, self.sweeps = state.round, state.calls, state.sweeps
        self._spent_before, self._began = state.seconds, time.perf_counter()
        self.replicas.spins[:], self.replicas.local_fields[:] = state.spins, state.local_fields
        self.replicas.energies[:] = state.energies
        self.best_energy, self.best_spins = state.best_energy, state.best_spins.copy()
        self.elites.spins, self.elites.energies = state.elites.copy(), np.array(details["elite_energies"], float)
        self.counts[:] = state.counts
        self.plan.temperatures.set_state(details["temperatures"])
        self.weights = RuleWeights.from_state(self.rules, details["rules"])
        self.caller.skipped = details["skipped"]
        self.caller.by_size = tuple(
            Ready(case, size, subsolver_from(spelling)) for case, size, spelling in details.get("ready", ())
        )
        self.failures = Failures(details["failed_calls"], details["failed_in_a_row"])
        self._rounds_without_gain = details["rounds_without_gain"]
        self._own_best = np.array(details["own_best"], np.float64)
        self._rounds_without_own_gain = np.array(details["rounds_without_own_gain"], np.int64)
        self._improvements.clear()
        self._resume_point = self._state()


def _copied(array: A, spare: A | None) -> A:
    """A copy, in ``spare`` if that is there: memory taken anew every round would cost more than the copying."""
    if spare is None:
        return array.copy()
    spare[...] = array
    return spare


@compiled
def _count(members: I32, counts: I64) -> None:
    """Add one for every call that a spin was in."""
    for row in range(len(members)):
        for spin in members[row]:
            counts[spin] += 1


def _graph(problem: Problem) -> tuple[I64, I32, F64]:
    return problem.row_starts, problem.neighbours, problem.couplings
