"""Problems stated in the user's words: named variables, costs and rules."""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from patchwalk.problem import networks
from patchwalk.problem.choice_spins import encode_choices
from patchwalk.problem.choices import FORMS, UNBOUNDED, Choices, Form, Rule, Variable
from patchwalk.problem.ising import Problem, ProblemError
from patchwalk.problem.sources import LARGEST_NUMBER

if TYPE_CHECKING:
    import networkx as nx

Term = str | tuple[str, Any]
MOST_NUMBER = 2**20
MOST_VALUES = 1000


@dataclass(frozen=True)
class _Sum:
    """A term as a constant and whole-numbered multiples of features."""

    constant: int
    parts: tuple[tuple[int, int], ...]


class ProblemBuilder:
    """A problem of least cost, stated piece by piece in words of your own, then built.

    A *term* is the name of a yes-or-no variable (1 if yes), the name of a whole number (itself), or a pair ``(name,
    value)`` (1 if that choice has that value). Costs are numbers times products of up to two terms; rules bound sums
    of terms. Everything raises :class:`~patchwalk.problem.ising.ProblemError` for names and values that do not exist.

    >>> rota = ProblemBuilder()
    >>> for day in ("Mon", "Tue"):
    ...     rota.choice(day, ["Ada", "Ben"])
    >>> rota.cost(2, ("Mon", "Ada"))
    >>> rota.cost(5, ("Mon", "Ben"), ("Tue", "Ben"))
    >>> rota.at_most_one([("Mon", "Ada"), ("Tue", "Ada")], name="Ada works once")
    >>> problem = rota.build()
    >>> spins = problem.encoding.encode({"choices": {"Mon": "Ada", "Tue": "Ben"}})
    >>> problem.energy(spins), problem.encoding.decode(spins).feasible
    (2.0, True)
    """

    def __init__(self) -> None:
        self._variables: dict[str, Variable] = {}
        self._features = self._bits = 0
        self._owners: list[str] = []
        self._constant = 0.0
        self._linear: dict[int, float] = {}
        self._pairs: dict[tuple[int, int], float] = {}
        self._rules: list[Rule] = []

    def yes_no(self, name: str) -> None:
        """A variable that is true or false."""
        self._add(name, "free", (False, True), 0, 1)

    def choice(self, name: str, values: Iterable[Any], form: str = "one-hot") -> None:
        """A variable with one of these values; a single one is simply taken.

        ``form`` is ``one-hot`` (a spin for each value), ``domain-wall`` (one less; suits values with an order, whose
        costs change little from one to the next) or ``binary`` (the fewest spins, for four values at most; of three
        or four only costs of their own, in no rule and no product).
        """
        listed = tuple(values)
        if form not in FORMS:
            raise ProblemError(f"form {form!r} of {name!r} is not known; it is one of: {', '.join(FORMS)}")
        if not listed or len(listed) > MOST_VALUES:
            raise ProblemError(f"{name!r} has {len(listed)} values; give 1 to {MOST_VALUES}")
        if not all(isinstance(value, str | int | float) for value in listed):
            raise ProblemError(f"{name!r} has a value that is neither text nor a number")
        if len(set(map(str, listed))) < len(listed):
            raise ProblemError(f"{name!r} has a value twice; values must differ")
        if form == "binary" and len(listed) > 4:
            raise ProblemError(
                f"{name!r} has {len(listed)} values; the binary form takes four at most: use one-hot or domain-wall"
            )
        kept: Form = "domain-wall" if len(listed) == 1 else form  # type: ignore[assignment] # looked up above
        self._add(name, kept, listed, 0, len(listed) - 1)

    def number(self, name: str, least: int, most: int) -> None:
        """A whole number from ``least`` to ``most``, in binary."""
        for bound in (least, most):
            if not isinstance(bound, int | np.integer) or isinstance(bound, bool) or abs(bound) > MOST_NUMBER:
                raise ProblemError(f"bound {bound!r} of {name!r} is not a whole number up to {MOST_NUMBER}")
        if most <= least:
            raise ProblemError(f"{name!r} is {least} to {most}, which leaves nothing to decide")
        self._add(name, "free", None, int(least), int(most))

    def cost(self, weight: float, *terms: Term) -> None:
        """Add a number times the product of no, one or two terms to the cost; negative numbers are rewards."""
        number = float(weight)
        if not abs(number) <= LARGEST_NUMBER:
            raise ProblemError(f"cost {weight!r} is not a finite number up to 1e100")
        if len(terms) > 2:
            raise ProblemError(f"a product of {len(terms)} terms; costs are of two terms at most")
        one, other = ([*map(self._sum, terms), _Sum(1, ()), _Sum(1, ())])[:2]
        for first, feature in ((one.constant, None), *((k, f) for f, k in one.parts)):
            for second, more in ((other.constant, None), *((k, f) for f, k in other.parts)):
                self._add_cost(number * first * second, feature, more)

    def exactly_one(self, terms: Iterable[Term], name: str | None = None) -> None:
        """Exactly one of the terms is 1."""
        self.total(terms, 1, 1, name=name)

    def at_most_one(self, terms: Iterable[Term], name: str | None = None) -> None:
        """At most one of the terms is 1."""
        self.total(terms, None, 1, name=name)

    def total(
        self,
        terms: Iterable[Term],
        least: int | None = None,
        most: int | None = None,
        *,
        times: Sequence[int] | None = None,
        name: str | None = None,
    ) -> None:
        """The sum of terms, each ``times`` a whole number (1 by default), is ``least`` to ``most``.

        Equal bounds make an equation; a bound that is left out does not bind. ``name`` is what a broken rule is called
        in answers.
        """
        listed = list(terms)
        factors = [1] * len(listed) if times is None else list(times)
        called = f"rule {len(self._rules) + 1}" if name is None else name
        if not listed or len(factors) != len(listed):
            raise ProblemError(
                f"{called}: {len(factors)} numbers for {len(listed)} terms; give one each, for one or more"
            )
        for number in (*factors, *(bound for bound in (least, most) if bound is not None)):
            if not isinstance(number, int | np.integer) or isinstance(number, bool) or abs(number) > MOST_NUMBER:
                raise ProblemError(
                    f"{called}: {number!r} is not a whole number up to {MOST_NUMBER}; state the rule in finer units"
                )
        constant, parts = 0, dict[int, int]()
        for factor, term in zip(factors, listed, strict=True):
            one = self._sum(term)
            constant += int(factor) * one.constant
            for feature, step in one.parts:
                parts[feature] = parts.get(feature, 0) + int(factor) * step
        parts = {feature: step for feature, step in parts.items() if step}
        if least is None and most is None:
            raise ProblemError(f"{called}: neither least nor most is given")
        self._rules.append(
            Rule(
                called,
                np.array(list(parts), np.int64),
                np.array(list(parts.values()), np.int64),
                constant,
                -UNBOUNDED if least is None else int(least),
                UNBOUNDED if most is None else int(most),
            )
        )

    def build(self, known: Mapping[str, Any] | None = None, notes: Iterable[str] = ()) -> Problem:
        """The problem, of kind ``constrained``; energy = cost for every answer that keeps all rules.

        ``known``, a value for every name that keeps all rules (yesterday's answer, say), makes penalties smaller.
        """
        return encode_choices(self._choices(), known, notes)

    def _choices(self) -> Choices:
        linear = np.zeros(self._features)
        linear[list(self._linear)] = list(self._linear.values())
        pairs = {pair: weight for pair, weight in self._pairs.items() if weight}
        ends = np.array(list(pairs), np.int64).reshape(-1, 2)
        weights = np.array(list(pairs.values()), np.float64)
        variables = tuple(self._variables.values())
        return Choices(variables, self._constant, linear, ends[:, 0], ends[:, 1], weights, tuple(self._rules))

    def _add(self, name: str, form: Form, values: tuple[Any, ...] | None, least: int, most: int) -> None:
        if not isinstance(name, str) or not name:
            raise ProblemError(f"name {name!r} is no text; give every variable a name")
        if name in self._variables:
            raise ProblemError(f"{name!r} is there already; names must differ")
        one = Variable(name, form, values, least, most, self._features, self._bits)
        self._variables[name] = one
        self._features += one.feature_count
        self._bits += one.bit_count
        self._owners += [name] * one.feature_count

    def _sum(self, term: Term) -> _Sum:
        if isinstance(term, str):
            one = self._variable(term)
            if one.form != "free":
                raise ProblemError(f"{term!r} is a choice; say ({term!r}, value) for one of its values")
            steps = one.steps if one.values is None else [1]
            first = one.first_feature
            return _Sum(one.least, tuple((first + place, step) for place, step in enumerate(steps)))
        if not isinstance(term, tuple | list) or len(term) != 2 or not isinstance(term[0], str):
            raise ProblemError(f"{term!r} is no term; say a name, or (name, value)")
        one = self._variable(term[0])
        if one.form == "free":
            raise ProblemError(f"{term[0]!r} is not a choice; say its name alone")
        for place, value in enumerate(one.values or ()):
            if value == term[1] or str(value) == str(term[1]):
                return _Sum(0, ((one.first_feature + place, 1),))
        raise ProblemError(f"{term[0]!r} cannot be {term[1]!r}; it is one of: {', '.join(map(str, one.values or ()))}")

    def _variable(self, name: str) -> Variable:
        if name not in self._variables:
            raise ProblemError(f"there is no variable {name!r}; state it before it is used")
        return self._variables[name]

    def _add_cost(self, weight: float, one: int | None, other: int | None) -> None:
        if one is None and other is None:
            self._constant += weight
        elif one is None or other is None or one == other:
            feature = one if one is not None else other
            assert feature is not None
            self._linear[feature] = self._linear.get(feature, 0.0) + weight
        elif not self._exclude_each_other(one, other):
            pair = (one, other) if one < other else (other, one)
            self._pairs[pair] = self._pairs.get(pair, 0.0) + weight

    def _exclude_each_other(self, one: int, other: int) -> bool:
        """Whether two features are different values of one choice, whose product is always 0."""
        return self._owners[one] == self._owners[other] and self._variables[self._owners[one]].form != "free"

    @staticmethod
    def maxcut(graph: nx.Graph, weight: str = "weight") -> Problem:
        """Two parts of a networkx graph that cut the most weight, see :mod:`patchwalk.problem.networks`."""
        return networks.maxcut(graph, weight)

    @staticmethod
    def independent_set(graph: nx.Graph, weight: str = "weight") -> Problem:
        """Nodes no two of which are joined, of most weight (a node attribute, 1 where absent)."""
        return networks.independent_set(graph, weight)

    @staticmethod
    def vertex_cover(graph: nx.Graph, weight: str = "weight") -> Problem:
        """Nodes that touch every edge, of least weight (a node attribute, 1 where absent)."""
        return networks.vertex_cover(graph, weight)

    @staticmethod
    def colouring(graph: nx.Graph, colours: int) -> Problem:
        """A colour for every node, so that no two that are joined have one colour."""
        return networks.colouring(graph, colours)

    @staticmethod
    def balanced_partition(graph: nx.Graph, weight: str = "weight") -> Problem:
        """Two parts of equal size that cut the least weight."""
        return networks.balanced_partition(graph, weight)
