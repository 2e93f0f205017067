"""Several rules side by side: every round one of them is drawn, and those that pay may be drawn more often.

The setting ``rule`` is written ``ball``, ``ball=2,loose=1`` or as a table of rules and weights. What a rule is worth is
its gain in energy per second of counted work, at the fixed prices of :mod:`patchwalk.cost`: never measured time, so
that the same run draws the same rules again.
"""

from __future__ import annotations

import difflib
import math
from collections.abc import Mapping
from dataclasses import dataclass, field, replace
from typing import Self

import numpy as np

from patchwalk.clusters.grouping import closed_over_groups
from patchwalk.clusters.rules import RULES, ClusterRule, Marks, View
from patchwalk.problem.ising import Problem
from patchwalk.subsolvers.contract import F64, I32
from patchwalk.subsolvers.draws import next_unit, stream_for

DRAW = 2
"""The word that tells the draw of a rule from what the rule itself draws."""

FLOOR = 0.05
"""No rule is drawn less often than this, or than half of an equal share where there are more than ten rules."""

MEMORY = 200.0
"""Rounds after which what was gained and spent counts 1/e."""

PATIENCE = 4.0
"""A rule counts as average until its own work is worth more than this many rounds."""


class RuleError(ValueError):
    """A rule or a weight that cannot be used; the message names it and the way out."""


@dataclass(frozen=True)
class Mixture:
    """Rules and the shares of rounds that they get, which add up to one.

    ``adapt`` says whether :class:`RuleWeights` may move the shares. A mixture is a rule itself, with fixed shares.

    >>> mixture_of("ball=3,loose=1").shares
    (0.75, 0.25)
    """

    rules: tuple[ClusterRule, ...]
    shares: tuple[float, ...]
    adapt: bool = True

    @property
    def name(self) -> str:
        """As it is written in settings."""
        if len(self.rules) == 1:
            return self.rules[0].name
        return ",".join(f"{rule.name}={share:g}" for rule, share in zip(self.rules, self.shares, strict=True))

    @property
    def looks_at_spins(self) -> bool:
        """Whether any of the rules does."""
        return any(rule.looks_at_spins for rule in self.rules)

    def closed(self, problem: Problem, size: int) -> Mixture:
        """The same for clusters of at most ``size`` spins of this problem, closed over its groups."""
        return replace(self, rules=tuple(closed_over_groups(rule, problem, size) for rule in self.rules))

    def drawn(self, seed: int, weights: RuleWeights | None = None) -> int:
        """The number of the rule that a round with this seed uses."""
        shares = self.shares if weights is None else weights.shares.tolist()
        level = next_unit(stream_for(seed, DRAW))
        for index, share in enumerate(shares[:-1]):
            level -= share
            if level < 0.0:
                return index
        return len(shares) - 1

    def pick(self, problem: Problem, size: int, wanted: int, seed: int, marks: Marks, view: View) -> tuple[I32, ...]:
        """Clusters of one of the rules, drawn by its share."""
        return self.rules[self.drawn(seed)].pick(problem, size, wanted, seed, marks, view)


