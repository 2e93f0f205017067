"""Encoded problems solved by the loop, against proofs by integer programming and colourings by networkx."""

from __future__ import annotations

import itertools
import json
from collections.abc import Iterable
from pathlib import Path
from typing import Any

import networkx as nx
import numpy as np
import pytest
from scipy.optimize import LinearConstraint, milp

import patchwalk
from patchwalk.problem import encodings
from patchwalk.problem.builder import ProblemBuilder
from patchwalk.problem.ising import Problem
from patchwalk.problem.layout_json import problem_from_json

ROTA = Path(__file__).resolve().parents[2] / "configs" / "kiosk-rota.json"

Row = dict[Any, float]


def least(objective: Row, rows: Iterable[tuple[Row, float, float]]) -> float:
    """The proved minimum of a linear objective of 0/1 variables under ``low <= row <= high``."""
    rows = list(rows)
    names = {
        name: place for place, name in enumerate(dict.fromkeys([*objective, *(n for row, *_ in rows for n in row)]))
    }
    matrix = np.zeros((len(rows), len(names)))
    for place, (row, *_) in enumerate(rows):
        for name, number in row.items():
            matrix[place, names[name]] += number
    costs = np.zeros(len(names))
    for name, number in objective.items():
        costs[names[name]] = number
    bounds = LinearConstraint(matrix, [low for _, low, _ in rows], [high for *_, high in rows])
    proved = milp(costs, constraints=bounds, integrality=np.ones(len(names)), bounds=(0, 1))
    assert proved.status == 0, proved.message
    return float(proved.fun)


def product_rows(both: Any, one: Any, other: Any) -> list[tuple[Row, float, float]]:
    """``both`` = one and other."""
    return [
        ({both: 1, one: -1}, -1, 0),
        ({both: 1, other: -1}, -1, 0),
        ({both: 1, one: -1, other: -1}, -1, 1),
    ]


def maximum_cut(graph: nx.Graph, weight: str | None) -> float:
    """The proved maximum cut: an edge counts if exactly one of its ends is in the set."""
    objective: Row = {}
    rows: list[tuple[Row, float, float]] = []
    for one, other, data in graph.edges(data=True):
        edge = ("cut", one, other)
        objective[edge] = -float(data.get(weight, 1.0)) if weight else -1.0
        rows += [({edge: 1, one: -1, other: -1}, -2, 0), ({edge: 1, one: 1, other: 1}, 0, 2)]
    return -least(objective, rows)


def solved(problem: Problem, folder: Path, **settings: Any) -> patchwalk.Solution:
    given = {"subsolver": "enumeration", "cluster_size": 10, "calls": 2000, "seed": 1, **settings}
    return patchwalk.solve(problem, run=folder / "run.sqlite", **given)


@pytest.mark.parametrize("weight", [None, "weight"])
def test_the_karate_clubs_maximum_cut_is_what_milp_proves(weight: str | None, tmp_path: Path) -> None:
    graph = nx.karate_club_graph()
    result = solved(ProblemBuilder.maxcut(graph, weight or "none"), tmp_path)
    assert result.objective == pytest.approx(maximum_cut(graph, weight), abs=1e-6)


def proper(graph: nx.Graph, colours: dict[str, int]) -> bool:
    return all(colours[str(one)] != colours[str(other)] for one, other in graph.edges)


@pytest.mark.parametrize(
    ("graph", "colours"),
    [(nx.karate_club_graph(), 5), (nx.les_miserables_graph(), 10)],
    ids=["karate club", "les miserables"],
)
def test_colourings_of_known_graphs_are_proper_and_use_no_more_colours_than_greedy(
    graph: nx.Graph, colours: int, tmp_path: Path
) -> None:
    """As many colours as the largest clique has vertices, so that none with fewer is proper."""
    greedy = 1 + max(nx.greedy_color(graph, "DSATUR").values())
    clique = max(map(len, nx.find_cliques(graph)))
    assert (clique, greedy) == (colours, colours)
    result = solved(ProblemBuilder.colouring(graph, colours), tmp_path, calls=8000, hot=0.3, cold=0.03)
    assert result.feasible
    assert result.objective == 0
    assert proper(graph, result.answer["colours"])
    too_few = solved(ProblemBuilder.colouring(graph, colours - 1), tmp_path / "few", calls=500)
    assert not too_few.feasible
    assert too_few.answer["verdict"].startswith("NOT VALID")


