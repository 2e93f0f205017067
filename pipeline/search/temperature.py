"""Temperature against the stage of a run, in units that the problem itself sets.

A schedule tells the replicas their temperatures and watches their energies after every round. What it has learnt is
plain state, so that a run can be resumed to the same bits.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any, Protocol

import numpy as np

from patchwalk.subsolvers.contract import F64


class Temperatures(Protocol):
    """How hot the replicas are."""

    def at(self, stage: float) -> F64:
        """The temperatures (R,) at ``stage``, the fraction of the budget spent (0 to 1), in energy units."""
        ...

    def watch(self, energies: F64, stage: float, number: int) -> None:
        """Learn from the energies (R,) at the end of round ``number``, which began at ``stage``."""
        ...

    def as_state(self) -> dict[str, Any]:
        """What was learnt, as plain values."""
        ...

    def set_state(self, state: Mapping[str, Any]) -> None:
        """Go on from :meth:`as_state`."""
        ...


@dataclass(frozen=True)
class GeometricCooling:
    """Temperature falling geometrically from ``hot`` to ``cold``, both in units of ``scale`` (energy units).

    Cooling as in Kirkpatrick, Gelatt & Vecchi, Science 220 (1983) 671. It falls ``coolings`` times, every time over
    twice as long as the time before: a run that is stopped early has cooled already, a bad valley is left again, and
    the last cooling still has more than half of the budget. ``hot`` = 0 holds the temperature at zero.

    >>> GeometricCooling(hot=1.0, cold=0.25, scale=2.0).temperature(0.5)
    1.0
    >>> twice = GeometricCooling(hot=1.0, cold=0.25, scale=2.0, coolings=2)
    >>> twice.temperature(0.0) == twice.temperature(1 / 3) == 2.0, twice.temperature(1.0)
    (True, 0.5)
    """

    hot: float
    cold: float
    scale: float
    coolings: int = 1
    replicas: int = 1

    def temperature(self, stage: float) -> float:
        """The temperature of all replicas, in energy units."""
        return self.fallen_by(self.fallen(stage))

    def fallen_by(self, fallen: float) -> float:
        """The temperature that has fallen by this share of the way, on a logarithmic scale."""
        if self.hot == 0.0 or self.cold == 0.0:
            return self.scale * self.hot * (1.0 - fallen)
        return float(self.scale * self.hot * (self.cold / self.hot) ** fallen)

    def fallen(self, stage: float) -> float:
        """How far the present cooling has come, 0 to 1."""
        parts = self._parts(stage)
        return parts / 2.0 ** self._begun(parts) - 1.0

    def cooling(self, stage: float) -> int:
        """Which cooling it is, counted from 0: the n-th begins where 2^n - 1 parts of 2^coolings - 1 are spent."""
        return self._begun(self._parts(stage))

    def _parts(self, stage: float) -> float:
        return 1.0 + min(1.0, max(0.0, stage)) * (2**self.coolings - 1)

    def _begun(self, parts: float) -> int:
        return min(self.coolings - 1, math.floor(math.log2(parts)))

    def at(self, stage: float) -> F64:
        return np.full(self.replicas, self.temperature(stage))

    def watch(self, energies: F64, stage: float, number: int) -> None:
        """There is nothing to learn."""

    def as_state(self) -> dict[str, Any]:
        return {}

    def set_state(self, state: Mapping[str, Any]) -> None:
        """There is nothing to take up."""


BINS = 24
"""Temperatures told apart while energies are watched, equal on a logarithmic scale."""


@dataclass(eq=False)
class AdaptiveCooling:
    """Cooling that takes its time where the energy depends on temperature most.

    The first of the ``coolings`` is geometric and measures the spread of energies at every temperature; the later
    ones fall at constant thermodynamic speed, d(stage) proportional to sigma_E dT / T^2 (Salamon et al., Comput. Phys.
    Commun. 49 (1988) 423, from memory). With a single cooling there is nothing to learn from, and it stays geometric.
    Half of the time is always spread geometrically, so that no temperature is left out.
    """

    plain: GeometricCooling
    sums: F64 = field(default_factory=lambda: np.zeros((3, BINS)))
    """Number, sum and sum of squares of energies (in units of the scale) met at every temperature."""

    def at(self, stage: float) -> F64:
        fallen = self.plain.fallen(stage)
        if self.plain.cooling(stage) > 0:
            fallen = float(np.interp(fallen, *self._clock()))
        return np.full(self.plain.replicas, self.plain.fallen_by(fallen))

    def watch(self, energies: F64, stage: float, number: int) -> None:  # noqa: ARG002 - every schedule is told
        if self.plain.cooling(stage) == 0 and self.plain.scale > 0.0:
            place = min(BINS - 1, int(BINS * self.plain.fallen(stage)))
            for energy in energies / self.plain.scale:
                self.sums[:, place] += (1.0, energy, energy * energy)

    def _clock(self) -> tuple[F64, F64]:
        """The share of a cooling's time at which it has fallen by each share of the way."""
        edges = np.linspace(0.0, 1.0, BINS + 1)
        number, total, squares = self.sums
        known = number > 1
        if np.count_nonzero(known) < 2 or self.plain.hot == 0.0 or self.plain.cold == 0.0:
            return edges, edges
        mean = total[known] / number[known]
        spread = np.sqrt(np.maximum(squares[known] / number[known] - mean * mean, 0.0))
        middles = (np.arange(BINS) + 0.5) / BINS
        inverse = np.array([1.0 / self.plain.fallen_by(middle) for middle in middles])
        needed = np.interp(middles, middles[known], spread) * inverse  # dT / T^2 is d(ln T) / T
        if needed.sum() == 0.0:
            return edges, edges
        shares = 0.5 * needed / needed.sum() + 0.5 / BINS
        return np.concatenate([[0.0], np.cumsum(shares)]), edges

    def as_state(self) -> dict[str, Any]:
        return {"sums": self.sums.tolist()}

    def set_state(self, state: Mapping[str, Any]) -> None:
        self.sums = np.array(state["sums"])
