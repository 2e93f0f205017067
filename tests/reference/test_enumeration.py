"""Listing all energies gives the ground states, their number and the Boltzmann law that are known from outside."""

from __future__ import annotations

import itertools
import math

import numpy as np
import pytest
from scipy.stats import chisquare

from patchwalk.subsolvers import ClusterBatch, make_subsolver
from patchwalk.subsolvers.contract import F64
from patchwalk.subsolvers.enumeration import BLOCK, Enumeration, lowest_configurations
from patchwalk.subsolvers.spectrum import LANES, boltzmann_factor, count_ties, lowest_of


def torus(side: int, *, triangular: bool = False, frustrated: bool = False) -> F64:
    """Couplings of a lattice on a torus: antiferromagnetic, or with every other column of vertical bonds reversed."""
    couplings = np.zeros((side**2, side**2))
    for x, y in itertools.product(range(side), repeat=2):
        steps = [(1, 0), (0, 1), (1, 1)] if triangular else [(1, 0), (0, 1)]
        for right, up in steps:
            one, other = x + side * y, (x + right) % side + side * ((y + up) % side)
            strength = -1.0 if frustrated and not (up and x % 2) else 1.0
            couplings[one, other] = couplings[other, one] = strength
    return couplings


def glass(size: int, seed: int, rows: int = 1, temperature: float = 1.0) -> ClusterBatch:
    draw = np.random.default_rng(seed)
    upper = np.triu(draw.normal(size=(rows, size, size)), 1)
    return ClusterBatch(
        fields=draw.normal(size=(rows, size)),
        spins=draw.choice(np.array([-1, 1], np.int8), (rows, size)),
        temperature=np.full(rows, temperature),
        seeds=draw.integers(0, 2**63, rows, dtype=np.uint64),
        couplings=upper + upper.transpose(0, 2, 1),
    )


def without_fields(couplings: F64, seeds: int = 1) -> ClusterBatch:
    size = len(couplings)
    return ClusterBatch(
        np.zeros((seeds, size)),
        np.ones((seeds, size), np.int8),
        np.zeros(seeds),
        np.arange(seeds, dtype=np.uint64),
        np.tile(couplings, (seeds, 1, 1)),
    )


@pytest.mark.parametrize(
    ("couplings", "energy", "count"),
    [
        # Wannier, Phys. Rev. 79 (1950) 357: energy -1 a spin; the counts were computed outside this project
        (torus(3, triangular=True), -9.0, 42),
        (torus(4, triangular=True), -16.0, 42),
        # Villain, J. Phys. C 10 (1977) 1717 (from memory): energy -1 a spin; the count was computed outside
        (torus(4, frustrated=True), -16.0, 272),
        # common practice: an odd ring keeps one unsatisfied bond, in any of n places, and the global flip doubles it
        (np.roll(np.eye(7), 1, 0) + np.roll(np.eye(7), -1, 0), -5.0, 14),
    ],
    ids=["triangular 3x3", "triangular 4x4", "frustrated 4x4", "ring of 7"],
)
def test_ground_states_are_counted(couplings: F64, energy: float, count: int) -> None:
    lowest, found = Enumeration().minima(without_fields(couplings))
    assert (lowest[0], found[0]) == (energy, count)
    assert len(lowest_configurations(np.zeros(len(couplings)), couplings)[1]) == count


@pytest.mark.parametrize("draw", ["minimum", "boltzmann"])
def test_degenerate_minima_are_drawn_evenly(draw: str) -> None:
    """42 ground states, 4200 draws. Chance of a false alarm with another seed: 1e-4."""
    batch = without_fields(torus(3, triangular=True), seeds=4200)
    outcomes = make_subsolver("enumeration", draw=draw).propose(batch).outcomes[:, 0]
    _, counts = np.unique(outcomes, axis=0, return_counts=True)
    assert len(counts) == 42
    assert chisquare(counts).pvalue > 1e-4


