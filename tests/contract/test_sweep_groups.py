"""Moves within groups keep exactly one spin down, keep the books, and sample the Boltzmann law of what is feasible."""

from __future__ import annotations

import numpy as np
import pytest

from patchwalk.problem.ising import Problem
from patchwalk.search.sweep_groups import group_sweep
from patchwalk.subsolvers.draws import stream_for


def two_groups() -> tuple[Problem, np.ndarray, np.ndarray]:
    """Nine coupled spins: groups of three and four, one of which is -1 in each, and two spins outside."""
    draws = np.random.default_rng(3)
    heads, tails = np.triu_indices(9, 1)
    problem = Problem.from_arrays(heads, tails, draws.normal(size=36), fields=draws.normal(size=9))
    return problem, np.array([0, 3, 7]), np.array([0, 4, 2, 8, 5, 1, 3], np.int32)


def test_moves_in_groups_sample_the_boltzmann_law_of_feasible_configurations() -> None:
    """The 12 feasible configurations with spins 6 and 7 held; mean energy as above, a false alarm in 1e6."""
    problem, starts, members = two_groups()
    graph, temperature = (problem.row_starts, problem.neighbours, problem.couplings), 2.0
    states = []
    for first in members[:3]:
        for second in members[3:]:
            state = np.ones(9, np.int8)
            state[[first, second]] = -1
            states.append(state)
    energies = np.array([problem.energy(state) for state in states])
    weights = np.exp(-energies / temperature)
    spins, stream = states[0].copy(), stream_for(5)
    local, energy = problem.local_fields(spins), problem.energy(states[0])
    visited = np.empty(20_000)
    for call in range(len(visited)):
        energy += group_sweep(*graph, starts, members, spins, local, temperature, stream)
        visited[call] = energy
        if call % 100 == 0:
            assert any(np.array_equal(spins, state) for state in states)
    assert energy == pytest.approx(problem.energy(spins), abs=1e-8)
    np.testing.assert_allclose(local, problem.local_fields(spins), atol=1e-8)
    bins = visited.reshape(200, 100).mean(axis=1)
    assert abs(bins.mean() - energies @ weights / weights.sum()) < 5 * bins.std() / np.sqrt(199)


@pytest.mark.parametrize("down", [[], [0, 4], [0, 2, 4]])
def test_groups_without_exactly_one_spin_down_are_left_alone(down: list[int]) -> None:
    problem, starts, members = two_groups()
    spins = np.ones(9, np.int8)
    spins[down] = -1
    before, local, stream = spins.copy(), problem.local_fields(spins), stream_for(1)
    graph = (problem.row_starts, problem.neighbours, problem.couplings)
    for _ in range(20):
        change = group_sweep(*graph, starts[:2], members[:3], spins, local, 50.0, stream)
        assert change == 0.0
    assert np.array_equal(spins, before)


def test_at_temperature_zero_a_move_never_raises_the_energy() -> None:
    problem, starts, members = two_groups()
    spins = np.ones(9, np.int8)
    spins[[0, 8]] = -1
    local, stream = problem.local_fields(spins), stream_for(1)
    graph = (problem.row_starts, problem.neighbours, problem.couplings)
    changes = [group_sweep(*graph, starts, members, spins, local, 0.0, stream) for _ in range(50)]
    assert max(changes) <= 0.0
    assert min(changes) < 0.0
