"""The rule that evidence suggests: who should be called when, learnt on one half of the runs, judged on the other.

A rule has at most two conditions on quantities known before a call, one choice where they hold and one elsewhere, and
to call nobody is among the choices, worth nothing and costing nothing. What a choice is worth on a cluster is its help
against the baseline, so that a rule of worth zero is no better than never to call.

False alarms: three questions are asked of one set of runs, whether the rule, whether always calling is worth more than
nothing, and whether the rule is worth more than always; each is asked at a third of the rate, so that where nothing
helps the advice to call is given at most at the stated rate. That holds for errors of runs that are symmetric or tend
upwards; where a few runs lose far more than the rest (exponential tails downwards), it was given in up to 10 % of 200
repetitions at a stated rate of 5 %: no interval from four runs knows of the fifth.
"""

from __future__ import annotations

import itertools
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass
from typing import Literal, NamedTuple

import numpy as np
import numpy.typing as npt

from patchwalk.statistics import Interval, bootstrap, by_run, ratio
from patchwalk.subsolvers.contract import F64, I64

BINS = 24
"""Quantile bins of a quantity; thresholds lie between them."""

FALSE_ALARMS = 0.05
"""How often a call is advised at most where none helps."""

QUESTIONS = 3

NOBODY = "nothing"

Verdict = Literal["call", "call when", "do not call", "cannot tell"]


class Threshold(NamedTuple):
    """One condition: a quantity at or above a value, or below it."""

    quantity: str
    above: bool
    value: float

    def __str__(self) -> str:
        return f"{self.quantity} {'>=' if self.above else '<'} {self.value:g}"

    def holds(self, quantities: Mapping[str, F64]) -> npt.NDArray[np.bool_]:
        """Where it holds, bool (N,)."""
        values = quantities[self.quantity]
        return values >= self.value if self.above else values < self.value


@dataclass(frozen=True)
class Rule:
    """``then`` where all conditions hold, ``otherwise`` elsewhere: spellings of subsolvers or ``nothing``."""

    conditions: tuple[Threshold, ...]
    then: str
    otherwise: str = NOBODY

    def __str__(self) -> str:
        if not self.conditions:
            return self.then
        return f"{self.then} when {self.condition}, else {self.otherwise}"

    @property
    def condition(self) -> str:
        """The conditions as they stand in settings."""
        return " and ".join(map(str, self.conditions))

    @property
    def callers(self) -> list[dict[str, str]]:
        """The cases of a settings file."""
        if not self.conditions:
            return [{"subsolver": self.then}]
        return [{"when": self.condition, "subsolver": self.then}, {"subsolver": self.otherwise}]

    def worth(self, lesson: Lesson) -> F64:
        """What the rule is worth on every cluster, f64 (N,)."""
        held = np.ones(len(lesson.runs), np.bool_)
        for condition in self.conditions:
            held &= condition.holds(lesson.quantities)
        worths = {NOBODY: np.zeros(len(held)), **lesson.worths}
        return np.where(held, worths[self.then], worths[self.otherwise])


@dataclass(frozen=True, eq=False)
class Lesson:
    """``N`` clusters: ``runs`` i64 (N,) counted from 0, ``weights`` f64 (N,), ``quantities`` and, for every choice but
    ``nothing``, its help against the baseline, f64 (N,) each. The first choice is the one that the runs called."""

    runs: I64
    weights: F64
    quantities: Mapping[str, F64]
    worths: Mapping[str, F64]

    def of_runs(self, wanted: I64) -> Lesson:
        """The clusters of some runs alone."""
        own = np.isin(self.runs, wanted)
        return Lesson(
            self.runs[own], self.weights[own], {name: values[own] for name, values in self.quantities.items()},
            {name: values[own] for name, values in self.worths.items()},
        )  # fmt: skip


@dataclass(frozen=True)
class Judgement:
    """A learnt rule and what came of it on runs it never saw; all worths are per cluster.

    ``always`` is to make every call, of all runs, for nothing is learnt there; ``promise``, the worth of a call that
    the rule makes.
    """

    rule: Rule
    verdict: Verdict
    worth: Interval
    always: Interval
    over_always: Interval
    promise: Interval
    called_share: float
    learnt_on: int
    judged_on: int


def suggested(lesson: Lesson, false_alarms: float = FALSE_ALARMS) -> Judgement:
    """The rule learnt on every other run, held against ``always`` and ``never`` on the rest."""
    runs = np.unique(lesson.runs)
    seen, unseen = runs[1::2], runs[::2]  # the larger half judges
    level = 1.0 - false_alarms / QUESTIONS
    rule = learnt(lesson.of_runs(seen)) if len(seen) else Rule((), next(iter(lesson.worths)))
    rest = lesson.of_runs(unseen)
    own = next(iter(lesson.worths))
    worth, usual = rule.worth(rest), rest.worths[own]
    always = mean_over_runs(lesson.runs, lesson.weights, lesson.worths[own], level)
    found = mean_over_runs(rest.runs, rest.weights, worth, level)
    better = mean_over_runs(rest.runs, rest.weights, worth - usual, level)
    called = _called(rule, rest)
    return Judgement(
        rule, _verdict(rule, own, found, always, better), found, always, better,
        mean_over_runs(rest.runs, rest.weights * called, worth, level),
        float(np.average(called, weights=rest.weights)), len(seen), len(unseen),
    )  # fmt: skip


def mean_over_runs(runs: I64, weights: F64, values: F64, level: float = 0.95) -> Interval:
    """The weighted mean of values (N,) with an interval over runs."""
    return bootstrap(by_run(runs, weights * values, weights), ratio, level=level)


