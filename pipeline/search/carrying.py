"""Sweeps between the calls: over one replica or many, on one thread or several, and inside groups of spins."""

from __future__ import annotations

import numpy as np

from patchwalk.problem.ising import Problem
from patchwalk.search.replicas import Replicas
from patchwalk.search.sweep_groups import group_sweep
from patchwalk.search.sweeps import carrier_for
from patchwalk.subsolvers.contract import F64, I32, I64, U64
from patchwalk.subsolvers.draws import seed_for, stream_for
from patchwalk.workers import Serial, Workers

SWEEP, GROUPS = 3, 8
"""The words of the streams that sweeps and moves inside groups draw from."""


class Carrying:
    """Sweeps all replicas of a search, in place."""

    def __init__(self, problem: Problem, seed: int, workers: Workers) -> None:
        self.problem, self.seed, self.workers = problem, seed, workers
        self.carrier = carrier_for(problem)
        self._group_starts: I64 = np.cumsum([0, *map(len, problem.groups)])
        self._group_members: I32 = np.concatenate([np.empty(0, np.int32), *problem.groups])

    def sweep(self, replicas: Replicas, temperatures: F64, number: int, first: int, sweeps: int) -> None:
        """Sweeps ``first`` and following of round ``number`` in every replica; each depends on its own seed alone."""
        if len(replicas) == 1:
            seed = seed_for(self.seed, SWEEP, number, first)
            replicas.energies[0] += self.carrier.sweep(
                replicas.spins[0], replicas.local_fields[0], float(temperatures[0]), seed, sweeps
            )
        else:
            self._sweep_side_by_side(replicas, temperatures, number, first, sweeps)
        if self.problem.groups:
            self._sweep_groups(replicas, temperatures, number, first)

    def _sweep_side_by_side(self, replicas: Replicas, temperatures: F64, number: int, first: int, sweeps: int) -> None:
        seeds: U64 = np.array(
            [seed_for(self.seed, SWEEP, number, first, replica) for replica in range(len(replicas))], np.uint64
        )

        def part(bounds: tuple[int, int]) -> None:
            own = slice(*bounds)
            replicas.energies[own] += self.carrier.sweep_replicas(
                replicas.spins[own], replicas.local_fields[own], temperatures[own], seeds[own], sweeps
            )

        workers = self.workers if self.workers.same_memory else Serial()
        for _ in workers.ordered(part, self.parts(len(replicas))):
            pass

    def parts(self, count: int) -> list[tuple[int, int]]:
        """Replicas dealt out to the workers in whole groups of those that are swept side by side."""
        workers, together = self.workers.count if self.workers.same_memory else 1, self.carrier.together
        share = -(-count // workers)
        share = -(-share // together) * together
        return [(first, min(count, first + share)) for first in range(0, count, share)]

    def _sweep_groups(self, replicas: Replicas, temperatures: F64, number: int, first: int) -> None:
        """Moves inside the groups of every replica, as many as spins there are in them, as sweeps have."""
        problem = self.problem
        for replica in range(len(replicas)):
            stream = stream_for(self.seed, GROUPS, number, first, replica)
            for _ in range(max(1, len(self._group_members) // max(1, len(problem.groups)))):
                replicas.energies[replica] += group_sweep(
                    problem.row_starts, problem.neighbours, problem.couplings, self._group_starts,
                    self._group_members, replicas.spins[replica], replicas.local_fields[replica],
                    float(temperatures[replica]), stream,
                )  # fmt: skip

    def rehearse(self, replicas: Replicas, temperatures: F64) -> None:
        """Compile what :meth:`sweep` will use, on a copy."""
        copy = Replicas(self.problem, replicas.spins.copy(), replicas.local_fields.copy(), replicas.energies.copy())
        self.sweep(copy, temperatures, 0, 0, 0)
