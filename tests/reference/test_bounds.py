"""Bounds by odd-cycle cuts against closed forms, enumeration and an independent solver.

K_n values of the odd-cycle program (4, 6.667, 10, 14 for n = 4..7): computed, see also Barahona & Mahjoub, Math.
Program. 36 (1986) 157, whose theorem says that it is exact where the graph has no K5 minor.
"""

from __future__ import annotations

import itertools
import math

import networkx as nx
import numpy as np
import pytest

from patchwalk.bounds.cut_graph import cut_graph
from patchwalk.bounds.cycles import CycleProgram, tighten
from patchwalk.bounds.energy_step import energy_levels, lower_energy, rounded_up
from patchwalk.bounds.rounding import rounded
from patchwalk.bounds.separation import violated_cuts
from patchwalk.commands.bounding import bounds_for
from patchwalk.problem.families import make
from patchwalk.problem.ising import Problem
from patchwalk.subsolvers.contract import F64, I8


def ground_energy(problem: Problem) -> float:
    """The lowest energy of all 2^n, by enumeration."""
    size = len(problem)
    bits = (np.arange(2**size)[:, None] >> np.arange(size)) & 1
    spins = 1.0 - 2.0 * bits
    energies = problem.offset + spins @ problem.fields + 0.5 * np.sum(spins * (problem.matrix @ spins.T).T, axis=1)
    return float(energies.min())


