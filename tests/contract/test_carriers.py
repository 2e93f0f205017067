"""Every representation of a problem keeps its books, samples the Boltzmann law, and treats each replica alone."""

from __future__ import annotations

import numpy as np
import pytest

from patchwalk.problem.families import make
from patchwalk.problem.ising import Problem
from patchwalk.search.sweep_colours import sweep_listed
from patchwalk.search.sweep_rows import fields_from_matrix
from patchwalk.search.sweep_tables import batches_of, palette_of
from patchwalk.search.sweeps import Carrier, carrier_for
from patchwalk.search.temperature import GeometricCooling
from patchwalk.subsolvers.contract import F64, I8, U64
from patchwalk.subsolvers.draws import seed_for, stream_for
from patchwalk.subsolvers.lanes_decisions import coldness_at

REPRESENTATIONS = ("colours", "matrix", "lists")


def carriers(problem: Problem) -> list[Carrier]:
    """The problem in every representation, also where another would have been chosen."""
    return [Carrier(problem, batches_of(problem), word) for word in REPRESENTATIONS]


def begin(problem: Problem, seed: int) -> tuple[I8, F64]:
    spins = np.random.default_rng(seed).choice(np.array([-1, 1], np.int8), len(problem))
    return spins, problem.local_fields(spins)


def replicas(problem: Problem, count: int, seed: int = 0) -> tuple[I8, F64, U64]:
    spins = np.random.default_rng(seed).choice(np.array([-1, 1], np.int8), (count, len(problem)))
    fields = np.stack([problem.local_fields(row) for row in spins])
    seeds = np.array([seed_for(seed, row) for row in range(count)], np.uint64)
    return spins, fields, seeds


def all_energies(problem: Problem) -> F64:
    """E of all configurations in the order of their numbers."""
    size = len(problem)
    states = 1 - 2 * ((np.arange(2**size)[:, None] >> np.arange(size)) & 1)
    return np.array([problem.energy(state) for state in states])


def boltzmann(problem: Problem, temperature: float) -> F64:
    energies = all_energies(problem)
    weights = np.exp(-(energies - energies.min()) / temperature)
    return weights / weights.sum()


def number(spins: I8) -> np.ndarray:
    return (spins < 0) @ (1 << np.arange(spins.shape[-1]))


def test_the_representation_follows_from_structure() -> None:
    assert carrier_for(make("lattice2d", 20)).representation == "colours"
    assert carrier_for(make("sk", 60)).representation == "matrix"
    clique, tail = np.triu_indices(60, 1), np.arange(60, 400)
    kite = Problem.from_arrays(
        np.concatenate([clique[0], tail - 1]), np.concatenate([clique[1], tail]), np.ones(len(clique[0]) + len(tail))
    )
    assert carrier_for(kite).representation == "lists"


@pytest.mark.parametrize("family", ["lattice2d", "sk"])
@pytest.mark.parametrize("couplings", ["pm1", "gaussian"])
@pytest.mark.parametrize("temperature", [0.0, 0.5, 3.0])
def test_energy_and_local_fields_are_kept(family: str, couplings: str, temperature: float) -> None:
    """n = 144 and 45: the last row of lanes is never full."""
    size = 12 if family == "lattice2d" else 45
    problem = make(family, size, seed=4, couplings=couplings, fields=True)
    for carrier in carriers(problem):
        spins, local = begin(problem, 1)
        energy = problem.energy(spins)
        for call in range(5):
            change = carrier.sweep(spins, local, temperature, seed_for(call), 4)
            energy += change
            assert energy == pytest.approx(problem.energy(spins), abs=1e-9)
            np.testing.assert_allclose(local, problem.local_fields(spins), atol=1e-9)
            assert temperature > 0.0 or change <= 0.0
    spins, local, seeds = replicas(problem, 20)
    before = np.array([problem.energy(row) for row in spins])
    changes = carrier_for(problem).sweep_replicas(spins, local, np.full(20, temperature), seeds, 20)
    after = np.array([problem.energy(row) for row in spins])
    np.testing.assert_allclose(changes, after - before, atol=1e-9)
    afresh = np.stack([problem.local_fields(row) for row in spins])
    np.testing.assert_allclose(local, afresh, atol=1e-9)
    assert family == "sk" or np.array_equal(local, afresh)


