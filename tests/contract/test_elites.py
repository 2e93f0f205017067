"""Kept configurations are the best, and truly differ."""

from __future__ import annotations

import itertools

import numpy as np
import pytest
from numpy.typing import NDArray

from patchwalk.search.elites import Elites


def apart(one: NDArray[np.int8], other: NDArray[np.int8], symmetric: bool) -> int:
    different = int(np.count_nonzero(one != other))
    return min(different, len(one) - different) if symmetric else different


@pytest.mark.parametrize("symmetric", [True, False])
def test_they_stay_apart_and_rise_in_energy(symmetric: bool) -> None:
    rng = np.random.default_rng(1)
    elites, offered = Elites.none_yet(12, 5, 3, symmetric), []
    for _ in range(300):
        spins = rng.choice(np.array([-1, 1], np.int8), 12)
        energy = float(rng.integers(-20, 20))
        elites.offer(energy, spins)
        offered.append(energy)
        assert len(elites.spins) == len(elites.energies) <= 5
        assert np.all(np.diff(elites.energies) >= 0.0)
        for one, other in itertools.combinations(elites.spins, 2):
            assert apart(one, other, symmetric) >= 3
        assert elites.energies[0] == min(offered), "the best of all is always kept"


def test_a_global_flip_is_the_same_configuration_where_there_are_no_fields() -> None:
    spins = np.array([1, 1, -1, 1, -1, -1], np.int8)
    for symmetric, kept in ((True, 1), (False, 2)):
        elites = Elites.none_yet(6, 4, 1, symmetric)
        elites.offer(-1.0, spins)
        elites.offer(-1.0, -spins)
        assert len(elites.spins) == kept


def test_a_better_one_takes_the_place_of_all_those_close_to_it() -> None:
    elites = Elites.none_yet(8, 4, 3, False)
    up = np.ones(8, np.int8)
    left, right = up.copy(), up.copy()
    left[:2], right[-2:] = -1, -1
    for energy, spins in ((-1.0, left), (-2.0, right)):
        elites.offer(energy, spins)
    assert elites.energies.tolist() == [-2.0, -1.0], "these are four spins apart"
    elites.offer(-1.5, up)
    assert elites.energies.tolist() == [-2.0, -1.0], "not better than all those close to it"
    elites.offer(-3.0, up)
    assert elites.energies.tolist() == [-3.0]
    assert np.array_equal(elites.spins[0], up)


def test_what_is_kept_is_a_copy() -> None:
    elites, spins = Elites.none_yet(4, 2, 1, False), np.ones(4, np.int8)
    elites.offer(0.0, spins)
    spins[0] = -1
    assert elites.spins.tolist() == [[1, 1, 1, 1]]


def test_a_full_list_wants_only_what_is_better() -> None:
    elites = Elites.none_yet(4, 1, 1, False)
    assert elites.wants(100.0)
    elites.offer(1.0, np.ones(4, np.int8))
    assert not elites.wants(1.0)
    assert elites.wants(0.5)
