"""Branch-and-bound: its proofs against enumeration, its parts switched off in turn, its honesty when it is stopped."""

from __future__ import annotations

from typing import Any

import networkx as nx
import numpy as np
import pytest
from scipy.optimize import Bounds, LinearConstraint, milp

from patchwalk.bounds.certificate import check
from patchwalk.bounds.clusters import promising
from patchwalk.bounds.cut_graph import cut_graph
from patchwalk.bounds.narrow import narrow_minimum, narrow_order
from patchwalk.problem.families import make
from patchwalk.problem.ising import Problem
from patchwalk.records import Round
from patchwalk.search.bound_search import BranchPlan
from patchwalk.search.branch_primal import RULE_NAME
from patchwalk.search.branching import BranchAndBound
from patchwalk.subsolvers.registry import make_subsolver

SUBSOLVER = make_subsolver("enumeration")


def ground_energy(problem: Problem) -> float:
    size = len(problem)
    spins = 1.0 - 2.0 * ((np.arange(2**size)[:, None] >> np.arange(size)) & 1)
    energies = problem.offset + spins @ problem.fields + 0.5 * np.sum(spins * (problem.matrix @ spins.T).T, axis=1)
    return float(energies.min())


def run(
    problem: Problem, seed: int = 1, interrupted: Any = lambda: False, **plan: Any
) -> tuple[BranchAndBound, list[Round]]:
    given = {"cluster_size": min(6, len(problem)), **plan}
    search = BranchAndBound(problem, SUBSOLVER, BranchPlan(**given), seed, interrupted=interrupted)
    return search, list(search.rounds())


