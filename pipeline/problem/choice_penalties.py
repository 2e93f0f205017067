"""Penalties of choices under rules, with the proof that they are enough.

Write c for linear costs, q for quadratic ones. Features of one block never meet in a product, for it is 0.

**One-hot blocks** pay f(m) = t (1 - m) + P (1 - m)^2 for m ones: A = P + t for none, B = P - t for two, and ever more
for each further one, if P >= 0. **Domain walls** pay K for every place where the value is "v + 1 or more" but not "v
or more"; each adds a feature of 1 and one of -1. All else is free.

*Step 1.* Take any configuration and straighten domain walls one after another, keeping the first value: for each place
one feature a turns from 1 to 0 and one feature b from -1 to 0, which adds (c_b - c_a) + sum_e (q_be - q_ae) x_e at
most, with every other x_e in -1 .. 1. *Step 2.* From one-hot blocks of two or more ones, take the one that is cheapest
to drop: at most the second largest of drop_a = -(c_a + sum q x), as at least two are there. *Step 3.* To blocks of
none, when all others have at most one, give the value that adds least: at most min_a (c_a + sum q x), and at most its
average over a. Each step's bound takes the worst of what other blocks may be at that point. So if K, B and A lie above
their bounds, every step lowers the energy, and without rules a configuration of least energy is an answer.

*With rules*, let R be an upper bound of the best answer's cost less a lower bound of the cost of any configuration
that has all variables right, over the part of the problem that hangs together. Whoever breaks a rule pays Q at least,
and Q > R is more than that can save. K, A and B get R on top: a configuration with a variable wrong is then at least R
above one that has all of them right, which is not below the lower bound. So it is above the best answer, too. Where a
feasible answer is known, its own cost is an upper bound.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from scipy import sparse
from scipy.sparse.csgraph import connected_components

from patchwalk.problem.choices import Choices, Form, Rule
from patchwalk.problem.penalties import above, smallest

F64 = npt.NDArray[np.float64]
I64 = npt.NDArray[np.int64]
MOST_COMPARED = 100_000_000
"""Beyond so many differences of costs, a domain wall's bound is taken from their sizes alone: quicker, and larger."""

Extreme = Callable[[Form, list[float], int], float]


@dataclass(frozen=True, eq=False)
class Prices:
    """``square`` P (or K) and ``shift`` t of every block; ``rule`` Q of every rule."""

    square: F64
    shift: F64
    rule: F64


def prices_of(choices: Choices, known: Sequence[F64] = ()) -> Prices:
    """Penalties that are enough, see the module; ``known`` are features (f,) of answers that keep all rules."""
    parts, part_of = _parts(choices)
    ranges = _ranges(choices, part_of, parts, known)
    ruled = np.zeros(parts, np.bool_)
    ruled[[part_of[choices.block_of[rule.features[0]]] for rule in choices.rules if len(rule.features)]] = True
    square, shift = np.zeros(len(choices.blocks)), np.zeros(len(choices.blocks))
    for block, (form, _, _) in enumerate(choices.blocks):
        extra = ranges[part_of[block]] if ruled[part_of[block]] else 0.0
        if form == "domain-wall":
            square[block] = above(_wall_bound(choices, block) + extra, _unit(choices, block))
        elif form == "one-hot":
            add, drop = _one_hot_bounds(choices, block)
            unit = _unit(choices, block)
            add = math.ceil(add / unit * 8) / 8 * unit  # averages are fractions; binary ones keep whole numbers whole
            square[block] = above(max((add + drop) / 2, 0.0) + extra, unit)
            shift[block] = (add - drop) / 2
    unit = smallest(np.concatenate([choices.linear, choices.weights]))
    rules = [_rule_price(choices, rule, part_of, ranges, unit) for rule in choices.rules]
    return Prices(square, shift, np.array(rules, np.float64))


def _rule_price(choices: Choices, rule: Rule, part_of: I64, ranges: F64, unit: float) -> float:
    bound = ranges[part_of[choices.block_of[rule.features[0]]]] if len(rule.features) else 0.0
    return float(above(bound, unit))


def _parts(choices: Choices) -> tuple[int, I64]:
    """How many parts the problem falls into, joined by products and rules, and the part of every block."""
    of = choices.block_of
    heads, tails = [of[choices.heads]], [of[choices.tails]]
    for rule in choices.rules:
        blocks = of[rule.features]
        heads.append(blocks[:-1])
        tails.append(blocks[1:])
    first, second = np.concatenate(heads), np.concatenate(tails)
    size = len(choices.blocks)
    graph = sparse.coo_array((np.ones(len(first), np.int8), (first, second)), shape=(size, size))
    count, part = connected_components(graph, directed=False)
    return int(count), np.asarray(part, np.int64)


