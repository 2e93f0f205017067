"""Problems stated with the builder, against a listing of all values in plain Python."""

from __future__ import annotations

import itertools
import math
from collections.abc import Callable
from typing import Any

import networkx as nx
import numpy as np
import pytest

from patchwalk.problem import choice_penalties, choice_repair, penalties
from patchwalk.problem.builder import ProblemBuilder
from patchwalk.problem.ising import Problem, ProblemError

Values = dict[str, Any]
LARGEST = 16
"""So many spins can be listed in a blink."""


def all_spins(size: int) -> np.ndarray:
    return 1 - 2 * ((np.arange(2**size)[:, None] >> np.arange(size)) & 1).astype(np.int8)


def ground_states(problem: Problem) -> tuple[float, np.ndarray]:
    spins = all_spins(len(problem))
    values = spins.astype(float)
    levels = problem.offset + values @ problem.fields + 0.5 * np.einsum("bi,bi->b", values @ problem.matrix, values)
    return float(levels.min()), spins[levels <= levels.min() + problem.tie_tolerance]


class Stated:
    """The same statements given to a builder and kept as plain Python."""

    def __init__(self) -> None:
        self.builder = ProblemBuilder()
        self.domains: dict[str, list[Any]] = {}
        self.costs: list[tuple[float, tuple[Any, ...]]] = []
        self.rules: list[tuple[list[Any], list[int], int | None, int | None]] = []

    def variable(self, name: str, form: str, size: int) -> None:
        if form == "yes-no":
            self.builder.yes_no(name)
            self.domains[name] = [False, True]
        elif form == "number":
            self.builder.number(name, -1, size - 2)
            self.domains[name] = list(range(-1, size - 1))
        else:
            self.domains[name] = [f"v{place}" for place in range(size)]
            self.builder.choice(name, self.domains[name], form)

    def cost(self, weight: float, *terms: Any) -> None:
        self.costs.append((weight, terms))
        self.builder.cost(weight, *terms)

    def rule(self, terms: list[Any], times: list[int], least: int | None, most: int | None) -> None:
        self.rules.append((terms, times, least, most))
        self.builder.total(terms, least, most, times=times)

    def terms(self, draws: np.random.Generator, count: int, among: list[str]) -> list[Any]:
        names = [str(name) for name in draws.choice(among, count)]
        plain = {name: name for name in names if not isinstance(self.domains[name][0], str)}
        return [plain.get(name) or (name, str(draws.choice(self.domains[name]))) for name in names]

    def everything(self) -> list[tuple[Values, float, bool]]:
        """All values with their cost and whether they keep all rules."""

        def number(term: Any, values: Values) -> int:
            return int(values[term]) if isinstance(term, str) else int(values[term[0]] == term[1])

        found = []
        for chosen in itertools.product(*self.domains.values()):
            values = dict(zip(self.domains, chosen, strict=True))
            cost = sum(weight * math.prod(number(term, values) for term in terms) for weight, terms in self.costs)
            kept = True
            for terms, times, least, most in self.rules:
                total = sum(factor * number(term, values) for factor, term in zip(times, terms, strict=True))
                kept &= (least is None or total >= least) and (most is None or total <= most)
            found.append((values, cost, kept))
        return found


