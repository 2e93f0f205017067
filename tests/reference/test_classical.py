"""Classical rivals against enumeration: they find small minima, and the held chain is reversible as it claims."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest
from scipy.stats import chisquare

from patchwalk.subsolvers import ClusterBatch, make_subsolver
from patchwalk.subsolvers.enumeration import lowest_configurations
from patchwalk.subsolvers.neighbours import TIE_CHANCE


def glass(rows: int, size: int, seed: int, plus_minus: bool = False, temperature: float = 0.7) -> ClusterBatch:
    rng = np.random.default_rng(seed)
    values = rng.choice([-1.0, 1.0], (rows, size, size)) if plus_minus else rng.normal(size=(rows, size, size))
    upper = np.triu(values, 1)
    return ClusterBatch(
        fields=rng.choice([-1.0, 0.0, 1.0], (rows, size)) if plus_minus else rng.normal(size=(rows, size)),
        spins=rng.choice([-1, 1], (rows, size)),
        temperature=np.full(rows, temperature),
        seeds=rng.integers(0, 2**63, rows),
        couplings=upper + upper.transpose(0, 2, 1),
    )


def energies_of(batch: ClusterBatch, row: int) -> np.ndarray:
    """All 2^k energies, by definition."""
    assert batch.couplings is not None
    size = batch.size
    states = 1.0 - 2.0 * ((np.arange(1 << size)[:, None] >> np.arange(size)) & 1)
    return states @ batch.fields[row] + 0.5 * np.einsum("xi,ij,xj->x", states, batch.couplings[row], states)


def numbers_of(outcomes: np.ndarray) -> np.ndarray:
    return ((outcomes < 0) << np.arange(outcomes.shape[-1])).sum(axis=-1)


@pytest.mark.parametrize("plus_minus", [False, True])
@pytest.mark.parametrize(
    ("name", "parameters", "share"),
    [
        ("tabu", {"steps": 100}, 0.99),
        ("descent", {"restarts": 64}, 0.99),
        ("metropolis", {"sweeps": 400}, 0.65),
        ("enumeration", {}, 1.0),
    ],
)
def test_the_minimum_of_small_clusters_is_found(
    name: str, parameters: dict[str, Any], share: float, plus_minus: bool
) -> None:
    batch = glass(100, 10, 3, plus_minus)
    assert batch.couplings is not None
    numbers = numbers_of(make_subsolver(name, **parameters).propose(batch).outcomes[:, 0])
    hits = [
        numbers[row] in lowest_configurations(batch.fields[row], batch.couplings[row])[1] for row in range(len(batch))
    ]
    assert np.mean(hits) >= share


def sweep_matrix(energies: np.ndarray, size: int, temperature: float, order: list[int]) -> np.ndarray:
    """The transition matrix of one Metropolis sweep in this order, ties taken with their chance."""
    matrix = np.eye(1 << size)
    for spin in order:
        step = np.zeros((1 << size, 1 << size))
        for x in range(1 << size):
            other = x ^ (1 << spin)
            rise = energies[other] - energies[x]
            chance = TIE_CHANCE if rise == 0 else min(1.0, np.exp(-rise / temperature))
            step[x, other], step[x, x] = chance, 1 - chance
        matrix = matrix @ step
    return matrix


@pytest.mark.parametrize("plus_minus", [False, True])
def test_the_held_chain_has_the_ratio_it_reports(plus_minus: bool) -> None:
    """There and back is reversible: pi(s) q(s->s') = pi(s') q(s'->s), so log_ratio is (E' - E)/T.

    The law of the outcomes agrees with the matrix by chi-square, fixed seed, false alarms one in a million.
    """
    size, shots, temperature = 4, 20_000, 0.9
    batch = glass(1, size, 8, plus_minus, temperature)
    energies = energies_of(batch, 0)
    there = sweep_matrix(energies, size, temperature, list(range(size)))
    back = sweep_matrix(energies, size, temperature, list(range(size))[::-1])
    chain = there @ back
    weights = np.exp(-energies / temperature)
    flow = weights[:, None] * chain
    np.testing.assert_allclose(flow, flow.T, atol=1e-12)
    start = int(numbers_of(batch.spins[0]))
    many = make_subsolver("metropolis", draw="boltzmann", sweeps=2, shots=shots).propose(batch)
    counts = np.bincount(numbers_of(many.outcomes[0]), minlength=16)
    likely = chain[start] > 1e-3
    pooled = np.append(counts[likely], counts[~likely].sum())
    expected = shots * np.append(chain[start][likely], chain[start][~likely].sum())
    kept = expected > 0
    assert chisquare(pooled[kept], expected[kept] / expected[kept].sum() * pooled[kept].sum()).pvalue > 1e-6
    one = make_subsolver("metropolis", draw="boltzmann", sweeps=2).propose(batch)
    end = int(numbers_of(one.outcomes[0, 0]))
    assert one.log_ratio is not None
    assert one.log_ratio[0] == pytest.approx((energies[end] - energies[start]) / temperature, abs=1e-12)


def test_tabu_leaves_a_local_minimum_that_descent_cannot() -> None:
    """A ferromagnetic block against a weak field: every single flip costs, the deeper valley lies k flips away."""
    size = 6
    couplings = np.ones((size, size)) * -1.0
    np.fill_diagonal(couplings, 0.0)
    batch = ClusterBatch(
        fields=np.full((1, size), 0.5), spins=np.ones((1, size)), temperature=np.zeros(1), seeds=np.ones(1),
        couplings=couplings[None],
    )  # fmt: skip
    found = make_subsolver("tabu", steps=40).propose(batch).outcomes[0, 0]
    assert np.all(found == -1)


def test_descent_counts_its_work() -> None:
    batch = glass(20, 12, 5)
    few, many = (make_subsolver("descent", restarts=n).propose(batch).work.spin_updates for n in (2, 20))
    assert few is not None
    assert many is not None
    assert np.all(few >= 2 * 12)
    assert np.all(many > few)
