"""Every encoding against the original problem, solved by listing everything in plain Python.

Instances are small enough to list all spins as well: each ground state decodes to an optimum of the original, the
energy equals the objective for every answer that keeps the constraints, and half the penalties are not enough.
"""

from __future__ import annotations

import itertools
import math
from collections.abc import Callable, Iterator
from typing import Any, NamedTuple

import networkx as nx
import numpy as np
import pytest

from patchwalk.problem import encodings, penalties
from patchwalk.problem.ising import KINDS, Problem, ProblemError

Original = Callable[[Any], float | None]
"""The objective of a candidate, or None where it breaks a constraint."""


class Case(NamedTuple):
    """An encoded problem beside everything the original problem says: (value, objective or None)."""

    problem: Problem
    candidates: list[tuple[dict[str, Any], float | None]]

    @property
    def best(self) -> float:
        """The optimum of the original."""
        sign = KINDS[self.problem.kind].sign
        return sign * min(sign * objective for _, objective in self.candidates if objective is not None)


def all_spins(size: int) -> np.ndarray:
    """All configurations, i8 (2^size, size)."""
    return 1 - 2 * ((np.arange(2**size)[:, None] >> np.arange(size)) & 1).astype(np.int8)


def energies(problem: Problem, spins: np.ndarray) -> np.ndarray:
    values = spins.astype(float)
    return problem.offset + values @ problem.fields + 0.5 * np.einsum("bi,bi->b", values @ problem.matrix, values)


def ground_states(problem: Problem) -> np.ndarray:
    spins = all_spins(len(problem))
    levels = energies(problem, spins)
    return spins[levels <= levels.min() + problem.tie_tolerance]


def subsets(things: list[Any]) -> Iterator[list[Any]]:
    for size in range(len(things) + 1):
        yield from map(list, itertools.combinations(things, size))


def random_graph(draws: np.random.Generator, size: int) -> list[tuple[int, int]]:
    """Edges of a random graph, some of them twice and some the other way round."""
    edges = [pair for pair in itertools.combinations(range(size), 2) if draws.random() < 0.5]
    extra = [edge[::-1] for edge in edges if draws.random() < 0.2]
    return edges + extra


def qubo(draws: np.random.Generator) -> Case:
    size = 6
    pairs = draws.integers(0, size, (12, 2))  # repeats and pairs of a bit with itself among them
    weights, linear, offset = draws.integers(-5, 6, 12), draws.integers(-5, 6, size), 3
    problem = encodings.encode_qubo(pairs[:, 0], pairs[:, 1], weights, linear, offset, list("abcdef"))
    candidates = []
    for bits in itertools.product([0, 1], repeat=size):
        value = sum(w * bits[i] * bits[j] for (i, j), w in zip(pairs, weights, strict=True))
        value += sum(w * x for w, x in zip(linear, bits, strict=True)) + offset
        candidates.append(({"bits": dict(zip("abcdef", bits, strict=True))}, float(value)))
    return Case(problem, candidates)


def clauses(draws: np.random.Generator, width: int, hard: bool) -> Case:
    size = 5
    lengths = draws.integers(0, width + 1, 9)
    rows = [[int(v) for v in draws.integers(1, size + 1, n) * draws.choice([-1, 1], n)] for n in lengths]
    weights = draws.integers(1, 6, len(rows)).astype(float)
    if hard:  # kept possible by a configuration drawn beforehand
        planted = draws.choice([-1, 1], size)
        possible = [any(literal * planted[abs(literal) - 1] > 0 for literal in row) for row in rows]
        weights[np.array(possible) & (draws.random(len(rows)) < 0.5)] = math.inf
    encode = encodings.encode_max2sat if width == 2 else encodings.encode_max3sat
    problem = encode(rows, weights, size)
    candidates = []
    for values in itertools.product([False, True], repeat=size):
        satisfied = [any(values[abs(literal) - 1] == (literal > 0) for literal in row) for row in rows]
        pairs = list(zip(satisfied, weights, strict=True))
        kept = all(done for done, weight in pairs if math.isinf(weight))
        objective = sum(weight for done, weight in pairs if done and not math.isinf(weight))
        names = map(str, range(1, size + 1))
        candidates.append(({"assignment": dict(zip(names, values, strict=True))}, objective if kept else None))
    return Case(problem, candidates)


def partition(draws: np.random.Generator) -> Case:
    numbers = [int(number) for number in draws.permutation(30)[:7]]
    candidates = []
    for places in subsets(list(range(7))):
        parts = [[n for i, n in enumerate(numbers) if (i in places) == first] for first in (True, False)]
        candidates.append(({"parts": parts}, float((sum(parts[0]) - sum(parts[1])) ** 2)))
    return Case(encodings.encode_partition(numbers), candidates)


