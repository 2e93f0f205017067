"""Clauses of two or three literals, of which as much weight as possible is to be satisfied.

A literal is a whole number: v for variable v, counted from 1, and -v for its negation; 0 fills a row up. A variable
that is true is spin -1. A clause of weight w that is not satisfied costs w, so that energy = -satisfied weight.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt
from scipy import sparse
from scipy.sparse.csgraph import connected_components

from patchwalk.problem.ising import Problem, ProblemError
from patchwalk.problem.meanings import I8, Encoding, labels_of, truth_values
from patchwalk.problem.penalties import above, problem_of_bits

I64 = npt.NDArray[np.int64]
F64 = npt.NDArray[np.float64]
Clauses = I64 | Sequence[Sequence[int]]

BROKEN_LISTED = 100
MOST_FLIPS, MOST_LOOKED_AT = 1000, 10_000_000
"""A repair that takes more flips, or looks at more clauses, would not be cheap."""


@dataclass(frozen=True, eq=False)
class ClauseForm(Encoding):
    """Clauses ``literals`` i64 (m, width), ``weights`` f64 (m,), infinite for those that must be satisfied.

    ``products`` i64 (a, 2) are pairs of literals: auxiliary spin n + j is down if both literals of pair j are false.
    """

    literals: I64
    weights: F64
    labels: tuple[str, ...]
    products: I64
    main = "assignment"

    def read(self, spins: I8) -> dict[str, Any]:
        values = (spins[: len(self.labels)] == -1).tolist()
        return {"assignment": dict(zip(self.labels, values, strict=True))}

    def judge(self, value: Mapping[str, Any]) -> tuple[float, tuple[str, ...]]:
        satisfied = np.any(self._true(truth_values(value, self.main, self.labels), self.literals), axis=1)
        hard = np.isinf(self.weights)
        failed = np.flatnonzero(hard & ~satisfied)
        broken = [f"clause {place + 1} ({self._spell(place)}) is not satisfied" for place in failed[:BROKEN_LISTED]]
        broken += [f"clause {place + 1} is not satisfied" for place in failed[BROKEN_LISTED:]]
        return float(self.weights[satisfied & ~hard].sum()), tuple(broken)

    def encode(self, value: Mapping[str, Any]) -> I8:
        values = truth_values(value, self.main, self.labels)
        auxiliary = ~np.any(self._true(values, self.products), axis=1)
        return np.where(np.concatenate([values == 1, auxiliary]), -1, 1).astype(np.int8)

    def settle(self, spins: I8) -> I8:
        return self.encode(self.read(spins))

    def mend(self, spins: I8) -> I8:
        """While that leaves fewer hard clauses broken, the best flip in the first that is broken."""
        hard = self.literals[np.isinf(self.weights)]
        values = truth_values(self.read(spins), self.main, self.labels)
        broken = np.flatnonzero(~np.any(self._true(values, hard), axis=1))
        for _ in range(min(MOST_FLIPS, MOST_LOOKED_AT // max(len(hard), 1))):
            if not len(broken):
                break
            trials = []
            for literal in hard[broken[0]][hard[broken[0]] != 0].tolist():
                flipped = values.copy()
                flipped[abs(literal) - 1] = literal > 0
                trials.append((flipped, np.flatnonzero(~np.any(self._true(flipped, hard), axis=1))))
            if not trials or min(len(left) for _, left in trials) >= len(broken):
                break
            values, broken = min(trials, key=lambda trial: len(trial[1]))
        return self.encode({self.main: dict(zip(self.labels, values.tolist(), strict=True))})

    def _true(self, values: npt.NDArray[np.int64], literals: I64) -> npt.NDArray[np.bool_]:
        known = np.concatenate([[False], values == 1])
        return (literals != 0) & (known[np.abs(literals)] == (literals > 0))

    def _spell(self, place: int) -> str:
        words = [("" if one > 0 else "not ") + self.labels[abs(one) - 1] for one in self.literals[place] if one]
        return " or ".join(words) or "empty"


def encode_max2sat(
    clauses: Clauses,
    weights: npt.ArrayLike | None = None,
    variable_count: int | None = None,
    *,
    names: Iterable[str] | None = None,
    notes: Iterable[str] = (),
) -> Problem:
    """The problem of satisfying the most weight of clauses of at most two literals; energy = -satisfied weight.

    ``clauses`` is an array (m, width) of literals filled up with 0, or a list of lists; ``weights`` (m,) are 0 or more,
    1 by default, infinite for a clause that *must* be satisfied. The energy is exact for every configuration that
    satisfies those.

    **Penalties.** A configuration that satisfies all clauses that must be has an energy of at most 0 above the
    constant; one that does not saves at most S, the weight of all other clauses (of those that share variables with
    it through clauses, for parts that share none are decided apart). So any penalty above S is enough, and with the
    clauses (x) of weight S and (not x), which must be, none below S is.

    Raises :class:`ProblemError` for a variable outside 1 .. ``variable_count``, a negative weight, or a
    clause of three different literals.

    >>> encode_max2sat([[1, 2], [-1, 2], [-2]]).energy([1, 1])
    -2.0
    """
    return _encode(clauses, weights, variable_count, 2, names, tuple(notes))


def encode_max3sat(
    clauses: Clauses,
    weights: npt.ArrayLike | None = None,
    variable_count: int | None = None,
    *,
    names: Iterable[str] | None = None,
    notes: Iterable[str] = (),
) -> Problem:
    """The same for clauses of at most three literals, through auxiliary spins (Rosenberg, Cah. Cent. Etud. Rech. Oper.
    17 (1975) 71).

    Such a clause costs w n1 n2 n3 with n = 1 where a literal is false. A new bit z takes the place of n1 n2, kept by
    the penalty P (n1 n2 - 2 n1 z - 2 n2 z + 3 z), which is 0 for z = n1 n2 and at least P otherwise. Clauses share z:
    each takes that of its three pairs of literals which most clauses have. The energy is exact wherever z = n1 n2.

    **Penalties.** A wrong z = 1 saves nothing, for z only costs; a wrong z = 0 saves at most W, the weight of all
    clauses that use it. So any P above W is enough. With P below W the clause (x or y or z) of weight W next to
    (not x), (not y), (not z), each weighing between P and W, is better left alone: none below W is.

    Clauses that must be satisfied, raises and arguments are those of :func:`encode_max2sat`.
    """
    return _encode(clauses, weights, variable_count, 3, names, tuple(notes))


def _encode(
    clauses: Clauses,
    weights: npt.ArrayLike | None,
    variable_count: int | None,
    width: int,
    names: Iterable[str] | None,
    notes: tuple[str, ...],
) -> Problem:
    given = _table(clauses)
    size = int(np.abs(given).max(initial=0)) if variable_count is None else int(variable_count)
    values = np.ones(len(given)) if weights is None else np.array(weights, np.float64).ravel()
    _check(given, values, size)
    literals, tautologies = _tidied(given, width)
    costs = np.where(np.isinf(values), _penalties_of_hard(literals, values, size), values)
    costs[tautologies] = 0.0
    short = literals[:, -1] == 0 if width == 3 else np.ones(len(literals), np.bool_)
    products, used, left = _choose_products(literals[~short])
    form = _FalseProducts(size + len(products))
    form.add(literals[short, 0], literals[short, 1], costs[short])
    _add_products(form, products, used, left, costs[~short], size)
    kept = None if names is None else tuple(names)
    labels = labels_of(kept, size)
    auxiliary = [f"auxiliary {place + 1}" for place in range(len(products))]
    return form.problem(
        offset=-float(values[np.isfinite(values)].sum()),
        kind=f"max{width}sat",
        names=None if kept is None and not auxiliary else (*labels, *auxiliary),
        encoding=ClauseForm(given, values, labels, products),
        notes=notes,
    )


def _table(clauses: Clauses) -> I64:
    """The clauses as i64 (m, width)."""
    if isinstance(clauses, np.ndarray) and clauses.ndim == 2:
        return np.array(clauses, np.int64)
    rows = [[int(literal) for literal in clause] for clause in clauses]
    width = max(map(len, rows), default=0)
    return np.array([row + [0] * (width - len(row)) for row in rows], np.int64).reshape(len(rows), width)


def _check(literals: I64, weights: F64, size: int) -> None:
    if len(weights) != len(literals):
        raise ProblemError(f"{len(weights)} weights for {len(literals)} clauses; give one each")
    if size < 1:
        raise ProblemError("there is no variable; give at least one clause that has a literal")
    outside = np.argwhere(np.abs(literals) > size)
    if len(outside):
        clause, place = outside[0]
        raise ProblemError(
            f"clause {clause + 1} has literal {literals[clause, place]}, but the variables are numbered 1 to {size}"
        )
    wrong = np.flatnonzero(~(weights >= 0))
    if len(wrong):
        raise ProblemError(f"clause {wrong[0] + 1} has weight {weights[wrong[0]]:g}; weights are 0 or more")


def _tidied(literals: I64, width: int) -> tuple[I64, npt.NDArray[np.bool_]]:
    """Literals i64 (m, width), each once and in front, and which clauses hold a literal and its negation."""
    order = np.argsort(np.where(literals == 0, np.iinfo(np.int64).max, np.abs(literals)), axis=1, kind="stable")
    rows = np.take_along_axis(literals, order, axis=1)
    same = np.abs(rows[:, 1:]) == np.abs(rows[:, :-1])
    tautologies = np.any(same & (rows[:, 1:] == -rows[:, :-1]) & (rows[:, 1:] != 0), axis=1)
    rows[:, 1:][same] = 0
    rows = np.take_along_axis(rows, np.argsort(rows == 0, axis=1, kind="stable"), axis=1)
    rows[tautologies] = 0
    if np.any(rows[:, width:]):
        clause = int(np.flatnonzero(np.any(rows[:, width:], axis=1))[0])
        count = int(np.count_nonzero(rows[clause]))
        way = "use kind max3sat" if width == 2 and count == 3 else f"kind max{width}sat takes {width} at most"
        raise ProblemError(f"clause {clause + 1} has {count} different literals; {way}")
    filled = np.zeros((len(rows), width), np.int64)
    filled[:, : min(width, rows.shape[1])] = rows[:, :width]
    return filled, tautologies


def _penalties_of_hard(literals: I64, weights: F64, size: int) -> F64:
    """For every clause what breaking it must cost: above the weight of all others in its part."""
    hard = np.isinf(weights)
    if not np.any(hard):
        return np.ones(len(weights))
    first = np.abs(literals[:, 0])
    heads, tails = np.repeat(first, literals.shape[1] - 1), np.abs(literals[:, 1:]).ravel()
    joined = tails > 0
    ones = np.ones(np.count_nonzero(joined), np.int8)
    graph = sparse.coo_array((ones, (heads[joined], tails[joined])), shape=(size + 1, size + 1))
    count, part = connected_components(graph, directed=False)
    soft = np.bincount(part[first], np.where(hard, 0.0, weights), count)
    return above(soft)[part[first]]


def _choose_products(triples: I64) -> tuple[I64, I64, I64]:
    """Pairs of literals i64 (a, 2); for every clause of three, i64 (t,), which pair it uses and the literal left."""
    if not len(triples):
        return np.empty((0, 2), np.int64), np.empty(0, np.int64), np.empty(0, np.int64)
    choices = triples[:, [[0, 1], [0, 2], [1, 2]]].reshape(-1, 2)
    span = 2 * int(np.abs(choices).max()) + 1
    _, first, which, counts = np.unique(
        choices[:, 0] * span + choices[:, 1], return_index=True, return_inverse=True, return_counts=True
    )
    pairs, which = choices[first], which.reshape(-1, 3)
    clauses = np.arange(len(triples))
    best = np.argmax(counts[which], axis=1)
    chosen, used = np.unique(which[clauses, best], return_inverse=True)
    return pairs[chosen], used.ravel(), triples[clauses, 2 - best]


def _add_products(form: _FalseProducts, products: I64, used: I64, left: I64, costs: F64, size: int) -> None:
    """Clauses of three as w z n3, and the penalties that keep every z at n1 n2."""
    auxiliary = -(size + 1 + np.arange(len(products)))  # "false" of a negated literal is the bit itself
    form.add(auxiliary[used], left, costs)
    penalties = above(np.bincount(used, costs, len(products)))
    nothing = np.zeros(len(products), np.int64)
    form.add(products[:, 0], products[:, 1], penalties)
    form.add(products[:, 0], auxiliary, -2 * penalties)
    form.add(products[:, 1], auxiliary, -2 * penalties)
    form.add(auxiliary, nothing, 3 * penalties)


class _FalseProducts:
    """A sum of products of "this literal is false", gathered as a quadratic form of bits."""

    def __init__(self, size: int) -> None:
        self.linear = np.zeros(size)
        self.offset = 0.0
        self.pairs: list[tuple[I64, I64, F64]] = []

    def add(self, one: I64, other: I64, weights: F64) -> None:
        """Add weights times "``one`` is false" times "``other`` is false", where literal 0 is always false.

        "False" is a + b x: 1 - x for a literal, x for a negated one, 1 for literal 0.
        """
        size = len(self.linear)
        (a, b), (c, d) = ((np.where(side < 0, 0.0, 1.0), -np.sign(side)) for side in (one, other))
        self.offset += float((weights * a * c).sum())
        self.linear += np.bincount(np.maximum(np.abs(one) - 1, 0), weights * b * c, size)
        self.linear += np.bincount(np.maximum(np.abs(other) - 1, 0), weights * a * d, size)
        both = (one != 0) & (other != 0)
        self.pairs.append((np.abs(one[both]) - 1, np.abs(other[both]) - 1, (weights * b * d)[both]))

    def problem(self, offset: float, **rest: Any) -> Problem:
        """The problem whose energy is this sum and the offset."""
        heads, tails, weights = (np.concatenate(parts) for parts in zip(*self.pairs, strict=True))
        return problem_of_bits(heads, tails, weights, self.linear, self.offset + offset, **rest)
