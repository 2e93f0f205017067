"""Features of clusters against brute force over all configurations, and the walk's gap against closed forms."""

from __future__ import annotations

import itertools
from functools import reduce

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from patchwalk.clusters.features import CHEAP, FEATURES, cheap_features, exact_features
from patchwalk.clusters.landscape import EXACT_LIMIT, GAP_LIMIT, spectral_gaps
from patchwalk.subsolvers.contract import F64, ClusterBatch, Edges
from patchwalk.subsolvers.drivers import heuristic_hopping, level_spread
from patchwalk.subsolvers.neighbours import edges_of


def random_batch(rows: int, size: int, seed: int, *, whole: bool = False, density: float = 0.6) -> ClusterBatch:
    """Sparse clusters with fields; with ``whole`` numbers there are many ties."""
    rng = np.random.default_rng(seed)

    def draw(*shape: int) -> F64:
        return rng.integers(-1, 2, shape).astype(float) if whole else rng.normal(size=shape)

    upper = np.triu(draw(rows, size, size) * (rng.random((rows, size, size)) < density), 1)
    spins = rng.choice(np.array([-1, 1], np.int8), (rows, size))
    seeds = np.arange(rows, dtype=np.uint64)
    return ClusterBatch(draw(rows, size), spins, np.ones(rows), seeds, couplings=upper + upper.transpose(0, 2, 1))


def as_edges(batch: ClusterBatch) -> ClusterBatch:
    return ClusterBatch(batch.fields, batch.spins, batch.temperature, batch.seeds, edges=edges_of(batch))


def with_spins(batch: ClusterBatch, seed: int) -> ClusterBatch:
    spins = np.random.default_rng(seed).choice(np.array([-1, 1], np.int8), batch.spins.shape)
    return ClusterBatch(batch.fields, spins, batch.temperature, batch.seeds, couplings=batch.couplings)


def by_hand(batch: ClusterBatch, row: int) -> dict[str, float]:
    """All features but the gap, straight from their definitions."""
    assert batch.couplings is not None
    fields, couplings, own = batch.fields[row], batch.couplings[row], batch.spins[row].astype(float)
    bonds = [(couplings[i, j], own[i] * own[j]) for i, j in itertools.combinations(range(batch.size), 2)]
    bonds = [(weight, alike) for weight, alike in bonds if weight != 0]
    bad = [weight for weight, alike in bonds if weight * alike > 0]
    bad_fields = [abs(h) for h, s in zip(fields, own, strict=True) if h * s > 0]
    weight = sum(abs(weight) for weight, _ in bonds)
    pull, total = np.abs(fields).sum(), weight + np.abs(fields).sum()
    configurations = [np.array(spins) for spins in itertools.product([1.0, -1.0], repeat=batch.size)]
    energies = {tuple(s): float(fields @ s + 0.5 * s @ couplings @ s) for s in configurations}
    lowest, tolerance = min(energies.values()), 1e-9 * total
    minima = [s for s in configurations if energies[tuple(s)] <= lowest + tolerance]
    flips = 1.0 - 2.0 * np.eye(batch.size)
    held = [all(energies[tuple(s * flip)] >= energies[tuple(s)] - tolerance for flip in flips) for s in configurations]
    return {
        "frustration": len(bad) / len(bonds) if bonds else 0.0,
        "strain": (sum(map(abs, bad)) + sum(bad_fields)) / total if total else 0.0,
        "pull": pull / (2 * weight) if weight else (np.inf if pull else 0.0),
        "degree": 2 * len(bonds) / batch.size,
        "distance": min(int(np.sum(s != own)) for s in minima),
        "excess": energies[tuple(own)] - lowest,
        "stable": sum(held),
        "degeneracy": len(minima),
    }


@settings(max_examples=25)
@given(st.integers(0, 10**6), st.integers(1, 7), st.booleans(), st.sampled_from([0.0, 0.4, 1.0]))
def test_features_follow_their_definitions(seed: int, size: int, whole: bool, density: float) -> None:
    batch = random_batch(2, size, seed, whole=whole, density=density)
    found = cheap_features(batch) | exact_features(batch)
    for row in range(len(batch)):
        expected = by_hand(batch, row)
        assert {name: values[row] for name, values in found.items()} == pytest.approx(expected, abs=1e-12)


def test_the_table_lists_exactly_what_there_is() -> None:
    batch = random_batch(2, 4, 1)
    assert tuple(cheap_features(batch)) == CHEAP
    assert {*CHEAP, *exact_features(batch, gap=True)} == set(FEATURES)


def test_features_say_truly_whether_they_look_at_the_spins() -> None:
    batch = random_batch(6, 6, 4)
    for name, feature in FEATURES.items():
        views = [(cheap_features(view) | exact_features(view, gap=True))[name].tobytes()
                 for view in (with_spins(batch, seed) for seed in range(3))]  # fmt: skip
        assert (len(set(views)) > 1) == feature.looks_at_spins, name