def random_problem(number: int) -> Problem:
    """One of 200: with and without fields, integer and real, dense and sparse; n up to 16."""
    draws = np.random.default_rng(1000 + number)
    size = int(draws.integers(2, 17))
    heads, tails = np.triu_indices(size, 1)
    kept = draws.random(len(heads)) < (1.0 if number % 2 else 3.0 / size)
    kept[0] = True
    integer, count = bool(number // 2 % 2), int(kept.sum())
    weights = draws.integers(-3, 4, count).astype(float) if integer else draws.standard_normal(count)
    fields = draws.integers(-2, 3, size).astype(float) if integer else draws.standard_normal(size)
    fielded = number // 4 % 2
    return Problem.from_arrays(heads[kept], tails[kept], weights, size=size, fields=fields if fielded else None)


@pytest.mark.parametrize("number", range(200))
def test_proofs_against_enumeration(number: int) -> None:
    problem = random_problem(number)
    lowest = ground_energy(problem)
    search, _ = run(problem, interior_rounds=number % 3)
    assert search.status == "proved_optimal"
    assert search.best_energy == pytest.approx(lowest, abs=1e-9)
    certificate = search.certificate()
    assert check(problem, certificate) <= lowest + 1e-12 * max(1.0, abs(lowest))
    assert certificate.bound >= search.best_energy - problem.tie_tolerance - 1e-15


def test_the_ground_energy_of_an_independent_solver() -> None:
    """``scipy.optimize.milp`` on the usual linearisation: y_e <= x_u, y_e <= x_v, y_e >= x_u + x_v - 1."""
    problem = make("lattice2d", 6, couplings="gaussian", seed=3)
    graph = cut_graph(problem)
    size, count = len(problem), len(graph.heads)
    rows, limits = [], []
    for e, (u, v) in enumerate(zip(graph.heads, graph.tails, strict=True)):
        for coefficients, limit in (
            ({size + e: 1, u: -1}, 0),
            ({size + e: 1, v: -1}, 0),
            ({u: 1, v: 1, size + e: -1}, 1),
        ):
            row = np.zeros(size + count)
            row[list(coefficients)] = list(coefficients.values())
            rows.append(row)
            limits.append(limit)
    # with s = 1 - 2 x, s_u s_v = 1 - 2 x_u - 2 x_v + 4 y
    costs = np.concatenate([-2.0 * np.asarray(problem.matrix.sum(axis=1)).ravel(), 4.0 * graph.weights])
    found = milp(
        costs,
        constraints=LinearConstraint(np.array(rows), -np.inf, limits),
        bounds=Bounds(0, 1),
        integrality=np.ones(len(costs)),
    )
    search, _ = run(problem)
    assert search.status == "proved_optimal"
    assert search.best_energy == pytest.approx(found.fun + graph.weights.sum(), abs=1e-6)


def test_rows_of_cluster_calls_are_like_all_others() -> None:
    problem = make("lattice3d", 4, couplings="gaussian", seed=3)
    search, rounds = run(problem, sweeps=0)
    calls = [calls for round_ in rounds for calls in round_.calls]
    assert sum(len(each) for each in calls) == search.incumbent.calls > 0
    assert RULE_NAME == "fractional"
    for each in calls:
        assert np.all(np.diff(each.members, axis=1) > 0)
        assert np.all(each.batch.temperature == 0.0)
        assert np.all(each.change[each.accepted] <= 1e-12)
    assert any(np.any(each.change < -1e-9) for each in calls)
    seeds = np.concatenate([each.batch.seeds for each in calls])
    assert len(np.unique(seeds)) == len(seeds)


def test_clusters_of_a_batch_do_not_touch() -> None:
    problem = make("lattice2d", 8, seed=2)
    _, rounds = run(problem, clusters_per_round=6)
    for round_ in rounds:
        for calls in round_.calls:
            near = [set(row.tolist()) | set(problem.matrix[row].indices.tolist()) for row in calls.members]
            for one in range(len(near)):
                for other in range(one):
                    assert not near[one] & set(calls.members[other].tolist())


def test_improvements_say_who_found_them() -> None:
    problem = make("lattice2d", 10, seed=2)
    _, rounds = run(problem, sweeps=0)
    found = [improvement for round_ in rounds for improvement in round_.improvements]
    assert found[0].finder == "start"
    assert {improvement.finder for improvement in found[1:]} <= {"rounding", "clusters"}
    energies = [improvement.energy for improvement in found]
    assert energies == sorted(energies, reverse=True)


@pytest.fixture(scope="module")
def branching_problem() -> Problem:
    """K_9, whose odd-cycle program is far from its cut of 20."""
    return Problem.from_networkx(nx.complete_graph(9))


def test_everything_switched_on(branching_problem: Problem) -> None:
    search, _ = run(branching_problem)
    assert search.status == "proved_optimal"
    assert len(search.log) > 1
    assert search.log[-1].gap <= 1e-8


def test_without_branching_only_the_root_is_in_the_log(branching_problem: Problem) -> None:
    search, _ = run(branching_problem, branching=False)
    assert [line.node for line in search.log] == [0]
    assert search.status == "budget"
    assert "branching is switched off" in search.message
    assert search.lower_bound < ground_energy(branching_problem)


def test_without_cuts_more_nodes(branching_problem: Problem) -> None:
    """Only integral points that are no configuration are cut off, so that bounds are weaker and the log longer."""
    whole, _ = run(branching_problem)
    less, _ = run(branching_problem, cuts=False)
    assert less.status == "proved_optimal"
    assert less.best_energy == whole.best_energy
    assert less.log[0].node_bound < whole.log[0].node_bound
    assert less.log[0].cuts < whole.log[0].cuts
    assert len(less.tree.nodes) > len(whole.tree.nodes)
    assert check(branching_problem, less.certificate()) == whole.best_energy


def test_without_the_heuristic_nobody_is_asked() -> None:
    problem = make("sk", 18, seed=3)
    search, rounds = run(problem, heuristic=False)
    assert search.incumbent.calls == search.incumbent.sweeps == 0
    assert all(not round_.calls for round_ in rounds)
    with_it, _ = run(problem)
    assert search.log[0].best > with_it.log[0].best
    assert search.status == with_it.status == "proved_optimal"
    assert search.best_energy == pytest.approx(with_it.best_energy, abs=1e-9)


@pytest.mark.parametrize("nodes", [1, 2, 3])
def test_stopped_by_a_count_of_nodes(branching_problem: Problem, nodes: int) -> None:
    search, _ = run(branching_problem, nodes=nodes)
    lowest = ground_energy(branching_problem)
    assert search.nodes_done == nodes
    assert search.status == "budget"
    assert search.lower_bound < lowest
    assert check(branching_problem, search.certificate()) <= lowest


@pytest.mark.parametrize("after", [0, 1, 2, 3, 5, 8, 13, 21])
def test_stopped_at_any_time(branching_problem: Problem, after: int) -> None:
    """By an interrupt at the nth time it is asked about: the bound is true, and nothing is called proved."""
    asked = [0]

    def interrupted() -> bool:
        asked[0] += 1
        return asked[0] > after

    search, _ = run(branching_problem, interrupted=interrupted)
    lowest = ground_energy(branching_problem)
    assert search.status == "interrupted"
    assert check(branching_problem, search.certificate()) <= min(lowest, search.lower_bound + 1e-9)
    assert search.lower_bound <= lowest + 1e-12


def test_a_clock_that_is_already_up(branching_problem: Problem) -> None:
    search, _ = run(branching_problem, seconds=1e-9)
    assert search.status == "budget"
    assert check(branching_problem, search.certificate()) <= ground_energy(branching_problem)


def test_same_seed_same_run(branching_problem: Problem) -> None:
    one, first = run(branching_problem, seed=3)
    two, second = run(branching_problem, seed=3)
    assert np.array_equal(one.best_spins, two.best_spins)
    assert [line.node for line in one.log] == [line.node for line in two.log]
    assert [line.node_bound for line in one.log] == [line.node_bound for line in two.log]
    for a, b in zip(first, second, strict=True):
        assert [c.batch.seeds.tolist() for c in a.calls] == [c.batch.seeds.tolist() for c in b.calls]


def test_a_start_is_never_lost() -> None:
    problem = make("lattice2d", 4, seed=2)
    lowest = ground_energy(problem)
    best, _ = run(problem)
    again = BranchAndBound(
        problem, None, BranchPlan(heuristic=False, branching=False, cuts=False), start=best.best_spins
    )
    for _ in again.rounds():
        pass
    assert again.best_energy == lowest


@pytest.mark.parametrize("nodes", [1, 2, 4])
def test_a_stopped_run_is_taken_up(branching_problem: Problem, nodes: int) -> None:
    first, _ = run(branching_problem, nodes=nodes)
    second = BranchAndBound(branching_problem, None, BranchPlan(), start=first.best_spins)
    second.take_up(first.certificate())
    assert second.node_count == first.node_count
    assert second.lower_bound == first.lower_bound
    for _ in second.rounds():
        pass
    assert second.status == "proved_optimal"
    assert second.best_energy == ground_energy(branching_problem)
    assert check(branching_problem, second.certificate()) == second.best_energy
    whole, _ = run(branching_problem)
    assert second.nodes_done < whole.nodes_done + 3  # what was done is not done again


def test_a_tree_of_another_problem_is_not_taken_up(branching_problem: Problem) -> None:
    first, _ = run(branching_problem, nodes=1)
    other = BranchAndBound(make("sk", 9, seed=1), None, BranchPlan())
    with pytest.raises(ValueError, match="same problem"):
        other.take_up(first.certificate())


def crowded(size: int, degree: float, seed: int) -> Problem:
    """Spins in a square, neighbours at odds: full of small dense parts, of which odd cycles see too little."""
    draw = np.random.default_rng(seed)
    graph = nx.random_geometric_graph(size, (degree / (np.pi * size)) ** 0.5, seed=seed)
    heads, tails = np.array(graph.edges).T
    fields = 0.5 * draw.standard_normal(size)
    return Problem.from_arrays(heads, tails, draw.random(len(heads)), size=size, fields=fields)


def test_clusters_beside_the_tree() -> None:
    """Where they prove more than the root of the cycles, theirs is the bound and its certificate, which a later run
    takes up; without them the root says less."""
    problem = crowded(150, 10, 2)
    _, bound = narrow_minimum(problem, narrow_order(problem))  # it is narrow, so that the truth is known
    alone, _ = run(problem, nodes=1)
    assert alone.certificate().method == "cycles"
    found, _ = run(problem, nodes=1, clusters=True)
    certificate = found.certificate()
    assert certificate.method == "clusters"
    assert "multipliers on what they share" in found.proof
    assert alone.lower_bound + 0.1 < found.lower_bound == check(problem, certificate) <= bound.lower_bound + 1e-9
    later = BranchAndBound(problem, None, BranchPlan(), start=found.best_spins)
    later.take_up(certificate)
    assert later.lower_bound == found.lower_bound


def test_clusters_that_could_not_be_checked_in_time_stand_aside() -> None:
    found, _ = run(crowded(150, 10, 2), seconds=0.1, clusters=True)
    assert found.beside is None
    assert found.certificate().method == "cycles"


def test_promising_are_problems_full_of_small_dense_parts() -> None:
    assert promising(crowded(150, 10, 2))
    assert promising(make("beacons", 150, seed=1))
    for family, size in (("lattice2d", 12), ("lattice3d", 6), ("regular", 100)):
        assert not promising(make(family, size, seed=1))
