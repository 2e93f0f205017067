"""Bounds and proofs of dense problems: closed forms, enumeration, and certificates that cannot be stretched."""

from __future__ import annotations

import dataclasses
import math

import networkx as nx
import numpy as np
import pytest
from scipy import optimize, sparse

from patchwalk.bounds.certificate_error import CertificateError
from patchwalk.bounds.dense import semidefinite_bound
from patchwalk.bounds.dense_certificate import checked_tree
from patchwalk.bounds.dense_tree import branch_dense
from patchwalk.bounds.merging import merged, tied, unmerged
from patchwalk.bounds.odd_cuts import list_pairs, smoothed_dual, triangles_broken, widened
from patchwalk.bounds.spectral import (
    checked_bound,
    grouped_matrix,
    spectral_bound,
    trivial_groups,
    vertex_count,
    vertex_matrix,
)
from patchwalk.bounds.tightening import Dual, bare, tied_dual, tighten, with_new_cuts
from patchwalk.problem.families import make
from patchwalk.problem.ising import Problem, ProblemError
from patchwalk.subsolvers.spectrum import cluster_energies


def ground_energy(problem: Problem) -> float:
    """The least of all 2^n energies."""
    levels = np.empty(1 << len(problem))
    cluster_energies(problem.fields.copy(), problem.matrix.toarray(), levels)
    return float(levels.min()) + problem.offset


def random_problem(number: int) -> Problem:
    """One of many kinds: sizes 2 to 20, with and without fields, whole and real numbers, dense and sparse."""
    draw = np.random.default_rng(number)
    size = int(draw.integers(2, 21)) if number % 10 == 0 else int(draw.integers(2, 15))
    heads, tails = np.triu_indices(size, 1)
    kept = draw.random(len(heads)) < (1.0, 0.5, 0.2)[number % 3]
    law = (lambda count: draw.integers(-3, 4, count)) if number % 2 else draw.standard_normal
    return Problem.from_arrays(
        heads[kept],
        tails[kept],
        law(int(kept.sum())),
        size=size,
        fields=law(size) if number % 4 < 2 else None,
        offset=float(number % 7),
    )


@pytest.mark.parametrize("vertices", range(3, 11))
def test_complete_graphs(vertices: int) -> None:
    """n^2/4 for K_n, odd and even (Goemans & Williamson 1995): below it by the stated tolerance at most."""
    problem = Problem.from_networkx(nx.complete_graph(vertices))
    for bound in (semidefinite_bound(problem), spectral_bound(problem)):
        assert -bound.lower_bound == pytest.approx(vertices**2 / 4, rel=1e-5)
        assert -bound.lower_bound >= vertices**2 // 4


def test_the_five_cycle() -> None:
    """4.5225425, that is 5 (1 + cos(pi/5)) / 2 (Goemans & Williamson 1995)."""
    problem = Problem.from_networkx(nx.cycle_graph(5))
    value = 5 * (1 + math.cos(math.pi / 5)) / 2
    assert value == pytest.approx(4.5225425, abs=1e-7)
    assert -semidefinite_bound(problem, tolerance=1e-9).lower_bound == pytest.approx(value, rel=1e-8)
    assert -spectral_bound(problem).lower_bound == pytest.approx(value, rel=1e-8)


def test_the_bound_reaches_the_value_of_the_program() -> None:
    """Primal and dual of the same program enclose its optimum, here within 0.001 %."""
    problem = make("sk", 100, seed=1)
    bound = semidefinite_bound(problem)
    assert bound.lower_bound <= bound.semidefinite_value <= bound.energy
    assert bound.semidefinite_value - bound.lower_bound <= 1e-5 * abs(bound.semidefinite_value)
    assert np.allclose(np.linalg.norm(bound.vectors, axis=1), 1, atol=1e-12)
    assert spectral_bound(problem).lower_bound < bound.lower_bound