def random_problem(number: int) -> Problem:
    """One of 200 small problems: with and without fields, integer and real, dense and sparse."""
    draws = np.random.default_rng(number)
    size = int(draws.integers(3, 18))
    heads, tails = np.triu_indices(size, 1)
    kept = draws.random(len(heads)) < (1.0 if number % 2 else 3.0 / size)
    kept[0] = True
    integer = bool(number // 2 % 2)
    count = int(kept.sum())
    weights = draws.integers(-3, 4, count).astype(float) if integer else draws.standard_normal(count)
    fields = draws.integers(-2, 3, size).astype(float) if integer else draws.standard_normal(size)
    return Problem.from_arrays(
        heads[kept], tails[kept], weights, size=size, fields=fields if number // 4 % 2 else None,
        offset=float(draws.integers(-5, 6)) if integer else float(draws.standard_normal()),
    )  # fmt: skip


def tightened(problem: Problem, interior_rounds: int = 3) -> CycleProgram:
    program = CycleProgram(cut_graph(problem))
    assert tighten(program, interior_rounds=interior_rounds)
    return program


@pytest.mark.parametrize(("size", "cut"), [(4, 4.0), (5, 20 / 3), (6, 10.0), (7, 14.0)])
def test_the_program_of_complete_graphs(size: int, cut: float) -> None:
    graph = Problem.from_networkx(nx.complete_graph(size))
    bound = tightened(graph).bound
    assert -cut - 1e-5 < bound <= -cut + 1e-9  # the least violation that is still cut, 1e-4, at most ten edges wide


@pytest.mark.parametrize("number", range(200))
def test_never_above_the_ground_energy(number: int) -> None:
    problem = random_problem(number)
    lowest = ground_energy(problem)
    program = CycleProgram(cut_graph(problem))
    levels = energy_levels(problem)
    bounds = []
    tighten(program, after_round=lambda _: bounds.append(program.bound), interior_rounds=number % 5)
    for bound in [*bounds, program.bound]:
        assert bound <= lowest + 1e-12 * abs(lowest)  # enumeration sums in floating point
        assert rounded_up(problem, bound, levels) <= lowest + 1e-12 * abs(lowest)


@pytest.mark.parametrize("seed", [1, 2, 3])
@pytest.mark.parametrize("couplings", ["pm1", "gaussian"])
def test_exact_on_planar_lattices(couplings: str, seed: int) -> None:
    problem = make("lattice2d", 4, couplings=couplings, open=True, seed=seed)
    assert tightened(problem).bound == pytest.approx(ground_energy(problem), abs=1e-6)


def test_exact_where_there_is_no_k5_minor() -> None:
    """K_3,3 is not planar, and has too few edges for a K5 minor."""
    draws = np.random.default_rng(5)
    heads, tails = zip(*itertools.product(range(3), range(3, 6)), strict=True)
    for _ in range(10):
        problem = Problem.from_arrays(heads, tails, draws.standard_normal(9))
        assert tightened(problem).bound == pytest.approx(ground_energy(problem), abs=1e-6)


def test_found_cuts_are_odd_cycles_and_broken() -> None:
    problem = make("lattice3d", 4, seed=2, fields=True)
    graph = cut_graph(problem)
    program = CycleProgram(graph)
    for _ in range(4):
        cuts = violated_cuts(graph, program.x)
        for cut in range(len(cuts)):
            own = slice(cuts.offsets[cut], cuts.offsets[cut + 1])
            edges, odd = cuts.edges[own], cuts.odd[own]
            assert odd.sum() % 2 == 1
            assert len(set(edges.tolist())) == len(edges)
            ends = np.concatenate([graph.heads[edges], graph.tails[edges]])
            assert set(np.unique(ends, return_counts=True)[1].tolist()) == {2}
            x = program.x[edges]
            assert x[odd == 1].sum() - x[odd == 0].sum() > odd.sum() - 1 + 1e-4
        program.add(cuts)
        program.solve(interior=False)


def test_no_broken_cut_is_missed() -> None:
    """Against every odd part of every simple cycle of a small graph."""
    draws = np.random.default_rng(11)
    graph = nx.convert_node_labels_to_integers(nx.petersen_graph())
    problem = Problem.from_networkx(graph)
    cut = cut_graph(problem)
    number = {(int(h), int(t)): e for e, (h, t) in enumerate(zip(cut.heads, cut.tails, strict=True))}
    cycles = [
        [number[min(u, v), max(u, v)] for u, v in zip(cycle, cycle[1:] + cycle[:1], strict=True)]
        for cycle in nx.simple_cycles(graph)
    ]
    seen = {True: 0, False: 0}
    for _ in range(60):
        x = np.clip(draws.normal(0.6, 0.25, len(cut.heads)), 0.0, 1.0)
        worst = max(_violation(x[cycle]) for cycle in cycles)
        if abs(worst - 1e-4) < 1e-9:
            continue
        assert (len(violated_cuts(cut, x)) > 0) == (worst > 1e-4)
        seen[worst > 1e-4] += 1
    assert min(seen.values()) > 3


def _violation(x: F64) -> float:
    """The largest x(F) - x(C minus F) - |F| + 1 over odd F: near 1 where x > 1/2, repaired where that is even."""
    odd = x > 0.5
    loss = np.where(odd, 1.0 - x, x)
    total = loss.sum()
    if odd.sum() % 2 == 0:
        total += np.min(1.0 - 2.0 * loss)
    return float(1.0 - total)


def test_rounding_gives_sides_no_single_flip_improves() -> None:
    problem = make("lattice3d", 4, seed=3, couplings="gaussian")
    graph = cut_graph(problem)
    program = tightened(problem)
    spins = graph.spins_of(rounded(graph, program.x, seed=1))
    assert np.all(spins * problem.local_fields(spins) <= 1e-9)
    assert problem.energy(spins) == pytest.approx(program.bound, abs=1e-6)  # the program is whole here: optimal


def test_energy_steps_divide_all_differences() -> None:
    for number in range(0, 200, 7):
        problem = random_problem(number)
        step, reference = energy_levels(problem)
        if not step:
            continue
        draws = np.random.default_rng(number)
        for _ in range(20):
            spins: I8 = (1 - 2 * draws.integers(0, 2, len(problem))).astype(np.int8)
            steps = (problem.energy(spins) - float(reference)) / float(step)
            assert steps == pytest.approx(round(steps), abs=1e-9)


def test_energy_steps_of_known_problems() -> None:
    assert energy_levels(make("lattice2d", 6, seed=1))[0] == 4  # even degree
    assert energy_levels(Problem.from_networkx(nx.complete_graph(4)))[0] == 1
    assert energy_levels(Problem.from_networkx(nx.complete_graph(5)))[0] == 2  # degrees are even, so all cuts are
    assert energy_levels(make("lattice2d", 6, couplings="gaussian", seed=1))[0] == 0


def test_a_rounded_energy_is_never_above() -> None:
    problem = Problem.from_arrays([0, 1], [1, 2], [0.1, 0.2], offset=0.3)
    from fractions import Fraction

    for spins in ([1, 1, 1], [1, -1, 1], [1, 1, -1]):
        exact = Fraction(0.3) + Fraction(0.1) * spins[0] * spins[1] + Fraction(0.2) * spins[1] * spins[2]
        value = lower_energy(problem, np.array(spins, np.int8))
        assert Fraction(value) <= exact
        assert float(exact) - value <= 2 * math.ulp(value)


@pytest.mark.slow
@pytest.mark.parametrize(
    ("couplings", "infinite", "uncertain"),
    [("pm1", -1.4015, 0.0008), ("gaussian", -1.31479, 0.00002)],
)
def test_proved_ground_states_extrapolate_to_the_literature(couplings: str, infinite: float, uncertain: float) -> None:
    """Periodic lattices, energy per spin against 1/L^2, read off at 0.

    +-J: De Simone et al., J. Stat. Phys. 84 (1996) 1363; Gaussian: Campbell, Hartmann & Katzgraber, PRB 70 (2004)
    054429 (from memory). Four standard errors: one false alarm in 16,000.
    """
    sides, samples = (12, 16, 24), 40
    inverse, energies = [], []
    for side in sides:
        for seed in range(samples):
            problem = make("lattice2d", side, couplings=couplings, seed=5000 + seed)
            found = bounds_for(problem, 60.0)
            assert found.status == "proved_optimal"
            inverse.append(side**-2.0)
            energies.append(found.energy / side**2)
    weights = 1.0 / np.sqrt(np.array(inverse))  # the spread of an energy per spin falls as 1/L
    (_, at_zero), covariance = np.polyfit(inverse, energies, 1, w=weights, cov=True)
    error = math.hypot(math.sqrt(covariance[1, 1]), uncertain)
    assert error < 0.01
    assert abs(at_zero - infinite) < 4.0 * error
