"""Temperature against the stage of a run, in units that the problem itself sets."""

from __future__ import annotations

from dataclasses import dataclass


@dataclass(frozen=True)
class GeometricCooling:
    """Temperature falling geometrically from ``hot`` to ``cold``, both in units of ``scale`` (energy units).

    Cooling as in Kirkpatrick, Gelatt & Vecchi, Science 220 (1983) 671. ``hot`` = 0 holds the temperature at zero.

    >>> GeometricCooling(hot=1.0, cold=0.25, scale=2.0).at(0.5)
    1.0
    """

    hot: float
    cold: float
    scale: float

    def at(self, stage: float) -> float:
        """The temperature at ``stage``, the fraction of the budget spent (0 to 1), in energy units."""
        if self.hot == 0.0 or self.cold == 0.0:
            return self.scale * self.hot * (1.0 - stage)
        return float(self.scale * self.hot * (self.cold / self.hot) ** min(1.0, max(0.0, stage)))
