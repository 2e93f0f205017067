"""Sampling the Boltzmann law exactly, with cluster proposals of any subsolver that keeps detailed balance.

Acceptance is Hastings' rule with the log ratio that the subsolver reports (none where its proposals are symmetric). A
proposal is admitted only if it promises balance, and rules and conditions only if they look at couplings, boundary
fields and counts, never at the cluster's own spins. Weights of rules adapt during the burn-in and are frozen after it.
Several temperatures form a ladder whose replicas trade places (:mod:`patchwalk.search.ladder`).
"""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import dataclass

import numpy as np

from patchwalk.clusters.mixture import Mixture, RuleWeights
from patchwalk.clusters.policy import Policy
from patchwalk.problem.ising import Problem
from patchwalk.records import Calls, Round, Snapshot
from patchwalk.search.calling import Caller, Cut, Ready, Worth
from patchwalk.search.carrying import Carrying
from patchwalk.search.ladder import Ladder
from patchwalk.search.neighbourhood import MIXTURE
from patchwalk.search.observables import Observables
from patchwalk.search.replicas import Replicas
from patchwalk.subsolvers.contract import F64, I8, I64, Status
from patchwalk.subsolvers.draws import seed_for
from patchwalk.subsolvers.registry import spelled, subsolver_from
from patchwalk.workers import Serial, Workers

ADMISSIBLE = (
    "walk,start=incumbent; walk (uniform start, one shot); a palindromic reverse anneal; enumeration or elimination "
    "with draw=boltzmann; metropolis at the call's own temperature"
)


class InadmissibleError(ValueError):
    """A combination whose samples would not follow the Boltzmann law; the message says why."""


@dataclass(frozen=True, eq=False)
class SamplingPlan:
    """How to sample: ``copies`` replicas at each of the ``temperatures`` f64 (L,), falling, in energy units.

    ``burn_in`` rounds are thrown away and ``rounds`` measured. With several temperatures, those of one copy trade
    places after every round.
    """

    policy: Policy
    rules: Mixture
    cluster_size: int
    clusters_per_round: int
    sweeps_per_round: int
    temperatures: F64
    copies: int
    burn_in: int
    rounds: int


def admit(policy: Policy, rules: Mixture) -> None:
    """Raise :class:`InadmissibleError` for what would not sample the Boltzmann law, with the reason."""
    for case in policy.cases:
        if case.subsolver is not None and case.subsolver.balance == "none":
            raise InadmissibleError(
                f"{spelled(case.subsolver)} promises no detailed balance, so that its proposals would change the law "
                f"that is sampled; admissible are: {ADMISSIBLE}"
            )
    if policy.looks_at_spins:
        raise InadmissibleError(
            f"a condition of the callers looks at the cluster's own spins ({', '.join(policy.quantities)}), so that a "
            "move and the one that undoes it would be proposed by different subsolvers; use conditions on stage, "
            "temperature, k, couplings or boundary fields"
        )
    for rule in rules.rules:
        if rule.looks_at_spins:
            raise InadmissibleError(
                f"the rule {rule.name} looks at the spins, so that a move and the one that undoes it would be proposed "
                "from different clusters; use ball, scattered, strip or stale"
            )


