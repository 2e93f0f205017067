"""Time to solution: how often a random method must be run to succeed almost surely, and what that costs.

``t ln(1 - confidence) / ln(1 - p)`` with the number of runs rounded up and at least one (Ronnow et al., Science 345
(2014) 420, formula from memory). A success probability counted in trials comes with its exact binomial interval
(Clopper & Pearson, Biometrika 26 (1934) 404).
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt
from scipy.stats import beta

from patchwalk.subsolvers.contract import F64

CONFIDENCE = 0.99
LEVEL = 0.95
"""Intervals hold with this probability."""


def runs_needed(probability: npt.ArrayLike, confidence: float = CONFIDENCE) -> F64:
    """Independent runs until one succeeds with probability ``confidence``: whole numbers, at least 1, inf for p = 0.

    >>> runs_needed([1.0, 0.9, 0.5, 0.0]).tolist()
    [1.0, 2.0, 7.0, inf]
    """
    return np.maximum(1.0, np.ceil(runs_unrounded(probability, confidence) * (1.0 - 1e-12)))


def runs_unrounded(probability: npt.ArrayLike, confidence: float = CONFIDENCE) -> F64:
    """The same without rounding, for averages and slopes in which steps would only disturb."""
    chance = np.asarray(probability, np.float64)
    if np.any(~((chance >= 0.0) & (chance <= 1.0 + 1e-9))):
        raise ValueError(f"probability is {probability!r}; give numbers from 0 to 1")
    with np.errstate(divide="ignore"):
        return math.log1p(-confidence) / np.log1p(-np.minimum(chance, 1.0))


def binomial_interval(successes: int, trials: int, level: float = LEVEL) -> tuple[float, float]:
    """The exact interval of a success probability seen ``successes`` times in ``trials``.

    >>> low, high = binomial_interval(0, 10)
    >>> low, round(high, 4)  # 1 - 0.025^(1/10)
    (0.0, 0.3085)
    """
    if not 0 <= successes <= trials or trials < 1:
        raise ValueError(f"successes is {successes} of {trials} trials; give a number from 0 to trials, at least one")
    tail = (1.0 - level) / 2.0
    low = 0.0 if successes == 0 else float(beta.ppf(tail, successes, trials - successes + 1))
    high = 1.0 if successes == trials else float(beta.ppf(1.0 - tail, successes + 1, trials - successes))
    return low, high


@dataclass(frozen=True)
class TimeToSolution:
    """What success with probability 0.99 costs, in the unit of ``cost``: the cost of a run times the runs needed.

    ``low`` and ``high`` bound ``value`` with probability 0.95; they are infinite where nothing succeeded.
    """

    cost: float
    successes: int
    trials: int
    value: float
    low: float
    high: float

    def as_json(self) -> dict[str, Any]:
        """Plain values; None for what is infinite."""
        bare = {"cost": self.cost, "successes": self.successes, "trials": self.trials}
        ends = {"value": self.value, "low": self.low, "high": self.high}
        return bare | {name: end if math.isfinite(end) else None for name, end in ends.items()}


def time_to_solution(cost: float, successes: int, trials: int, level: float = LEVEL) -> TimeToSolution:
    """From ``trials`` runs of equal ``cost``, of which some succeeded.

    >>> time_to_solution(100.0, 5, 10).value
    700.0
    """
    low, high = binomial_interval(successes, trials, level)
    value, best, worst = (cost * float(runs_needed(chance)) for chance in (successes / trials, high, low))
    return TimeToSolution(cost, successes, trials, value, best, worst)
