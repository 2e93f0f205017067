"""Sweeps keep their books right, sample the Boltzmann law, and cool a ring to its ground state."""

from __future__ import annotations

import numpy as np
import pytest

from patchwalk.problem.families import make
from patchwalk.problem.ising import Problem
from patchwalk.search.sweeps import descend, flip_accepted, metropolis_sweep
from patchwalk.search.temperature import GeometricCooling
from patchwalk.subsolvers.contract import F64, I8
from patchwalk.subsolvers.draws import stream_for


def begin(problem: Problem, seed: int) -> tuple[I8, F64]:
    spins = np.random.default_rng(seed).choice(np.array([-1, 1], np.int8), len(problem))
    return spins, problem.local_fields(spins)


def graph(problem: Problem) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    return problem.row_starts, problem.neighbours, problem.couplings


@pytest.mark.parametrize("family", ["lattice2d", "sk"])
@pytest.mark.parametrize("temperature", [0.0, 0.5, 3.0])
def test_energy_and_local_fields_are_kept(family: str, temperature: float) -> None:
    problem = make(family, 12, seed=4)
    spins, local = begin(problem, 1)
    energy, stream = problem.energy(spins), stream_for(9)
    for _ in range(20):
        change = metropolis_sweep(*graph(problem), spins, local, temperature, stream)
        energy += change
        assert energy == pytest.approx(problem.energy(spins), abs=1e-9)
        if temperature == 0.0:
            assert change <= 0.0
    np.testing.assert_allclose(local, problem.local_fields(spins), atol=1e-9)


def test_sweeps_sample_the_boltzmann_law() -> None:
    """Mean energy within 5 standard errors of enumeration; binned errors, false alarms below 1 in a million."""
    problem, temperature = make("sk", 6, seed=3, fields=True), 0.9
    states = 1 - 2 * ((np.arange(64)[:, None] >> np.arange(6)) & 1)
    energies = np.array([problem.energy(state) for state in states])
    weights = np.exp(-energies / temperature)
    exact = float(energies @ weights / weights.sum())
    spins, local = begin(problem, 1)
    energy, stream = problem.energy(spins), stream_for(2)
    bins = np.zeros(200)
    for number in range(200):
        for _ in range(100):
            energy += metropolis_sweep(*graph(problem), spins, local, temperature, stream)
            bins[number] += energy / 100
    assert abs(bins[1:].mean() - exact) < 5 * bins[1:].std() / np.sqrt(199)


def test_a_ring_cools_to_its_ground_state() -> None:
    """Domain walls must not travel with the sweep: with ties always flipped this ring stays near energy zero."""
    ring = Problem.from_arrays(range(100), [*range(1, 100), 0], [1.0] * 100)
    spins, local = begin(ring, 5)
    cooling, stream = GeometricCooling(0.7, 0.07, ring.field_scale), stream_for(1)
    for sweep in range(2000):
        metropolis_sweep(*graph(ring), spins, local, cooling.temperature(sweep / 2000), stream)
    assert ring.energy(spins) == -100.0


def test_descent_ends_where_no_flip_lowers_the_energy() -> None:
    problem = make("lattice3d", 5, couplings="gaussian", seed=2)
    spins, local = begin(problem, 3)
    before = problem.energy(spins)
    change = descend(*graph(problem), spins, local, problem.tie_tolerance)
    assert problem.energy(spins) == pytest.approx(before + change)
    assert all(problem.flip_change(spins, spin) >= -problem.tie_tolerance for spin in range(len(problem)))


def test_accepted_calls_and_only_those_are_put_in() -> None:
    """Two replicas, three clusters: the first refused, the others taken, and energies carried along."""
    problem = make("lattice2d", 6, seed=1)
    spins, local = (np.stack(both) for both in zip(begin(problem, 1), begin(problem, 2), strict=True))
    expected, energies = spins.copy(), np.array([problem.energy(row) for row in spins])
    members, replicas = np.array([[0, 1, 2], [14, 15, 20], [27, 28, 34]], np.int32), np.array([1, 1, 0])
    own = spins[replicas[:, None], members]
    outcomes = np.stack([own, -own], axis=1)
    expected[1, [14, 15, 20]] *= -1
    expected[0, [27, 28, 34]] *= -1
    after = np.array([problem.energy(row) for row in expected])
    change, before = np.array([5.0, after[1] - energies[1], after[0] - energies[0]]), np.empty(3)
    first = energies.copy()
    flip_accepted(
        *graph(problem), spins, local, energies, replicas, members, outcomes, np.ones(3, np.int64), change,
        np.array([False, True, True]), before,
    )  # fmt: skip
    assert np.array_equal(spins, expected)
    assert np.array_equal(before, first[[1, 1, 0]])
    np.testing.assert_allclose(energies, after)
    for row in range(2):
        np.testing.assert_allclose(local[row], problem.local_fields(spins[row]))


def test_cooling_goes_from_hot_to_cold_in_the_problems_units() -> None:
    cooling = GeometricCooling(hot=2.0, cold=0.5, scale=3.0)
    assert (cooling.temperature(0.0), cooling.temperature(0.5), cooling.temperature(1.0)) == (6.0, 3.0, 1.5)
    assert GeometricCooling(0.0, 0.0, 3.0).at(0.3) == 0.0


def test_every_cooling_lasts_over_twice_as_long_as_the_one_before() -> None:
    cooling = GeometricCooling(hot=2.0, cold=0.5, scale=3.0, coolings=3)
    starts = [0.0, 1 / 7, 3 / 7]
    ends = [1 / 7 - 1e-9, 3 / 7 - 1e-9, 1.0]
    assert [cooling.temperature(stage) for stage in starts] == pytest.approx([6.0] * 3)
    assert [cooling.temperature(stage) for stage in ends] == pytest.approx([1.5] * 3, rel=1e-6)
    for begin, end in zip(starts, ends, strict=True):
        temperatures = [cooling.temperature(begin + (end - begin) * step / 20) for step in range(21)]
        assert temperatures == sorted(temperatures, reverse=True)
