"""Trading temperatures changes no law, and the spacing moves until all neighbours trade equally often."""

from __future__ import annotations

import itertools

import numpy as np
import pytest
from numpy.typing import NDArray
from scipy.stats import chisquare

from patchwalk.search.ladder import ADAPT_ROUNDS, Ladder

LEVELS = np.array([0.0, 1.0, 2.5])


def test_exchange_leaves_the_joint_boltzmann_law_as_it_is() -> None:
    """Three rungs whose replicas are drawn afresh from their own Boltzmann law before every trade: behind the trade,
    what stands on each rung, and all of it together, follows the same law.
    """
    temperatures, rounds = np.array([3.0, 1.5, 0.8]), 20_000
    laws = np.exp(-LEVELS[None] / temperatures[:, None])
    laws /= laws.sum(axis=1, keepdims=True)
    rng, ladder = np.random.default_rng(2), Ladder(temperatures, 5)
    seen = np.zeros((3, 3, 3))
    for number in range(rounds):
        on_rung = np.array([rng.choice(3, p=law) for law in laws])
        states = on_rung[ladder.rungs]  # of each replica, by the rung it stands on
        ladder.watch(LEVELS[states], 1.0, number)
        seen[tuple(states[np.argsort(ladder.rungs)])] += 1
    joint = np.einsum("a,b,c->abc", *laws)
    assert chisquare(seen.ravel(), rounds * joint.ravel()).pvalue > 1e-4
    assert ladder.traded.min() > 0.1 * rounds


def test_every_replica_keeps_a_temperature_and_pairs_take_turns() -> None:
    ladder, rng = Ladder(np.geomspace(4.0, 0.5, 6), 1), np.random.default_rng(3)
    for number in range(200):
        before = ladder.rungs.copy()
        ladder.watch(rng.normal(size=6), 1.0, number)
        assert sorted(ladder.rungs) == list(range(6))
        moved = np.flatnonzero(before != ladder.rungs)
        assert all({before[i], ladder.rungs[i]} == {low, low + 1} for i in moved
                   for low in [min(before[i], ladder.rungs[i])])  # fmt: skip
        assert all(min(before[i], ladder.rungs[i]) % 2 == number % 2 for i in moved)
    assert np.array_equal(ladder.at(0.3), ladder.temperatures[ladder.rungs])
    assert ladder.at(0.3)[ladder.coldest] == 0.5


def test_the_lower_energy_always_goes_to_the_colder_rung() -> None:
    ladder = Ladder(np.array([2.0, 1.0]), 1)
    ladder.watch(np.array([-5.0, 5.0]), 1.0, 0)
    assert ladder.rungs.tolist() == [1, 0]
    ladder.watch(np.array([-500.0, 500.0]), 1.0, 2)
    assert ladder.rungs.tolist() == [1, 0]


def oscillators(temperatures: NDArray[np.float64], rng: np.random.Generator) -> NDArray[np.float64]:
    """Energies of 40 classical degrees of freedom for T above 1 and of 400 below, (R,)."""
    count = np.where(temperatures < 1.0, 400.0, 40.0)
    return rng.gamma(count / 2, temperatures)


def test_the_spacing_adapts_until_neighbours_trade_equally_often() -> None:
    """With one number of degrees of freedom the spacing would be geometric; here the cold steps must be narrower."""
    start = np.geomspace(4.0, 0.25, 7)
    ladder, rng = Ladder(start.copy(), 4, adapting=1.0), np.random.default_rng(6)
    spread = []
    for number in range(200 * ADAPT_ROUNDS):
        ladder.watch(oscillators(ladder.at(0.0), rng), 0.0, number)
        if (number + 2) % ADAPT_ROUNDS == 0:
            rates = ladder.chances / np.maximum(ladder.tried, 1)
            spread.append(rates.max() - rates.min())
        assert np.all(np.diff(ladder.temperatures) < 0.0)
    assert np.mean(spread[-50:]) < 0.5 * spread[0]
    assert ladder.temperatures[[0, -1]].tolist() == start[[0, -1]].tolist(), "the ends stay"
    cold = [i for i, low in enumerate(ladder.temperatures[1:]) if low < 1.0]
    widths = -np.diff(np.log(ladder.temperatures))
    assert widths[cold[1:]].max() < widths[: cold[0]].min(), "steps are narrow where energies depend on T most"


def test_it_does_not_adapt_when_told_not_to() -> None:
    start = np.geomspace(4.0, 0.25, 7)
    ladder, rng = Ladder(start.copy(), 4, adapting=0.5), np.random.default_rng(6)
    for number in range(3 * ADAPT_ROUNDS):
        ladder.watch(oscillators(ladder.at(0.0), rng), 0.5, number)
    assert np.array_equal(ladder.temperatures, start)


@pytest.mark.parametrize("broken_off", [0, 7, ADAPT_ROUNDS - 1, 130])
def test_it_goes_on_from_its_state_to_the_same_bits(broken_off: int) -> None:
    energies = np.random.default_rng(8).normal(size=(200, 5))
    whole, part = (Ladder(np.geomspace(2.0, 0.2, 5), 9, adapting=1.0) for _ in range(2))
    for number, row in enumerate(energies):
        whole.watch(row, 0.0, number)
        if number < broken_off:
            part.watch(row, 0.0, number)
    resumed = Ladder(np.geomspace(2.0, 0.2, 5), 9, adapting=1.0)
    resumed.set_state(part.as_state())
    for number, row in itertools.islice(enumerate(energies), broken_off, None):
        resumed.watch(row, 0.0, number)
    assert resumed.as_state() == whole.as_state()
