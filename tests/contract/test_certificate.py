"""A certificate proves what it says or is refused: every kind of tampering is tried on real ones."""

from __future__ import annotations

import dataclasses
import math
from typing import Any

import numpy as np
import pytest

from patchwalk.bounds.certificate import Certificate, check
from patchwalk.bounds.certificate_error import CertificateError
from patchwalk.bounds.clusters import cluster_bound
from patchwalk.bounds.cycle_certificate import BOUNDED, BRANCHED, EMPTY, SETTLED, dual_value
from patchwalk.problem.families import make
from patchwalk.problem.ising import Problem
from patchwalk.search.bound_search import BranchPlan
from patchwalk.search.branching import BranchAndBound


def proved(problem: Problem, **plan: Any) -> BranchAndBound:
    search = BranchAndBound(problem, None, BranchPlan(**plan))
    for _ in search.rounds():
        pass
    return search


@pytest.fixture(scope="module")
def problem() -> Problem:
    """A dense problem whose proof needs branching."""
    return make("sk", 18, seed=3)


@pytest.fixture(scope="module")
def tree(problem: Problem) -> Certificate:
    search = proved(problem)
    assert search.status == "proved_optimal"
    certificate = search.certificate()
    assert np.count_nonzero(certificate.arrays["outcomes"] == BRANCHED) >= 2
    return certificate


def altered(certificate: Certificate, bound: float | None = None, **arrays: Any) -> Certificate:
    return dataclasses.replace(
        certificate, bound=certificate.bound if bound is None else bound, arrays={**certificate.arrays, **arrays}
    )


def test_a_true_certificate_holds(problem: Problem, tree: Certificate) -> None:
    assert check(problem, tree) == tree.bound


def test_a_bound_stated_too_high(problem: Problem, tree: Certificate) -> None:
    with pytest.raises(CertificateError):
        check(problem, altered(tree, bound=tree.bound + 1e-6))


def test_another_problem(tree: Certificate) -> None:
    with pytest.raises(CertificateError, match="another problem"):
        check(make("sk", 18, seed=4), tree)