@pytest.mark.parametrize("tens", range(20))
def test_bounds_stay_below_the_ground_energy(tens: int) -> None:
    for number in range(10 * tens, 10 * tens + 10):
        problem = random_problem(number)
        ground = ground_energy(problem)
        room = problem.tie_tolerance  # what enumeration itself may have rounded
        semidefinite, spectral = semidefinite_bound(problem), spectral_bound(problem)
        assert semidefinite.lower_bound <= ground + room
        assert spectral.lower_bound <= semidefinite.semidefinite_value + room
        assert semidefinite.energy == pytest.approx(problem.energy(semidefinite.spins))
        assert semidefinite.energy >= ground - room
        for bound in (semidefinite, spectral):
            assert checked_bound(problem, bound.certificate) == bound.lower_bound


def test_a_stretched_certificate_is_refused() -> None:
    """Any entry of the diagonal raised by more than rounding makes the slack matrix indefinite."""
    problem = make("sk", 30, seed=3, fields=True)
    for bound in (semidefinite_bound(problem), spectral_bound(problem)):
        certificate = bound.certificate
        for vertex in range(vertex_count(problem)):
            raised = certificate.diagonal.copy()
            raised[vertex] += 0.05
            with pytest.raises(CertificateError, match="positive definite"):
                checked_bound(problem, dataclasses.replace(certificate, diagonal=raised))
        lowered = dataclasses.replace(certificate, diagonal=certificate.diagonal - 1e-3)
        assert checked_bound(problem, lowered) < bound.lower_bound


def test_a_certificate_of_another_layout_is_refused() -> None:
    problem = make("sk", 6, seed=1)
    good = spectral_bound(problem).certificate

    def cut(members: list[int], member_signs: list[int], weight: float = 1.0) -> dict[str, np.ndarray]:
        one = {"members": np.array([members], np.int32), "member_signs": np.array([member_signs], np.int8)}
        return {**one, "weights": np.array([weight])}

    triangle = [1, 1, -1, 0, 0]
    for changes, words in (
        ({"groups": good.groups[:-1]}, "6 entries"),
        ({"groups": np.zeros(6, np.int32)}, "every number"),
        ({"signs": np.zeros(6, np.int8)}, "\\+1 or -1"),
        ({"diagonal": np.full(6, np.nan)}, "not finite"),
        (cut([0, 1, 2, 0, 0], triangle, -1.0), "negative"),
        (cut([0, 1, 2, 0, 0], triangle, np.inf), "not finite"),
        (cut([0, 1, 2], [1, 1, 1]), "shape"),
        (cut([0, 1, 6, 0, 0], triangle), "from 0 to 5"),
        (cut([0, 1, 1, 0, 0], triangle), "all different"),
        (cut([0, 1, 2, 3, 0], [1, 1, 1, 1, 0]), "odd number"),
        (cut([0, 1, 2, 0, 0], [2, 1, 1, 0, 0]), "\\+1 or -1"),
    ):
        with pytest.raises(CertificateError, match=words):
            checked_bound(problem, dataclasses.replace(good, **changes))


def test_equal_calls_give_equal_bits_at_every_scale() -> None:
    problem = make("sk", 40, seed=5, fields=True)
    pairs = np.transpose(np.nonzero(np.triu(problem.matrix.toarray())))
    weights = problem.matrix.toarray()[pairs[:, 0], pairs[:, 1]]
    large = Problem.from_arrays(*pairs.T, weights * 2**20, fields=problem.fields * 2**20)
    first, second, third = (semidefinite_bound(it) for it in (problem, problem, large))
    assert first.lower_bound == second.lower_bound == third.lower_bound / 2**20
    assert np.array_equal(first.certificate.diagonal, second.certificate.diagonal)
    assert np.array_equal(first.spins, third.spins)


def test_too_large_is_refused_with_a_sentence() -> None:
    problem = Problem.from_arrays(range(6000), range(1, 6001), np.ones(6000))
    for bound in (semidefinite_bound, spectral_bound):
        with pytest.raises(ValueError, match="6001 spins"):
            bound(problem)


