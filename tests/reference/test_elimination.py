"""Variable elimination is exact: against listing everything, matchings, integer programmes and published averages."""

from __future__ import annotations

import itertools
from typing import Any

import networkx as nx
import numpy as np
import pytest
from scipy.optimize import LinearConstraint, milp
from scipy.stats import chisquare

from patchwalk.clusters.rules import Marks
from patchwalk.clusters.strip import StripRule
from patchwalk.problem.families import make
from patchwalk.problem.ising import Problem
from patchwalk.subsolvers import ClusterBatch, Edges, Status, elimination_plans, make_subsolver
from patchwalk.subsolvers.contract import F64, I32, I64
from patchwalk.subsolvers.elimination import Elimination
from patchwalk.subsolvers.elimination_layout import lay_out
from patchwalk.subsolvers.elimination_order import find_plan, fits_within, width_of
from patchwalk.subsolvers.enumeration import Enumeration

SIGNS = np.array([-1, 1], np.int8)


def random_batch(
    rows: int, size: int, density: float, seed: int, *, signs: bool = False, temperature: float = 1.0
) -> ClusterBatch:
    """Random graphs of mean density ``density`` with Gaussian weights, or +1 and -1 and no fields."""
    draw = np.random.default_rng(seed)
    weights = draw.choice([-1.0, 1.0], (rows, size, size)) if signs else draw.normal(size=(rows, size, size))
    upper = np.triu(weights * (draw.random((rows, size, size)) < density), 1)
    return ClusterBatch(
        fields=np.zeros((rows, size)) if signs else draw.normal(size=(rows, size)),
        spins=draw.choice(SIGNS, (rows, size)),
        temperature=np.full(rows, temperature),
        seeds=draw.integers(0, 2**63, rows, dtype=np.uint64),
        couplings=upper + upper.transpose(0, 2, 1),
    )


def whole(problems: list[Problem], temperature: float = 0.0) -> ClusterBatch:
    """Whole problems as a batch of clusters."""
    size = len(problems[0])
    halves = []
    for problem in problems:
        heads = np.repeat(np.arange(size), np.diff(problem.row_starts))
        once = heads < problem.neighbours
        halves.append((np.stack([heads[once], problem.neighbours[once]], axis=1), problem.couplings[once]))
    return ClusterBatch(
        fields=np.stack([problem.fields for problem in problems]),
        spins=np.ones((len(problems), size), np.int8),
        temperature=np.full(len(problems), temperature),
        seeds=np.arange(len(problems), dtype=np.uint64),
        edges=Edges(
            np.concatenate([[0], np.cumsum([len(weights) for _, weights in halves])]),
            np.concatenate([pairs for pairs, _ in halves]),
            np.concatenate([weights for _, weights in halves]),
        ),
    )


def energies_of(batch: ClusterBatch, outcomes: Any) -> F64:
    """The energies f64 (B,) of one configuration a row, from dense couplings or from edges."""
    spins = outcomes.astype(float)
    total = (batch.fields * spins).sum(axis=1)
    if batch.couplings is not None:
        return np.asarray(total + 0.5 * np.einsum("bi,bij,bj->b", spins, batch.couplings, spins))
    assert batch.edges is not None
    row = np.repeat(np.arange(len(batch)), np.diff(batch.edges.offsets))
    pairs = spins[row, batch.edges.pairs[:, 0]] * spins[row, batch.edges.pairs[:, 1]]
    return np.asarray(total + np.bincount(row, batch.edges.weights * pairs, len(batch)))