def random_statement(seed: int, forms: list[tuple[str, int]], rules: int) -> Stated:
    """Costs of one and two terms, and rules drawn so that some values keep them all."""
    draws = np.random.default_rng(seed)
    stated = Stated()
    for place, (form, size) in enumerate(forms):
        stated.variable(f"x{place}", form, size)
    names = list(stated.domains)
    pairable = [name for name, (form, size) in zip(names, forms, strict=True) if form != "binary" or size == 2]
    for _ in range(6):
        stated.cost(float(draws.integers(-5, 6)), *stated.terms(draws, 1, names))
    for _ in range(8):
        stated.cost(float(draws.integers(-5, 6)), *stated.terms(draws, 2, pairable))
    stated.cost(2.0)
    planted, *_ = draws.permutation(np.arange(len(stated.everything())))[:1]
    values = stated.everything()[planted][0]
    for _ in range(rules):
        terms = stated.terms(draws, int(draws.integers(2, 4)), pairable)
        times = [int(factor) for factor in draws.integers(-2, 3, len(terms))]
        now = sum(
            factor * (int(values[term]) if isinstance(term, str) else int(values[term[0]] == term[1]))
            for factor, term in zip(times, terms, strict=True)
        )
        least, most = now - int(draws.integers(0, 2)), now + int(draws.integers(0, 2))
        shape = draws.integers(4)
        stated.rule(terms, times, None if shape == 0 else least, None if shape == 1 else most)
    return stated


MIXES = {
    "yes or no": [("yes-no", 2)] * 6,
    "one-hot": [("one-hot", 3), ("one-hot", 2), ("one-hot", 4)],
    "domain walls": [("domain-wall", 4), ("domain-wall", 3), ("domain-wall", 2), ("domain-wall", 4)],
    "binary": [("binary", 3), ("binary", 4), ("binary", 2), ("binary", 2)],
    "numbers": [("number", 5), ("number", 3), ("number", 4)],
    "one of each": [("one-hot", 3), ("domain-wall", 3), ("binary", 3), ("number", 3), ("yes-no", 2)],
    "one value": [("one-hot", 1), ("one-hot", 3), ("yes-no", 2)],
}


def check(stated: Stated, problem: Problem) -> None:
    """Energy = cost of all that keeps the rules, ground states are the best of them, and nothing else is good."""
    listed = stated.everything()
    best = min(cost for _, cost, kept in listed if kept)
    for values, cost, kept in listed:
        spins = problem.encoding.encode({"choices": values})
        assert problem.encoding.read(spins)["choices"] == values
        objective, broken = problem.encoding.judge({"choices": values})
        assert objective == pytest.approx(cost, abs=1e-9)
        assert kept == (not broken)
        if kept:
            assert problem.energy(spins) == pytest.approx(cost, abs=1e-9)
        else:
            assert problem.energy(spins) > best + problem.tie_tolerance
    lowest, states = ground_states(problem)
    assert lowest == pytest.approx(best, abs=1e-9)
    for spins in states:
        answer = problem.encoding.decode(spins)
        assert answer.feasible
        assert not answer.repaired, "a ground state keeps the rules as it stands"
        assert answer.objective == pytest.approx(best, abs=1e-9)
        assert problem.energy(answer.spins) == pytest.approx(best, abs=1e-9)


@pytest.mark.parametrize("seed", range(8))
@pytest.mark.parametrize("rules", [0, 1, 2])
@pytest.mark.parametrize("mix", MIXES)
def test_ground_states_are_the_best_values_that_keep_the_rules(mix: str, rules: int, seed: int) -> None:
    stated = random_statement(seed, MIXES[mix], rules)
    problem = stated.builder.build()
    assert len(problem) <= LARGEST
    check(stated, problem)


@pytest.mark.parametrize("seed", range(8))
@pytest.mark.parametrize("mix", ["one-hot", "one of each"])
def test_a_known_answer_makes_penalties_smaller_and_they_are_still_enough(mix: str, seed: int) -> None:
    stated = random_statement(seed, MIXES[mix], 2)
    known = min((cost, place) for place, (_, cost, kept) in enumerate(stated.everything()) if kept)[1]
    problem = stated.builder.build(known=stated.everything()[known][0])
    assert len(problem) <= LARGEST
    check(stated, problem)
    assert np.abs(problem.couplings).sum() <= np.abs(stated.builder.build().couplings).sum()