def milp_ground_energy(problem: Problem) -> float:
    """The least energy by an integer program on the standard linearisation (z = b_i b_j, b = (1 - s) / 2)."""
    rows, columns = np.nonzero(np.triu(problem.matrix.toarray()))
    weights = problem.matrix.toarray()[rows, columns]
    size, pairs = len(problem), len(rows)
    linear = -2.0 * problem.fields
    np.add.at(linear, rows, -2 * weights)
    np.add.at(linear, columns, -2 * weights)
    constant = problem.offset + problem.fields.sum() + weights.sum()
    first = sparse.csr_array((np.ones(pairs), (np.arange(pairs), rows)), shape=(pairs, size))
    second = sparse.csr_array((np.ones(pairs), (np.arange(pairs), columns)), shape=(pairs, size))
    product = sparse.eye_array(pairs)
    limits = [
        optimize.LinearConstraint(sparse.hstack([first, -product]), 0, np.inf),
        optimize.LinearConstraint(sparse.hstack([second, -product]), 0, np.inf),
        optimize.LinearConstraint(sparse.hstack([first + second, -product]), -np.inf, 1),
    ]
    whole = np.concatenate([np.ones(size), np.zeros(pairs)])
    answer = optimize.milp(
        np.concatenate([linear, 4 * weights]), constraints=limits, integrality=whole, bounds=optimize.Bounds(0, 1)
    )
    return float(answer.fun) + constant


@pytest.mark.parametrize("tens", range(20))
def test_proofs_agree_with_enumeration(tens: int) -> None:
    for number in range(10 * tens, 10 * tens + 10):
        problem = random_problem(number)
        ground = ground_energy(problem)
        room = problem.tie_tolerance + 1e-14  # offsets up to 6, and enumeration rounds too
        proof = branch_dense(problem)
        assert proof.proved_optimal
        assert proof.energy == pytest.approx(ground, abs=room)
        assert proof.energy == pytest.approx(problem.energy(proof.spins))
        assert ground - 2 * room <= proof.lower_bound <= ground + room
        if number % 10 == 0:
            assert checked_tree(problem, proof.arrays) >= proof.lower_bound


@pytest.mark.parametrize("seed", [1, 2])
def test_proofs_agree_with_an_integer_program(seed: int) -> None:
    problem = make("sk", 16, seed=seed, fields=True)
    assert branch_dense(problem).energy == pytest.approx(milp_ground_energy(problem), rel=1e-6)


def test_a_proof_that_needs_a_tree() -> None:
    problem = make("sk", 40, seed=2, fields=True)
    proof = branch_dense(problem)
    assert proof.proved_optimal
    assert proof.nodes > 1
    assert proof.lower_bound >= proof.energy - problem.tie_tolerance
    assert checked_tree(problem, proof.arrays) >= proof.lower_bound
    again = branch_dense(problem, proof.spins)
    assert again.energy == proof.energy


@pytest.mark.slow
@pytest.mark.parametrize("seed", range(1, 6))
def test_sixty_spins_are_proved(seed: int) -> None:
    problem = make("sk", 60, seed=seed)
    proof = branch_dense(problem)
    assert proof.proved_optimal
    assert checked_tree(problem, proof.arrays) >= proof.energy - problem.tie_tolerance


def test_a_tree_that_was_stopped_says_so() -> None:
    """Its bound is true all the same: below the energy that the whole tree proves."""
    problem = make("sk", 40, seed=2, fields=True)
    whole, stopped, late = branch_dense(problem), branch_dense(problem, nodes=1), branch_dense(problem, seconds=0.0)
    for proof in (stopped, late):
        assert (proof.nodes, proof.proved_optimal) == (1, False)
        assert proof.lower_bound < whole.energy
        assert checked_tree(problem, proof.arrays) >= proof.lower_bound


def test_whole_numbers_close_a_node_one_step_early() -> None:
    """Energies of K_7 are ((sum s)^2 - 7) / 2, that is -3, 1, 9, 21, in steps of 4: any bound above -7 proves -3."""
    problem = Problem.from_arrays(*np.triu_indices(7, 1), np.ones(21))
    proof = branch_dense(problem)
    assert (proof.lower_bound, proof.energy, proof.nodes) == (-3.0, -3.0, 1)