def test_rows_are_independent_and_either_form_of_couplings_gives_the_same() -> None:
    batch = random_batch(8, 6, 5)
    whole = cheap_features(batch) | exact_features(batch, gap=True)
    for row in range(len(batch)):
        alone = batch.rows(row, row + 1)
        for name, values in (cheap_features(alone) | exact_features(alone, gap=True)).items():
            assert values[0] == whole[name][row], name
    for name, values in (cheap_features(as_edges(batch)) | exact_features(as_edges(batch))).items():
        assert values == pytest.approx(whole[name], rel=1e-14), f"{name}: sums of |J| may be taken in another order"


def test_large_clusters_have_cheap_features() -> None:
    """A chain of 100 spins all alike whose bonds all want opposite ones."""
    pairs = np.stack([np.arange(99), np.arange(1, 100)], axis=1)
    edges = Edges(np.array([0, 99]), pairs, np.full(99, 2.0))
    batch = ClusterBatch(np.full((1, 100), -1.0), np.ones((1, 100), np.int8), np.ones(1), np.zeros(1), edges=edges)
    found = {name: float(values[0]) for name, values in cheap_features(batch).items()}
    assert found == pytest.approx({"frustration": 1.0, "strain": 198 / 298, "pull": 100 / 396, "degree": 1.98})


@pytest.mark.parametrize(
    ("size", "gap", "limit"), [(EXACT_LIMIT + 1, False, EXACT_LIMIT), (GAP_LIMIT + 1, True, GAP_LIMIT)]
)
def test_clusters_that_are_too_large_are_refused(size: int, gap: bool, limit: int) -> None:
    with pytest.raises(ValueError, match=f"{size} spins.* at {limit}"):
        exact_features(random_batch(1, size, 1), gap=gap)


def test_an_unknown_feature_is_refused() -> None:
    with pytest.raises(ValueError, match="distance is no cheap feature"):
        cheap_features(random_batch(1, 3, 1), ["distance"])


def single(fields: F64, couplings: F64) -> ClusterBatch:
    size = len(fields)
    return ClusterBatch(fields[None], np.ones((1, size), np.int8), np.ones(1), np.zeros(1), couplings=couplings[None])


def test_gap_of_two_spins() -> None:
    """Levels of -g (X + X) + J Z Z are +-J and +-sqrt(J^2 + 4 g^2)."""
    coupling, hopping = 0.7, 0.4
    batch = single(np.zeros(2), np.array([[0.0, coupling], [coupling, 0.0]]))
    expected = np.sqrt(coupling**2 + 4 * hopping**2) - coupling
    assert spectral_gaps(batch, np.array([hopping]))[0] == pytest.approx(expected, rel=1e-12)


@pytest.mark.parametrize("size", [3, 10])
def test_gap_of_free_spins(size: int) -> None:
    """Each on its own has levels +-sqrt(h^2 + g^2); the softest is excited first. 10 spins take the iterative way."""
    fields = np.linspace(0.3, 1.4, size)
    gap = spectral_gaps(single(fields, np.zeros((size, size))), np.array([0.5]))[0]
    assert gap == pytest.approx(2 * np.hypot(0.3, 0.5), rel=1e-10)


@pytest.mark.parametrize("hopping", [0.6, 1.5])
def test_gap_of_a_ring(hopping: float) -> None:
    """The transverse-field Ising ring, Pfeuty, Ann. Phys. 57 (1970) 79: free fermions, one momentum set per parity."""
    size = 10
    ring = np.roll(np.eye(size), 1, axis=0)
    batch = single(np.zeros(size), -(ring + ring.T))

    def level(momenta: F64) -> float:
        energies = np.sqrt(1 + hopping**2 + 2 * hopping * np.cos(momenta))
        energies[np.isclose(momenta, np.pi)] = 1 - hopping  # signed: the mode that parity leaves no choice about
        return float(-energies.sum())

    numbers = 2 * np.pi * np.arange(size) / size
    expected = level(numbers) - level(numbers + np.pi / size)
    assert spectral_gaps(batch, np.array([hopping]))[0] == pytest.approx(expected, rel=1e-8)


def test_gap_against_a_dense_matrix_at_the_walks_own_rate() -> None:
    """Built from Kronecker products, for a size that takes the iterative way."""
    batch = random_batch(2, 9, 3, whole=True)
    assert batch.couplings is not None
    size, up, flip = batch.size, np.diag([1.0, -1.0]), np.array([[0.0, 1.0], [1.0, 0.0]])

    def at(matrix: F64, *places: int) -> F64:
        return reduce(np.kron, [matrix if spin in places else np.eye(2) for spin in reversed(range(size))])

    rates = np.empty(2)
    heuristic_hopping(batch.fields, batch.couplings, level_spread(size), rates)
    for row, gap in enumerate(spectral_gaps(batch)):
        energy = sum(batch.fields[row, i] * at(up, i) for i in range(size))
        for i, j in itertools.combinations(range(size), 2):
            energy = energy + batch.couplings[row, i, j] * at(up, i, j)
        levels = np.linalg.eigvalsh(energy - rates[row] * sum(at(flip, i) for i in range(size)))
        assert gap == pytest.approx(levels[1] - levels[0], rel=1e-8)