def _verdict(rule: Rule, own: str, worth: Interval, always: Interval, better: Interval) -> Verdict:
    """``call`` where always is worth more than nothing and the rule not more than that."""
    special_rule = rule.conditions or rule.then not in (own, NOBODY)
    if special_rule and worth.above_zero and (better.above_zero or not always.above_zero):
        return "call when"
    if always.above_zero:
        return "call"
    if always.below_zero and not worth.above_zero and (rule.then == NOBODY or worth.value <= 0.0):
        return "do not call"
    return "cannot tell"


def _called(rule: Rule, lesson: Lesson) -> F64:
    """One where the rule calls somebody, else zero, f64 (N,)."""
    ones = {name: np.ones(len(lesson.runs)) for name in lesson.worths}
    return rule.worth(Lesson(lesson.runs, lesson.weights, lesson.quantities, ones))


def learnt(lesson: Lesson) -> Rule:
    """The rule of highest mean worth here; of equals the one with fewest conditions."""
    choices = [NOBODY, *lesson.worths]
    gains = np.stack([np.zeros(len(lesson.runs)), *(lesson.weights * own for own in lesson.worths.values())])
    edges = {name: thresholds(values) for name, values in lesson.quantities.items()}
    edges = {name: cuts for name, cuts in edges.items() if len(cuts)}
    bins = {name: np.searchsorted(cuts, lesson.quantities[name], side="right") for name, cuts in edges.items()}
    best_value, best = -np.inf, Rule((), NOBODY)
    for value, conditions, then, otherwise in _candidates(gains, edges, bins):
        if value > best_value + 1e-12 * abs(value):
            best_value, best = value, Rule(conditions, choices[then], choices[otherwise])
    return best


def thresholds(values: F64) -> F64:
    """Where a quantity (N,) may be cut: its quantiles to three digits, without its least value."""
    known = values[np.isfinite(values)]
    if len(known) == 0:
        return np.empty(0)
    cuts = np.quantile(known, np.linspace(0.0, 1.0, BINS + 1)[1:-1], method="higher")
    cuts = np.unique([float(f"{cut:.3g}") for cut in cuts])
    return cuts[(cuts > known.min()) & (cuts <= known.max())]


def _candidates(
    gains: F64, edges: Mapping[str, F64], bins: Mapping[str, npt.NDArray[np.intp]]
) -> Iterator[tuple[float, tuple[Threshold, ...], int, int]]:
    """The best rule of every shape: its worth, conditions, and the numbers of the two choices."""
    totals = gains.sum(axis=1)
    yield float(totals.max()), (), int(totals.argmax()), 0
    for name in edges:
        sums = _sums(gains, [bins[name]], [len(edges[name])])
        for above, table in _sides(sums, 1):
            value, then, otherwise, (cut,) = _best(table, totals)
            yield value, (Threshold(name, above[0], float(edges[name][cut])),), then, otherwise
    for first, second in itertools.combinations(edges, 2):
        sums = _sums(gains, [bins[first], bins[second]], [len(edges[first]), len(edges[second])])
        for above, table in _sides(sums, 2):
            value, then, otherwise, (cut, other) = _best(table, totals)
            conditions = (
                Threshold(first, above[0], float(edges[first][cut])),
                Threshold(second, above[1], float(edges[second][other])),
            )
            yield value, conditions, then, otherwise
    for name in edges:  # an interval of one quantity
        table = np.cumsum(_sums(gains, [bins[name]], [len(edges[name])]), axis=1)
        inside = np.full((len(gains), len(edges[name]), len(edges[name])), -np.inf)
        for low in range(len(edges[name]) - 1):
            inside[:, low, low + 1 :] = table[:, low + 1 : -1] - table[:, low, None]
        if len(edges[name]) > 1:
            value, then, otherwise, (low, high) = _best(inside, totals)
            pair = (Threshold(name, True, float(edges[name][low])), Threshold(name, False, float(edges[name][high])))
            yield value, pair, then, otherwise


def _sums(gains: F64, bins: Sequence[npt.NDArray[np.intp]], cuts: Sequence[int]) -> F64:
    """Gains of every choice summed over the cells of a grid, (A, cuts + 1, ...)."""
    shape = tuple(count + 1 for count in cuts)
    cells = np.ravel_multi_index(tuple(bins), shape)
    return np.stack([np.bincount(cells, own, int(np.prod(shape))).reshape(shape) for own in gains])


def _sides(sums: F64, axes: int) -> Iterator[tuple[tuple[bool, ...], F64]]:
    """For every choice of sides, the gains (A, cuts, ...) where all conditions hold, by the number of the cut."""
    for above in itertools.product((True, False), repeat=axes):
        table = sums
        for axis, side in enumerate(above, 1):
            low = np.cumsum(table, axis=axis)
            below = np.delete(low, -1, axis=axis)
            table = low.take([-1], axis=axis) - below if side else below
        yield above, table


def _best(table: F64, totals: F64) -> tuple[float, int, int, tuple[int, ...]]:
    """The cut and the two different choices that are worth most: gain inside of one, outside of the other."""
    inside = np.where(np.isfinite(table), table, 0.0)
    outside = totals.reshape(-1, *([1] * (table.ndim - 1))) - inside
    values = np.where(np.isfinite(table[:, None]), inside[:, None] + outside[None], -np.inf)
    values[np.arange(len(table)), np.arange(len(table))] = -np.inf
    then, otherwise, *cut = (int(place) for place in np.unravel_index(int(values.argmax()), values.shape))
    return float(values.max()), then, otherwise, tuple(cut)