class BoltzmannSampling:
    """One sampling run. Iterate over :meth:`sample`; then read ``observables``."""

    def __init__(
        self,
        problem: Problem,
        plan: SamplingPlan,
        seed: int,
        start: I8 | None = None,
        interrupted: Callable[[], bool] = lambda: False,
        workers: Workers | None = None,
    ) -> None:
        self.rules = plan.rules.closed(problem, plan.cluster_size)
        admit(plan.policy, self.rules)
        self.problem, self.plan, self.seed, self.interrupted = problem, plan, seed, interrupted
        workers = Serial() if workers is None else workers
        levels, count = len(plan.temperatures), plan.copies * len(plan.temperatures)
        self.replicas = Replicas.random(problem, count, seed)
        if start is not None:
            for number in range(count):
                self.replicas.put(number, start)
        self.ladders = [Ladder(plan.temperatures.copy(), seed_for(seed, copy)) for copy in range(plan.copies)]
        self.caller = Caller(problem, plan.policy, plan.cluster_size, "hastings", seed, workers)
        self.carrying = Carrying(problem, seed, workers)
        self.weights = RuleWeights(self.rules)
        self.counts = np.zeros(len(problem), np.int64)
        self.observables = Observables.empty(plan.rounds, levels, plan.copies)
        self.round = self.calls = self.sweeps = self.failed_calls = 0

    def prepare(self) -> None:
        """Compile, and let subsolvers calibrate on the clusters of the first round; nothing is calibrated later."""
        cuts = self._cuts(self.rules.drawn(seed_for(self.seed, MIXTURE, 0)))
        self.caller.prepare([self.caller.question(cut, self.replicas, self._temperatures()) for cut in cuts])
        self.carrying.rehearse(self.replicas, self._temperatures())

    def sample(self) -> Iterator[Round]:
        """Burn in and measure, a round at a time; an interrupt ends it with what was measured so far."""
        try:
            while self.round < self.plan.burn_in + self.plan.rounds and not self.interrupted():
                yield self._one_round()
        finally:
            self.caller.release()

    def snapshot(self, seconds: float) -> Snapshot:
        """The state between two rounds, from which :meth:`go_on_from` goes on to the same bits; series stand apart."""
        replicas = self.replicas
        lowest = int(np.argmin(replicas.energies))
        details = {
            "ladders": [ladder.as_state() for ladder in self.ladders],
            "rules": self.weights.as_state(),
            "skipped": self.caller.skipped,
            "failed_calls": self.failed_calls,
            "ready": [(one.case, one.size, spelled(one.subsolver)) for one in self.caller.by_size or ()],
        }
        return Snapshot(
            round=self.round, calls=self.calls, sweeps=self.sweeps, seconds=seconds,
            spins=replicas.spins.copy(), local_fields=replicas.local_fields.copy(), energies=replicas.energies.copy(),
            best_energy=float(replicas.energies[lowest]), best_spins=replicas.spins[lowest].copy(),
            elites=np.empty((0, len(self.problem)), np.int8), counts=self.counts.copy(), details=details,
        )  # fmt: skip

    def go_on_from(self, state: Snapshot) -> None:
        """Take up a run where :meth:`snapshot` left it; ``observables`` must hold what was measured until then."""
        details = state.details
        self.round, self.calls, self.sweeps = state.round, state.calls, state.sweeps
        self.replicas.spins[:], self.replicas.local_fields[:] = state.spins, state.local_fields
        self.replicas.energies[:] = state.energies
        self.counts[:] = state.counts
        for ladder, kept in zip(self.ladders, details["ladders"], strict=True):
            ladder.set_state(kept)
        self.weights = RuleWeights.from_state(self.rules, details["rules"])
        self.caller.skipped, self.failed_calls = details["skipped"], details["failed_calls"]
        self.caller.by_size = tuple(
            Ready(case, size, subsolver_from(spelling)) for case, size, spelling in details["ready"]
        )

    @property
    def stage(self) -> float:
        """The fraction of all rounds that is done."""
        return self.round / (self.plan.burn_in + self.plan.rounds)

    def _one_round(self) -> Round:
        stage, temperatures = self.stage, self._temperatures()
        calls = tuple(self._call(temperatures, stage))
        if self.plan.sweeps_per_round:
            self.carrying.sweep(self.replicas, temperatures, self.round, 0, self.plan.sweeps_per_round)
            self.sweeps += self.plan.sweeps_per_round * len(self.replicas)
        self._trade()
        if self.round % 1000 == 999:
            self.replicas.refresh()
        if self.round >= self.plan.burn_in:
            self.observables.measure(self.round - self.plan.burn_in, self.replicas, self._holders())
        self.round += 1
        return Round(self.round - 1, stage, temperatures, calls, self.replicas.energies.copy(), ())

    def _cuts(self, drawn: int) -> list[Cut]:
        wanted = max(self.plan.clusters_per_round, len(self.replicas))
        elites = np.empty((0, len(self.problem)), np.int8)
        return self.caller.cuts(self.rules.rules[drawn], self.replicas, self.round, wanted, self.counts, elites)

    def _call(self, temperatures: F64, stage: float) -> Iterator[Calls]:
        """The calls of a round, carried out to their end: a round cut short would not keep the law."""
        drawn = self.rules.drawn(seed_for(self.seed, MIXTURE, self.round), self.weights)
        name, worth = self.rules.rules[drawn].name, Worth()
        cuts = self._cuts(drawn)
        for calls in self.caller.carry_out(cuts, name, self.replicas, temperatures, stage, lambda: False):
            self.calls += len(calls)
            self.failed_calls += int(np.count_nonzero(calls.proposals.status == Status.FAILED))
            np.add.at(self.counts, calls.members.ravel(), 1)
            worth.count(np.abs(calls.change) * calls.accepted, calls)  # at rest energies fall as often as they rise
            yield calls
        if self.round < self.plan.burn_in:
            self.weights.reward(drawn, *worth.of_the_round())

    def _temperatures(self) -> F64:
        """The temperature of every replica, copy after copy."""
        return np.concatenate([ladder.at(0.0) for ladder in self.ladders])

    def _trade(self) -> None:
        levels = len(self.plan.temperatures)
        for copy, ladder in enumerate(self.ladders):
            ladder.watch(self.replicas.energies[copy * levels : (copy + 1) * levels], 1.0, self.round)

    def _holders(self) -> I64:
        """Which replica stands at each level of each copy, i64 (copies, L)."""
        levels = len(self.plan.temperatures)
        return np.stack([copy * levels + np.argsort(ladder.rungs) for copy, ladder in enumerate(self.ladders)])
