"""Break-even: by how much a device must become faster until its calls pay.

The *break-even factor* against a rival is (drop per second of the rival) / (drop per second of the subsolver): above 1
the subsolver must become that much faster. Against ``none`` it is the f at which the curve of the sweeps, read at
c / f, meets the subsolver's drop. With load, read and wait held fixed only the evolution becomes faster, and there
"no speed-up suffices" is an answer.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from patchwalk.evidence.help_tables import pairs_with
from patchwalk.evidence.replayed import NONE, Replayed
from patchwalk.statistics import Interval, bootstrap, by_run
from patchwalk.subsolvers.contract import F64

FACTORS = 4.0 ** np.arange(-4.0, 12.25, 0.25)
"""Where the curve of the sweeps is read: from 256 times slower to some 10^7 times faster."""


@dataclass(frozen=True)
class BreakEven:
    """Factors against one rival; ``held`` with load, read and wait fixed, infinite where no speed-up suffices.

    ``reason`` says why the factor is undefined, else it is empty.
    """

    rival: str
    factor: Interval
    held: Interval
    reason: str = ""

    def __str__(self) -> str:
        if self.reason:
            return f"undefined: {self.reason}"
        if np.isinf(self.held.value):
            return f"{self.factor}; with load, read and wait held fixed no speed-up suffices"
        if math.isclose(self.held.value, self.factor.value):
            return f"{self.factor}"
        return f"{self.factor}; with load, read and wait held fixed {self.held}"


def break_even(replayed: Replayed, rival: str) -> BreakEven:
    """The break-even factors against one rival, with intervals over runs."""
    pairs = pairs_with(replayed, rival)
    weights, nothing = pairs.weights, Interval(np.nan, np.nan, np.nan, 0)
    evolving = replayed.answers[replayed.own].evolving[pairs.rows]
    reason = _reason(replayed.own, float(weights @ pairs.drops), rival, float(weights @ pairs.rival_drops))
    if reason:
        return BreakEven(rival, nothing, nothing, reason)
    columns = [weights * pairs.drops, weights * pairs.costs, weights * evolving]
    if rival == NONE:
        gains = [
            weights * replayed.swept(replayed.answers[replayed.own].costs / factor)[pairs.rows] for factor in FACTORS
        ]
        sums = by_run(pairs.runs, *columns, *gains)
        return BreakEven(rival, _factor(sums, _against_sweeps), _factor(sums, _sweeps_held))
    sums = by_run(pairs.runs, *columns, weights * pairs.rival_drops, weights * pairs.rival_costs)
    return BreakEven(rival, _factor(sums, _against_rival), _factor(sums, _rival_held))


def _factor(sums: F64, statistic: Callable[[F64], F64]) -> Interval:
    return bootstrap(sums, statistic, logarithmic=True)


def _reason(own: str, drop: float, rival: str, rival_drop: float) -> str:
    if drop <= 0.0:
        return f"the mean drop of {own} is not positive, so that no speed makes it worth calling"
    if rival_drop <= 0.0 and rival == NONE:
        return f"sweeps from where {own} was called gain nothing on average, so that there is no pace to keep up with"
    if rival_drop <= 0.0:
        return f"the mean drop of {rival} is not positive, so that {own} is ahead at any price"
    return ""


def _against_rival(sums: F64) -> F64:
    """(drop per second of the rival) / (drop per second of the subsolver), nan where a drop is not positive."""
    drop, cost, _, rival_drop, rival_cost = sums.T
    with np.errstate(divide="ignore", invalid="ignore"):
        return np.where((drop > 0.0) & (rival_drop > 0.0), rival_drop * cost / (rival_cost * drop), np.nan)


def _rival_held(sums: F64) -> F64:
    """How much faster the evolution alone must become."""
    drop, cost, evolving, rival_drop, rival_cost = sums.T
    with np.errstate(divide="ignore", invalid="ignore"):
        allowed = np.where((drop > 0.0) & (rival_drop > 0.0), drop * rival_cost / rival_drop, np.nan)
    return _of_evolution(allowed, cost, evolving)


def _of_evolution(allowed: F64, cost: F64, evolving: F64) -> F64:
    """evolving / (allowed seconds less what is held), infinite where nothing is left for the evolution."""
    left = allowed - (cost - evolving)
    with np.errstate(divide="ignore", invalid="ignore"):
        return np.where(np.isnan(left), np.nan, np.where(left > 1e-12 * cost, evolving / left, np.inf))


def _against_sweeps(sums: F64) -> F64:
    """The f at which the mean curve, read at c / f, comes down to the subsolver's drop."""
    drops, curves = sums[:, 0], sums[:, 3:]
    return np.array([_meeting(drop, curve) for drop, curve in zip(drops, curves, strict=True)])


def _sweeps_held(sums: F64) -> F64:
    factors = _against_sweeps(sums)
    return _of_evolution(sums[:, 1] / factors, sums[:, 1], sums[:, 2])


def _meeting(drop: float, curve: F64) -> float:
    """Where a curve over ``FACTORS`` first falls to the drop, on the logarithmic scale; nan where nothing is gained."""
    below = np.flatnonzero(curve <= drop)
    if drop <= 0.0 or len(below) == 0:
        return np.nan
    place = int(below[0])
    if place == 0:
        return float(FACTORS[0])
    high, low = curve[place - 1], curve[place]
    share = (high - drop) / (high - low)
    return float(FACTORS[place - 1] * (FACTORS[place] / FACTORS[place - 1]) ** share)
