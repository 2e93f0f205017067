"""Cluster bounds: exact where one cluster holds all or the couplings are a tree, never above the true minimum."""

from __future__ import annotations

import itertools

import networkx as nx
import numpy as np
import pytest

from patchwalk.bounds.certificate_error import CertificateError
from patchwalk.bounds.cluster_certificate import WIDEST, checked_clusters, eliminated
from patchwalk.bounds.cluster_dual import (
    cluster_minima,
    grow_clusters,
    list_cluster_pairs,
    smoothed_minima,
    transform,
)
from patchwalk.bounds.clusters import cluster_bound
from patchwalk.bounds.narrow import narrow_minimum, narrow_order
from patchwalk.clusters.conditioning import condition
from patchwalk.problem.families import make
from patchwalk.problem.ising import Problem
from patchwalk.subsolvers.registry import make_subsolver
from patchwalk.subsolvers.spectrum import cluster_energies


def ground_energy(problem: Problem) -> float:
    levels = np.empty(1 << len(problem))
    cluster_energies(problem.fields.copy(), problem.matrix.toarray(), levels)
    return float(levels.min()) + problem.offset


def random_problem(number: int) -> Problem:
    """Sizes 2 to 16, with and without fields, whole and real numbers, dense and sparse."""
    draw = np.random.default_rng(number)
    size = int(draw.integers(2, 17))
    heads, tails = np.triu_indices(size, 1)
    kept = draw.random(len(heads)) < (1.0, 0.5, 0.2)[number % 3]
    law = (lambda count: draw.integers(-3, 4, count)) if number % 2 else draw.standard_normal
    fields = law(size) if number % 4 < 2 else None
    return Problem.from_arrays(
        heads[kept], tails[kept], law(int(kept.sum())), size=size, fields=fields, offset=float(number % 5)
    )


@pytest.mark.parametrize("tens", range(20))
def test_bounds_stay_below_the_ground_energy(tens: int) -> None:
    for number in range(10 * tens, 10 * tens + 10):
        problem = random_problem(number)
        bound = cluster_bound(problem, cluster_size=2 + number % 5, overlap=1 + number % 4)
        assert bound.lower_bound <= ground_energy(problem) + problem.tie_tolerance
        assert checked_clusters(problem, bound.arrays) == bound.lower_bound


@pytest.mark.parametrize("number", range(6))
def test_one_cluster_that_holds_all_is_exact(number: int) -> None:
    problem = make("sk", 8, seed=number, fields=bool(number % 2))
    bound = cluster_bound(problem, cluster_size=8)
    assert bound.lower_bound == pytest.approx(ground_energy(problem), rel=1e-12)


def test_a_tree_is_exact_in_pairs() -> None:
    """Clusters of one coupling each are tight on a tree (Wainwright, Jaakkola & Willsky 2005); within 0.1 % here, since
    the climb ends at a finite temperature."""
    draw = np.random.default_rng(1)
    edges = np.array(nx.random_labeled_tree(14, seed=2).edges)
    problem = Problem.from_arrays(*edges.T, draw.standard_normal(13), fields=draw.standard_normal(14))
    ground = ground_energy(problem)
    assert -1e-3 * abs(ground) + ground <= cluster_bound(problem, cluster_size=2).lower_bound <= ground


def test_larger_clusters_and_multipliers_raise_the_bound() -> None:
    """Pairs alone give -sum |J| without fields; plaquettes see frustration; the climb starts from even shares."""
    problem = make("lattice2d", 6, seed=1)
    pairs, plaquettes = (cluster_bound(problem, cluster_size=size, overlap=6) for size in (2, 6))
    assert pairs.lower_bound == pytest.approx(-np.abs(problem.couplings).sum() / 2)
    assert plaquettes.lower_bound > pairs.lower_bound + 15
    untouched = cluster_bound(problem, cluster_size=6, overlap=6, steps=0)
    assert plaquettes.lower_bound > untouched.lower_bound + 1


@pytest.mark.parametrize("name", ["field_shares", "coupling_shares"])
def test_shares_that_do_not_add_up_are_refused(name: str) -> None:
    """One share altered alone, upwards or downwards, by much or by little; or left out altogether."""
    problem = make("lattice2d", 4, seed=3, couplings="gaussian", fields=True)
    arrays = cluster_bound(problem, cluster_size=6).arrays
    for place in range(len(arrays[name])):
        for change in (1.0, -1.0, 1e-9, -1e-12):
            shares = arrays[name].copy()
            shares[place] += change
            with pytest.raises(CertificateError, match="do not add up"):
                checked_clusters(problem, {**arrays, name: shares})
    with pytest.raises(CertificateError, match="do not add up"):
        checked_clusters(problem, {**arrays, name: 0 * arrays[name]})