def vertex_set(draws: np.random.Generator, cover: bool, least: int) -> Case:
    size, names = 7, list("abcdefg")
    edges, weights = random_graph(draws, size), draws.integers(least, 6, size)
    encode = encodings.encode_vertex_cover if cover else encodings.encode_independent_set
    problem = encode(edges, weights, size, names=names)
    candidates = []
    for chosen in subsets(list(range(size))):
        ends = [(one in chosen) + (other in chosen) for one, other in edges]
        kept = all(count >= 1 for count in ends) if cover else all(count <= 1 for count in ends)
        value = {"cover" if cover else "members": [names[place] for place in chosen]}
        candidates.append((value, float(sum(weights[place] for place in chosen)) if kept else None))
    return Case(problem, candidates)


def colouring(draws: np.random.Generator, colours: int, size: int) -> Case:
    edges = random_graph(draws, size)
    problem = encodings.encode_colouring(edges, colours, size)
    candidates = []
    for chosen in itertools.product(range(1, colours + 1), repeat=size):
        conflicts = len({frozenset(edge) for edge in edges if chosen[edge[0]] == chosen[edge[1]]})
        candidates.append(({"colours": {str(i + 1): c for i, c in enumerate(chosen)}}, float(conflicts)))
    return Case(problem, candidates)


def balanced(draws: np.random.Generator, size: int, least: int) -> Case:
    edges = random_graph(draws, size)
    weights = draws.integers(least, 6, len(edges))
    problem = encodings.encode_balanced_partition(edges, weights, size)
    candidates = []
    for chosen in subsets(list(range(size))):
        cut = sum(w for (i, j), w in zip(edges, weights, strict=True) if (i in chosen) != (j in chosen))
        kept = abs(size - 2 * len(chosen)) <= 1
        parts = [[str(i + 1) for i in range(size) if (i in chosen) == first] for first in (True, False)]
        candidates.append(({"parts": parts}, float(cut) if kept else None))
    return Case(problem, candidates)


CASES: dict[str, Callable[[np.random.Generator], Case]] = {
    "qubo": qubo,
    "max2sat": lambda draws: clauses(draws, 2, hard=False),
    "max2sat, some hard": lambda draws: clauses(draws, 2, hard=True),
    "max3sat": lambda draws: clauses(draws, 3, hard=False),
    "max3sat, some hard": lambda draws: clauses(draws, 3, hard=True),
    "partition": partition,
    "independent set": lambda draws: vertex_set(draws, cover=False, least=1),
    "independent set, any weights": lambda draws: vertex_set(draws, cover=False, least=-3),
    "vertex cover": lambda draws: vertex_set(draws, cover=True, least=1),
    "vertex cover, any weights": lambda draws: vertex_set(draws, cover=True, least=-3),
    "2 colours": lambda draws: colouring(draws, 2, 6),
    "3 colours": lambda draws: colouring(draws, 3, 4),
    "balance, even": lambda draws: balanced(draws, 8, 1),
    "balance, odd": lambda draws: balanced(draws, 7, 1),
    "balance, any weights": lambda draws: balanced(draws, 6, -4),
}

SEEDS = range(12)


def conflict_free(case: Case, objective: float) -> bool:
    """Colourings with conflicts are no answers, though the energy counts their conflicts."""
    return case.problem.kind != "colouring" or objective == 0


@pytest.mark.parametrize("seed", SEEDS)
@pytest.mark.parametrize("name", CASES)
def test_energy_is_the_objective_of_every_answer(name: str, seed: int) -> None:
    case = CASES[name](np.random.default_rng(seed))
    problem, encoding = case.problem, case.problem.encoding
    for value, objective in case.candidates:
        spins = encoding.encode(value)
        if objective is None:
            assert encoding.judge(value)[1], f"{value} breaks a constraint"
            continue
        assert problem.energy(spins) == KINDS[problem.kind].sign * objective
        assert encoding.judge(value)[0] == objective
        read = encoding.read(spins)[encoding.main]
        assert read == value[encoding.main] or list(map(sorted, read)) == list(map(sorted, value[encoding.main]))
        answer = encoding.decode(spins)
        if conflict_free(case, objective):
            assert (answer.objective, answer.feasible, answer.repaired) == (objective, True, False)
            assert np.array_equal(answer.spins, spins)


@pytest.mark.parametrize("seed", SEEDS)
@pytest.mark.parametrize("name", CASES)
def test_every_ground_state_decodes_to_an_optimum(name: str, seed: int) -> None:
    case = CASES[name](np.random.default_rng(seed))
    for spins in ground_states(case.problem):
        value = case.problem.encoding.read(spins)
        objective, broken = case.problem.encoding.judge(value)
        assert objective == case.best
        assert not broken or not conflict_free(case, case.best)
        assert np.array_equal(case.problem.encoding.settle(spins), spins), "auxiliary spins too are as they should be"