@pytest.mark.parametrize("signs", [False, True], ids=["gaussian", "signs"])
@pytest.mark.parametrize(
    ("size", "density"), [(1, 0.5), (2, 1.0), (5, 0.0), (7, 1.0), (12, 0.2), (14, 0.5), (18, 0.15), (18, 1.0)]
)
def test_the_minimum_and_its_degeneracy_are_those_of_enumeration(size: int, density: float, signs: bool) -> None:
    batch = random_batch(6, size, density, seed=100 * size + int(10 * density), signs=signs)
    lowest, count = Elimination().minima(batch)
    expected, expected_count = Enumeration().minima(batch)
    np.testing.assert_allclose(lowest, expected, rtol=1e-12, atol=1e-12)
    assert count.tolist() == expected_count.tolist()
    proposals = Elimination(shots=3).propose(batch)
    for shot in range(3):
        np.testing.assert_allclose(energies_of(batch, proposals.outcomes[:, shot]), expected, rtol=1e-12, atol=1e-12)


@pytest.mark.parametrize(
    ("size", "density", "temperature"), [(4, 1.0, 1.5), (9, 0.3, 0.8), (13, 0.2, 2.5), (18, 0.12, 1.0), (18, 1.0, 4.0)]
)
def test_draws_follow_the_boltzmann_law(size: int, density: float, temperature: float) -> None:
    """10,000 shots against enumerated weights, in 50 classes of about equal weight: cut once along the numbers of the
    configurations and once along their energies. Chance of a false alarm with another seed: 1e-4 for each comparison.
    """
    shots = 10_000
    batch = random_batch(1, size, density, seed=size, temperature=temperature)
    outcomes = Elimination("boltzmann", shots).propose(batch).outcomes[0]
    numbers = (outcomes < 0) @ (1 << np.arange(size))
    everything = np.arange(1 << size)
    spins = 1 - 2 * (everything[:, None] >> np.arange(size) & 1)
    assert batch.couplings is not None
    energies = spins @ batch.fields[0] + 0.5 * ((spins @ batch.couplings[0]) * spins).sum(axis=1)
    law = np.exp((energies.min() - energies) / temperature)
    law /= law.sum()
    for order in (everything, np.argsort(energies)):
        upper = np.cumsum(law[order])
        classes = np.empty(1 << size, np.int64)
        classes[order] = np.minimum(((upper - law[order] / 2) * 50).astype(np.int64), 49)
        expected = np.bincount(classes, law, 50) * shots
        observed = np.bincount(classes[numbers], minlength=50)
        assert chisquare(observed[expected > 0], expected[expected > 0]).pvalue > 1e-4


@pytest.mark.parametrize("draw", ["minimum", "boltzmann"])
def test_at_temperature_zero_minima_are_drawn_evenly(draw: str) -> None:
    """Chance of a false alarm with another seed: 1e-4."""
    batch = random_batch(1, 14, 0.2, seed=7, signs=True, temperature=0.0)
    count = int(Enumeration().minima(batch)[1][0])
    assert 20 < count < 500
    outcomes = make_subsolver("elimination", draw=draw, shots=50 * count).propose(batch).outcomes[0]
    _, counts = np.unique(outcomes, axis=0, return_counts=True)
    assert len(counts) == count
    assert chisquare(counts).pvalue > 1e-4


@pytest.mark.parametrize("temperature", [1e-6, 0.02])
def test_low_temperatures_neither_vanish_nor_overflow(temperature: float) -> None:
    """Energies differ by thousands of temperatures, and the minimum is all that is left."""
    batch = random_batch(5, 30, 0.1, seed=9, temperature=temperature)
    cold = Elimination("boltzmann").propose(batch).outcomes
    best = Elimination().minima(batch)[0]
    assert np.all(energies_of(batch, cold[:, 0]) - best < 30 * temperature)