def test_every_dual_altered_alone(problem: Problem, tree: Certificate) -> None:
    """Raised, lowered, negative and nan: the multipliers then prove something else than the node says."""
    duals = tree.arrays["duals"]
    places = np.flatnonzero(duals > 1e-6)
    assert len(places) > 10
    for place in places[:: max(1, len(places) // 40)]:
        for value in (duals[place] * 1.01, duals[place] * 0.99, -duals[place], math.nan, math.inf):
            changed = duals.copy()
            changed[place] = value
            with pytest.raises(CertificateError, match="multiplier"):
                check(problem, altered(tree, duals=changed))


def test_a_dual_and_its_nodes_bound_altered_together(problem: Problem, tree: Certificate) -> None:
    """Where the node's bound is made to fit a negative multiplier that would raise it."""
    starts, duals, bounds = (tree.arrays[name].copy() for name in ("dual_starts", "duals", "node_bounds"))
    node = int(np.flatnonzero(np.diff(starts))[0])
    duals[starts[node]] = -1.0
    bounds[node] += 1.0
    with pytest.raises(CertificateError, match=">= 0"):
        check(problem, altered(tree, duals=duals, node_bounds=bounds))


@pytest.mark.filterwarnings("ignore::RuntimeWarning")  # what overflows on purpose
@pytest.mark.parametrize("outcome", [BOUNDED, EMPTY, SETTLED])
@pytest.mark.parametrize("stated", [-100.0, 0.0, math.nan])
def test_multipliers_so_large_that_they_overflow(problem: Problem, outcome: int, stated: float) -> None:
    """Every one is finite, yet two on the same edges add up to infinity, from which nothing follows."""
    triangle = [[0, 1], [1, 2], [0, 2]]
    others = [list(pair) for pair in zip(*np.triu_indices(len(problem), 1), strict=True) if list(pair) not in triangle]
    arrays = {
        "pairs": np.array([*triangle, *others], np.int32), "cut_starts": np.array([0, 3, 6]),
        "cut_edges": np.array([0, 1, 2, 0, 1, 2], np.int32), "cut_odd": np.array([1, 0, 0, 1, 0, 0], np.int8),
        "parents": np.array([-1]), "split_edges": np.array([-1], np.int32), "split_sides": np.zeros(1, np.int8),
        "outcomes": np.array([outcome], np.int8), "node_bounds": np.array([stated]), "dual_starts": np.array([0, 2]),
        "dual_cuts": np.array([0, 1], np.int32), "duals": np.full(2, 1.7e308),
    }  # fmt: skip
    for bound in (-100.0, 1e6):
        with pytest.raises(CertificateError):
            check(problem, Certificate(problem.fingerprint, "cycles", bound, arrays))


@pytest.mark.filterwarnings("ignore::RuntimeWarning")
@pytest.mark.parametrize("name", ["field_shares", "coupling_shares"])
def test_shares_so_large_that_they_overflow(name: str) -> None:
    lattice = make("lattice2d", 4, seed=3, couplings="gaussian", fields=True)
    arrays = cluster_bound(lattice, cluster_size=6, steps=0).arrays
    whole = arrays["members"] if name == "field_shares" else [tuple(pair) for pair in np.sort(arrays["pairs"]).tolist()]
    same = [place for place, one in enumerate(whole) if one == whole[0]]
    for signs in ((1.0, 1.0), (1.0, -1.0)):
        shares = arrays[name].copy()
        shares[same[:2]] = 1.7e308 * np.array(signs)
        with pytest.raises(CertificateError):
            check(lattice, Certificate(lattice.fingerprint, "clusters", -1e9, {**arrays, name: shares}))


def test_every_node_missing(problem: Problem, tree: Certificate) -> None:
    arrays, count = tree.arrays, len(tree.arrays["parents"])
    for node in range(1, count):
        if np.any(arrays["parents"] == node):
            continue
        kept = np.delete(np.arange(count), node)
        renumbered = np.cumsum(np.arange(count) != node) - 1
        parents = arrays["parents"][kept]
        starts = arrays["dual_starts"]
        own = np.r_[: starts[node], starts[node + 1] : starts[-1]]
        lengths = np.diff(starts)[kept]
        smaller = {name: arrays[name][kept] for name in ("split_edges", "split_sides", "outcomes", "node_bounds")}
        with pytest.raises(CertificateError, match="missing"):
            check(
                problem,
                altered(
                    tree, parents=np.where(parents >= 0, renumbered[parents], -1),
                    dual_starts=np.concatenate([[0], np.cumsum(lengths)]), dual_cuts=arrays["dual_cuts"][own],
                    duals=arrays["duals"][own], **smaller,
                ),
            )  # fmt: skip


def test_a_split_on_two_different_pairs(problem: Problem, tree: Certificate) -> None:
    edges = tree.arrays["split_edges"].copy()
    edges[-1] = (edges[-1] + 1) % len(tree.arrays["pairs"])
    with pytest.raises(CertificateError, match="two halves of one split"):
        check(problem, altered(tree, split_edges=edges))


def test_an_even_part_and_an_open_cycle(problem: Problem, tree: Certificate) -> None:
    odd = tree.arrays["cut_odd"].copy()
    odd[0] = 1 - odd[0]
    with pytest.raises(CertificateError, match="even number of edges"):
        check(problem, altered(tree, cut_odd=odd))
    edges = tree.arrays["cut_edges"].copy()
    others = np.setdiff1d(np.arange(len(tree.arrays["pairs"])), edges[: tree.arrays["cut_starts"][1]])
    edges[0] = others[0]
    with pytest.raises(CertificateError, match="do not close"):
        check(problem, altered(tree, cut_edges=edges))


def test_a_coupling_left_out(problem: Problem, tree: Certificate) -> None:
    pairs = tree.arrays["pairs"].copy()
    pairs[-1] = [0, 0]
    with pytest.raises(CertificateError):
        check(problem, altered(tree, pairs=pairs))
    with pytest.raises(CertificateError, match="leaves out"):
        check(problem, altered(tree, pairs=tree.arrays["pairs"][:-1]))


def test_an_open_node_said_to_be_empty(problem: Problem, tree: Certificate) -> None:
    outcomes = tree.arrays["outcomes"].copy()
    leaf = int(np.flatnonzero(outcomes == 1)[0]) if np.any(outcomes == 1) else int(np.flatnonzero(outcomes != 0)[0])
    outcomes[leaf] = 2
    with pytest.raises(CertificateError):
        check(problem, altered(tree, outcomes=outcomes))


@pytest.mark.parametrize("name", ["pairs", "cut_starts", "parents", "duals", "outcomes"])
def test_a_column_missing_or_too_short(problem: Problem, tree: Certificate, name: str) -> None:
    arrays = {key: value for key, value in tree.arrays.items() if key != name}
    with pytest.raises(CertificateError):
        check(problem, Certificate(tree.fingerprint, "cycles", tree.bound, arrays))
    with pytest.raises(CertificateError):
        check(problem, altered(tree, **{name: tree.arrays[name][:-1]}))


def test_an_unknown_method(problem: Problem, tree: Certificate) -> None:
    with pytest.raises(CertificateError, match="not known"):
        check(problem, dataclasses.replace(tree, method="tea leaves"))


def test_matching_is_made_once_more() -> None:
    lattice = make("lattice2d", 5, open=True, seed=1)
    lowest = proved(lattice).best_energy
    assert check(lattice, Certificate(lattice.fingerprint, "matching", lowest)) == lowest
    with pytest.raises(CertificateError, match="matching gives"):
        check(lattice, Certificate(lattice.fingerprint, "matching", lowest + 1.0))


def test_any_multipliers_make_a_true_bound() -> None:
    """Random ones, against enumeration: weak, but never above."""
    problem = make("sk", 8, seed=2)
    tree = proved(problem).certificate()
    spins = 1.0 - 2.0 * ((np.arange(256)[:, None] >> np.arange(8)) & 1)
    lowest = float((0.5 * np.sum(spins * (problem.matrix @ spins.T).T, axis=1)).min())
    draws = np.random.default_rng(1)
    pairs, cuts = tree.arrays["pairs"], len(tree.arrays["cut_starts"]) - 1
    weights = np.array([problem.matrix[u, v] for u, v in pairs])
    box = np.zeros(len(pairs)), np.ones(len(pairs))
    columns = (tree.arrays["cut_starts"], tree.arrays["cut_edges"], tree.arrays["cut_odd"])
    for scale in (0.01, 0.1, 1.0):
        duals = scale * draws.random(cuts)
        value = dual_value(-2.0 * weights, math.fsum(weights.tolist()), *columns, duals, *box)
        assert value.bound <= lowest
        assert 0.0 < value.margin < 1e-12