@pytest.mark.parametrize("seed", [1, 2, 3])
def test_sets_of_vertices_and_balanced_parts_of_random_graphs(seed: int, tmp_path: Path) -> None:
    graph = nx.gnp_random_graph(20, 0.2, seed=seed)
    draws = np.random.default_rng(seed)
    weights = {node: int(draws.integers(1, 9)) for node in graph}
    nx.set_node_attributes(graph, weights, "weight")
    edges = [({one: 1, other: 1}, 0, 1) for one, other in graph.edges]
    heaviest = -least({node: -weight for node, weight in weights.items()}, edges)
    lightest = least(weights, [(row, 1, 2) for row, *_ in edges])
    assert heaviest + lightest == pytest.approx(sum(weights.values())), "complements of each other (Gallai)"
    independent = solved(ProblemBuilder.independent_set(graph), tmp_path / "i")
    cover = solved(ProblemBuilder.vertex_cover(graph), tmp_path / "c")
    assert (independent.objective, independent.feasible) == (pytest.approx(heaviest), True)
    assert (cover.objective, cover.feasible) == (pytest.approx(lightest), True)

    objective: Row = {}
    rows: list[tuple[Row, float, float]] = [(dict.fromkeys(graph, 1.0), 10, 10)]
    for one, other in graph.edges:
        objective["cut", one, other] = 1.0
        rows += [
            ({("cut", one, other): 1, one: -1, other: 1}, 0, 2),
            ({("cut", one, other): 1, one: 1, other: -1}, 0, 2),
        ]
    halves = solved(ProblemBuilder.balanced_partition(graph, "none"), tmp_path / "b")
    assert (halves.objective, halves.feasible) == (pytest.approx(least(objective, rows)), True)


@pytest.mark.parametrize("width", [2, 3])
@pytest.mark.parametrize("seed", [1, 2])
def test_random_clauses_against_milp(width: int, seed: int, tmp_path: Path) -> None:
    draws = np.random.default_rng(seed)
    clauses = [[int(v) for v in draws.permutation(20)[:width] + 1] for _ in range(80)]
    clauses = [[v * int(draws.choice([-1, 1])) for v in clause] for clause in clauses]
    weights = [float(weight) for weight in draws.integers(1, 10, 80)]
    rows: list[tuple[Row, float, float]] = []
    for place, clause in enumerate(clauses):
        row: Row = {("clause", place): -1.0}
        for literal in clause:
            row[abs(literal)] = row.get(abs(literal), 0.0) + (1.0 if literal > 0 else -1.0)
        rows.append((row, -sum(literal < 0 for literal in clause), np.inf))
    most = -least({("clause", place): -weight for place, weight in enumerate(weights)}, rows)
    encode = encodings.encode_max2sat if width == 2 else encodings.encode_max3sat
    result = solved(encode(clauses, weights, 20), tmp_path, seed=None, seeds=[1, 2, 3])
    assert result.objective == pytest.approx(most)
    assert result.energy == -result.objective


def rota_optimum(table: dict[str, Any]) -> float:
    """The least cost of a rota that keeps all rules, from the JSON alone."""
    objective: Row = {}
    rows: list[tuple[Row, float, float]] = []
    for shift, people in table["choices"].items():
        rows.append(({(shift, person): 1.0 for person in people}, 1, 1))
    for entry in table["costs"]:
        terms = [tuple(term) for term in entry["if"]]
        name: Any = terms[0] if len(terms) == 1 else tuple(terms)
        objective[name] = objective.get(name, 0.0) + entry["cost"]
        if len(terms) == 2:
            rows += product_rows(name, *terms)
    for rule in table["rules"]:
        row: Row = {}
        for choice, person in rule["of"]:
            for shift in [shift for shift, people in table["choices"].items() if person in people]:
                if choice in ("*", shift):
                    row[shift, person] = 1.0
        rows.append((row, rule.get("at least", 0), rule.get("at most", len(row))))
    return least(objective, rows)


def broken_rules(table: dict[str, Any], rota: dict[str, str]) -> list[str]:
    """Rules of the JSON that a rota breaks, counted by hand."""
    broken = [f"{person} on {shift}" for shift, person in rota.items() if person not in table["choices"][shift]]
    for rule in table["rules"]:
        terms = {(shift, person) for choice, person in rule["of"] for shift in rota if choice in ("*", shift)}
        count = sum(rota[shift] == person for shift, person in terms)
        if not rule.get("at least", 0) <= count <= rule.get("at most", len(rota)):
            broken.append(rule["name"])
    return broken


@pytest.mark.parametrize(
    ("settings", "above"),
    [
        ({"subsolver": "enumeration", "seed": None, "seeds": [1, 2, 3]}, 0),
        ({"subsolver": "walk,shots=4", "seed": None, "seeds": [1, 2]}, 12),  # short of the optimum, but valid
    ],
    ids=["enumeration", "walk"],
)
def test_the_kiosks_rota_is_valid_and_as_good_as_milp_proves(
    settings: dict[str, Any], above: float, tmp_path: Path
) -> None:
    text = ROTA.read_text(encoding="utf-8")
    table = json.loads(text)
    problem = problem_from_json(text, str(ROTA))
    result = solved(problem, tmp_path, cluster_size=12, calls=6000, hot=0.06, cold=0.006, **settings)
    rota = result.answer["choices"]
    assert set(rota) == set(table["choices"])
    assert broken_rules(table, rota) == []
    cost = sum(entry["cost"] for entry in table["costs"] if all(rota[shift] == who for shift, who in entry["if"]))
    assert result.feasible
    assert result.objective == result.energy == cost
    optimum = rota_optimum(table)
    assert optimum - 1e-6 <= cost <= optimum + above + 1e-6


def test_rows_of_products_say_and() -> None:
    for one, other in itertools.product([0, 1], repeat=2):
        fixed = [({"a": 1.0}, one, one), ({"b": 1.0}, other, other), *product_rows("ab", "a", "b")]
        assert least({"ab": 1.0}, fixed) == -least({"ab": -1.0}, fixed) == one * other