@pytest.mark.parametrize(
    "problem",
    [
        make("lattice2d", 9, seed=2),
        make("lattice2d", 9, seed=2, couplings="gaussian"),
        make("sk", 40, seed=2),
        make("sk", 40, seed=2, couplings="pm1"),
    ],
    ids=["whole", "real", "dense", "dense whole"],
)
def test_a_replica_depends_on_its_own_row_alone(problem: Problem) -> None:
    carrier = carrier_for(problem)
    start, local, seeds = replicas(problem, 53, seed=8)
    temperatures = np.linspace(0.0, 2.0, 53)
    together, fields = start.copy(), local.copy()
    changes = carrier.sweep_replicas(together, fields, temperatures, seeds, 7)
    assert len({row.tobytes() for row in together}) > 40
    shuffled = np.random.default_rng(3).permutation(53)
    for rows in (shuffled, shuffled[:16], shuffled[5:6], shuffled[10:27]):
        spins = start[rows].copy()
        own = carrier.sweep_replicas(spins, None, temperatures[rows], seeds[rows], 7)
        assert np.array_equal(spins, together[rows])
        assert np.array_equal(own, changes[rows])


@pytest.mark.parametrize("couplings", ["pm1", "gaussian"])
def test_scaling_the_problem_changes_no_bit(couplings: str) -> None:
    """Couplings, fields and temperature times 2^20."""
    problem, factor = make("lattice3d", 4, seed=3, couplings=couplings, fields=True), 2.0**20
    heads = np.repeat(np.arange(len(problem)), np.diff(problem.row_starts))
    once = heads < problem.neighbours
    larger = Problem.from_arrays(
        heads[once], problem.neighbours[once], factor * problem.couplings[once], fields=factor * problem.fields
    )
    for small, large in zip(carriers(problem), carriers(larger), strict=True):
        (spins, local), (others, other_local) = begin(problem, 1), begin(larger, 1)
        change = small.sweep(spins, local, 0.8, 5, 30)
        assert factor * change == large.sweep(others, other_local, factor * 0.8, 5, 30)
        assert np.array_equal(spins, others)
        assert np.array_equal(factor * local, other_local)
    (spins, local, seeds), (others, other_local, _) = replicas(problem, 16), replicas(larger, 16)
    temperatures = np.linspace(0.0, 2.0, 16)
    changes = carrier_for(problem).sweep_replicas(spins, local, temperatures, seeds, 30)
    scaled = carrier_for(larger).sweep_replicas(others, other_local, factor * temperatures, seeds, 30)
    assert np.array_equal(spins, others)
    assert np.array_equal(factor * changes, scaled)


def test_packed_rows_and_lists_give_the_same_bits() -> None:
    problem = make("lattice3d", 5, seed=6, fields=True)
    carrier = carrier_for(problem)
    (spins, local), (others, other_local) = begin(problem, 2), begin(problem, 2)
    change = carrier.sweep(spins, local, 1.2, 17, 25)
    lists = (problem.row_starts, problem.neighbours.view(np.uint32), problem.couplings)
    batches = (carrier.batches.order, carrier.batches.starts)
    cold, stream = coldness_at(1.2), stream_for(17)
    assert palette_of(problem, carrier.batches) is not None
    assert sweep_listed(*batches, *lists, others, other_local, cold, stream, 25) == change
    assert np.array_equal(spins, others)
    assert np.array_equal(local, other_local)


