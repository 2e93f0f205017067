"""The table of all energies of a cluster holds what the definition says, configuration by configuration."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt
import pytest

from patchwalk.subsolvers.contract import F64, I8, ClusterBatch
from patchwalk.subsolvers.spectrum import (
    cluster_energies,
    configuration_number,
    tie_tolerance,
    write_configuration,
)


def random_cluster(size: int, seed: int) -> tuple[F64, F64]:
    """Fields and couplings of a fully connected glass, all N(0,1)."""
    draw = np.random.default_rng(seed)
    upper = np.triu(draw.normal(size=(size, size)), 1)
    return draw.normal(size=size), upper + upper.T


def energies_of(fields: F64, couplings: F64) -> F64:
    energies = np.empty(1 << len(fields))
    cluster_energies(fields, couplings, energies)
    return energies


def spins_of(number: int, size: int) -> I8:
    """The numbering as the design states it: bit i, least significant first, is 0 for +1 and 1 for -1."""
    return np.array([-1 if number >> bit & 1 else 1 for bit in range(size)], np.int8)


def energy_by_definition(fields: F64, couplings: F64, spins: npt.NDArray[np.int8]) -> float:
    total = 0.0
    for i in range(len(fields)):
        total += fields[i] * spins[i]
        for j in range(i + 1, len(fields)):
            total += couplings[i, j] * spins[i] * spins[j]
    return total


@pytest.mark.parametrize("size", range(1, 9))
def test_every_energy_is_the_double_sum(size: int) -> None:
    fields, couplings = random_cluster(size, seed=size)
    expected = [energy_by_definition(fields, couplings, spins_of(x, size)) for x in range(1 << size)]
    np.testing.assert_allclose(energies_of(fields, couplings), expected, rtol=0, atol=1e-13 * size**2)


def test_large_table_at_random_places() -> None:
    size = 16
    fields, couplings = random_cluster(size, seed=5)
    energies = energies_of(fields, couplings)
    for number in np.random.default_rng(6).integers(0, 1 << size, 200):
        expected = energy_by_definition(fields, couplings, spins_of(int(number), size))
        assert energies[number] == pytest.approx(expected, rel=0, abs=1e-11)


def test_whole_numbers_give_exact_energies() -> None:
    draw = np.random.default_rng(2)
    upper = np.triu(draw.integers(-3, 4, (9, 9)), 1).astype(np.float64)
    fields = draw.integers(-3, 4, 9).astype(np.float64)
    expected = [energy_by_definition(fields, upper, spins_of(x, 9)) for x in range(512)]
    np.testing.assert_array_equal(energies_of(fields, upper + upper.T), expected)


def test_without_fields_turning_every_spin_changes_nothing() -> None:
    fields, couplings = random_cluster(7, seed=3)
    energies = energies_of(0.0 * fields, couplings)
    assert np.ptp(energies) > 1.0
    np.testing.assert_allclose(energies, energies[::-1], rtol=0, atol=tie_tolerance(0.0 * fields, couplings))


def test_fields_and_couplings_average_out() -> None:
    energies = energies_of(*random_cluster(10, seed=4))
    assert abs(energies.mean()) < 1e-12


def test_turning_spins_in_the_problem_renumbers_the_table() -> None:
    """A gauge change s_i -> g_i s_i is an exclusive or on the numbers."""
    size, turned = 6, 0b011010
    fields, couplings = random_cluster(size, seed=7)
    signs = spins_of(turned, size)
    changed = energies_of(fields * signs, couplings * np.outer(signs, signs))
    original = energies_of(fields, couplings)
    np.testing.assert_allclose(changed, original[np.arange(1 << size) ^ turned], rtol=0, atol=1e-13)


def test_a_power_of_two_scales_every_bit() -> None:
    fields, couplings = random_cluster(9, seed=8)
    np.testing.assert_array_equal(
        energies_of(fields * 2.0**20, couplings * 2.0**20), energies_of(fields, couplings) * 2.0**20
    )


def test_rows_of_a_read_only_batch_are_accepted() -> None:
    fields, couplings = random_cluster(5, seed=9)
    batch = ClusterBatch(
        fields=np.stack([fields, -fields]),
        couplings=np.stack([couplings, couplings]),
        spins=np.ones((2, 5), np.int8),
        temperature=np.zeros(2),
        seeds=np.zeros(2, np.uint64),
    )
    assert batch.couplings is not None
    np.testing.assert_array_equal(energies_of(batch.fields[1], batch.couplings[1]), energies_of(-fields, couplings))


def test_antiferromagnetic_triangle() -> None:
    """Six of eight states at -1, two at +3 (common practice)."""
    energies = energies_of(np.zeros(3), np.ones((3, 3)) - np.eye(3))
    assert sorted(energies) == [-1.0] * 6 + [3.0] * 2


def test_tolerance_is_a_billionth_of_all_weights() -> None:
    couplings = np.array([[0.0, -2.0], [-2.0, 0.0]])
    assert tie_tolerance(np.array([1.0, -4.0]), couplings) == pytest.approx(7e-9, rel=1e-15)


def test_numbers_and_configurations_go_both_ways() -> None:
    spins = np.empty(7, np.int8)
    for number in range(128):
        write_configuration(number, spins)
        np.testing.assert_array_equal(spins, spins_of(number, 7))
        assert configuration_number(spins) == number
