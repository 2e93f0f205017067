"""Configurations of one problem that are searched side by side, with what is carried along for them."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from patchwalk.problem.ising import Problem
from patchwalk.subsolvers.contract import F64, I8
from patchwalk.subsolvers.draws import generator_for

START = 1
"""The word of the stream that random starts are drawn from."""


@dataclass(eq=False)
class Replicas:
    """``R`` configurations: ``spins`` i8 (R, n), ``local_fields`` f64 (R, n) and ``energies`` f64 (R,), offset
    included.
    """

    problem: Problem
    spins: I8
    local_fields: F64
    energies: F64

    @classmethod
    def of(cls, problem: Problem, spins: I8) -> Replicas:
        """Replicas in these configurations, i8 (R, n)."""
        replicas = cls(problem, spins.copy(), np.empty(spins.shape), np.empty(len(spins)))
        replicas.refresh()
        return replicas

    @classmethod
    def random(cls, problem: Problem, count: int, seed: int) -> Replicas:
        """Replicas in random configurations; each depends on the seed and its own number alone."""
        drawn = [
            generator_for(seed, START, number).integers(0, 2, len(problem), dtype=np.int8) for number in range(count)
        ]
        return cls.of(problem, np.stack([1 - 2 * words for words in drawn]))

    def __len__(self) -> int:
        return len(self.spins)

    def refresh(self) -> None:
        """Derive local fields and energies afresh, so that rounding cannot pile up."""
        for number, spins in enumerate(self.spins):
            self.local_fields[number] = self.problem.local_fields(spins)
            self.energies[number] = self.problem.energy(spins)

    def put(self, number: int, spins: I8) -> None:
        """Put one replica into another configuration."""
        self.spins[number] = spins
        self.local_fields[number] = self.problem.local_fields(spins)
        self.energies[number] = self.problem.energy(spins)