def test_the_accepted_chain_keeps_the_boltzmann_law() -> None:
    """pi P = pi for k = 4: P from 1500 draws at each of the 16 starts, accepted by min(1, exp(-dE/T + log_ratio)).

    Every entry within 5 standard errors; chance of a false alarm with another seed: 1e-5.
    """
    size, draws, temperature = 4, 1500, 3.0
    one = random_batch(1, size, 1.0, seed=3)
    assert one.couplings is not None
    starts = np.array(list(itertools.product([1, -1], repeat=size)), np.int8)[:, ::-1]
    rows = draws * len(starts)
    batch = ClusterBatch(
        fields=np.repeat(one.fields, rows, axis=0),
        spins=np.repeat(starts, draws, axis=0),
        temperature=np.full(rows, temperature),
        seeds=np.random.default_rng(8).integers(0, 2**63, rows, dtype=np.uint64),
        couplings=np.repeat(one.couplings, rows, axis=0),
    )
    subsolver = Elimination("boltzmann")
    assert subsolver.balance == "ratio"
    proposals = subsolver.propose(batch)
    assert proposals.log_ratio is not None
    rise = energies_of(batch, proposals.outcomes[:, 0]) - energies_of(batch, batch.spins)
    accept = np.minimum(1.0, np.exp(-rise / temperature + proposals.log_ratio))
    np.testing.assert_allclose(accept, 1.0, rtol=0, atol=1e-12)  # a heat bath is never refused
    landed = (proposals.outcomes[:, 0] < 0) @ (1 << np.arange(size))
    chain = np.stack([np.bincount(part, minlength=16) / draws for part in np.split(landed, len(starts))])
    levels = np.array([energies_of(one, start[None])[0] for start in starts])
    law = np.exp((levels.min() - levels) / temperature)
    law /= law.sum()
    error = np.sqrt((law**2).sum() * law * (1 - law) / draws)
    assert np.all(np.abs(law @ chain - law) < 5 * error)


def matched_ground_energy(problem: Problem, side: int) -> float:
    """The ground energy of an open +-J square lattice by a minimum-weight perfect matching.

    Bieche, Maynard, Rammal & Uhry, J. Phys. A 13 (1980) 2553: the unsatisfied bonds of a ground state are the shortest
    set of paths, across bonds, that join the frustrated plaquettes in pairs or to the outside. Joining two of them by
    way of the outside costs both distances to it; if their number is odd, the outside takes part.
    """
    bonds = problem.matrix.toarray().reshape(side, side, side, side)
    corners = itertools.product(range(side - 1), repeat=2)
    frustrated = [
        (y, x)
        for y, x in corners
        if bonds[y, x, y, x + 1] * bonds[y + 1, x, y + 1, x + 1] * bonds[y, x, y + 1, x] * bonds[y, x + 1, y + 1, x + 1]
        < 0
    ]
    out = {p: min(p[0] + 1, p[1] + 1, side - 1 - p[0], side - 1 - p[1]) for p in frustrated}
    graph = nx.Graph()
    for one, other in itertools.combinations(frustrated, 2):
        across = abs(one[0] - other[0]) + abs(one[1] - other[1])
        graph.add_edge(one, other, weight=min(across, out[one] + out[other]))
    if len(frustrated) % 2:
        graph.add_weighted_edges_from((plaquette, "outside", out[plaquette]) for plaquette in frustrated)
    unsatisfied = sum(graph[one][other]["weight"] for one, other in nx.min_weight_matching(graph))
    return float(2 * unsatisfied - problem.coupling_count)


@pytest.mark.parametrize(("side", "seed"), [(6, 1), (9, 2), (12, 3), (20, 4)])
def test_open_lattices_have_the_energy_that_a_matching_proves(side: int, seed: int) -> None:
    """The tables of 20 x 20 are too many to be kept, so that stretches are filled a second time."""
    problem = make("lattice2d", side, seed=seed, open=True)
    batch = whole([problem])
    outcome = Elimination().propose(batch).outcomes[0, 0]
    assert problem.energy(outcome) == matched_ground_energy(problem, side)
    layout = lay_out(plan_of(batch))
    assert (len(layout.stretches) > 2) == (side == 20)