@pytest.mark.parametrize("seed", range(6))
@pytest.mark.parametrize("mix", ["one-hot", "domain walls", "one of each"])
def test_all_spins_decode_to_what_the_rules_say(mix: str, seed: int) -> None:
    stated = random_statement(seed, MIXES[mix], 1)
    problem = stated.builder.build()
    good = {tuple(values.values()): cost for values, cost, kept in stated.everything() if kept}
    for spins in np.random.default_rng(seed).permutation(all_spins(len(problem)))[:150]:
        answer = problem.encoding.decode(spins)
        said = tuple(answer.value["choices"].values())
        assert answer.feasible == (not any(isinstance(value, list) for value in said) and said in good)
        if answer.feasible:
            assert answer.objective == pytest.approx(good[said], abs=1e-9)
            assert problem.energy(answer.spins) == pytest.approx(good[said], abs=1e-9)
        else:
            assert answer.broken


def test_where_a_repair_would_not_be_cheap_none_is_tried(monkeypatch: pytest.MonkeyPatch) -> None:
    problem = dear_middle().build()
    assert problem.encoding.decode([1, -1]).repaired
    monkeypatch.setattr(choice_repair, "MOST_VISITS", 0)
    answer = problem.encoding.decode([1, -1])
    assert answer.broken == ("x has 2 values: low, high",)
    assert not answer.repaired


def test_a_repair_finds_an_answer_that_keeps_the_rules_where_one_is_near() -> None:
    """Twelve shifts, three people, four each: from one person doing everything."""
    builder = ProblemBuilder()
    shifts = [f"shift {place}" for place in range(12)]
    for shift in shifts:
        builder.choice(shift, ["Ada", "Ben", "Cleo"])
    for person in ("Ada", "Ben", "Cleo"):
        builder.total([(shift, person) for shift in shifts], 4, 4, name=f"shifts of {person}")
    problem = builder.build()
    broken = problem.encoding.encode({"choices": dict.fromkeys(shifts, "Ada")})
    assert len(problem.encoding.judge_spins(broken)[1]) == 3
    answer = problem.encoding.decode(broken)
    assert answer.feasible
    assert answer.mended[0] == "shifts of Ada: the total is 12, allowed 4"
    counts = [list(answer.value["choices"].values()).count(person) for person in ("Ada", "Ben", "Cleo")]
    assert counts == [4, 4, 4]


def triangle(form: str) -> ProblemBuilder:
    """Three choices of two values, which cost 1 wherever two are the same."""
    builder = ProblemBuilder()
    for name in "abc":
        builder.choice(name, ["red", "blue"], form)
    for one, other in itertools.combinations("abc", 2):
        for colour in ("red", "blue"):
            builder.cost(1, (one, colour), (other, colour))
    return builder


def dear_middle() -> ProblemBuilder:
    """A domain wall there and back takes the cost of the middle value twice, the wrong way round."""
    builder = ProblemBuilder()
    builder.choice("x", ["low", "middle", "high"], "domain-wall")
    builder.cost(8, ("x", "middle"))
    return builder


def forbidden(rule: Callable[[ProblemBuilder], None], names: str = "ab") -> ProblemBuilder:
    """A reward of 6 for every name, of which a rule forbids one."""
    builder = ProblemBuilder()
    for name in names:
        builder.yes_no(name)
        builder.cost(-6, name)
    rule(builder)
    return builder


TIGHT: dict[str, Callable[[], ProblemBuilder]] = {
    "one-hot": lambda: triangle("one-hot"),
    "a domain wall": dear_middle,
    "an equation": lambda: forbidden(lambda builder: builder.total(["a", "a", "b"], 2, 2)),
    "two that exclude each other": lambda: forbidden(lambda builder: builder.at_most_one(["a", "b"])),
    "exactly one": lambda: forbidden(lambda builder: builder.exactly_one(["a", "b"])),
    "an inequality with slack": lambda: forbidden(lambda builder: builder.total(["a", "b", "c"], 0, 2), "abc"),
}


