"""Choices under rules put together as spins: costs, the penalties that keep variables right, and those of rules."""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from dataclasses import replace
from itertools import pairwise
from typing import Any

import numpy as np

from patchwalk.problem.choice_penalties import Prices, prices_of
from patchwalk.problem.choice_repair import cheapest, repaired
from patchwalk.problem.choices import F64, Choices, Product, Rule, Variable
from patchwalk.problem.ising import Problem, ProblemError
from patchwalk.problem.kinds.chosen import ChosenValues, Kept, bounds_of
from patchwalk.problem.penalties import MOST_SLACK_BITS, problem_of_bits

MOST_PRODUCTS = 2_000_000

Products = list[list[Product]]
"""Every feature as a sum of products of bits."""


class _Form:
    """A quadratic form of bits as it is put together."""

    def __init__(self) -> None:
        self.offset = 0.0
        self.linear: dict[int, float] = {}
        self.pairs: dict[tuple[int, int], float] = {}

    def add(self, weight: float, one: Sequence[Product], other: Sequence[Product] = ((1.0, ()),)) -> None:
        """Add weight times the product of two sums of products."""
        if len(one) * len(other) > 4 * MOST_PRODUCTS:
            raise ProblemError(f"a rule of {len(one)} terms makes too many products of bits; state it in smaller parts")
        for first, some in one:
            for second, more in other:
                factors = sorted({*some, *more})
                number = weight * first * second
                if len(factors) > 2:
                    raise ProblemError(
                        "the binary form of three or four values is a product of two bits and can have costs of its "
                        "own only, in no rule and no product; use the form one-hot or domain-wall"
                    )
                if len(factors) == 2:
                    pair = factors[0], factors[1]
                    self.pairs[pair] = self.pairs.get(pair, 0.0) + number
                elif factors:
                    self.linear[factors[0]] = self.linear.get(factors[0], 0.0) + number
                else:
                    self.offset += number
        if len(self.pairs) > MOST_PRODUCTS:
            raise ProblemError(f"the costs and rules make more than {MOST_PRODUCTS} products of bits; state fewer")


def encode_choices(choices: Choices, known: Mapping[str, Any] | None = None, notes: Iterable[str] = ()) -> Problem:
    """The problem of least cost; energy = cost of every answer that keeps all rules, with slack as it should be.

    ``known`` is a value of an answer that keeps all rules: it only makes penalties smaller, as does one that a cheap
    repair finds. The proof that they are
    enough is in :mod:`patchwalk.problem.choice_penalties`. Raises :class:`ProblemError` for a rule that can never be
    kept or needs more slack than 10 bits, and for a known answer that breaks a rule.
    """
    if not choices.variables:
        raise ProblemError("there is nothing to decide; state at least one variable")
    size = choices.variables[-1].first_bit + choices.variables[-1].bit_count
    said = list(notes)
    kept: list[Kept] = []
    for rule in choices.rules:
        one = _kept(choices, rule, size, said)
        if one is not None:
            kept.append(one)
            size += len(one.steps)
    encoding = ChosenValues(choices, tuple(kept), size)
    prices = prices_of(replace(choices, rules=tuple(one.rule for one in kept)), _known_answers(encoding, known))
    products = [one.products(place) for one in choices.variables for place in range(one.feature_count)]
    form = _Form()
    _add_costs(form, choices, products)
    _add_blocks(form, choices, products, prices)
    for one, price in zip(kept, prices.rule.tolist(), strict=True):
        _add_rule(form, products, one, price)
    return _problem(form, encoding, products, said)


def _known_answers(encoding: ChosenValues, known: Mapping[str, Any] | None) -> list[F64]:
    """The features of answers that keep all rules: the one given, and one found on the cheap if it can be."""
    answers = []
    if known is not None:
        broken = encoding.judge({"choices": known})[1]
        if broken:
            raise ProblemError(f"the known answer breaks the rules: {broken[0]}")
        answers.append(encoding.active({"choices": known}))
    if encoding.kept:
        found = repaired(encoding.choices, cheapest(encoding.choices))
        if found is not None and not any(rule.excess(rule.total(found)) for rule in encoding.choices.rules):
            answers.append(found)
    return answers