def test_only_few_different_couplings_make_a_palette() -> None:
    problem = make("lattice2d", 20, couplings="gaussian")
    assert palette_of(problem, batches_of(problem)) is None
    whole = Problem.from_arrays(range(99), range(1, 100), np.arange(99) % 50 - 25)
    palette = palette_of(whole, batches_of(whole))
    assert palette is not None
    assert np.array_equal(palette.values, np.delete(np.arange(-25.0, 25.0), 25))


def test_local_fields_come_from_a_matrix_as_from_the_problem() -> None:
    problem = make("sk", 37, seed=2, fields=True)
    spins, local = begin(problem, 4)
    assert np.array_equal(fields_from_matrix(problem.matrix.toarray(), problem.fields, spins), local)


@pytest.mark.parametrize("pairs", [0, 2])
@pytest.mark.parametrize("strength", [1.0, 0.3])
def test_spins_without_neighbours_follow_their_fields(pairs: int, strength: float) -> None:
    """Also before the first coupling, after the last, and where there is none at all."""
    fields = np.where(np.arange(300) % 3 == 0, 1.0, -1.0)
    problem = Problem.from_arrays([50, 51][:pairs], [51, 52][:pairs], [strength] * pairs, size=300, fields=fields)
    for carrier in carriers(problem):
        spins, local = begin(problem, 1)
        carrier.sweep(spins, local, 0.0, 5, 50)
        assert np.array_equal(spins[:50], -fields[:50])
        assert np.array_equal(spins[53:], -fields[53:])
    together, local, seeds = replicas(problem, 5)
    carrier_for(problem).sweep_replicas(together, local, np.zeros(5), seeds, 50)
    assert np.array_equal(together[:, 53:], np.tile(-fields[53:], (5, 1)))


def test_no_sweeps_change_nothing() -> None:
    problem = make("lattice2d", 6, seed=1)
    for carrier in carriers(problem):
        spins, local = begin(problem, 1)
        assert carrier.sweep(spins, local, 1.0, 3, sweeps=0) == 0.0
        assert np.array_equal(spins, begin(problem, 1)[0])


def small_problems() -> list[tuple[Problem, float]]:
    """With ties and without, whole numbers and not."""
    return [
        (make("lattice2d", 3, seed=5, couplings="pm1"), 1.5),
        (make("lattice2d", 3, seed=5, couplings="gaussian", fields=True), 1.1),
        (make("sk", 8, seed=3, couplings="gaussian", fields=True), 0.7),
    ]


@pytest.mark.parametrize("representation", REPRESENTATIONS)
@pytest.mark.parametrize("case", range(3))
def test_one_replica_samples_the_boltzmann_law(representation: str, case: int) -> None:
    """Mean energy and squared energy within 5 standard errors of enumeration, from 200 bins: a false alarm in 5e5."""
    problem, temperature = small_problems()[case]
    carrier = Carrier(problem, batches_of(problem), representation)
    energies, law = all_energies(problem), boltzmann(problem, temperature)
    spins, local = begin(problem, 1)
    energy, visited = problem.energy(spins), np.empty(20_000)
    for call in range(len(visited)):
        energy += carrier.sweep(spins, local, temperature, seed_for(9, case, call), 2)
        visited[call] = energy
    for power in (1, 2):
        bins = (visited[100:] ** power)[: 199 * 100].reshape(199, 100).mean(axis=1)
        exact = float(energies**power @ law)
        assert abs(bins.mean() - exact) < 5 * bins.std() / np.sqrt(198)


