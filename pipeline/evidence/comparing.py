"""Whole runs compared: what the same budget bought two contenders, paired by instance and seed.

A paired difference is averaged over seeds within an instance and then over instances. Its interval comes from a
bootstrap (Efron, Ann. Stat. 7 (1979) 1) that draws instances anew and, within each, seeds; its tails are widened as
Student's law asks for so few units (Hesterberg, Am. Stat. 69 (2015) 371, from memory), and it is never narrower than
Student's own interval: a handful of values drawn anew cannot show how far a handful may stray. One pair gives no
interval.
"""

from __future__ import annotations

import math
from collections.abc import Iterable, Sequence
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from scipy.stats import norm
from scipy.stats import t as student

from patchwalk.evidence.time_to_solution import LEVEL, TimeToSolution, time_to_solution
from patchwalk.subsolvers.contract import F64, I64
from patchwalk.subsolvers.draws import generator_for

RESAMPLES = 4000
BOOTSTRAP = 0x636F6D7061726564
"""The word of the stream that resamples are drawn from."""


@dataclass(frozen=True)
class Outcome:
    """How one whole run ended.

    ``residual`` is its energy above the reference, per spin; ``reached`` the cost at which the reference was first
    met, in the unit of the budget, inf where it was not; ``cost`` what the whole run may spend.
    """

    instance: str
    contender: str
    seed: int
    residual: float
    reached: float
    cost: float


@dataclass(frozen=True)
class Interval:
    """A mean with its interval, ``low`` and ``high`` None where there are too few units for one; ``n`` units."""

    value: float
    low: float | None
    high: float | None
    n: int

    @property
    def tells(self) -> bool:
        """Whether zero lies outside."""
        return self.low is not None and self.high is not None and not self.low <= 0.0 <= self.high

    def __str__(self) -> str:
        if self.low is None or self.high is None:
            return f"{self.value:.4g} (no interval: one run; give more --seeds)"
        return f"{self.value:.4g} [{self.low:.4g}, {self.high:.4g}]"

    def as_json(self) -> dict[str, Any]:
        """Plain values."""
        return {"value": self.value, "low": self.low, "high": self.high, "n": self.n}


@dataclass(frozen=True)
class Standing:
    """One contender over all its runs: mean residual energy per spin, runs that met the reference, and when.

    ``solution`` counts every run as a trial; ``median_reach`` is the median cost at which the reference was met,
    None where fewer than half of the runs met it.
    """

    contender: str
    residual: Interval
    solution: TimeToSolution
    median_reach: float | None

    def as_json(self) -> dict[str, Any]:
        """Plain values."""
        return {
            "contender": self.contender, "residual": self.residual.as_json(), "solution": self.solution.as_json(),
            "median_reach": self.median_reach,
        }  # fmt: skip


@dataclass(frozen=True)
class Duel:
    """Residual energy of ``one`` minus that of ``other``, paired: below zero ``one`` is better.

    ``wins``, ``ties`` and ``losses`` count pairs from the side of ``one``; ``level`` is what the interval holds with.
    """

    one: str
    other: str
    difference: Interval
    wins: int
    ties: int
    losses: int
    level: float

    @property
    def verdict(self) -> str:
        """One sentence: which is better, or that nobody can tell."""
        if self.difference.low is None:
            return f"one run each cannot tell {self.one} from {self.other}: give more --seeds or instances"
        if not self.difference.tells:
            return f"the difference between {self.one} and {self.other} cannot be told from none in these runs"
        better, worse = (self.one, self.other) if self.difference.value < 0 else (self.other, self.one)
        least, most = sorted(abs(end) for end in (self.difference.low, self.difference.high) if end is not None)
        return (
            f"{better} ended lower than {worse}, by {abs(self.difference.value):.3g} in energy per spin "
            f"({100 * self.level:.3g} % interval {least:.3g} to {most:.3g})"
        )

    def as_json(self) -> dict[str, Any]:
        """Plain values."""
        own = {name: getattr(self, name) for name in ("one", "other", "wins", "ties", "losses", "level", "verdict")}
        return own | {"difference": self.difference.as_json()}


@dataclass(frozen=True)
class PerformanceCurve:
    """Share of instances that a contender solves within ``ratios`` times the cost of the best (Dolan & More).

    ``ratios`` rise from 1; ``shares`` are those of all contenders' breakpoints. Instances that nobody solved count as
    unsolved by all.
    """

    contender: str
    ratios: tuple[float, ...]
    shares: tuple[float, ...]