def _kept(choices: Choices, rule: Rule, first_bit: int, notes: list[str]) -> Kept | None:
    """How a rule is to be kept; None, with a note, where nothing can break it."""
    least, most = choices.reach(rule)
    if rule.least > most or rule.most < least or rule.least > rule.most:
        raise ProblemError(
            f"{rule.name} can never be kept: the total is {least} to {most}, but {bounds_of(rule)} is asked for"
        )
    if rule.least <= least and rule.most >= most:
        notes.append(f"{rule.name} is always kept: the total is {least} to {most}")
        return None
    low, high = max(rule.least, least), min(rule.most, most)
    if high - low >= 2**MOST_SLACK_BITS:
        raise ProblemError(
            f"{rule.name} leaves room for {high - low + 1} totals, {low} to {high}; {MOST_SLACK_BITS} slack bits tell "
            f"{2**MOST_SLACK_BITS} apart: narrow the bounds, or state the rule in coarser units"
        )
    forms = {choices.blocks[block][0] for block in choices.block_of[rule.features].tolist()}
    ones = not rule.constant and bool(np.all(rule.coefficients == 1)) and forms <= {"free", "one-hot"}
    pairwise = ones and rule.least <= 0 and rule.most == 1
    return Kept(rule, pairwise, low, 0 if pairwise else high - low, first_bit)


def _add_costs(form: _Form, choices: Choices, products: Products) -> None:
    form.offset += choices.constant
    for feature in np.flatnonzero(choices.linear).tolist():
        form.add(float(choices.linear[feature]), products[feature])
    for one, other, weight in zip(
        choices.heads.tolist(), choices.tails.tolist(), choices.weights.tolist(), strict=True
    ):
        form.add(weight, products[one], products[other])


def _add_blocks(form: _Form, choices: Choices, products: Products, prices: Prices) -> None:
    for block, (kind, first, end) in enumerate(choices.blocks):
        square, shift = float(prices.square[block]), float(prices.shift[block])
        if kind == "one-hot":
            missing: list[Product] = [(1.0, ())]
            missing += [(-1.0, factors) for feature in range(first, end) for _, factors in products[feature]]
            form.add(shift, missing)
            form.add(square, missing, missing)
        elif kind == "domain-wall":
            bits = [products[feature][0][1] for feature in range(first + 1, end)]
            for before, after in pairwise(bits):
                form.add(square, [(1.0, after), (-1.0, (*before, *after))])


def _add_rule(form: _Form, products: Products, kept: Kept, price: float) -> None:
    rule = kept.rule
    if kept.pairwise:
        for place, one in enumerate(rule.features.tolist()):
            for other in rule.features[:place].tolist():
                form.add(price, products[one], products[other])
        return
    total: list[Product] = [(float(rule.constant - kept.least), ())]
    for feature, coefficient in zip(rule.features.tolist(), rule.coefficients.tolist(), strict=True):
        total += [(coefficient * weight, factors) for weight, factors in products[feature]]
    total += [(-float(step), (kept.first_bit + place,)) for place, step in enumerate(kept.steps)]
    form.add(price, total, total)


def _problem(form: _Form, encoding: ChosenValues, products: Products, notes: list[str]) -> Problem:
    linear = np.zeros(encoding.size)
    linear[list(form.linear)] = list(form.linear.values())
    pairs = np.array(list(form.pairs), np.int64).reshape(-1, 2)
    names: list[str] = []
    for one in encoding.choices.variables:
        names += _bit_names(one)
    for kept in encoding.kept:
        names += [f"slack {place + 1} of {kept.rule.name}" for place in range(len(kept.steps))]
    return problem_of_bits(
        pairs[:, 0],
        pairs[:, 1],
        list(form.pairs.values()),
        linear,
        form.offset,
        kind="constrained",
        names=names,
        groups=_groups(encoding, products),
        encoding=encoding,
        notes=notes,
    )


def _bit_names(one: Variable) -> list[str]:
    if one.values is None:
        return [f"{one.name}, bit of {step}" for step in one.steps]
    if one.form == "free":
        return [one.name]
    if one.form == "one-hot":
        return [f"{one.name} is {value}" for value in one.values]
    if one.form == "domain-wall":
        return [f"{one.name} is after {value}" for value in one.values[:-1]]
    return [f"{one.name}, bit {place + 1}" for place in range(one.bit_count)]


def _groups(encoding: ChosenValues, products: Products) -> list[list[int]]:
    """The bits of one-hot variables, and of rules that ask for exactly one of several bits."""
    choices = encoding.choices
    groups = [
        list(range(one.first_bit, one.first_bit + one.bit_count)) for one in choices.variables if one.form == "one-hot"
    ]
    for kept in encoding.kept:
        rule = kept.rule
        factors = [products[feature] for feature in rule.features.tolist()]
        single = all(len(each) == 1 and len(each[0][1]) == 1 for each in factors)
        exactly_one = rule.least == rule.most == 1 and not rule.constant and bool(np.all(rule.coefficients == 1))
        if exactly_one and single and len(factors) > 1:
            groups.append([each[0][1][0] for each in factors])
    return groups