def test_shares_moved_from_one_cluster_to_another_prove_something_else() -> None:
    """They add up still, so that what they prove is true; the climb left nothing to gain by it."""
    problem = make("lattice2d", 4, seed=3, couplings="gaussian", fields=True)
    bound = cluster_bound(problem, cluster_size=6)
    draw, members = np.random.default_rng(1), bound.arrays["members"]
    for _ in range(30):
        one, other = draw.choice(np.flatnonzero(members == draw.integers(16)), 2, replace=False)
        shares, change = bound.arrays["field_shares"].copy(), 2.0 ** draw.integers(-4, 2)
        shares[one] += change
        shares[other] -= change
        proved = checked_clusters(problem, {**bound.arrays, "field_shares": shares})
        assert proved <= min(bound.lower_bound + 1e-2, ground_energy(problem))


def test_a_certificate_of_another_layout_is_refused() -> None:
    problem = make("lattice2d", 4, seed=3)
    good = cluster_bound(problem, cluster_size=4, steps=0).arrays
    for changes, words in (
        ({"field_shares": good["field_shares"][:-1]}, "shares for"),
        ({"coupling_shares": good["coupling_shares"] * np.nan}, "not finite"),
        ({"members": good["members"] + 1}, "from 0 to 15"),
        ({"members": 0 * good["members"]}, "a member twice"),
        (
            {"pairs": good["pairs"][::-1], "coupling_shares": good["coupling_shares"][::-1]},
            "not one of two members",
        ),
        ({"pairs": good["pairs"] + 8}, "of spins from 0"),
        ({"pairs": good["pairs"][:1]}, "shares for"),
        ({"member_starts": good["member_starts"][1:]}, "starts"),
        ({"pair_starts": good["pair_starts"][::-1]}, "rising"),
    ):
        with pytest.raises(CertificateError, match=words):
            checked_clusters(problem, {**good, **changes})
    with pytest.raises(CertificateError, match="incomplete"):
        checked_clusters(problem, {name: good[name] for name in good if name != "pairs"})


@pytest.mark.parametrize("number", range(40))
def test_elimination_of_the_check_against_enumeration(number: int) -> None:
    """In any order: the lowest of all energies, and spins that have it."""
    problem = random_problem(number)
    order = np.random.default_rng(number).permutation(len(problem)).astype(np.int32)
    pairs = np.argwhere(np.triu(problem.matrix.toarray())).astype(np.int32)
    weights = problem.matrix.toarray()[pairs[:, 0], pairs[:, 1]]
    lowest, found = eliminated(order, problem.fields[order], pairs, weights)
    assert lowest + problem.offset == pytest.approx(ground_energy(problem), abs=1e-12)
    spins = np.empty(len(problem), np.int8)
    spins[order] = found
    assert problem.energy(spins) == pytest.approx(lowest + problem.offset, abs=1e-12)


def test_tables_too_wide_to_check_are_refused() -> None:
    size = WIDEST + 2
    heads, tails = np.triu_indices(size, 1)
    with pytest.raises(ValueError, match=f"2\\^{size - 1} entries"):
        eliminated(np.arange(size), np.zeros(size), np.stack([heads, tails], axis=1), np.ones(len(heads)))


def test_impossible_settings_are_refused() -> None:
    problem = make("lattice2d", 4, seed=3)
    for settings in ({"cluster_size": 1}, {"cluster_size": 21}, {"overlap": 0}):
        with pytest.raises(ValueError, match=next(iter(settings))):
            cluster_bound(problem, **settings)


def test_equal_calls_give_equal_bits_at_every_scale() -> None:
    problem = make("beacons", 30, seed=2)
    pairs = np.array(np.nonzero(np.triu(problem.matrix.toarray())))
    weights = problem.matrix.toarray()[pairs[0], pairs[1]]
    large = Problem.from_arrays(*pairs, weights * 2**20, fields=problem.fields * 2**20, offset=problem.offset * 2**20)
    first, second, third = (cluster_bound(it, cluster_size=6) for it in (problem, problem, large))
    assert first.lower_bound == second.lower_bound == third.lower_bound / 2**20
    assert np.array_equal(first.arrays["coupling_shares"], second.arrays["coupling_shares"])