@dataclass(eq=False)
class RuleWeights:
    """What each rule has gained and what work it took, f64 (R,) each, older rounds counting less and less.

    A rule's share is its share in the mixture times its rate, gain over work, never below a floor. Rates lean towards
    that of all rules together as long as a rule has done little work, and where nothing was gained at all, the shares
    are those of the mixture. Multiplying all gains, or all work, by one number changes no share.

    >>> weights = RuleWeights(mixture_of("ball,loose"))
    >>> for _ in range(50):
    ...     weights.reward(0, gain=1.0, work=1.0)
    ...     weights.reward(1, gain=3.0, work=1.0)
    >>> weights.shares.round(2).tolist()
    [0.3, 0.7]
    """

    mixture: Mixture
    gains: F64 = field(default_factory=lambda: np.zeros(0))
    work: F64 = field(default_factory=lambda: np.zeros(0))
    rounds: float = 0.0

    def __post_init__(self) -> None:
        if not len(self.gains):
            self.gains, self.work = np.zeros(len(self.mixture.rules)), np.zeros(len(self.mixture.rules))

    def reward(self, index: int, gain: float, work: float) -> None:
        """One round of rule ``index``: by how much it lowered the energy, all in all, and its counted work in seconds.

        Does nothing where the mixture does not adapt. Raises ``ValueError`` for numbers that are not finite or for work
        below zero.
        """
        if not (math.isfinite(gain) and math.isfinite(work) and work >= 0.0):
            raise ValueError(f"rule {self.mixture.rules[index].name}: gain {gain} for work {work} cannot be counted")
        if not self.mixture.adapt:
            return
        kept = math.exp(-1.0 / MEMORY)
        self.gains *= kept
        self.work *= kept
        self.rounds = kept * self.rounds + 1.0
        self.gains[index] += gain
        self.work[index] += work

    @property
    def shares(self) -> F64:
        """How often each rule is drawn now, f64 (R,), adding up to one."""
        fixed = np.array(self.mixture.shares)
        total = float(self.work.sum())
        if not self.mixture.adapt or total <= 0.0:
            return fixed
        average = max(0.0, float(self.gains.sum())) / total
        waiting = PATIENCE * total / self.rounds
        rates = np.maximum(0.0, self.gains + average * waiting) / (self.work + waiting)
        worth = fixed * rates
        if worth.sum() <= 0.0:
            return fixed
        floor = min(FLOOR, 0.5 / len(fixed))
        return floor + (1.0 - floor * len(fixed)) * worth / worth.sum()

    def as_state(self) -> dict[str, float]:
        """Everything that is to be kept, as numbers under plain names."""
        state = {"rounds": self.rounds}
        for rule, gain, work in zip(self.mixture.rules, self.gains.tolist(), self.work.tolist(), strict=True):
            state |= {f"{rule.name}.gain": gain, f"{rule.name}.work": work}
        return state

    @classmethod
    def from_state(cls, mixture: Mixture, state: Mapping[str, float]) -> Self:
        """The weights that gave this state; raises ``KeyError`` where they belong to other rules."""
        names = [rule.name for rule in mixture.rules]
        gains, work = (np.array([state[f"{name}.{what}"] for name in names]) for what in ("gain", "work"))
        return cls(mixture, gains, work, state["rounds"])


def mixture_of(setting: str | Mapping[str, float], adapt: bool = True) -> Mixture:
    """The rules written as ``ball``, ``ball=2,loose=1`` (a weight left out is 1) or as a table.

    Raises :class:`RuleError` for a rule that does not exist, with the nearest one, or a weight that is not above zero.
    """
    if isinstance(setting, str):
        parts = [part.partition("=") for part in setting.split(",")]
        pairs = [(name.strip(), _number(name.strip(), value.strip()) if sign else 1.0) for name, sign, value in parts]
    else:
        pairs = [(str(name), _number(str(name), value)) for name, value in setting.items()]
    if not pairs:
        raise RuleError(f"no rule is given; there are: {', '.join(RULES)}")
    names = [name for name, _ in pairs]
    for name, weight in pairs:
        if name not in RULES:
            raise RuleError(f"there is no rule {name!r}{_nearest(name)}; write ball or ball=2,loose=1")
        if names.count(name) > 1:
            raise RuleError(f"rule {name} is given {names.count(name)} times; give it once, with the weights added")
        if not (math.isfinite(weight) and weight > 0.0):
            raise RuleError(f"rule {name}: its weight is {weight:g}; give a number above zero, or leave the rule out")
    total = sum(weight for _, weight in pairs)
    return Mixture(tuple(RULES[name] for name in names), tuple(weight / total for _, weight in pairs), adapt)


def _number(name: str, value: object) -> float:
    try:
        return float(str(value))
    except ValueError:
        raise RuleError(f"rule {name}: its weight is {value!r}; give a number above zero, as in {name}=2") from None


def _nearest(word: str) -> str:
    close = difflib.get_close_matches(word, RULES, n=1, cutoff=0.5)
    hint = f"; did you mean {close[0]!r}?" if close else ";"
    return f"{hint} There are: {', '.join(RULES)}"
