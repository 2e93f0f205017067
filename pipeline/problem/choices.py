"""Named choices under rules, as a builder or our JSON states them, before they become spins.

A *feature* is a number that is 0 or 1 in every answer: a yes-or-no variable, a bit of a whole number, or "this
variable has that value". Costs are linear and quadratic in features, rules bound whole-numbered sums of them.
Features come in *blocks*: one that is free, or the values of one variable, of which exactly one is 1.
"""

from __future__ import annotations

from collections import defaultdict
from collections.abc import Sequence
from dataclasses import dataclass, field
from functools import cached_property
from typing import Any, Literal

import numpy as np
import numpy.typing as npt

from patchwalk.problem.penalties import count_coefficients

F64 = npt.NDArray[np.float64]
I64 = npt.NDArray[np.int64]

Form = Literal["free", "one-hot", "domain-wall", "binary"]
UNBOUNDED = 2**62
FORMS = ("one-hot", "domain-wall", "binary")
Product = tuple[float, tuple[int, ...]]
"""A number times a product of bits."""


@dataclass(frozen=True)
class Variable:
    """What the user decides. ``values`` for a choice, (False, True) for yes or no, None for a whole number."""

    name: str
    form: Form
    values: tuple[Any, ...] | None
    least: int
    most: int
    first_feature: int
    first_bit: int

    @property
    def steps(self) -> list[int]:
        """By how much each bit of a whole number raises it."""
        return count_coefficients(self.most - self.least)

    @property
    def feature_count(self) -> int:
        if self.values is None:
            return len(self.steps)
        return 1 if self.form == "free" else len(self.values)

    @property
    def bit_count(self) -> int:
        if self.form in ("free", "one-hot"):
            return self.feature_count
        count = self.feature_count - 1
        return count if self.form == "domain-wall" else len(count_coefficients(count))

    def products(self, place: int) -> list[Product]:
        """The feature of this place as a sum of products of bits.

        One-hot: the bit of the value. Domain wall: y_v - y_(v+1) with y_v = 1 where the value is v or more, y_0 = 1.
        Binary: the sum over all bit patterns whose steps add up to the value, of the product that picks each.
        """
        if self.form in ("free", "one-hot"):
            return [(1.0, (self.first_bit + place,))]
        if self.form == "domain-wall":
            before = (1.0, (self.first_bit + place - 1,) if place else ())
            return [before, (-1.0, (self.first_bit + place,))] if place < self.bit_count else [before]
        steps = count_coefficients(self.feature_count - 1)
        total: dict[tuple[int, ...], float] = defaultdict(float)
        for pattern in range(2 ** len(steps)):
            bits = [pattern >> k & 1 for k in range(len(steps))]
            if sum(step * bit for step, bit in zip(steps, bits, strict=True)) == place:
                for weight, factors in _picker(bits, self.first_bit):
                    total[factors] += weight
        return [(weight, factors) for factors, weight in total.items() if weight]


def _picker(bits: Sequence[int], first: int) -> list[Product]:
    """The product that is 1 for this pattern of bits and 0 for every other, multiplied out."""
    products: list[Product] = [(1.0, ())]
    for place, bit in enumerate(bits, first):
        with_bit = [(weight, (*factors, place)) for weight, factors in products]
        products = with_bit if bit else products + [(-weight, factors) for weight, factors in with_bit]
    return products


@dataclass(frozen=True, eq=False)
class Rule:
    """``least <= constant + sum coefficients * features <= most``, all whole numbers, or one side ``UNBOUNDED``."""

    name: str
    features: I64
    coefficients: I64
    constant: int
    least: int
    most: int

    def total(self, active: F64) -> int:
        """The sum, from all features (f,)."""
        return self.constant + round(float(self.coefficients @ active[self.features]))

    def excess(self, total: int) -> int:
        """By how much the sum is outside."""
        return max(self.least - total, total - self.most, 0)


@dataclass(frozen=True, eq=False)
class Choices:
    """The whole problem: costs ``constant + linear @ f + sum weights * f[heads] * f[tails]``, to be least."""

    variables: tuple[Variable, ...]
    constant: float
    linear: F64
    heads: I64
    tails: I64
    weights: F64
    rules: tuple[Rule, ...]
    about: dict[str, Any] = field(default_factory=dict)

    def cost(self, active: F64) -> float:
        """The objective, from all features (f,)."""
        pairs = float(self.weights @ (active[self.heads] * active[self.tails]))
        return self.constant + float(self.linear @ active) + pairs

    @cached_property
    def blocks(self) -> list[tuple[Form, int, int]]:
        """Form, first feature and end of every block."""
        blocks: list[tuple[Form, int, int]] = []
        for one in self.variables:
            first, end = one.first_feature, one.first_feature + one.feature_count
            if one.form == "free":
                blocks += [("free", feature, feature + 1) for feature in range(first, end)]
            else:
                blocks.append((one.form, first, end))
        return blocks

    @cached_property
    def block_of(self) -> I64:
        """The block of every feature."""
        sizes = [end - first for _, first, end in self.blocks]
        return np.repeat(np.arange(len(sizes)), sizes)

    @cached_property
    def neighbours(self) -> list[dict[int, dict[int, float]]]:
        """For every feature, by block, the features it is multiplied with and the weight."""
        table: list[dict[int, dict[int, float]]] = [defaultdict(dict) for _ in self.linear]
        for one, other, weight in zip(self.heads.tolist(), self.tails.tolist(), self.weights.tolist(), strict=True):
            table[one][int(self.block_of[other])][other] = weight
            table[other][int(self.block_of[one])][one] = weight
        return table

    def reach(self, rule: Rule) -> tuple[int, int]:
        """The least and the most that a rule's sum can be, whatever the other rules say."""
        least = most = rule.constant
        by_block: dict[int, list[int]] = defaultdict(list)
        for feature, coefficient in zip(rule.features.tolist(), rule.coefficients.tolist(), strict=True):
            by_block[int(self.block_of[feature])].append(coefficient)
        for block, coefficients in by_block.items():
            form, first, end = self.blocks[block]
            if form == "free" or len(coefficients) < end - first:
                coefficients = [*coefficients, 0]
            least, most = least + min(coefficients), most + max(coefficients)
        return least, most
