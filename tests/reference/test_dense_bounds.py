"""Bounds of dense problems: closed forms, never above the true minimum, and certificates that cannot be stretched."""

from __future__ import annotations

import dataclasses
import math

import networkx as nx
import numpy as np
import pytest

from patchwalk.bounds.dense import semidefinite_bound
from patchwalk.bounds.spectral import CertificateError, checked_bound, spectral_bound, vertex_count
from patchwalk.problem.families import make
from patchwalk.problem.ising import Problem
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
    cut = {"members": np.array([[0, 1, 2]], np.int32), "member_signs": np.ones((1, 3), np.int8)}
    for changes, words in (
        ({"groups": good.groups[:-1]}, "6 entries"),
        ({"groups": np.zeros(6, np.int32)}, "every number"),
        ({"signs": np.zeros(6, np.int8)}, "\\+1 or -1"),
        ({"diagonal": np.full(6, np.nan)}, "not finite"),
        ({**cut, "weights": np.array([-1.0])}, "negative"),
        ({**cut, "weights": np.ones(2)}, "shape"),
        ({**cut, "members": np.array([[0, 1, 1]], np.int32), "weights": np.ones(1)}, "three different"),
        ({**cut, "members": np.array([[0, 1, 6]], np.int32), "weights": np.ones(1)}, "three different"),
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
