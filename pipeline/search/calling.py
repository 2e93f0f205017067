"""The life of the calls of one round: cut, condition, ask, judge, flip.

Clusters of one replica do not touch each other, and replicas are independent, so every call is accepted or refused on
its own and exactly, whatever the order.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import dataclass
from typing import NamedTuple

import numpy as np
import numpy.typing as npt

from patchwalk.acceptance import AcceptanceRule, judge
from patchwalk.clusters.conditioning import condition
from patchwalk.clusters.policy import Policy
from patchwalk.clusters.rules import ClusterRule, Marks, View
from patchwalk.cost import priced
from patchwalk.engine import Answered, answers, forecast_of, prepared, release
from patchwalk.problem.ising import Problem
from patchwalk.records import Calls
from patchwalk.search.replicas import Replicas
from patchwalk.search.sweeps import flip_accepted
from patchwalk.subsolvers.compiled import compiled
from patchwalk.subsolvers.contract import F64, I8, I32, I64, U64, ClusterBatch, Subsolver
from patchwalk.subsolvers.draws import call_seeds, seed_for
from patchwalk.workers import Serial, Workers

RULE, CALL = 2, 4
"""Words that tell the streams of one run seed apart."""


class Cut(NamedTuple):
    """Clusters of one size: ``members`` i32 (B, k), whose they are, their place in the replica's round, their seeds."""

    members: I32
    replicas: I64
    places: I64
    seeds: U64

    def rows(self, chosen: slice | npt.NDArray[np.bool_]) -> Cut:
        """Some of the clusters alone."""
        return Cut(self.members[chosen], self.replicas[chosen], self.places[chosen], self.seeds[chosen])


class Worth:
    """What the calls of a round gained and what their work cost; summed once, so that slices change no bit of it."""

    def __init__(self) -> None:
        self._gains: list[F64] = []
        self._prices: list[F64] = []

    def count(self, gains: F64, calls: Calls) -> None:
        """Take in one slice, with what each of its calls gained."""
        self._gains.append(gains)
        self._prices.append(priced(calls.proposals.work, len(calls)))

    def of_the_round(self) -> tuple[float, float]:
        """Gain in energy units and counted work in seconds at fixed prices."""
        if not self._gains:
            return 0.0, 0.0
        return float(np.concatenate(self._gains).sum()), float(np.concatenate(self._prices).sum())


class Ready(NamedTuple):
    """The subsolver of a case of the policy, ready for clusters of ``size`` spins."""

    case: int
    size: int
    subsolver: Subsolver


