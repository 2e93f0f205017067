"""Planar problems by matching, against enumeration, elimination of whole lattices, and the odd-cycle program."""

from __future__ import annotations

import networkx as nx
import numpy as np
import pytest

from patchwalk.bounds.cut_graph import cut_graph
from patchwalk.bounds.cycles import CycleProgram, tighten
from patchwalk.bounds.planar import frustrated_faces, is_planar, planar_minimum
from patchwalk.problem.families import make
from patchwalk.problem.ising import Problem


def test_what_is_planar() -> None:
    assert is_planar(make("lattice2d", 5, open=True, seed=1))
    assert not is_planar(make("lattice2d", 5, seed=1))  # a torus
    assert not is_planar(make("lattice2d", 5, open=True, fields=True, seed=1))
    assert not is_planar(Problem.from_networkx(nx.complete_graph(5)))
    assert is_planar(Problem.from_networkx(nx.complete_graph(4)))


def test_others_are_refused() -> None:
    with pytest.raises(ValueError, match="no drawing without crossings"):
        planar_minimum(Problem.from_networkx(nx.complete_graph(5)))
    with pytest.raises(ValueError, match="has fields"):
        planar_minimum(make("lattice2d", 4, open=True, fields=True, seed=1))


@pytest.mark.parametrize("number", range(40))
def test_random_planar_graphs_against_enumeration(number: int) -> None:
    """Lattices with bonds taken away: with bridges, trees and several pieces."""
    draws = np.random.default_rng(number)
    graph = nx.convert_node_labels_to_integers(nx.triangular_lattice_graph(2, 4))
    edges = [edge for edge in graph.edges if draws.random() < 0.75]
    size = graph.number_of_nodes()
    weights = draws.integers(1, 4, len(edges)) * draws.choice([-1.0, 1.0], len(edges))
    if number % 2:
        weights = draws.standard_normal(len(edges))
    problem = Problem.from_arrays(*zip(*edges, strict=True), weights, size=size)
    found = planar_minimum(problem)
    spins = 1.0 - 2.0 * ((np.arange(2**size)[:, None] >> np.arange(size)) & 1)
    lowest = float((0.5 * np.sum(spins * (problem.matrix @ spins.T).T, axis=1)).min())
    assert found.energy == pytest.approx(lowest, abs=1e-9)
    assert problem.energy(found.spins) == found.energy
    assert found.lower_bound <= lowest + 1e-12 * size
    assert found.lower_bound == pytest.approx(lowest, abs=1e-9)


@pytest.mark.parametrize("couplings", ["pm1", "gaussian"])
def test_open_lattices_against_the_program(couplings: str) -> None:
    problem = make("lattice2d", 9, couplings=couplings, open=True, seed=4)
    program = CycleProgram(cut_graph(problem))
    assert tighten(program)
    assert planar_minimum(problem).energy == pytest.approx(program.bound, abs=1e-6)


def test_frustrated_faces() -> None:
    assert frustrated_faces(Problem.from_networkx(nx.cycle_graph(5))) == 2  # inside and outside
    assert frustrated_faces(Problem.from_networkx(nx.cycle_graph(6))) == 0