def _ranges(choices: Choices, part_of: I64, parts: int, known: Sequence[F64]) -> F64:
    """For every part, an upper bound of its best cost less a lower bound of all, every product shared by its two."""
    least, most = np.zeros(parts), np.zeros(parts)
    for block, (form, first, end) in enumerate(choices.blocks):
        low = [choices.linear[a] + _meeting(choices, a, _valid_least) / 2 for a in range(first, end)]
        high = [choices.linear[a] + _meeting(choices, a, _valid_most) / 2 for a in range(first, end)]
        if form == "free":
            low, high = [*low, 0.0], [*high, 0.0]
        least[part_of[block]] += min(low)
        most[part_of[block]] += max(high)
    for active in known:
        cost = np.bincount(part_of[choices.block_of], choices.linear * active, parts)
        pairs = choices.weights * active[choices.heads] * active[choices.tails]
        cost += np.bincount(part_of[choices.block_of[choices.heads]], pairs, parts)
        most = np.minimum(most, cost)
    return np.maximum(most - least, 0.0)


def _meeting(choices: Choices, feature: int, extreme: Extreme) -> float:
    """The extreme of sum q x over the other blocks, as ``extreme`` has it for one block."""
    return sum(
        extreme(choices.blocks[block][0], list(weights.values()), choices.blocks[block][2] - choices.blocks[block][1])
        for block, weights in choices.neighbours[feature].items()
    )


def _valid_least(form: Form, weights: list[float], size: int) -> float:
    """Of a block that is right."""
    return min(weights) if form != "free" and len(weights) == size else min(0.0, *weights)


def _valid_most(form: Form, weights: list[float], size: int) -> float:
    """Of a block that is right."""
    return max(weights) if form != "free" and len(weights) == size else max(0.0, *weights)


def _subset_least(form: Form, weights: list[float], size: int) -> float:
    """Of a block that may have any number of ones if it is one-hot, and is right otherwise."""
    return sum(min(0.0, weight) for weight in weights) if form == "one-hot" else _valid_least(form, weights, size)


def _sparse_most(form: Form, weights: list[float], size: int) -> float:
    """Of a block that may have none if it is one-hot, and is right otherwise."""
    return max(0.0, *weights) if form == "one-hot" else _valid_most(form, weights, size)


def _one_hot_bounds(choices: Choices, block: int) -> tuple[float, float]:
    """What giving a value to a block that has none adds at most, and dropping one of several."""
    _, first, end = choices.blocks[block]
    features = range(first, end)
    drops = sorted(-(choices.linear[a] + _meeting(choices, a, _subset_least)) for a in features)
    adds = [choices.linear[a] + _meeting(choices, a, _sparse_most) for a in features]
    summed: dict[int, dict[int, float]] = {}
    for a in features:
        for other, weights in choices.neighbours[a].items():
            column = summed.setdefault(other, {})
            for e, weight in weights.items():
                column[e] = column.get(e, 0.0) + weight
    average = float(choices.linear[first:end].sum())
    for other, column in summed.items():
        form, begin, stop = choices.blocks[other]
        average += _sparse_most(form, list(column.values()), stop - begin)
    return float(min(*adds, average / (end - first))), float(drops[-2])


def _wall_bound(choices: Choices, block: int) -> float:
    """What straightening one place of a domain wall adds at most."""
    _, first, end = choices.blocks[block]
    met = sorted({e for a in range(first, end) for weights in choices.neighbours[a].values() for e in weights})
    linear = choices.linear[first:end]
    if (end - first) ** 2 * len(met) > MOST_COMPARED:
        sums = np.array(
            [sum(abs(w) for of in choices.neighbours[a].values() for w in of.values()) for a in range(first, end)]
        )
        return float((linear + sums).max() - (linear - sums).min())
    place = {e: column for column, e in enumerate(met)}
    table = np.zeros((end - first, len(met)))
    for a in range(first, end):
        for weights in choices.neighbours[a].values():
            for e, weight in weights.items():
                table[a - first, place[e]] = weight
    return float(max((linear - linear[a] + np.abs(table - table[a]).sum(axis=1)).max() for a in range(end - first)))


def _unit(choices: Choices, block: int) -> float:
    """The least cost that a block has to do with."""
    _, first, end = choices.blocks[block]
    products = [
        weight for a in range(first, end) for weights in choices.neighbours[a].values() for weight in weights.values()
    ]
    return smallest(np.concatenate([choices.linear[first:end], products]))