@pytest.mark.parametrize("size", [1, 4, 12])
def test_draws_follow_the_boltzmann_law(size: int) -> None:
    """20,000 shots, rare configurations taken together. Chance of a false alarm with another seed: 1e-4 each."""
    batch = glass(size, seed=size, temperature=1.7)
    proposals = make_subsolver("enumeration", draw="boltzmann", shots=20_000).propose(batch)
    assert batch.couplings is not None
    spins = np.array(list(itertools.product([1, -1], repeat=size)), np.int64)[:, ::-1]
    energies = spins @ batch.fields[0] + 0.5 * np.einsum("xi,ij,xj->x", spins, batch.couplings[0], spins)
    law = np.exp((energies.min() - energies) / 1.7)
    law /= law.sum()
    counts = np.bincount((proposals.outcomes[0] < 0) @ (1 << np.arange(size)), minlength=1 << size)
    rare = law * 20_000 < 10
    together = [np.append(values[~rare], values[rare].sum()) for values in (counts, law * 20_000)]
    observed, expected = (values[together[1] > 0] for values in together)
    assert chisquare(observed, expected).pvalue > 1e-4
    assert proposals.hit_probability is not None
    assert proposals.hit_probability[0] == pytest.approx(law.max(), rel=1e-12)


def test_a_draw_lands_beyond_the_first_block() -> None:
    """The minimum is put at the last of all configurations, and at one in the middle."""
    size = 14
    assert 1 << size > 8 * BLOCK
    for target in ((1 << size) - 1, 11 * BLOCK + 5):
        fields = np.array([[1.0 if target >> bit & 1 else -1.0 for bit in range(size)]])
        batch = ClusterBatch(
            fields, np.ones((1, size), np.int8), np.full(1, 0.01), np.zeros(1, np.uint64), np.zeros((1, size, size))
        )
        for draw in ("minimum", "boltzmann"):
            outcome = make_subsolver("enumeration", draw=draw).propose(batch).outcomes[0, 0]
            assert sum(1 << bit for bit in range(size) if outcome[bit] < 0) == target


def test_the_log_ratio_makes_it_a_heat_bath_move() -> None:
    batch = glass(6, seed=4, rows=50, temperature=0.6)
    proposals = make_subsolver("enumeration", draw="boltzmann").propose(batch)
    assert batch.couplings is not None
    assert proposals.log_ratio is not None
    for row in range(50):
        before, after = (
            float(batch.fields[row] @ spins + 0.5 * spins @ batch.couplings[row] @ spins)
            for spins in (batch.spins[row].astype(float), proposals.outcomes[row, 0].astype(float))
        )
        assert proposals.log_ratio[row] == pytest.approx((after - before) / 0.6, abs=1e-12)


def test_the_largest_size_is_24() -> None:
    size = 24
    fields = np.random.default_rng(1).normal(size=(1, size))
    batch = ClusterBatch(
        fields, np.ones((1, size), np.int8), np.ones(1), np.zeros(1, np.uint64), np.zeros((1, size, size))
    )
    proposals = make_subsolver("enumeration").propose(batch)
    assert np.array_equal(proposals.outcomes[0, 0], -np.sign(fields[0]))
    assert proposals.work.energies is not None
    assert proposals.work.energies[0] == 1 << 24


@pytest.mark.parametrize("size", [1, 2, 8, LANES, 4 * LANES])
def test_reductions_agree_with_plain_ones(size: int) -> None:
    energies = np.random.default_rng(size).normal(size=size)
    assert lowest_of(energies) == energies.min()
    ties = np.empty(min(size, 2), np.int64)
    count_ties(energies, 0.3, ties)
    assert ties.tolist() == [(part <= 0.3).sum() for part in np.split(energies, len(ties))]


def test_the_boltzmann_factor_is_the_exponential() -> None:
    exponents = np.concatenate([[0.0, 1e-300, 1e-9, 707.999], np.random.default_rng(1).uniform(0, 700, 5000)])
    for exponent in exponents:
        assert boltzmann_factor(exponent) == pytest.approx(math.exp(-exponent), rel=1e-15)
    assert boltzmann_factor(708.0) == boltzmann_factor(math.inf) == 0.0