@pytest.mark.parametrize("seed", range(3))
@pytest.mark.parametrize("name", CASES)
def test_no_answer_that_breaks_a_constraint_is_called_good(name: str, seed: int) -> None:
    """Up to 500 configurations: what decode says, held against the list of what keeps the constraints."""
    case = CASES[name](np.random.default_rng(seed))
    encoding = case.problem.encoding
    objectives = {
        encoding.encode(value).tobytes(): objective
        for value, objective in case.candidates
        if objective is not None and conflict_free(case, objective)
    }  # one configuration each, as numbers differ
    spins_listed = all_spins(len(case.problem))
    for spins in np.random.default_rng(seed).permutation(spins_listed)[:500]:
        answer = encoding.decode(spins)
        assert answer.feasible == (not answer.broken)
        assert answer.feasible == (answer.spins.tobytes() in objectives)
        if answer.feasible:
            assert answer.objective == objectives[answer.spins.tobytes()]
        if answer.repaired:
            assert encoding.judge(encoding.read(spins))[1] == answer.mended


def clique(size: int) -> list[tuple[int, int]]:
    return list(itertools.combinations(range(size), 2))


TIGHT: dict[str, Callable[[], tuple[Problem, float]]] = {
    "a clause that must be, against one of as much weight": lambda: (
        encodings.encode_max2sat([[1], [-1]], [7, math.inf], 1),
        0.0,
    ),
    "a clause of three that is best left alone": lambda: (
        encodings.encode_max3sat([[1, 2, 3], [-1], [-2], [-3]], [1, 0.9, 0.9, 0.9], 3),
        2.8,
    ),
    "one edge, not both ends": lambda: (encodings.encode_independent_set([(0, 1)], [2, 3]), 3.0),
    "one edge, one end": lambda: (encodings.encode_vertex_cover([(0, 1)], [2, 3]), 2.0),
    "a clique of colours + 1": lambda: (encodings.encode_colouring(clique(4), 3), 1.0),
    "a clique of half and one more": lambda: (encodings.encode_balanced_partition(clique(5), size=8), 4.0),
    "a clique too large by two, odd size": lambda: (encodings.encode_balanced_partition(clique(6), size=9), 5.0),
}


def decodes_to_optima(problem: Problem, best: float) -> bool:
    """Whether each ground state keeps the constraints as it stands and has the best objective."""
    for spins in ground_states(problem):
        value = problem.encoding.read(spins)
        objective, broken = problem.encoding.judge(value)
        structural = [sentence for sentence in broken if "both have colour" not in sentence]
        if structural or abs(objective - best) > 1e-9:
            return False
    return True


@pytest.mark.parametrize("name", TIGHT)
def test_penalties_are_enough_and_half_of_them_is_not(name: str, monkeypatch: pytest.MonkeyPatch) -> None:
    problem, best = TIGHT[name]()
    assert decodes_to_optima(problem, best)
    monkeypatch.setattr(penalties, "MARGIN", penalties.MARGIN / 2)
    assert not decodes_to_optima(TIGHT[name]()[0], best)


def test_one_colour_for_each_vertex_is_a_group() -> None:
    problem = encodings.encode_colouring([(0, 1), (1, 2)], 3, names=["a", "b", "c"])
    assert [group.tolist() for group in problem.groups] == [[0, 1, 2], [3, 4, 5], [6, 7, 8]]
    assert problem.names is not None
    assert problem.names[3] == "b has colour 1"
    assert encodings.encode_independent_set([(0, 1)]).groups == ()


def test_hard_clauses_are_priced_part_by_part() -> None:
    """A heavy soft clause elsewhere does not make a penalty dearer."""
    problem = encodings.encode_max2sat([[1], [-1], [2]], [1, math.inf, 1000], 2)
    assert problem.flip_change([1, 1], 0) == pytest.approx(penalties.MARGIN * 1 - 1)


def test_hard_clauses_are_mended_by_flips_that_help() -> None:
    rows = [[-1, -2], [-2, -3], [1, 2, 3], [2]]
    problem = encodings.encode_max3sat(rows, [math.inf, math.inf, math.inf, 5], 3)
    answer = problem.encoding.decode([-1, -1, -1, *[1] * (len(problem) - 3)])
    assert answer.mended == ("clause 1 (not 1 or not 2) is not satisfied", "clause 2 (not 2 or not 3) is not satisfied")
    assert answer.value == {"assignment": {"1": True, "2": False, "3": True}}
    assert problem.energy(answer.spins) == -answer.objective == 0