@pytest.mark.parametrize(("size", "overlap"), [(2, 1), (4, 2), (9, 9)])
def test_clusters_cover_every_coupling_and_are_connected(size: int, overlap: int) -> None:
    for problem in (make("lattice2d", 6, seed=1), make("sk", 12, seed=1), make("beacons", 40, seed=1)):
        starts, members = grow_clusters(problem.row_starts, problem.neighbours, size, overlap)
        graph, covered = nx.from_scipy_sparse_array(problem.matrix), set()
        for start, stop in itertools.pairwise(starts):
            own = members[start:stop]
            assert 2 <= len(own) <= size
            assert np.all(np.diff(own) > 0)
            inside = graph.subgraph(own.tolist())
            assert nx.is_connected(inside)
            covered |= {tuple(sorted(edge)) for edge in inside.edges}
        assert covered == {tuple(sorted(edge)) for edge in graph.edges}


def test_the_slope_is_the_derivative_and_the_minima_its_limit() -> None:
    problem = make("lattice2d", 3, seed=1, couplings="gaussian", fields=True)
    starts, members = grow_clusters(problem.row_starts, problem.neighbours, 5, 2)
    layout = (starts, *list_cluster_pairs(problem.row_starts, problem.neighbours, starts, members)[:3])
    count = len(members) + len(layout[2])
    shares = np.random.default_rng(1).normal(size=count)
    slope, spare, minima = np.empty(count), np.empty(count), np.empty(len(starts) - 1)
    _, sharp = smoothed_minima(*layout, shares, 0.7, slope)
    cluster_minima(*layout, shares, minima)
    assert sharp == pytest.approx(minima.sum())
    for place in range(count):
        step = np.zeros(count)
        step[place] = 1e-5
        up, down = (smoothed_minima(*layout, shares + sign * step, 0.7, spare)[0] for sign in (1, -1))
        assert (up - down) / 2e-5 == pytest.approx(slope[place], abs=1e-7)
    assert smoothed_minima(*layout, shares, 1e-3, spare)[0] == pytest.approx(sharp, abs=1e-3 * 5 * len(minima))


def test_the_transform_is_hadamards_matrix() -> None:
    values = np.random.default_rng(2).normal(size=16)
    matrix = np.array([[(-1.0) ** bin(x & m).count("1") for x in range(16)] for m in range(16)])
    table = values.copy()
    transform(table)
    assert np.allclose(table, matrix @ values, atol=1e-13)


@pytest.mark.parametrize("family", ["beacons", "tree", "strip", "lone spins"])
def test_narrow_problems_are_exact(family: str) -> None:
    """Against the kernels of the subsolver ``elimination``, which share nothing with the check."""
    draw = np.random.default_rng(3)
    if family == "beacons":
        problem = make("beacons", 200, seed=4)
    elif family == "lone spins":
        problem = Problem.from_arrays([0], [1], [1.0], size=70, fields=draw.standard_normal(70))
    else:
        graph = nx.random_labeled_tree(300, seed=2) if family == "tree" else nx.grid_2d_graph(6, 60)
        edges = np.array(nx.convert_node_labels_to_integers(graph).edges)
        problem = Problem.from_arrays(
            *edges.T, draw.standard_normal(len(edges)), fields=draw.standard_normal(len(graph))
        )
    order = narrow_order(problem)
    assert order is not None
    spins, bound = narrow_minimum(problem, order)
    everything = np.arange(len(problem), dtype=np.int32)[None]
    up = np.ones(len(problem), np.int8)
    whole = condition(
        problem,
        everything,
        up,
        problem.local_fields(up),
        0.0,
        np.zeros(1, np.uint64),
        np.full(len(problem), -1, np.int32),
    )
    (lowest,), _ = make_subsolver("elimination").minima(whole)
    assert bound.lower_bound <= problem.energy(spins) <= bound.lower_bound + problem.tie_tolerance
    assert problem.energy(spins) == pytest.approx(lowest + problem.offset, rel=1e-12)


def test_what_is_not_narrow() -> None:
    assert narrow_order(make("lattice2d", 30, seed=1)) is None
    assert narrow_order(make("sk", 40, seed=1)) is None
