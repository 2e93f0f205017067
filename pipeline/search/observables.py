"""What is measured while the Boltzmann law is sampled, and what is said about it in the end."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np

from patchwalk.search.replicas import Replicas
from patchwalk.statistics import Estimate, function_of, mean_of
from patchwalk.subsolvers.contract import F64, I64


@dataclass(eq=False)
class Observables:
    """Series over rounds, levels and copies: ``energies`` f64 (N, L, C), ``magnetisations`` f64 (N, L, C), the mean
    spin, and ``overlaps`` f64 (N, L), the mean of s_i s'_i over the first two copies, nan where there is one copy.
    """

    energies: F64
    magnetisations: F64
    overlaps: F64
    measured: int = 0

    @classmethod
    def empty(cls, rounds: int, levels: int, copies: int) -> Observables:
        """Room for so many measurements."""
        shape = (rounds, levels, copies)
        return cls(np.empty(shape), np.empty(shape), np.full(shape[:2], np.nan))

    def measure(self, number: int, replicas: Replicas, holders: I64) -> None:
        """Take down measurement ``number``; ``holders`` i64 (C, L) says which replica stands at each level."""
        self.energies[number] = replicas.energies[holders].T
        self.magnetisations[number] = replicas.spins[holders].mean(axis=2).T
        if len(holders) > 1:
            one, other = replicas.spins[holders[0]], replicas.spins[holders[1]]
            self.overlaps[number] = np.einsum("li,li->l", one, other, dtype=np.float64) / one.shape[1]
        self.measured = number + 1

    def at_level(self, level: int, temperature: float, size: int) -> Level:
        """Everything about one temperature (energy units) of a problem with ``size`` spins."""
        energies = self.energies[: self.measured, level]
        magnetisations = self.magnetisations[: self.measured, level]
        return Level(
            temperature=temperature,
            energy=mean_of(energies),
            magnetisation=mean_of(magnetisations),
            absolute_magnetisation=mean_of(np.abs(magnetisations)),
            overlap=None if energies.shape[1] < 2 else mean_of(self.overlaps[: self.measured, level]),
            absolute_overlap=None if energies.shape[1] < 2 else mean_of(np.abs(self.overlaps[: self.measured, level])),
            heat_capacity=_heat_capacity(energies, temperature, size),
        )


@dataclass(frozen=True)
class Level:
    """Averages at one temperature: the energy (of the whole problem, offset included), mean spin, its size, overlap of
    two copies, its size (None with one copy), and heat capacity per spin, var(E) / (n T^2).
    """

    temperature: float
    energy: Estimate
    magnetisation: Estimate
    absolute_magnetisation: Estimate
    overlap: Estimate | None
    absolute_overlap: Estimate | None
    heat_capacity: Estimate

    def estimates(self) -> dict[str, Estimate]:
        """All that is known, by name."""
        names = (
            "energy", "heat_capacity", "magnetisation", "absolute_magnetisation", "overlap", "absolute_overlap",
        )  # fmt: skip
        return {name: value for name in names if (value := getattr(self, name)) is not None}

    def as_json(self) -> dict[str, Any]:
        """Plain values."""
        return {
            "temperature": self.temperature,
            **{
                name: {
                    "value": one.value, "error": one.error if np.isfinite(one.error) else None, "tau": one.tau,
                    "n": one.n, "effective_n": one.effective, "reliable": one.reliable,
                }
                for name, one in self.estimates().items()
            },
        }  # fmt: skip


def _heat_capacity(energies: F64, temperature: float, size: int) -> Estimate:
    return function_of(energies, lambda series: float(series.var()) / (size * temperature * temperature))