@pytest.mark.parametrize("name", TIGHT)
def test_half_the_penalties_are_not_enough(name: str, monkeypatch: pytest.MonkeyPatch) -> None:
    def sound() -> bool:
        problem = TIGHT[name]().build()
        best = min(
            problem.encoding.judge(problem.encoding.read(spins))[0]
            for spins in all_spins(len(problem))
            if not problem.encoding.judge(problem.encoding.read(spins))[1]
        )
        lowest, states = ground_states(problem)
        right = all(not problem.encoding.judge(problem.encoding.read(spins))[1] for spins in states)
        return right and lowest == pytest.approx(best, abs=1e-9)

    assert sound()
    monkeypatch.setattr(penalties, "MARGIN", penalties.MARGIN / 2)
    assert not sound()


def test_penalties_do_not_grow_with_what_does_not_matter() -> None:
    """A constant on all values of a choice shifts the cost, and a dear part elsewhere concerns nobody."""

    def price(extra: float, elsewhere: float) -> float:
        builder = triangle("one-hot")
        for value in ("red", "blue"):
            builder.cost(extra, ("a", value))
        builder.choice("apart", ["cheap", "dear"])
        builder.cost(elsewhere, ("apart", "dear"))
        choices = builder._choices()
        return float(choice_penalties.prices_of(choices).square[0])

    assert price(0, 1) == price(1000, 1) == price(0, 1000)


def test_groups_are_one_hot_variables_and_rules_of_exactly_one() -> None:
    builder = ProblemBuilder()
    builder.choice("a", ["x", "y", "z"])
    builder.choice("b", ["x", "y"], "domain-wall")
    for name in "cde":
        builder.yes_no(name)
    builder.exactly_one(["c", "d", "e"])
    builder.exactly_one([("a", "x"), ("b", "x")])
    builder.at_most_one(["c", ("a", "y")])
    problem = builder.build()
    assert [group.tolist() for group in problem.groups] == [[0, 1, 2], [4, 5, 6]]
    assert problem.names is not None
    assert problem.names[:5] == ("a is x", "a is y", "a is z", "b is after x", "c")


def test_slack_is_bounded_and_only_where_it_is_needed() -> None:
    builder = ProblemBuilder()
    for name in "abcdef":
        builder.yes_no(name)
    builder.at_most_one(["a", "b"])
    builder.exactly_one(["c", "d"])
    builder.total(list("abcdef"), 1, 4)  # 3 apart: two slack bits, as totals 0, 1, 2, 3 above the least
    builder.total(["a", "b"], 0, 5, name="never in the way")
    problem = builder.build()
    assert problem.names is not None
    assert [name for name in problem.names if "slack" in name] == ["slack 1 of rule 3", "slack 2 of rule 3"]
    assert problem.notes == ("never in the way is always kept: the total is 0 to 2",)


