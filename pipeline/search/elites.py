"""Several best configurations that differ: for answers to choose from, restarts, and clusters where they disagree."""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np

from patchwalk.subsolvers.compiled import compiled
from patchwalk.subsolvers.contract import F64, I8

BLOCK = 128
"""Spins compared before looking whether that was enough."""


@dataclass(eq=False)
class Elites:
    """At most ``limit`` configurations of low energy, any two at least ``distance`` spins apart.

    With ``symmetric`` (no fields) a configuration and its global flip count as one. ``spins`` i8 (E, n) and
    ``energies`` f64 (E,) rise in energy.
    """

    limit: int
    distance: int
    symmetric: bool
    spins: I8
    energies: F64 = field(default_factory=lambda: np.empty(0))

    @classmethod
    def none_yet(cls, size: int, limit: int, distance: int, symmetric: bool) -> Elites:
        """A list that is still empty, for configurations of ``size`` spins."""
        return cls(limit, max(1, distance), symmetric, np.empty((0, size), np.int8))

    def wants(self, energy: float) -> bool:
        """Whether a configuration of this energy might be kept."""
        return len(self.energies) < self.limit or energy < self.energies[-1]

    def offer(self, energy: float, spins: I8) -> None:
        """Keep the configuration if it is good, or better than all those close to it."""
        if not self.wants(energy):
            return
        room = min(self.limit, len(self.energies) + 1)
        energies, configurations = np.empty(room), np.empty((room, len(spins)), np.int8)
        kept = _with(
            self.energies, self.spins, energy, spins, self.distance, self.symmetric, energies, configurations
        )  # fmt: skip
        if kept:
            self.energies, self.spins = energies[:kept], configurations[:kept]


@compiled
def _with(
    energies: F64,
    configurations: I8,
    energy: float,
    spins: I8,
    distance: int,
    symmetric: bool,
    new_energies: F64,
    new_configurations: I8,
) -> int:
    """Fill the new list with the old one, without what is close to ``spins``, and ``spins`` at its place; returns how
    many it holds, 0 where one of those close to it is as good.
    """
    close = np.empty(len(energies), np.bool_)
    for row in range(len(energies)):
        close[row] = _is_close(configurations[row], spins, distance, symmetric)
        if close[row] and energies[row] <= energy:
            return 0
    filled, placed = 0, False
    for row in range(len(energies) + 1):
        if not placed and (row == len(energies) or (not close[row] and energies[row] > energy)):
            new_energies[filled], new_configurations[filled] = energy, spins
            filled, placed = filled + 1, True
        if filled == len(new_energies):
            break
        if row < len(energies) and not close[row]:
            new_energies[filled], new_configurations[filled] = energies[row], configurations[row]
            filled += 1
    return filled


@compiled
def _is_close(one: I8, other: I8, distance: int, symmetric: bool) -> bool:
    """Whether fewer than ``distance`` spins differ, or are equal where that counts; reads no more than it needs."""
    differing = 0
    for first in range(0, len(one), BLOCK):
        last = min(first + BLOCK, len(one))
        for spin in range(first, last):
            differing += one[spin] != other[spin]
        if differing >= distance and (not symmetric or last - differing >= distance):
            return False
    return True
