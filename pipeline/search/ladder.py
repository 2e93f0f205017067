"""A ladder of temperatures whose replicas trade places.

Replica exchange: Swendsen & Wang, Phys. Rev. Lett. 57 (1986) 2607; Hukushima & Nemoto, J. Phys. Soc. Jpn. 65 (1996)
1604. After every round neighbours on the ladder, even and odd pairs by turns, trade their temperatures with
probability min(1, exp((1/T_i - 1/T_j)(E_i - E_j))), which leaves the joint Boltzmann law as it is.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np

from patchwalk.subsolvers.contract import F64, I64
from patchwalk.subsolvers.draws import generator_for

EXCHANGE = 5
"""The word of the stream that exchanges are drawn from."""

ADAPT_ROUNDS = 50
"""The spacing is looked at anew after so many rounds."""

STIFFNESS = 0.5
"""How far a look moves the steps towards those that would trade equally often: 0 not at all, 1 all the way."""


@dataclass(eq=False)
class Ladder:
    """``temperatures`` f64 (R,), falling, in energy units, one for each replica.

    ``rungs`` i64 (R,) is the rung each replica stands on, 0 the hottest. While the stage is below ``adapting`` the
    inner temperatures move so that all neighbours trade equally often; afterwards, and for sampling always, they stay.
    ``seed`` is that of the run.
    """

    temperatures: F64
    seed: int
    adapting: float = 0.0

    def __post_init__(self) -> None:
        self.rungs: I64 = np.arange(len(self.temperatures))
        steps = len(self.temperatures) - 1
        self.tried, self.chances, self.traded = np.zeros(steps), np.zeros(steps), np.zeros(steps)

    def at(self, stage: float) -> F64:  # noqa: ARG002 - every schedule is told
        return self.temperatures[self.rungs]

    def watch(self, energies: F64, stage: float, number: int) -> None:
        """Let neighbours trade; now and then look at the spacing anew."""
        self._exchange(energies, number)
        if stage < self.adapting and (number + 1) % ADAPT_ROUNDS == 0:
            self._respace()

    def _exchange(self, energies: F64, number: int) -> None:
        units = generator_for(self.seed, EXCHANGE, number).random(len(self.rungs))
        holder = np.argsort(self.rungs)
        for rung in range(number % 2, len(self.rungs) - 1, 2):
            one, other = holder[rung], holder[rung + 1]
            colder = 1.0 / self.temperatures[rung + 1] - 1.0 / self.temperatures[rung]
            exponent = colder * (energies[other] - energies[one])
            chance = 1.0 if exponent >= 0.0 else math.exp(exponent)
            self.tried[rung] += 1
            self.chances[rung] += chance
            if units[rung] < chance:
                self.traded[rung] += 1
                self.rungs[one], self.rungs[other] = self.rungs[other], self.rungs[one]

    def _respace(self) -> None:
        """Move the inner rungs towards equal rates: a step's width follows how easily it is crossed."""
        rates = np.clip(self.chances / np.maximum(self.tried, 1.0), 0.01, 0.99)
        widths = -np.diff(np.log(self.temperatures))
        if len(widths) < 2 or widths.sum() == 0.0:
            return
        # minus the logarithm of a rate grows as the square of the step
        wanted = widths * (np.log(rates) / np.log(rates).mean()) ** -0.5
        wanted *= widths.sum() / wanted.sum()
        widths += STIFFNESS * (wanted - widths)
        inner = math.log(self.temperatures[0]) - np.cumsum(widths)[:-1]
        self.temperatures[1:-1] = np.exp(inner)
        self.tried[:], self.chances[:] = 0.0, 0.0

    @property
    def coldest(self) -> int:
        """The replica on the coldest rung."""
        return int(np.argmax(self.rungs))

    def as_state(self) -> dict[str, Any]:
        return {
            "rungs": self.rungs.tolist(), "temperatures": self.temperatures.tolist(), "tried": self.tried.tolist(),
            "chances": self.chances.tolist(), "traded": self.traded.tolist(),
        }  # fmt: skip

    def set_state(self, state: Mapping[str, Any]) -> None:
        self.rungs = np.array(state["rungs"], np.int64)
        for name in ("temperatures", "tried", "chances", "traded"):
            setattr(self, name, np.array(state[name], np.float64))