def mean_interval(values: F64, instances: I64, level: float = LEVEL, seed: int = 1) -> Interval:
    """The mean over instances of means over runs, with its bootstrap interval; ``instances`` i64 (n,) number them.

    With one instance its runs are the units, and the interval speaks of that instance alone.
    """
    groups = [values[instances == number] for number in np.unique(instances)]
    means = np.array([group.mean() for group in groups])
    centre, units = float(means.mean()), len(groups) if len(groups) > 1 else len(values)
    if units < 2:
        return Interval(centre, None, None, units)
    draws = generator_for(seed, BOOTSTRAP)
    drawn_means = np.stack([
        group[draws.integers(0, len(group), (RESAMPLES, len(group)))].mean(axis=1) for group in groups
    ])  # fmt: skip
    if len(groups) == 1:
        resampled = drawn_means[0]
    else:
        picks = draws.integers(0, len(groups), (RESAMPLES, len(groups)))
        resampled = drawn_means[picks, np.arange(RESAMPLES)[:, None]].mean(axis=1)
    tail = widened_tail(units, level)
    low, high = np.quantile(resampled, [tail, 1.0 - tail])
    alike = means if len(groups) > 1 else values
    reach = float(student.ppf((1.0 + level) / 2.0, units - 1)) * float(alike.std(ddof=1)) / math.sqrt(units)
    return Interval(centre, min(float(low), centre - reach), max(float(high), centre + reach), units)


def widened_tail(units: int, level: float = LEVEL) -> float:
    """The quantile at which a percentile interval of so few units is cut, below (1 - level)/2."""
    reach = math.sqrt(units / (units - 1)) * float(student.ppf((1.0 + level) / 2.0, units - 1))
    return float(norm.cdf(-reach))


def standings(outcomes: Sequence[Outcome], contenders: Sequence[str]) -> list[Standing]:
    """A line for each contender."""
    found = []
    for name in contenders:
        own = [one for one in outcomes if one.contender == name]
        reached = np.array([one.reached for one in own])
        met, middle = int(np.isfinite(reached).sum()), float(np.sort(reached)[(len(reached) - 1) // 2])
        cost = float(np.mean([one.cost for one in own]))
        found.append(
            Standing(
                name,
                mean_interval(np.array([one.residual for one in own]), _numbers(own)),
                time_to_solution(cost, met, len(own)),
                middle if math.isfinite(middle) else None,
            )
        )
    return found


def duels(outcomes: Sequence[Outcome], contenders: Sequence[str], tolerance: float = 1e-9) -> list[Duel]:
    """Every two contenders on the runs they share; intervals are widened so that all hold together (Bonferroni)."""
    pairs = [(one, other) for place, one in enumerate(contenders) for other in contenders[place + 1 :]]
    level = 1.0 - (1.0 - LEVEL) / max(1, len(pairs))
    return [_duel(outcomes, one, other, level, tolerance) for one, other in pairs]


def _duel(outcomes: Sequence[Outcome], one: str, other: str, level: float, tolerance: float) -> Duel:
    sides = [{(run.instance, run.seed): run for run in outcomes if run.contender == name} for name in (one, other)]
    shared = [key for key in sides[0] if key in sides[1]]
    if not shared:
        raise ValueError(f"{one} and {other} share no instance and seed; their runs cannot be paired")
    gains = np.array([sides[0][key].residual - sides[1][key].residual for key in shared])
    gains[np.abs(gains) <= tolerance] = 0.0
    numbers = _numbers([sides[0][key] for key in shared])
    wins, ties, losses = (int(np.count_nonzero(found)) for found in (gains < 0, gains == 0, gains > 0))
    return Duel(one, other, mean_interval(gains, numbers, level), wins, ties, losses, level)


def performance_curves(outcomes: Sequence[Outcome], contenders: Sequence[str]) -> list[PerformanceCurve]:
    """Curves over instances (Dolan & More, Math. Program. 91 (2002) 201) of the time to solution at 99 %."""
    instances = list(dict.fromkeys(run.instance for run in outcomes))
    costs = np.array([[_solution_cost(outcomes, instance, name) for name in contenders] for instance in instances])
    return curves_of(costs, contenders)


def curves_of(costs: F64, contenders: Sequence[str]) -> list[PerformanceCurve]:
    """The same from costs f64 (instances, contenders), inf where unsolved.

    >>> [curve.shares for curve in curves_of(np.array([[1.0, 2.0], [3.0, np.inf]]), ["a", "b"])]
    [(1.0, 1.0), (0.0, 0.5)]
    """
    best = costs.min(axis=1, keepdims=True)
    ratios = np.where(np.isfinite(costs), costs / np.where(np.isfinite(best), best, 1.0), np.inf)
    breaks = np.unique(np.append(ratios[np.isfinite(ratios)], 1.0))
    shares = (ratios[:, :, None] <= breaks).mean(axis=0)
    return [
        PerformanceCurve(name, tuple(breaks.tolist()), tuple(shares[place].tolist()))
        for place, name in enumerate(contenders)
    ]


def _solution_cost(outcomes: Sequence[Outcome], instance: str, contender: str) -> float:
    own = [run for run in outcomes if (run.instance, run.contender) == (instance, contender)]
    if not own:
        return math.inf
    met = sum(math.isfinite(run.reached) for run in own)
    return time_to_solution(float(np.mean([run.cost for run in own])), met, len(own)).value


def _numbers(outcomes: Iterable[Outcome]) -> I64:
    names: dict[str, int] = {}
    return np.array([names.setdefault(run.instance, len(names)) for run in outcomes], np.int64)


def against(outcomes: Iterable[Outcome], references: dict[str, float]) -> list[Outcome]:
    """Outcomes whose ``residual`` is still an energy per spin, measured from each instance's reference."""
    return [replace(run, residual=run.residual - references[run.instance]) for run in outcomes]
