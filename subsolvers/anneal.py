"""Anneals of a cluster, simulated exactly: forward, reverse, and blends of an anneal with a walk.

The state evolves under ``H(t) = -A(t) sum_i X_i + B(t) H_P`` with the cluster's energies on the diagonal of H_P, and
is measured at the end (Kadowaki & Nishimori, PRE 58 (1998) 5355; Farhi et al., quant-ph/0001106, both from memory).
A is in units of the hopping rate that a walk would use, B is 1 where the problem acts in full, so that a schedule
means the same on weak and strong clusters. What the three share is in anneal_settings.py and anneal_calls.py.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from pathlib import Path
from typing import ClassVar

from patchwalk.subsolvers import schedules
from patchwalk.subsolvers.anneal_calls import Anneal
from patchwalk.subsolvers.anneal_settings import is_number
from patchwalk.subsolvers.contract import Balance, refuse_oversize


@dataclass(frozen=True)
class Forward(Anneal):
    """From the uniform superposition, with the transverse field giving way to the problem.

    ``schedule`` is ``"linear"``; ``"gap"``, at a speed that follows the cluster's own gap (k up to 8); ``"search"``,
    the closed form of the same for a search among 2^k; or a TOML file with columns time, A and B, which then sets the
    duration as well. No promise is made for sampling.

    The default duration of 6 hops is where hops to a minimum were fewest: duration x ln(0.01) / ln(1 - p) was 34, 106
    and 117 at 3 hops, 23, 60 and 64 at 6, 22, 57 and 65 at 10, 26, 70 and 85 at 20, for mean hit probabilities p over
    40 clusters each: 3 x 3 patches of a +-J and of a Gaussian lattice, and 10 spins of a fully connected glass.
    """

    schedule: str = "linear"

    name: ClassVar[str] = "forward"
    concurrent: ClassVar[bool] = True
    default_in_hops: ClassVar[float] = 6.0
    _table: schedules.Schedule | None = field(default=None, init=False, repr=False)

    def __post_init__(self) -> None:
        super().__post_init__()
        if not isinstance(self.schedule, str) or not (
            self.schedule in ("linear", "gap", "search") or self.schedule.endswith(".toml")
        ):
            raise ValueError(
                f"forward: schedule is {self.schedule!r}; it is linear, gap, search, or a .toml file with columns "
                "time, A and B"
            )
        if self.schedule.endswith(".toml"):
            if self.duration is not None or self.duration_in_hops is not None:
                raise ValueError(f"forward: {self.schedule} has its own times; leave duration out")
            object.__setattr__(self, "_table", schedules.read_table(Path(self.schedule)))

    def schedule_for(self, spins: int) -> schedules.Schedule:
        if self._table is not None:
            return self._table
        duration, in_hops = self._unit()
        if self.schedule == "search":
            return schedules.search(duration, in_hops, 1 << spins)
        if self.schedule == "gap":
            refuse_oversize("forward", spins, schedules.GAP_SPINS, "schedule=gap (dense diagonalisation)")
            return schedules.by_gap(duration, in_hops)
        return schedules.linear(duration, in_hops)


@dataclass(frozen=True)
class Reverse(Anneal):
    """From the incumbent to a turning point, a pause there, and back.

    At the turning point A is ``1 - turning_point`` hoppings and B is ``turning_point``. The duration is that of the
    two legs together, ``leg_ratio`` the time of the way there over that of the way back, and ``pause`` comes on top,
    in the unit of the duration. With equal legs and one shot the proposal matrix is symmetric.

    Defaults by the measure given for :class:`Forward`, from 82 and 124 incumbents that a short Metropolis chain left
    outside the minima (Gaussian patches; fully connected): turning at 0.5, 0.6 and 0.7 with 3 hops took 219 and 461,
    208 and 361, 272 and 402 hops; 6 hops at 0.6 took 170 and 412. Pauses shift the best turning point upwards and gain
    little.
    """

    turning_point: float = 0.6
    pause: float = 0.0
    leg_ratio: float = 1.0

    name: ClassVar[str] = "reverse"
    concurrent: ClassVar[bool] = True
    default_in_hops: ClassVar[float] = 3.0
    from_incumbent: ClassVar[bool] = True

    def __post_init__(self) -> None:
        super().__post_init__()
        self._require(
            "turning_point", is_number(self.turning_point) and 0 <= self.turning_point <= 1, "a number from 0 to 1"
        )
        self._require("pause", is_number(self.pause) and self.pause >= 0, "a time of at least 0")
        self._require("leg_ratio", is_number(self.leg_ratio) and 1e-6 <= self.leg_ratio <= 1e6, "a ratio around 1")

    @property
    def quiet_balance(self) -> Balance:
        return "symmetric" if self.shots == 1 and self.leg_ratio == 1.0 else "none"

    def schedule_for(self, spins: int) -> schedules.Schedule:  # noqa: ARG002
        duration, in_hops = self._unit()
        return schedules.there_and_back(duration, in_hops, self.turning_point, self.pause, self.leg_ratio)


@dataclass(frozen=True)
class Blend(Anneal):
    """Between a walk and a forward anneal, from the uniform superposition.

    A falls from 1 hopping to ``1 - mix`` hoppings while B rises from ``1 - mix`` to 1: ``mix`` is 0 for a walk that is
    measured at the end, and 1 for the linear ramp (between the two as in Morley et al., PRA 99 (2019) 022339, from
    memory).

    Defaults by the measure and the clusters given for :class:`Forward`: mix 0.75 at 3 hops took 14, 43 and 52 hops,
    0.5 at 2 hops 15, 45 and 60, the walk at its best (0.75 hops) 12, 41 and 46, the ramp at its best 23, 57 and 64.
    """

    mix: float = 0.75

    name: ClassVar[str] = "blend"
    concurrent: ClassVar[bool] = True
    default_in_hops: ClassVar[float] = 3.0

    def __post_init__(self) -> None:
        super().__post_init__()
        self._require("mix", is_number(self.mix) and 0 <= self.mix <= 1, "a number from 0 (walk) to 1 (linear ramp)")

    def schedule_for(self, spins: int) -> schedules.Schedule:  # noqa: ARG002
        duration, in_hops = self._unit()
        return schedules.blended(duration, in_hops, self.mix)