@pytest.mark.parametrize(
    ("state", "message"),
    [
        (lambda b: b.yes_no("a"), "'a' is there already"),
        (lambda b: b.yes_no(""), "name '' is no text"),
        (lambda b: b.choice("c", []), "'c' has 0 values"),
        (lambda b: b.choice("c", ["x", "x"]), "'c' has a value twice"),
        (lambda b: b.choice("c", [[1], [2]]), "neither text nor a number"),
        (lambda b: b.choice("c", "xyzuv", "binary"), "'c' has 5 values; the binary form takes four at most"),
        (
            lambda b: b.choice("c", "xy", "unary"),
            "form 'unary' of 'c' is not known; it is one of: one-hot, domain-wall",
        ),
        (lambda b: b.number("n", 3, 3), "leaves nothing to decide"),
        (lambda b: b.number("n", 0, 2**40), "bound 1099511627776 of 'n' is not a whole number up to 1048576"),
        (lambda b: b.cost(math.nan, "a"), "cost nan is not a finite number"),
        (lambda b: b.cost(1, "a", "a", "a"), "a product of 3 terms"),
        (lambda b: b.cost(1, "z"), "there is no variable 'z'"),
        (lambda b: b.cost(1, "choice"), "'choice' is a choice; say"),
        (lambda b: b.cost(1, ("a", 1)), "'a' is not a choice; say its name alone"),
        (lambda b: b.cost(1, ("choice", "green")), "'choice' cannot be 'green'; it is one of: red, blue, black"),
        (lambda b: b.cost(1, 7), "7 is no term"),
        (lambda b: b.total(["a"], 1, 1, times=[0.5]), "rule 1: 0.5 is not a whole number"),
        (lambda b: b.total(["a"], 1, 1, times=[1, 2]), "rule 1: 2 numbers for 1 terms"),
        (lambda b: b.total([], 1, 1), "rule 1: 0 numbers for 0 terms"),
        (lambda b: b.total(["a"]), "rule 1: neither least nor most"),
    ],
)
def test_statements_that_make_no_sense_are_refused(state: Callable[[ProblemBuilder], None], message: str) -> None:
    builder = ProblemBuilder()
    builder.yes_no("a")
    builder.choice("choice", ["red", "blue", "black"])
    with pytest.raises(ProblemError, match=message):
        state(builder)


@pytest.mark.parametrize(
    ("state", "message"),
    [
        (lambda b: b.total(["n", "a"], 60, None), "rule 1 can never be kept: the total is 0 to 51, but at least 60"),
        (lambda b: b.total(["a"], 1, 0), "can never be kept: the total is 0 to 1, but 1 to 0"),
        (
            lambda b: b.total(["n"], 10, 2000, times=[41]),
            "rule 1 leaves room for 1991 totals, 10 to 2000; 10 slack bits tell 1024 apart",
        ),
        (lambda b: b.total([("small", "x"), "a"], 1, 1), "in no rule and no product"),
        (lambda b: b.cost(1, ("small", "x"), "a"), "in no rule and no product"),
    ],
)
def test_problems_that_cannot_be_built_say_why(state: Callable[[ProblemBuilder], None], message: str) -> None:
    builder = ProblemBuilder()
    builder.yes_no("a")
    builder.number("n", 0, 50)
    builder.choice("small", ["x", "y", "z"], "binary")
    state(builder)
    with pytest.raises(ProblemError, match=message):
        builder.build()
    with pytest.raises(ProblemError, match="nothing to decide"):
        ProblemBuilder().build()


def test_a_known_answer_that_breaks_a_rule_is_refused() -> None:
    builder = TIGHT["two that exclude each other"]()
    with pytest.raises(
        ProblemError, match="the known answer breaks the rules: rule 1: the total is 2, allowed at most 1"
    ):
        builder.build(known={"a": True, "b": True})
    with pytest.raises(ProblemError, match="says nothing of 'b'"):
        builder.build(known={"a": True})


def test_a_graph_of_networkx_in_one_call() -> None:
    graph = nx.Graph([("n", "e"), ("e", "s"), ("s", "w")])
    graph.nodes["n"]["weight"] = 5
    graph.edges["e", "s"]["weight"] = 3
    for problem, objective in (
        (ProblemBuilder.maxcut(graph), 5.0),
        (ProblemBuilder.independent_set(graph), 6.0),
        (ProblemBuilder.vertex_cover(graph), 2.0),
        (ProblemBuilder.colouring(graph, 2), 0.0),
        (ProblemBuilder.balanced_partition(graph), 2.0),
    ):
        lowest, _ = ground_states(problem)
        assert problem.objective(lowest) == objective
    assert ProblemBuilder.vertex_cover(graph).names == ("n", "e", "s", "w")
    doubled = nx.MultiDiGraph([("a", "b"), ("b", "a")])
    assert ProblemBuilder.independent_set(doubled).coupling_count == 1