def test_a_draw_from_stretches_is_a_draw_from_the_whole() -> None:
    """17 x 17 spins: the mean energy of 400 draws against -d ln Z / d(1/T) by a transfer matrix, within 5 standard
    errors. Chance of a false alarm with another seed: 1e-6.
    """
    problem = make("lattice2d", 17, seed=5, open=True)
    temperature, step = 2.0, 1e-4
    batch = whole([problem], temperature)
    assert len(lay_out(plan_of(batch)).stretches) > 2
    outcomes = Elimination("boltzmann", shots=400).propose(batch).outcomes[0]
    energies = np.array([problem.energy(outcome) for outcome in outcomes])
    exact = mean_energy_by_transfer(problem, 17, temperature, step)
    assert abs(energies.mean() - exact) < 5 * energies.std() / 20


def mean_energy_by_transfer(problem: Problem, side: int, temperature: float, step: float) -> float:
    """-d ln Z / d beta of an open lattice without fields, by adding one spin after the other to a row of spins."""

    def log_partition(beta: float) -> float:
        bonds = problem.matrix.toarray()
        table, total = np.ones((2,) * side), 0.0
        for spin in range(side * side):
            x = spin % side
            shape = [1] * side
            table = np.moveaxis(table, x, 0)
            signs = np.array([1.0, -1.0])
            above = bonds[spin - side, spin] if spin >= side else 0.0
            table = np.tensordot(np.exp(-beta * above * np.outer(signs, signs)), table, axes=(1, 0))
            table = np.moveaxis(table, 0, x)
            if spin < side:
                table = table / 2  # the spin that was there before the first row never existed
            if x > 0:
                shape[x - 1], shape[x] = 2, 2
                table = table * np.exp(-beta * bonds[spin - 1, spin] * np.outer(signs, signs)).reshape(shape)
            total += np.log(table.max())
            table = table / table.max()
        return total + float(np.log(table.sum()))

    beta = 1 / temperature
    return -(log_partition(beta + step) - log_partition(beta - step)) / (2 * step)


@pytest.mark.parametrize("seed", range(4))
def test_small_frustrated_clusters_against_an_integer_programme(seed: int) -> None:
    """scipy.optimize.milp on x in {0, 1} and z = x_i xor x_j, with E = sum h (1 - 2x) + sum J (1 - 2z)."""
    batch = random_batch(1, 16, 0.3, seed=seed, signs=seed % 2 == 0)
    assert batch.couplings is not None
    first, second = np.nonzero(np.triu(batch.couplings[0]))
    weights, count = batch.couplings[0][first, second], len(first)
    rows = np.zeros((4 * count, 16 + count))
    limits = np.zeros(4 * count)
    for edge, (i, j) in enumerate(zip(first, second, strict=True)):
        for place, (a, b, c, limit) in enumerate([(-1, -1, 1, 0), (1, -1, -1, 0), (-1, 1, -1, 0), (1, 1, 1, 2)]):
            rows[4 * edge + place, [i, j, 16 + edge]] = a, b, c
            limits[4 * edge + place] = limit
    found = milp(
        np.concatenate([-2 * batch.fields[0], -2 * weights]),
        constraints=LinearConstraint(rows, -np.inf, limits),
        integrality=np.concatenate([np.ones(16), np.zeros(count)]),
        bounds=(0, 1),
        options={"mip_rel_gap": 0.0},
    )
    assert found.success
    expected = found.fun + batch.fields[0].sum() + weights.sum()
    for exact in (Elimination(), Enumeration()):
        assert energies_of(batch, exact.propose(batch).outcomes[:, 0])[0] == pytest.approx(expected, abs=1e-6)