def test_a_million_clauses_need_no_loop_over_clauses() -> None:
    """A table of clauses, as a reader of large files gives it, and lists make the same problem."""
    draws = np.random.default_rng(3)
    table = draws.integers(1, 40, (500, 3)) * draws.choice([-1, 1], (500, 3))
    rows = [[int(literal) for literal in row] for row in table]
    assert encodings.encode_max3sat(table).fingerprint == encodings.encode_max3sat(rows).fingerprint


def test_planted_bipartite_graphs_have_two_colours() -> None:
    graph = nx.complete_bipartite_graph(3, 3)
    problem = encodings.encode_colouring(list(graph.edges), 2)
    answers = [problem.encoding.decode(spins) for spins in ground_states(problem)]
    assert len(answers) == 2
    for answer in answers:
        colours = [answer.value["colours"][str(vertex + 1)] for vertex in graph]
        assert answer.feasible
        assert all(colours[one] != colours[other] for one, other in graph.edges)


def test_numbers_of_any_length_are_split_exactly() -> None:
    numbers = [10**30 + 1, 10**30, 3, 2]
    problem = encodings.encode_partition(numbers)
    assert "rounded" in problem.notes[0]
    answer = problem.encoding.decode([1, -1, -1, 1])
    assert answer.value == {"parts": [[10**30 + 1, 2], [10**30, 3]], "difference": 0}
    assert answer.objective == 0


@pytest.mark.parametrize(
    ("make", "message"),
    [
        (lambda: encodings.encode_qubo([0], [2], [1], [0, 0]), "bit 2 does not exist: 2 bits are numbered 0 to 1"),
        (lambda: encodings.encode_qubo([0], [1, 1], [1], [0, 0]), "1 heads, 2 tails and 1 weights"),
        (lambda: encodings.encode_max2sat([[1, 2, 3]]), "clause 1 has 3 different literals; use kind max3sat"),
        (
            lambda: encodings.encode_max3sat([[1], [1, 2, 3, 4]]),
            "clause 2 has 4 different literals; kind max3sat takes",
        ),
        (lambda: encodings.encode_max2sat([[1, -3]], variable_count=2), "clause 1 has literal -3, but the variables"),
        (lambda: encodings.encode_max2sat([[1], [2]], [1, -2]), "clause 2 has weight -2; weights are 0 or more"),
        (lambda: encodings.encode_max2sat([[1], [2]], [1, math.nan]), "clause 2 has weight nan"),
        (lambda: encodings.encode_max2sat([[1]], [1, 2]), "2 weights for 1 clauses"),
        (lambda: encodings.encode_max2sat([]), "there is no variable"),
        (lambda: encodings.encode_partition([3]), "1 numbers cannot be split"),
        (lambda: encodings.encode_partition([3, math.inf]), "not finite"),
        (lambda: encodings.encode_partition([3, 10**400]), "not finite"),
        (lambda: encodings.encode_independent_set([(0, 0)]), "vertex 0 is joined to itself"),
        (lambda: encodings.encode_independent_set([(0, 1)], [1, 2, 3], 2), "3 weights for 2 vertices"),
        (lambda: encodings.encode_vertex_cover([(0, 5)], size=3), "vertex 5 does not exist: 3 vertices"),
        (lambda: encodings.encode_vertex_cover([(0, 1, 2)]), r"edges have shape \(1, 3\)"),
        (lambda: encodings.encode_colouring([(0, 1)], 1), "1 colours leave nothing to decide"),
        (lambda: encodings.encode_colouring([(0, 1)], 10_000), "10000 colours make more than 20000000 couplings"),
        (lambda: encodings.encode_balanced_partition([(0, 1)], [1, 2]), "2 weights for 1 edges"),
        (lambda: encodings.encode_balanced_partition([(0, 1)], size=10_000), "10000 vertices make more than"),
    ],
)
def test_what_cannot_be_encoded_is_refused_with_the_reason(make: Callable[[], Problem], message: str) -> None:
    with pytest.raises(ProblemError, match=message):
        make()


def test_tautologies_empty_clauses_and_repeated_literals_count_as_they_should() -> None:
    problem = encodings.encode_max2sat([[1, -1], [], [2, 2], [1, -1, 3, 4]], [5, 7, 2, 1], 4)
    assert problem.coupling_count == 0
    assert [problem.energy(spins) for spins in ([1, 1, 1, 1], [1, -1, 1, 1])] == [-6, -8]
    answer = problem.encoding.decode([1, -1, 1, 1])
    assert (answer.objective, answer.feasible) == (8, True)
    hopeless = encodings.encode_max2sat([[1], []], [1, math.inf], 1)
    assert hopeless.encoding.decode([-1]).broken == ("clause 2 (empty) is not satisfied",)
