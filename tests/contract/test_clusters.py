"""Clusters do not touch, have the size asked for, and conditioned on the rest they tell energy changes exactly."""

from __future__ import annotations

import itertools
from dataclasses import replace

import networkx as nx
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from patchwalk.clusters.conditioning import condition
from patchwalk.clusters.growing import CANDIDATES
from patchwalk.clusters.rules import RULES, Marks, View, cluster_rule
from patchwalk.problem.families import make
from patchwalk.problem.ising import Problem
from patchwalk.search.sweeps import descend
from patchwalk.subsolvers.contract import F64, I8, I32, ClusterBatch


def random_problem(size: int, degree: float, seed: int) -> Problem:
    """A random graph with Gaussian couplings and fields."""
    rng = np.random.default_rng(seed)
    count = int(size * degree / 2)
    heads, tails = rng.integers(0, size, (2, count))
    apart = heads != tails
    weights, fields = rng.normal(size=int(apart.sum())), rng.normal(size=size)
    return Problem.from_arrays(heads[apart], tails[apart], weights, size=size, fields=fields, offset=2.5)


def picked(
    rule: str, problem: Problem, size: int, wanted: int, seed: int, marks: Marks, view: View | None = None
) -> I32:
    """The clusters of one round, all of one size where there are no groups."""
    if view is None:
        spins = np.random.default_rng(seed).choice(np.array([-1, 1], np.int8), len(problem))
        view = View.of(problem, spins)
    (members,) = cluster_rule(rule).pick(problem, size, wanted, seed, marks, view)
    return members


def conditioned(problem: Problem, members: I32, spins: I8) -> ClusterBatch:
    places = np.full(len(problem), -1, np.int32)
    batch = condition(
        problem, members, spins, problem.local_fields(spins), 1.0, np.arange(len(members), dtype=np.uint64), places
    )
    assert np.all(places == -1), "the scratch is left as it was found"
    return batch


def cluster_energy(batch: ClusterBatch, row: int, spins: I8) -> float:
    """The cluster's own energy, from either form of its couplings."""
    energy = float(batch.fields[row] @ spins)
    if batch.couplings is not None:
        return energy + 0.5 * float(spins @ batch.couplings[row] @ spins)
    assert batch.edges is not None
    own = batch.edges.rows(row, row + 1)
    return energy + float((own.weights * spins[own.pairs[:, 0]] * spins[own.pairs[:, 1]]).sum())