@pytest.mark.parametrize(
    ("couplings", "side", "published", "error"),
    [
        # exact transfer, computed outside this project
        *(("pm1", *entry) for entry in ((4, -1.13380, 0.00120), (6, -1.23339, 0.00103), (8, -1.28189, 0.00101))),
        *(("gaussian", *entry) for entry in ((4, -1.04182, 0.00187), (6, -1.13489, 0.00160), (8, -1.18320, 0.00161))),
    ],
)
def test_mean_ground_energies_of_free_lattices(couplings: str, side: int, published: float, error: float) -> None:
    """500 lattices each, within 5 standard errors of both. Chance of a false alarm with other seeds: 1e-6 each."""
    lattices = [make("lattice2d", side, seed=seed, couplings=couplings, open=True) for seed in range(500)]
    energies = Elimination().minima(whole(lattices))[0] / side**2
    spread = np.hypot(energies.std(ddof=1) / np.sqrt(500), error)
    assert abs(energies.mean() - published) < 5 * spread


def plan_of(batch: ClusterBatch, limit: int = 20) -> Any:
    """The plan for a batch of one sparse cluster."""
    graph = nx.Graph()
    graph.add_nodes_from(range(batch.size))
    assert batch.edges is not None
    graph.add_edges_from(batch.edges.pairs.tolist())
    return plan_for(graph, limit)


def plan_for(graph: nx.Graph, limit: int = 20) -> Any:
    return find_plan(*lists_for(graph), limit)


def lists_for(graph: nx.Graph) -> tuple[I64, I32]:
    lists = [sorted(graph[node]) for node in range(len(graph))]
    starts: I64 = np.concatenate([[0], np.cumsum([len(row) for row in lists])]).astype(np.int64)
    return starts, np.array([node for row in lists for node in row], np.int32)


@pytest.mark.parametrize(
    ("graph", "width"),
    [
        (nx.path_graph(50), 1),
        (nx.random_labeled_tree(200, seed=3), 1),
        (nx.cycle_graph(60), 2),
        (nx.complete_graph(9), 8),
        (nx.empty_graph(5), 0),
        (nx.grid_2d_graph(12, 32), 12),
        (nx.grid_2d_graph(16, 16), 16),
        (nx.grid_2d_graph(3, 100), 3),
    ],
)
def test_orders_reach_the_width_that_a_graph_is_known_for(graph: nx.Graph, width: int) -> None:
    """The treewidth of trees, rings, complete graphs and grids, whatever the numbering of their nodes."""
    shuffled = np.random.default_rng(1).permutation(len(graph))
    relabelled = nx.relabel_nodes(graph, dict(zip(graph, shuffled.tolist(), strict=True)))
    plan = plan_for(relabelled)
    assert sorted(plan.order) == list(range(len(graph)))
    assert width_of(plan) == width


def widths_of_strips(problem: Problem, size: int, rounds: int, rule: StripRule) -> tuple[list[int], list[int]]:
    """The width and the size of every cluster that the rule picks in so many rounds."""
    marks, widths, sizes = Marks.for_problem(problem), [], []
    for seed in range(rounds):
        for members in rule.pick(problem, size, 8, seed, marks):
            inside = nx.from_scipy_sparse_array(problem.matrix[members][:, members])
            widths.append(width_of(plan_for(inside, rule.widest)))
            sizes.append(len(members))
    return widths, sizes


@pytest.mark.parametrize(
    ("family", "side", "size"), [("lattice2d", 64, 300), ("lattice3d", 6, 60), ("lattice3d", 8, 200)]
)
def test_strips_on_lattices_have_the_size_asked_for_and_stay_narrow(family: str, side: int, size: int) -> None:
    """Also where a cluster is a large share of a small cubic lattice, and fronts run into each other."""
    widths, sizes = widths_of_strips(make(family, side, seed=1), size, 5, StripRule())
    assert set(sizes) == {size}
    assert np.mean(widths) < 15
    assert max(widths) <= 20