@pytest.mark.parametrize("case", range(3))
def test_replicas_sample_the_boltzmann_law(case: int) -> None:
    """4096 independent replicas after 60 sweeps: every configuration as often as enumeration says, by chi squared.

    Configurations expected less than ten times are counted as one. The limit lies 5 standard deviations above the
    mean of chi squared: a false alarm in 1e5, its right tail being heavier than a Gaussian's. At 1.5 times the
    temperature the same rows fail.
    """
    problem, temperature = small_problems()[case]
    law = boltzmann(problem, temperature)
    spins, _, seeds = replicas(problem, 4096, seed=4)
    carrier_for(problem).sweep_replicas(spins, None, np.full(4096, temperature), seeds, 60)
    counts = np.bincount(number(spins), minlength=len(law))

    def surprise(law: F64) -> float:
        common = 4096 * law >= 10
        expected = 4096 * np.append(law[common], law[~common].sum())
        seen = np.append(counts[common], counts[~common].sum())
        kept = expected > 0
        freedom = int(kept.sum()) - 1
        chi_squared = float(((seen - expected)[kept] ** 2 / expected[kept]).sum())
        return (chi_squared - freedom) / np.sqrt(2 * freedom)

    assert surprise(law) < 5
    assert surprise(boltzmann(problem, 1.5 * temperature)) > 5


def test_spins_that_are_not_coupled_are_not_correlated() -> None:
    """No two spins share a draw: 780 correlations of 2048 samples, all within 5 standard errors (1 in 2000 falsely)."""
    problem = Problem.from_arrays([], [], [], size=40, fields=np.full(40, 0.3))
    spins, _, seeds = replicas(problem, 2048, seed=6)
    carrier_for(problem).sweep_replicas(spins, None, np.ones(2048), seeds, 4)
    samples = [spins]
    for carrier in carriers(problem):
        alone, _, _ = replicas(problem, 2048, seed=6)
        for row, own in enumerate(alone):
            carrier.sweep(own, problem.fields.copy(), 1.0, int(seeds[row]), 4)
        samples.append(alone)
    for sample in samples:
        correlations = np.corrcoef(sample.T)
        assert np.abs(correlations[np.triu_indices(40, 1)]).max() < 5 / np.sqrt(2048)


def test_a_ring_cools_to_its_ground_state() -> None:
    """Domain walls must meet: with ties always flipped they travel with the batches and never do."""
    ring = Problem.from_arrays(range(100), [*range(1, 100), 0], [1.0] * 100)
    cooling = GeometricCooling(0.7, 0.07, ring.field_scale)
    for carrier in carriers(ring):
        spins, local = begin(ring, 5)
        for sweep in range(2000):
            carrier.sweep(spins, local, cooling.temperature(sweep / 2000), seed_for(1, sweep))
        assert ring.energy(spins) == -100.0
    together, _, seeds = replicas(ring, 16)
    for sweep in range(2000):
        temperatures = np.full(16, cooling.temperature(sweep / 2000))
        carrier_for(ring).sweep_replicas(together, None, temperatures, seeds + np.uint64(sweep << 32))
    assert np.count_nonzero([ring.energy(row) == -100.0 for row in together]) >= 14


@pytest.mark.parametrize("couplings", ["pm1", "gaussian"])
def test_representations_cool_equally_well(couplings: str) -> None:
    """Energies after annealing, 32 runs each: means within 5 standard errors of a difference (1 in 2e4 falsely)."""
    problem = make("lattice3d", 6, seed=1, couplings=couplings)
    cooling, found = GeometricCooling(1.0, 0.1, problem.field_scale), []
    for carrier in carriers(problem):
        runs = []
        for run in range(32):
            spins, local = begin(problem, run)
            for sweep in range(100):
                carrier.sweep(spins, local, cooling.temperature(sweep / 99), seed_for(run, sweep))
            runs.append(problem.energy(spins))
        found.append(np.array(runs))
    together, _, seeds = replicas(problem, 32, seed=7)
    for sweep in range(100):
        temperatures = np.full(32, cooling.temperature(sweep / 99))
        carrier_for(problem).sweep_replicas(together, None, temperatures, seeds + np.uint64(sweep << 32))
    found.append(np.array([problem.energy(row) for row in together]))
    for one in found[1:]:
        error = np.sqrt((one.var() + found[0].var()) / 31)
        assert abs(one.mean() - found[0].mean()) < 5 * error