@pytest.mark.parametrize("rule", sorted(RULES))
@pytest.mark.parametrize(
    ("problem", "size"),
    [
        (make("lattice2d", 20, seed=1), 10),
        (make("lattice3d", 6, seed=1), 7),
        (make("sk", 40, seed=1), 12),
        (random_problem(200, 1.2, 3), 9),
        (random_problem(30, 0.0, 3), 5),
    ],
    ids=["square", "cubic", "dense", "many components", "no couplings"],
)
def test_clusters_of_a_round_do_not_touch(rule: str, problem: Problem, size: int) -> None:
    marks = Marks.for_problem(problem)
    for seed in range(30):
        members = picked(rule, problem, size, 64, seed, marks)
        assert members.shape[1] == size
        assert 1 <= len(members) <= max(1, len(problem) // size)
        assert np.all(np.diff(members, axis=1) > 0), "members rise, so none occurs twice"
        owner = np.full(len(problem), -1)
        for row, cluster in enumerate(members):
            assert np.all(owner[cluster] == -1)
            owner[cluster] = row
        rows = np.repeat(np.arange(len(problem)), np.diff(problem.row_starts))
        ends = owner[rows], owner[problem.neighbours]
        assert not np.any((ends[0] >= 0) & (ends[1] >= 0) & (ends[0] != ends[1]))


@given(st.integers(0, 10**6), st.integers(1, 12), st.integers(1, 9), st.sampled_from([0.5, 3.0, 30.0]), st.data())
def test_whatever_the_configuration_clusters_are_sound(
    seed: int, size: int, wanted: int, degree: float, data: st.DataObject
) -> None:
    """In range, rising, apart, and the same again from the same seed, for random graphs, spins, elites and counts."""
    problem, rng = random_problem(40, degree, seed % 23), np.random.default_rng(seed)
    rule = data.draw(st.sampled_from(sorted(RULES)))
    spins, *elites = rng.choice(np.array([-1, 1], np.int8), (1 + data.draw(st.integers(0, 3)), len(problem)))
    best = np.array(elites, np.int8).reshape(len(elites), len(problem))
    view = View(spins, problem.local_fields(spins), best, rng.integers(0, 9, len(problem)))
    members = picked(rule, problem, size, wanted, seed, Marks.for_problem(problem), view)
    assert members.dtype == np.int32
    assert 1 <= len(members) <= wanted
    assert members.min() >= 0
    assert members.max() < len(problem)
    assert np.all(np.diff(members, axis=1) > 0)
    for one, other in itertools.combinations(members, 2):
        assert not set(one) & set(other)
        assert problem.matrix[one][:, other].nnz == 0
    assert np.array_equal(picked(rule, problem, size, wanted, seed, Marks.for_problem(problem), view), members)


@pytest.mark.parametrize("rule", sorted(RULES))
def test_rules_are_seeded_and_know_no_history(rule: str) -> None:
    problem, marks = make("lattice2d", 12, seed=1), None
    first = picked(rule, problem, 8, 16, 7, Marks.for_problem(problem))
    marks = Marks.for_problem(problem)
    for seed in range(5):
        picked(rule, problem, 8, 16, seed, marks)
    assert np.array_equal(picked(rule, problem, 8, 16, 7, marks), first)
    assert not np.array_equal(picked(rule, problem, 8, 16, 8, marks), first)


@pytest.mark.parametrize("before", sorted(RULES))
def test_rules_know_nothing_of_another_rules_rounds(before: str) -> None:
    problem = make("lattice2d", 40, seed=1)
    marks = Marks.for_problem(problem)
    for rule in sorted(RULES):
        for seed in range(4):
            picked(before, problem, 60, 4, seed, marks)
            fresh = picked(rule, problem, 20, 16, seed, Marks.for_problem(problem))
            assert np.array_equal(picked(rule, problem, 20, 16, seed, marks), fresh)


@pytest.mark.parametrize("rule", sorted(RULES))
def test_blind_rules_pick_the_same_whatever_the_spins(rule: str) -> None:
    """And those that say they look do pick differently: the claim is not made for nothing."""
    problem = make("lattice2d", 12, seed=1)
    rng = np.random.default_rng(3)
    counts = rng.integers(0, 5, len(problem))
    picks = []
    for _ in range(6):
        spins, *elites = rng.choice(np.array([-1, 1], np.int8), (4, len(problem)))
        view = View(spins, problem.local_fields(spins), np.array(elites), counts)
        picks.append(picked(rule, problem, 8, 16, 7, Marks.for_problem(problem), view).tobytes())
    assert (len(set(picks)) == 1) == (not cluster_rule(rule).looks_at_spins)


@pytest.mark.parametrize("rule", sorted(RULES))
def test_the_whole_problem_can_be_one_cluster(rule: str) -> None:
    problem = random_problem(15, 1.0, 2)
    members = picked(rule, problem, 15, 64, 1, Marks.for_problem(problem))
    assert members.tolist() == [list(range(15))]


def test_a_ball_is_connected_and_every_spin_gets_its_turn() -> None:
    problem, marks = make("lattice2d", 10, seed=1), None
    marks = Marks.for_problem(problem)
    seen = np.zeros(len(problem), int)
    for seed in range(300):
        members = picked("ball", problem, 9, 1, seed, marks)
        inside = problem.matrix[members[0]][:, members[0]]
        reached = np.linalg.matrix_power(np.abs(inside.toarray()) + np.eye(9), 9)
        assert np.all(reached > 0)
        seen[members[0]] += 1
    assert seen.min() > 5


def ferromagnet(size: int, fields: F64 | None = None, *, ring: bool = False) -> Problem:
    """A chain or an open square whose bonds all favour equal spins."""
    if ring:
        spins = np.arange(size)
        return Problem.from_arrays(spins, np.roll(spins, -1), -np.ones(size), fields=fields)
    grid = nx.convert_node_labels_to_integers(nx.grid_2d_graph(size, size), ordering="sorted")
    heads, tails = np.array(grid.edges).T
    return Problem.from_arrays(heads, tails, -np.ones(len(heads)), fields=fields)


def test_frustrated_follows_violated_bonds() -> None:
    """One spin against all others: it and its neighbours, whatever the seed, where a ball would seldom meet it."""
    problem, flipped = ferromagnet(20), 20 * 9 + 7
    spins = np.ones(len(problem), np.int8)
    spins[flipped] = -1
    view, marks = View.of(problem, spins), Marks.for_problem(problem)
    expected = sorted([flipped, flipped - 1, flipped + 1, flipped - 20, flipped + 20])
    for seed in range(20):
        assert picked("frustrated", problem, 5, 1, seed, marks, view)[0].tolist() == expected


def test_frustrated_clusters_hold_more_violated_bonds_than_balls() -> None:
    problem = make("lattice3d", 8, seed=2, couplings="gaussian")
    spins = np.random.default_rng(1).choice(np.array([-1, 1], np.int8), len(problem))
    local = problem.local_fields(spins)
    descend(problem.row_starts, problem.neighbours, problem.couplings, spins, local, problem.tie_tolerance)
    view, marks = View.of(problem, spins), Marks.for_problem(problem)
    violated = problem.matrix.multiply(np.outer(spins, spins)).tocsr() > 0

    def share(rule: str) -> float:
        clusters = np.concatenate([picked(rule, problem, 10, 8, seed, marks, view) for seed in range(10)])
        return float(np.mean([violated[cluster][:, cluster].sum() / 2 for cluster in clusters]))

    assert share("frustrated") > 2 * share("ball")


def test_disputed_is_where_two_good_configurations_differ() -> None:
    """A domain that differs is the cluster; with no field also when the second configuration comes upside down."""
    domain = [20 * 5 + 3, 20 * 5 + 4, 20 * 5 + 5, 20 * 6 + 4, 20 * 6 + 5, 20 * 7 + 5]
    one = np.random.default_rng(2).choice(np.array([-1, 1], np.int8), 400)
    other = one.copy()
    other[domain] *= -1
    free, held = ferromagnet(20), ferromagnet(20, np.full(400, 0.5))
    for problem, second in ((free, other), (free, -other), (held, other)):
        view = replace(View.of(problem, one), elites=np.array([one, second]))
        for seed in range(10):
            assert picked("disputed", problem, 6, 1, seed, Marks.for_problem(problem), view)[0].tolist() == domain
    view = replace(View.of(held, one), elites=np.array([one, -other]))
    assert not set(domain) & set(picked("disputed", held, 6, 1, 1, Marks.for_problem(held), view)[0].tolist())


def test_disputed_without_two_configurations_is_ball() -> None:
    problem, spins = ferromagnet(20), np.ones(400, np.int8)
    view = replace(View.of(problem, spins), elites=spins[None])
    both = [picked(rule, problem, 6, 8, 3, Marks.for_problem(problem), view) for rule in ("disputed", "ball")]
    assert np.array_equal(*both)


def test_loose_starts_where_local_fields_are_weak() -> None:
    """One weak spin in a ring of 40: so many draws with replacement miss it in a round with chance (39/40)^draws."""
    fields = np.zeros(40)
    fields[11] = 1.9  # local fields are -2 everywhere but here, where it is -0.1
    problem, spins = ferromagnet(40, fields, ring=True), np.ones(40, np.int8)
    view, marks = View.of(problem, spins), Marks.for_problem(problem)
    hits = [picked("loose", problem, 3, 1, seed, marks, view)[0].tolist() == [10, 11, 12] for seed in range(400)]
    chance = 1 - (39 / 40) ** CANDIDATES
    assert np.mean(hits) == pytest.approx(chance, abs=5 * (chance * (1 - chance) / 400) ** 0.5)


def test_stale_gives_everybody_a_turn() -> None:
    problem = make("lattice2d", 12, seed=1)
    marks = Marks.for_problem(problem)

    def spread(rule: str) -> float:
        view = View.of(problem, np.ones(len(problem), np.int8))
        for seed in range(100):
            for cluster in picked(rule, problem, 6, 8, seed, marks, view):
                view.counts[cluster] += 1
        return float(np.std(view.counts))

    assert spread("stale") < 0.25 * spread("ball")


@settings(max_examples=60, deadline=None)
@given(st.integers(0, 10**6), st.sampled_from([3, 8, 30, 70]), st.sampled_from([1.5, 6.0, 60.0]), st.data())
def test_cluster_changes_are_changes_of_the_whole(seed: int, size: int, degree: float, data: st.DataObject) -> None:
    problem = random_problem(80, degree, seed % 50)
    rng = np.random.default_rng(seed)
    spins = rng.choice(np.array([-1, 1], np.int8), len(problem))
    rule = data.draw(st.sampled_from(sorted(RULES)))
    members = picked(rule, problem, size, 4, seed, Marks.for_problem(problem))
    batch = conditioned(problem, members, spins)
    assert batch.size == size or rule == "strip", "strips end early where they would be too wide to eliminate"
    assert (batch.couplings is None) == (batch.size > 64)
    for row, cluster in enumerate(members):
        assert np.array_equal(batch.spins[row], spins[cluster])
        flipped = spins.copy()
        flipped[cluster] = rng.choice(np.array([-1, 1], np.int8), batch.size)
        inside = cluster_energy(batch, row, flipped[cluster]) - cluster_energy(batch, row, spins[cluster])
        assert inside == pytest.approx(problem.energy(flipped) - problem.energy(spins), abs=1e-10)
