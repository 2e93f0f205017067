"""What every anneal is told: how long, how strongly driven, how exact, how noisy; checked when it is made."""

from __future__ import annotations

import math
from dataclasses import dataclass, field
from typing import ClassVar, Literal

from patchwalk.subsolvers import schedules
from patchwalk.subsolvers.contract import Balance
from patchwalk.subsolvers.drivers import DRIVERS, Driver
from patchwalk.subsolvers.noise import Noise, noise_of
from patchwalk.subsolvers.uniform import require_shots

FINEST_TOLERANCE = 1e-11
"""Rounding alone moves a law by nearly this much."""


@dataclass(frozen=True)
class AnnealSettings:
    """What all anneals are told.

    ``duration`` is in units of 1/energy, ``duration_in_hops`` in hops (1/hopping, see ``drivers.py``); at most one of
    them is given.
    ``hopping`` is ``"heuristic"`` (span/(2k), from the couplings alone) or a rate in energy units; ``hopping_factor``
    multiplies either. ``driver`` takes the place of sum_i X_i, as for a walk. ``shots`` measurements are drawn
    independently from the law at the end. ``tolerance`` bounds the total variation distance of that law to the exact
    one; a call whose estimate is above it is ``TRUNCATED``. On curved schedules ``most_steps`` limits what it may cost.

    ``dephasing``, ``control_error``, ``precision_bits`` and ``readout_flip`` are the noise of a device (noise.py), off
    unless given. Schedules are those of the cluster as it was meant. ``laws`` and ``distribution`` stay without noise;
    ``noisy_distribution`` has it.
    """

    duration: float | None = None
    duration_in_hops: float | None = None
    hopping: float | Literal["heuristic"] = "heuristic"
    hopping_factor: float = 1.0
    driver: Driver = "hypercube"
    shots: int = 1
    tolerance: float = 1e-6
    most_steps: int = 100_000
    dephasing: float = 0.0
    control_error: float = 0.0
    precision_bits: int | None = None
    readout_flip: float = 0.0

    name: ClassVar[str]
    max_spins: ClassVar[int] = 22
    deterministic: ClassVar[bool] = True
    from_incumbent: ClassVar[bool] = False
    default_in_hops: ClassVar[float]
    noise: Noise = field(init=False, repr=False, compare=False)

    def __post_init__(self) -> None:
        require_shots(self.name, self.shots)
        if self.duration is not None and self.duration_in_hops is not None:
            raise ValueError(f"{self.name}: duration and duration_in_hops are both given; give one of them")
        for key in ("duration", "duration_in_hops"):
            if getattr(self, key) is not None:
                self._require(key, is_number(getattr(self, key)) and getattr(self, key) > 0, "a time above 0")
        self._require(
            "hopping",
            self.hopping == "heuristic" or (is_number(self.hopping) and float(self.hopping) > 0),
            "heuristic or a positive rate in energy units",
        )
        if self.driver not in DRIVERS:
            raise ValueError(f"{self.name}: driver is {self.driver!r}; it is one of {', '.join(DRIVERS)}")
        self._require("hopping_factor", is_number(self.hopping_factor) and self.hopping_factor > 0, "a positive number")
        self._require(
            "tolerance",
            is_number(self.tolerance) and FINEST_TOLERANCE <= self.tolerance <= 0.1,
            f"a total variation distance from {FINEST_TOLERANCE} (double precision gives no better) to 0.1",
        )
        whole = isinstance(self.most_steps, int) and not isinstance(self.most_steps, bool)
        self._require("most_steps", whole and 1 <= self.most_steps <= 10_000_000, "a whole number from 1 to 10,000,000")
        object.__setattr__(self, "noise", noise_of(self))

    def _require(self, key: str, good: bool, wanted: str) -> None:
        if not good:
            raise ValueError(f"{self.name}: {key} is {getattr(self, key)!r}; give {wanted}")

    @property
    def balance(self) -> Balance:
        return self.noise.balance(self.quiet_balance)

    @property
    def quiet_balance(self) -> Balance:
        """What is promised without noise."""
        return "none"

    def schedule_for(self, spins: int) -> schedules.Schedule:
        """The schedule on clusters of this size."""
        raise NotImplementedError

    def _unit(self) -> tuple[float, bool]:
        """The duration that counts, and whether it is in hops."""
        if self.duration is not None:
            return float(self.duration), False
        return float(self.default_in_hops if self.duration_in_hops is None else self.duration_in_hops), True


def is_number(value: object) -> bool:
    return isinstance(value, (int, float)) and not isinstance(value, bool) and math.isfinite(value)
