"""Known ground states: small graphs by enumeration, and published facts of open instances."""

from __future__ import annotations

import itertools
import os
from pathlib import Path

import networkx as nx
import numpy as np
import pytest

from patchwalk.problem.files import read_problem
from patchwalk.problem.ising import Problem

FOLDER = os.environ.get("PATCHWALK_INSTANCES", "")
needs_instances = pytest.mark.skipif(
    not FOLDER, reason="PATCHWALK_INSTANCES does not name the folder of open instances"
)


def energies(problem):
    """All 2^n energies, in no promised order."""
    return np.array([problem.energy(spins) for spins in itertools.product([1, -1], repeat=len(problem))])


def test_the_antiferromagnetic_triangle_is_frustrated():
    levels, counts = np.unique(energies(Problem.from_arrays([0, 1, 2], [1, 2, 0], [1, 1, 1])), return_counts=True)
    assert levels.tolist() == [-1, 3]
    assert counts.tolist() == [6, 2]


@pytest.mark.parametrize(
    ("graph", "cut", "maxima"),
    [
        *((nx.cycle_graph(n), n - 1, 2 * n) for n in (3, 5, 7, 9)),
        *((nx.cycle_graph(n), n, 2) for n in (4, 6, 8)),
        # K_n: the cut is floor(n^2/4), reached by every split into halves
        (nx.complete_graph(4), 4, 6),
        (nx.complete_graph(5), 6, 20),
        (nx.complete_graph(6), 9, 20),
        (nx.complete_graph(7), 12, 70),
        (nx.complete_bipartite_graph(3, 4), 12, 2),
        (nx.petersen_graph(), 12, None),  # Petersen: 15 edges, its maximum cut is 12
    ],
)
def test_maximum_cuts_of_small_graphs(graph, cut, maxima):
    problem = Problem.from_networkx(graph)
    levels = energies(problem)
    assert problem.objective(levels.min()) == cut
    if maxima is not None:
        assert np.count_nonzero(levels == levels.min()) == maxima


@needs_instances
@pytest.mark.parametrize(
    ("name", "vertices", "edges", "weight"),
    [
        ("G1.txt", 800, 19176, 19176),
        ("G11.txt", 800, 1600, None),
        ("G14.txt", 800, 4694, 4694),
        ("G22.txt", 2000, 19990, 19990),
        ("G43.txt", 1000, 9990, 9990),
        ("G48.txt", 3000, 6000, 6000),
        ("torusg3-8.dat", 512, 1536, None),
        ("toruspm3-8-50.dat", 512, 1536, None),
        ("bqp250-1.mc.txt", 251, 3339, None),
    ],
)
def test_open_instances_have_their_published_counts(name, vertices, edges, weight):
    problem = read_problem(Path(FOLDER) / name, kind="maxcut")
    assert (len(problem), problem.coupling_count, problem.notes) == (vertices, edges, ())
    if weight is not None:
        assert problem.offset == -weight / 2
    assert problem.energy(np.ones(vertices)) == 0  # nothing is cut


@needs_instances
def test_g48_is_bipartite_and_cuts_every_edge():
    problem = read_problem(Path(FOLDER) / "G48.txt", kind="maxcut")
    graph = nx.from_scipy_sparse_array(problem.matrix)
    assert nx.is_bipartite(graph)
    sides = nx.algorithms.bipartite.color(graph)
    spins = [1 if sides[node] else -1 for node in range(len(problem))]
    assert problem.objective(problem.energy(spins)) == 6000


@needs_instances
@pytest.mark.parametrize(
    ("name", "degree", "signs_only"),
    [("G11.txt", 4, True), ("toruspm3-8-50.dat", 6, True), ("torusg3-8.dat", 6, False)],
)
def test_torus_files_are_regular_lattices(name, degree, signs_only):
    problem = read_problem(Path(FOLDER) / name, kind="maxcut")
    assert set(np.diff(problem.row_starts)) == {degree}
    weights = 2 * problem.couplings
    assert np.array_equal(weights, np.round(weights))
    assert (set(weights) == {1.0, -1.0}) == signs_only
