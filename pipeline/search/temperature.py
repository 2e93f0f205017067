"""Temperature against the stage of a run, in units that the problem itself sets."""

from __future__ import annotations

import math
from dataclasses import dataclass


@dataclass(frozen=True)
class GeometricCooling:
    """Temperature falling geometrically from ``hot`` to ``cold``, both in units of ``scale`` (energy units).

    Cooling as in Kirkpatrick, Gelatt & Vecchi, Science 220 (1983) 671. It falls ``coolings`` times, every time over
    twice as long as the time before: a run that is stopped early has cooled already, a bad valley is left again, and
    the last cooling still has more than half of the budget. ``hot`` = 0 holds the temperature at zero.

    >>> GeometricCooling(hot=1.0, cold=0.25, scale=2.0).at(0.5)
    1.0
    >>> twice = GeometricCooling(hot=1.0, cold=0.25, scale=2.0, coolings=2)
    >>> twice.at(0.0) == twice.at(1 / 3) == 2.0, twice.at(1.0)
    (True, 0.5)
    """

    hot: float
    cold: float
    scale: float
    coolings: int = 1

    def at(self, stage: float) -> float:
        """The temperature at ``stage``, the fraction of the budget spent (0 to 1), in energy units."""
        fallen = self._fallen(min(1.0, max(0.0, stage)))
        if self.hot == 0.0 or self.cold == 0.0:
            return self.scale * self.hot * (1.0 - fallen)
        return float(self.scale * self.hot * (self.cold / self.hot) ** fallen)

    def _fallen(self, stage: float) -> float:
        """How far the present cooling has come, 0 to 1; the n-th begins where 2^n - 1 parts of 2^coolings - 1 are
        spent.
        """
        parts = 1.0 + stage * (2**self.coolings - 1)
        begun = min(self.coolings - 1, math.floor(math.log2(parts)))
        return parts / 2.0**begun - 1.0
