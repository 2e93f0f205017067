"""Several best configurations that differ: for answers to choose from, restarts, and clusters where they disagree."""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np

from patchwalk.subsolvers.contract import F64, I8


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
        apart = self._distances(spins) >= self.distance
        if not apart.all() and self.energies[~apart][0] <= energy:
            return
        kept, configurations = self.energies[apart], self.spins[apart]
        place = int(np.searchsorted(kept, energy, side="right"))
        self.energies = np.concatenate([kept[:place], [energy], kept[place:]])[: self.limit]
        self.spins = np.concatenate([configurations[:place], spins[None], configurations[place:]])[: self.limit]

    def _distances(self, spins: I8) -> np.typing.NDArray[np.int64]:
        apart: np.typing.NDArray[np.int64] = np.array(
            [np.count_nonzero(kept != spins) for kept in self.spins], np.int64
        )
        return np.minimum(apart, len(spins) - apart) if self.symmetric else apart
