"""``forecast`` tells what a graph is, and what calls will need, before anything is allocated or written."""

from __future__ import annotations

import json
import subprocess
import sys
from pathlib import Path

import networkx as nx
import numpy as np
import pytest

from patchwalk import Problem, forecast, make, write_problem
from patchwalk.commands.forecasting import structure_of
from patchwalk.subsolvers import make_subsolver
from patchwalk.subsolvers.contract import ClusterBatch

PROGRAM = Path(sys.executable).with_name("patchwalk")


def problem_of(graph: nx.Graph, weight: float = 1.0) -> Problem:
    nx.set_edge_attributes(graph, weight, "weight")
    return Problem.from_networkx(graph, kind="ising")


@pytest.mark.parametrize(
    ("graph", "planar", "bipartite", "width", "components"),
    [
        (nx.path_graph(20), True, True, 1, 1),
        (nx.cycle_graph(9), True, False, 2, 1),
        (nx.complete_graph(6), False, False, 5, 1),
        (nx.complete_bipartite_graph(3, 3), False, True, 3, 1),
        (nx.grid_2d_graph(4, 7), True, True, 4, 1),
        (nx.disjoint_union(nx.cycle_graph(4), nx.path_graph(3)), True, True, 2, 2),
    ],
    ids=["path", "odd ring", "K6", "K33", "grid", "two pieces"],
)
def test_known_graphs(graph: nx.Graph, planar: bool, bipartite: bool, width: int, components: int) -> None:
    found = structure_of(problem_of(graph))
    assert (found.planar, found.bipartite, found.components) == (planar, bipartite, components)
    assert found.elimination_width == width
    assert (found.spins, found.couplings) == (graph.number_of_nodes(), graph.number_of_edges())
    assert found.degree_most == max(dict(graph.degree).values())


def test_frustration_is_an_odd_cycle_of_couplings_that_want_opposite_spins() -> None:
    assert structure_of(problem_of(nx.cycle_graph(5), 1.0)).frustrated
    assert not structure_of(problem_of(nx.cycle_graph(5), -1.0)).frustrated
    assert not structure_of(problem_of(nx.cycle_graph(6), 1.0)).frustrated
    assert structure_of(make("lattice2d", 6, seed=1)).frustrated


def test_the_unit_of_couplings() -> None:
    assert structure_of(problem_of(nx.path_graph(3), 0.75)).unit == 0.25
    assert structure_of(problem_of(nx.path_graph(3), 6.0)).unit == 2.0
    assert structure_of(make("sk", 8, seed=1)).unit is None


def test_calls_are_those_that_the_subsolver_forecasts() -> None:
    outlook = forecast(make("lattice2d", 12, seed=2), subsolver="enumeration", cluster_size=9)
    told = {one.size: one for one in outlook.calls if one.subsolver == "enumeration"}
    assert 9 in told
    blank = ClusterBatch(np.zeros((1, 9)), np.ones((1, 9), np.int8), np.zeros(1), np.zeros(1, np.uint64),
                         np.zeros((1, 9, 9)))  # fmt: skip
    assert told[9].bytes == make_subsolver("enumeration").forecast(blank).bytes
    assert told[8].seconds < told[16].seconds
    assert {"walk", "reverse", "elimination", "uniform"} <= {one.subsolver for one in outlook.calls}


def test_on_the_command_line_nothing_is_written(tmp_path: Path) -> None:
    write_problem(make("lattice2d", 8, seed=1), tmp_path / "glass.txt")
    words = [PROGRAM, "forecast", "glass.txt", "--cluster-size", "6"]
    spoken = subprocess.run(words, cwd=tmp_path, capture_output=True, text=True, check=True).stdout
    assert "64 spins, 128 couplings" in spoken
    assert "clusters of 6 spins picked by ball" in spoken
    told = json.loads(
        subprocess.run([*words, "--json"], cwd=tmp_path, capture_output=True, text=True, check=True).stdout
    )
    assert told["structure"]["degree_mean"] == 4.0
    assert [path.name for path in tmp_path.iterdir()] == ["glass.txt"]