def test_strips_that_would_be_too_wide_are_shorter() -> None:
    """In a complete graph k spins are of width k - 1; a limit below a front of its own width is kept to as well."""
    widths, sizes = widths_of_strips(make("sk", 60, seed=1), 30, 3, StripRule())
    assert set(sizes) == {21}
    assert set(widths) == {20}
    widths, sizes = widths_of_strips(make("lattice3d", 6, seed=1), 150, 3, StripRule(widest=9))
    assert all(10 <= size < 150 for size in sizes)
    assert max(widths) <= 9


@pytest.mark.parametrize("limit", [3, 5, 9])
def test_a_plan_fits_exactly_if_a_width_is_found(limit: int) -> None:
    for seed in range(30):
        graph = nx.gnm_random_graph(24, 18 + seed, seed=seed)
        starts, neighbours = lists_for(graph)
        assert fits_within(starts, neighbours, limit) == (width_of(find_plan(starts, neighbours, limit)) <= limit)


def test_a_plan_is_made_once_a_graph_and_changes_nothing() -> None:
    """Forecasting and answering share it, and an answer is the same whether it was there already or not."""
    batch = random_batch(4, 30, 0.1, seed=21, temperature=0.5)
    subsolver = Elimination("boltzmann")
    elimination_plans._planned.cache_clear()
    fresh = subsolver.propose(batch)
    assert elimination_plans._planned.cache_info().misses == 4
    subsolver.forecast(batch)
    again = subsolver.propose(batch)
    assert elimination_plans._planned.cache_info().misses == 4
    assert fresh.outcomes.tobytes() == again.outcomes.tobytes()
    narrow = Elimination("boltzmann", max_width=1).propose(batch)
    assert set(narrow.status.tolist()) == {Status.FAILED}, "another limit is another plan"


def test_one_cluster_that_is_too_wide_fails_alone() -> None:
    size = 30
    dense, chain = np.triu(np.ones((size, size)), 1), np.diag(np.ones(size - 1), 1)
    batch = ClusterBatch(
        fields=np.zeros((3, size)),
        spins=np.tile(SIGNS[np.arange(size) % 2], (3, 1)),
        temperature=np.zeros(3),
        seeds=np.arange(3, dtype=np.uint64),
        couplings=np.stack([dense + dense.T, chain + chain.T, dense + dense.T]),
    )
    subsolver = make_subsolver("elimination").prepare(batch)
    proposals = subsolver.propose(batch)
    assert proposals.status.tolist() == [Status.FAILED, Status.OK, Status.FAILED]
    assert proposals.messages[1] == ""
    assert (
        "needs width 29, the limit is 20 (2^w table entries); use smaller or thinner clusters" in proposals.messages[0]
    )
    assert np.array_equal(proposals.outcomes[:, 0][[0, 2]], batch.spins[[0, 2]])
    assert energies_of(batch, proposals.outcomes[:, 0])[1] == -(size - 1)
    assert np.isnan(Elimination().minima(batch)[0][0])
    work = subsolver.forecast(batch).work.table_entries
    assert work is not None
    assert work.tolist() == [0, 2 * (size - 1) + 1, 0]
    wider = Elimination(max_width=3).propose(random_batch(1, 8, 1.0, seed=1))
    assert "needs width 7, the limit is 3" in wider.messages[0]


def test_more_than_a_thousand_spins_are_refused() -> None:
    size = 1001
    batch = whole([Problem.from_arrays(np.arange(size - 1), np.arange(1, size), np.ones(size - 1))])
    for ask in (Elimination().propose, Elimination().forecast):
        with pytest.raises(ValueError, match=r"1001 spins.*stops at 1000.*smaller clusters"):
            ask(batch)


def test_a_long_chain_is_solved_at_once() -> None:
    """The ground states of a ring of 1000 antiferromagnetic bonds are the two alternating ones."""
    size = 1000
    batch = whole([Problem.from_arrays(np.arange(size), (np.arange(size) + 1) % size, np.ones(size))])
    lowest, count = Elimination().minima(batch)
    assert (lowest[0], count[0]) == (-size, 2)
