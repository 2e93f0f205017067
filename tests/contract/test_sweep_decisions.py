"""Decisions in lanes follow Metropolis' rule to float32, batches do not touch, and together they keep the law."""

from __future__ import annotations

import numpy as np
import pytest

from patchwalk.problem.families import make
from patchwalk.problem.ising import Problem
from patchwalk.search.sweep_tables import batches_of, common_unit, greedy_colours
from patchwalk.subsolvers.compiled import compiled
from patchwalk.subsolvers.contract import F64
from patchwalk.subsolvers.draws import next_word, stream_for
from patchwalk.subsolvers.lanes_bits import load_lanes, spread, store_lanes
from patchwalk.subsolvers.lanes_decisions import coldness_at, draws_after, flips_that_happen
from patchwalk.subsolvers.neighbours import TIE_CHANCE


@compiled
def decide(rises: F64, temperature_word: float, draws: np.ndarray) -> np.uint32:
    none = np.uint32(0)
    return flips_that_happen(
        none, load_lanes(none, rises, 0), spread(none, temperature_word), load_lanes(none, draws, 0)
    )


@compiled
def draw_lanes(state: np.uint64, draws: np.ndarray) -> None:
    store_lanes(draws, 0, draws_after(np.uint32(0), state))


def chance_of(rises: F64, temperature: float) -> F64:
    """The chances of up to 32 flips, exactly: the share of all 2^32 draws that lets them happen, by bisection."""
    padded = np.zeros(32)
    padded[: len(rises)] = rises
    happening, refused = np.full(32, -1, np.int64), np.full(32, 2**32, np.int64)
    while np.any(refused - happening > 1):
        middle = (happening + refused) // 2
        flips = int(decide(padded, coldness_at(temperature), middle.clip(0, 2**32 - 1).astype(np.uint32)))
        yes, unsettled = (flips >> np.arange(32)) & 1 == 1, refused - happening > 1
        happening = np.where(unsettled & yes, middle, happening)
        refused = np.where(unsettled & ~yes, middle, refused)
    return (refused / 2.0**32)[: len(rises)]


def test_lanes_draw_the_words_of_the_stream() -> None:
    draws, stream = np.zeros(32, np.uint32), stream_for(77)
    draw_lanes(stream[0], draws)
    words = np.array([next_word(stream) for _ in range(16)], np.uint64)
    assert np.array_equal(draws, words.view(np.uint32))


def test_a_rise_is_accepted_as_often_as_metropolis_says() -> None:
    """To float32: relative 2e-6, and half a step of the 32-bit draws."""
    for temperature in (0.3, 1.0, 2.0**20):
        rises = temperature * np.concatenate([np.linspace(1e-4, 21.0, 31), [45.0]])
        expected = np.exp(-rises / temperature)
        np.testing.assert_allclose(chance_of(rises, temperature), expected, rtol=2e-6, atol=2.0**-32)
        falls = np.array([-1e-30, -1.0, -1e30])
        assert np.array_equal(chance_of(falls * temperature, temperature), [1.0, 1.0, 1.0])
        assert chance_of(np.array([0.0, -0.0]), temperature) == pytest.approx([TIE_CHANCE] * 2, abs=1e-7)


def test_at_temperature_zero_nothing_rises() -> None:
    chances = chance_of(np.array([1e-300, 1.0, 1e30, 0.0, -1e-300, -1e30]), 0.0)
    assert chances == pytest.approx([0.0, 0.0, 0.0, TIE_CHANCE, 1.0, 1.0], abs=1e-7)
    assert np.array_equal(chances[[0, 1, 2, 4, 5]], [0.0, 0.0, 0.0, 1.0, 1.0])


def boltzmann(problem: Problem, temperature: float) -> F64:
    """The Boltzmann law over all configurations in the order of their numbers."""
    size = len(problem)
    states = 1 - 2 * ((np.arange(2**size)[:, None] >> np.arange(size)) & 1)
    energies = np.array([problem.energy(state) for state in states])
    weights = np.exp(-(energies - energies.min()) / temperature)
    return weights / weights.sum()


def test_a_batch_keeps_the_boltzmann_law() -> None:
    """pi P = pi for the update of each batch, P a dense matrix from the kernels' own exact chances."""
    problem, temperature = make("lattice2d", 3, seed=4, fields=True, couplings="gaussian"), 1.3
    law, size, batches = boltzmann(problem, temperature), len(problem), batches_of(problem)
    states = 1 - 2 * ((np.arange(2**size)[:, None] >> np.arange(size)) & 1)
    for batch in range(len(batches.starts) - 1):
        members = batches.order[batches.starts[batch] : batches.starts[batch + 1]].astype(int)
        transition = np.zeros((2**size, 2**size))
        for x, state in enumerate(states):
            rises = np.array([problem.flip_change(state, spin) for spin in members])
            chances = chance_of(rises, temperature)
            for flips in range(2 ** len(members)):
                flipped = (flips >> np.arange(len(members))) & 1 == 1
                y = x ^ int((1 << members[flipped]).sum())
                transition[x, y] = np.prod(np.where(flipped, chances, 1 - chances))
        np.testing.assert_allclose(transition.sum(axis=1), 1.0, rtol=1e-12)
        np.testing.assert_allclose(law @ transition, law, rtol=3e-6)


@pytest.mark.parametrize("problem", [make("lattice2d", 40), make("lattice3d", 11), make("sk", 30)], ids=str)
def test_batches_hold_every_spin_once_and_no_coupled_pair(problem: Problem) -> None:
    batches = batches_of(problem)
    assert np.array_equal(np.sort(batches.order), np.arange(len(problem)))
    batch_of = np.empty(len(problem), int)
    for batch in range(len(batches.starts) - 1):
        batch_of[batches.order[batches.starts[batch] : batches.starts[batch + 1]]] = batch
    heads = np.repeat(np.arange(len(problem)), np.diff(problem.row_starts))
    assert np.all(batch_of[heads] != batch_of[problem.neighbours])
    assert batches.longest == np.bincount(batch_of).max()


def test_an_even_lattice_takes_two_colours() -> None:
    problem = make("lattice3d", 6)
    assert greedy_colours(problem.row_starts, problem.neighbours).max() == 1


@pytest.mark.parametrize(
    ("weights", "unit"),
    [
        ([1.0, -1.0, 1.0], 1.0),
        ([0.1, -0.1, 0.1], 0.1),
        ([6.0, -4.0, 10.0], 2.0),
        ([0.75, -0.5, 3.0], 0.25),
        ([0.1, 0.2, 0.3], None),  # in floating point 0.3 is not three times 0.1
        ([1.0, 2.0**-40, 1.0], None),
        ([0.3, 1.7, -2.2], None),
    ],
)
def test_couplings_that_are_whole_numbers_are_found(weights: list[float], unit: float | None) -> None:
    problem = Problem.from_arrays([0, 1, 2], [1, 2, 0], weights)
    assert common_unit(problem, 1e4) == unit
    larger = Problem.from_arrays([0, 1, 2], [1, 2, 0], np.array(weights) * 2.0**20)
    assert common_unit(larger, 1e4) == (None if unit is None else unit * 2.0**20)