@dataclass(eq=False)
class Caller:
    """Carries out the calls of a round on replicas of one problem; ``seed`` is that of the run."""

    problem: Problem
    policy: Policy
    cluster_size: int
    acceptance: AcceptanceRule
    seed: int
    workers: Workers
    ask: Callable[[Subsolver, ClusterBatch, Workers], Iterator[Answered]] = answers
    skipped: int = 0
    by_size: tuple[Ready, ...] | None = None
    """Who answers where readiness depends on the size of clusters; None before anybody was made ready."""

    def __post_init__(self) -> None:
        self._marks = Marks.for_problem(self.problem)
        self._places: I32 = np.full(len(self.problem), -1, np.int32)

    def cuts(
        self, rule: ClusterRule, replicas: Replicas, number: int, wanted: int, counts: I64, elites: I8
    ) -> list[Cut]:
        """The clusters of round ``number``, at most ``wanted`` of them, dealt evenly over the replicas."""
        by_size: dict[int, list[Cut]] = {}
        for replica in range(len(replicas)):
            share = (wanted * (replica + 1)) // len(replicas) - (wanted * replica) // len(replicas)
            if share == 0:
                continue
            view = View(replicas.spins[replica], replicas.local_fields[replica], elites, counts)
            seed = seed_for(self.seed, RULE, replica, number)
            base, first = np.uint64(seed_for(self.seed, CALL, replica, number)), 0
            for members in rule.pick(self.problem, self.cluster_size, share, seed, self._marks, view):
                cut = Cut(members, *_places(len(members), replica, first, base))
                by_size.setdefault(members.shape[1], []).append(cut)
                first += len(members)
        return [_joined(parts) for _, parts in sorted(by_size.items())]

    def question(self, cut: Cut, replicas: Replicas, temperatures: F64) -> ClusterBatch:
        """The clusters, conditioned each on the rest of its replica."""
        return condition(
            self.problem, cut.members, replicas.spins, replicas.local_fields, temperatures[cut.replicas], cut.seeds,
            self._places, cut.replicas,
        )  # fmt: skip

    def prepare(self, samples: list[ClusterBatch]) -> None:
        """Make the subsolvers ready, once for each size: on sample batches, one for each size, the largest last.

        Where getting ready comes out the same for every size, one stands for all. A resumed run knows already who
        answers which size.
        """
        found = [
            Ready(number, batch.size, prepared(case.subsolver, batch))
            for number, case in enumerate(self.policy.cases)
            if case.subsolver is not None
            for batch in samples
        ]
        for one in found:  # the last one of a case is for the largest clusters
            forecast_of(one.subsolver, samples[-1])  # compiles what slicing will need
            self.policy = self.policy.answered_by(one.case, one.subsolver)
        if self.by_size is None:
            differ = any(one.subsolver != self.policy.cases[one.case].subsolver for one in found)
            self.by_size = tuple(found) if differ else ()
            return
        nearest = [min(samples, key=lambda batch: abs(batch.size - one.size)) for one in self.by_size]
        self.by_size = tuple(
            one._replace(subsolver=prepared(one.subsolver, batch))
            for one, batch in zip(self.by_size, nearest, strict=True)
        )

    def subsolver_for(self, case: int, size: int) -> Subsolver | None:
        """Who answers clusters of this size under a case of the policy: whoever is ready for the nearest size."""
        own = [one for one in self.by_size or () if one.case == case]
        if not own:
            return self.policy.cases[case].subsolver
        return min(own, key=lambda one: abs(one.size - size)).subsolver

    def release(self) -> None:
        """Let go of whatever the subsolvers keep running."""
        for subsolver in (
            *(case.subsolver for case in self.policy.cases),
            *(one.subsolver for one in self.by_size or ()),
        ):
            if subsolver is not None:
                release(subsolver)

    def carry_out(
        self, cuts: list[Cut], rule: str, replicas: Replicas, temperatures: F64, stage: float, stop: Callable[[], bool]
    ) -> Iterator[Calls]:
        """Ask and settle slice by slice; ``stop`` is looked at after each."""
        for cut in cuts:
            batch = self.question(cut, replicas, temperatures)
            for case, own_cut, own_batch in self._assigned(cut, batch, replicas, temperatures, stage):
                subsolver = self.subsolver_for(case, own_batch.size)
                if subsolver is None:
                    self.skipped += len(own_batch)
                    continue
                for answered in self.ask(subsolver, own_batch, self.workers):
                    yield self.settle(own_cut, answered, rule, subsolver, replicas)
                    if stop():
                        return

    def _assigned(
        self, cut: Cut, batch: ClusterBatch, replicas: Replicas, temperatures: F64, stage: float
    ) -> Iterator[tuple[int, Cut, ClusterBatch]]:
        """Which case of the policy answers which clusters."""
        if len(self.policy.cases) == 1 and self.policy.cases[0].when is None:
            yield 0, cut, batch
            return
        assigned = self.policy.assign(batch, stage, self.problem.field_scale)
        self.skipped += int(np.count_nonzero(assigned < 0))
        for case in range(len(self.policy.cases)):
            chosen = assigned == case
            if np.all(chosen):
                yield case, cut, batch
            elif np.any(chosen):
                own = cut.rows(chosen)
                yield case, own, self.question(own, replicas, temperatures)

    def settle(self, cut: Cut, answered: Answered, rule: str, subsolver: Subsolver, replicas: Replicas) -> Calls:
        """Accept or refuse the answers of one slice and bring the configurations up to date."""
        batch, proposals = answered.batch, answered.proposals
        whole = len(batch) == len(cut.members)
        own = cut if whole else cut.rows(slice(answered.start, answered.start + len(batch)))
        chosen, change, accepted = judge(batch, proposals, self.acceptance)
        before = np.empty(len(batch))
        flip_accepted(
            self.problem.row_starts, self.problem.neighbours, self.problem.couplings, replicas.spins,
            replicas.local_fields, replicas.energies, own.replicas, own.members, proposals.outcomes, chosen, change,
            accepted, before,
        )  # fmt: skip
        return Calls(
            own.members, own.replicas, own.places, rule, subsolver, batch, proposals, chosen,
            change, accepted, before, answered.seconds,
        )  # fmt: skip


def rehearsing(caller: Caller) -> Caller:
    """A caller of the same kind on a small ring, on which the loop's kernels can be compiled."""
    size = 2 * caller.cluster_size + 2
    spins = np.arange(size)
    ring = Problem.from_arrays(spins, np.roll(spins, -1), np.ones(size))
    return Caller(ring, caller.policy, caller.cluster_size, caller.acceptance, caller.seed, Serial())


def _joined(parts: list[Cut]) -> Cut:
    return parts[0] if len(parts) == 1 else Cut(*(np.concatenate(arrays) for arrays in zip(*parts, strict=True)))


@compiled
def _places(rows: int, replica: int, first: int, base: np.uint64) -> tuple[I64, I64, U64]:
    """The last three arrays of a :class:`Cut` of one replica, whose first cluster is number ``first`` of its round."""
    return np.full(rows, replica), np.arange(first, first + rows), call_seeds(base, rows, first)