def test_a_tree_with_a_node_missing_or_a_bound_stretched_is_refused() -> None:
    problem = make("sk", 40, seed=2, fields=True)
    arrays = branch_dense(problem).arrays
    checked_tree(problem, arrays)
    names = ("parents", "firsts", "seconds", "signs", "diagonal_starts", "cut_starts")
    shorter = {name: arrays[name][:-1] for name in names}
    for name in names[1:]:
        with pytest.raises(CertificateError, match=name):
            checked_tree(problem, {**arrays, name: arrays[name][:-1]})
    with pytest.raises(CertificateError, match="missing"):
        checked_tree(problem, {**arrays, **shorter})
    with pytest.raises(CertificateError, match="missing"):
        checked_tree(problem, {**arrays, "signs": np.ones_like(arrays["signs"])})
    with pytest.raises(CertificateError, match="parent"):
        checked_tree(problem, {**arrays, "parents": arrays["parents"] + 1})
    with pytest.raises(CertificateError, match="tied already"):
        checked_tree(problem, {**arrays, "seconds": arrays["firsts"]})
    for name in ("diagonals", "weights"):
        for place in range(0, len(arrays[name]), len(arrays[name]) // 7):
            raised = arrays[name].copy()
            raised[place] += 0.05
            with pytest.raises(CertificateError, match="positive definite"):
                checked_tree(problem, {**arrays, name: raised})


def test_equal_trees_have_equal_bits() -> None:
    problem = make("sk", 30, seed=7)
    first, second = branch_dense(problem), branch_dense(problem)
    assert first.lower_bound == second.lower_bound
    assert all(np.array_equal(first.arrays[name], second.arrays[name]) for name in first.arrays)


def test_cuts_bring_the_bound_near_the_ground_energy() -> None:
    """Without cuts it lies about a sixth below, which is what triangles and fives are there for."""
    problem = make("sk", 50, seed=4)
    plain, cut = semidefinite_bound(problem), branch_dense(problem, nodes=1)
    assert (plain.energy - plain.lower_bound) / -plain.energy > 0.1
    assert (cut.energy - cut.lower_bound) / -cut.energy < 0.02


def test_cuts_hold_for_all_configurations_and_are_violated() -> None:
    problem = make("sk", 10, seed=1)
    bound = semidefinite_bound(problem)
    gram = bound.vectors @ bound.vectors.T
    members, signs, excess = triangles_broken(gram, 0.0, 1000)
    wide, wide_signs, wide_excess = widened(gram, members, signs)
    configurations = 1.0 - 2.0 * ((np.arange(1024)[:, None] >> np.arange(10)) & 1)
    for some, some_signs, claimed in ((members, signs, excess), (wide, wide_signs, wide_excess)):
        for row, its_signs, by in zip(some, some_signs, claimed, strict=True):
            weights = np.zeros(10)
            np.add.at(weights, row, its_signs)
            assert np.abs(weights).sum() in (3, 5)
            assert np.min((configurations @ weights) ** 2) == 1
            assert 1 - weights @ gram @ weights == pytest.approx(by, abs=1e-12)
    triples = [(i, j, k) for i in range(10) for j in range(i) for k in range(j)]
    patterns = [(1, 1, 1), (1, -1, -1), (-1, 1, -1), (-1, -1, 1)]
    broken = sum(a * gram[i, j] + b * gram[i, k] + c * gram[j, k] < -1 for i, j, k in triples for a, b, c in patterns)
    assert len(members) == broken
    few = triangles_broken(gram, 0.01, broken // 2)[2]
    assert len(few) <= broken // 2
    assert np.all(np.isin(np.sort(few), excess))
    assert few.max() == excess.max()


def test_the_slope_of_the_dual_is_its_derivative() -> None:
    """Against differences, at a point with cuts: central differences of step h are off by about h^2 f'''."""
    problem = make("sk", 9, seed=2)
    matrix = vertex_matrix(problem).toarray()
    bound = semidefinite_bound(problem, sweeps=3)
    dual = with_new_cuts(bare(bound.certificate.diagonal), bound.vectors @ bound.vectors.T)
    pairs = list_pairs(dual.members, dual.signs, 9)
    point = np.concatenate([dual.diagonal + 0.05, np.full(len(dual.weights), 0.01)])

    def value(at: np.ndarray, slope: np.ndarray) -> float:
        return smoothed_dual(matrix, dual.members, dual.signs, *pairs, at, 0.1, slope, np.empty((9, 9)))[0]

    slope, spare = np.empty(len(point)), np.empty(len(point))
    value(point, slope)
    for place in range(len(point)):
        step = np.zeros(len(point))
        step[place] = 1e-5
        difference = (value(point + step, spare) - value(point - step, spare)) / 2e-5
        assert difference == pytest.approx(slope[place], abs=1e-6)


@pytest.mark.parametrize(("low", "high", "relation"), [(0, 1, 1), (2, 7, -1), (5, 11, 1), (3, 4, -1)])
def test_a_child_starts_where_its_parent_ended(low: int, high: int, relation: int) -> None:
    """Its matrix and dual give the slack that the tie makes of the parent's, but for cuts that add up."""
    problem = make("sk", 12, seed=3)
    bound = semidefinite_bound(problem)
    matrix = vertex_matrix(problem).toarray()
    climb = tighten(matrix, bare(bound.certificate.diagonal), bound.vectors @ bound.vectors.T, target=np.inf, rounds=3)
    tie = np.insert(np.eye(11), high, relation * np.eye(11)[low], axis=0)
    groups, signs = tied(*trivial_groups(problem), low, high, relation)
    child = tied_dual(climb.best, low, high, relation)
    merged_matrix, _ = grouped_matrix(problem, groups, signs, 11)
    lost = [
        (weights, row)
        for weights, row in zip(climb.best.weights, _rows(climb.best, 12), strict=True)
        if abs((tie.T @ row)[low]) == 2
    ]
    expected = tie.T @ _slack(matrix, climb.best) @ tie
    for weight, row in lost:
        expected += weight * np.outer(tie.T @ row, tie.T @ row)
    found = _slack(merged_matrix, child)
    # a cut that lost two of three members has moved to the diagonal, where it says the same
    assert np.allclose(found, expected, atol=1e-12)
    total = child.diagonal.sum() + child.weights.sum() + sum(weight for weight, _ in lost)
    assert total == pytest.approx(climb.best.diagonal.sum() + climb.best.weights.sum())


def _rows(dual: Dual, size: int) -> np.ndarray:
    rows = np.zeros((len(dual.weights), size))
    for place in range(5):
        np.add.at(rows, (np.arange(len(rows)), dual.members[:, place]), dual.signs[:, place])
    return rows


def _slack(matrix: np.ndarray, dual: Dual) -> np.ndarray:
    rows = _rows(dual, len(matrix))
    return matrix - np.diag(dual.diagonal) - rows.T @ (dual.weights[:, None] * rows)


@pytest.mark.parametrize("fields", [False, True])
def test_merging_keeps_every_energy(fields: bool) -> None:
    problem = make("sk", 9, seed=5, fields=fields)
    draw = np.random.default_rng(1)
    for first, second in ((0, 1), (8, 0), (3, 7), (None, 4), (None, 0)):
        for sign in (1, -1):
            smaller = merged(problem, first, second, sign)
            assert len(smaller) == 8
            for _ in range(20):
                spins = draw.choice([-1, 1], 8).astype(np.int8)
                whole = unmerged(spins, first, second, sign)
                assert whole[second] == (sign if first is None else sign * whole[first])
                assert smaller.energy(spins) == pytest.approx(problem.energy(whole), abs=1e-12)


def test_ties_that_cannot_be_are_refused() -> None:
    problem = make("sk", 4, seed=1)
    for first, second, sign in ((0, 0, 1), (0, 4, 1), (-1, 2, 1), (0, 1, 0)):
        with pytest.raises(ProblemError):
            merged(problem, first, second, sign)


def test_groups_of_a_long_path_say_what_its_ties_say() -> None:
    problem = make("sk", 12, seed=1, fields=True)
    groups, signs = trivial_groups(problem)
    draw, ties = np.random.default_rng(3), []
    while groups.max() > 0:
        first, second = draw.integers(0, vertex_count(problem), 2)
        if groups[first] != groups[second]:
            ties.append((first, second, int(draw.choice([-1, 1]))))
            groups, signs = tied(groups, signs, *ties[-1])
            assert len(set(groups.tolist())) == groups.max() + 1
    for first, second, sign in ties:
        assert signs[first] == sign * signs[second]
