"""Clusters hold groups whole as far as their size allows, and otherwise what the group needs to move."""

from __future__ import annotations

import itertools

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from patchwalk.clusters.grouping import closed_over_groups
from patchwalk.clusters.rules import RULES, Marks, View
from patchwalk.problem.ising import Problem
from patchwalk.subsolvers.contract import I8, I32


def problem_with(groups: list[list[int]], size: int, seed: int = 1) -> Problem:
    """Spins of one group are coupled to each other, as penalties do, and a few pairs besides."""
    rng = np.random.default_rng(seed)
    pairs = {pair for group in groups for pair in itertools.combinations(sorted(group), 2)}
    pairs |= {tuple(sorted(rng.choice(size, 2, replace=False).tolist())) for _ in range(size)}
    heads, tails = np.array(sorted(pairs)).T
    return Problem.from_arrays(heads, tails, rng.normal(size=len(heads)), size=size, groups=groups)


def assignment(side: int) -> Problem:
    """Spin ``side * row + column`` is down where the row is given the column: one down in every row and column."""
    cells = np.arange(side * side).reshape(side, side)
    return problem_with([*cells.tolist(), *cells.T.tolist()], side * side)


def assigned(columns: list[int]) -> I8:
    spins = np.ones((len(columns), len(columns)), np.int8)
    spins[np.arange(len(columns)), columns] = -1
    return spins.ravel()


def hang_together(groups: list[list[int]], spin: int) -> set[int]:
    """A spin and all that its groups take along."""
    taken = {spin}
    while True:
        more = taken.union(*(group for group in groups if taken & set(group)))
        if more == taken:
            return taken
        taken = more


def check_apart(problem: Problem, picked: tuple[I32, ...]) -> None:
    owner = np.full(len(problem), -1)
    for number, cluster in enumerate(cluster for rows in picked for cluster in rows):
        assert np.all(np.diff(cluster) > 0)
        assert np.all(owner[cluster] == -1)
        owner[cluster] = number
    rows = np.repeat(np.arange(len(problem)), np.diff(problem.row_starts))
    ends = owner[rows], owner[problem.neighbours]
    assert not np.any((ends[0] >= 0) & (ends[1] >= 0) & (ends[0] != ends[1]))


@given(st.integers(0, 10**6), st.integers(2, 9), st.data())
def test_what_fits_stays_whole(seed: int, size: int, data: st.DataObject) -> None:
    spins_count = data.draw(st.sampled_from([12, 40]))
    member = st.integers(0, spins_count - 1)
    groups = data.draw(st.lists(st.lists(member, min_size=2, max_size=6, unique=True), min_size=1, max_size=8))
    problem = problem_with(groups, spins_count, seed % 7)
    rule = closed_over_groups(RULES[data.draw(st.sampled_from(sorted(RULES)))], problem, size)
    rng = np.random.default_rng(seed)
    spins = rng.choice(np.array([-1, 1], np.int8), spins_count)
    wanted = data.draw(st.integers(1, 9))
    picked = rule.pick(problem, size, wanted, seed, Marks.for_problem(problem), View.of(problem, spins))
    sizes = [rows.shape[1] for rows in picked]
    assert sizes == sorted(set(sizes))
    assert 1 <= sizes[0] <= sizes[-1] <= size
    assert 1 <= sum(map(len, picked)) <= wanted
    check_apart(problem, picked)
    for cluster in (cluster for rows in picked for cluster in rows):
        for spin in cluster.tolist():
            whole = hang_together(groups, spin)
            assert whole <= set(cluster.tolist()) or len(whole) > size
    again = rule.pick(problem, size, wanted, seed, Marks.for_problem(problem), View.of(problem, spins))
    assert all(np.array_equal(*both) for both in zip(picked, again, strict=True))


def test_without_groups_the_rule_is_as_it_was() -> None:
    problem = Problem.from_arrays([0, 1], [1, 2], [1.0, 1.0])
    assert closed_over_groups(RULES["ball"], problem, 2) is RULES["ball"]


@pytest.mark.parametrize(("size", "looks"), [(4, False), (3, True)])
def test_blind_rules_stay_blind_where_every_group_fits(size: int, looks: bool) -> None:
    groups = [list(range(first, first + 4)) for first in range(0, 24, 4)]
    problem = problem_with(groups, 24)
    rule = closed_over_groups(RULES["ball"], problem, size)
    assert rule.looks_at_spins == looks
    rng = np.random.default_rng(3)
    picks = set()
    for _ in range(8):
        view = View.of(problem, rng.choice(np.array([-1, 1], np.int8), 24))
        rows = rule.pick(problem, size, 4, 5, Marks.for_problem(problem), view)
        picks.add(b"|".join(row.tobytes() for row in rows))
    assert (len(picks) > 1) == looks


def test_part_of_a_large_group_has_its_down_member() -> None:
    """Two groups of ten, clusters of four: the spin that is down and three others of the same group."""
    groups = [list(range(10)), list(range(10, 20))]
    problem, spins = problem_with(groups, 20), np.ones(20, np.int8)
    spins[[3, 16]] = -1
    rule = closed_over_groups(RULES["scattered"], problem, 4)
    others = set()
    for seed in range(60):
        (rows,) = rule.pick(problem, 4, 1, seed, Marks.for_problem(problem), View.of(problem, spins))
        cluster = set(rows[0].tolist())
        group = groups[0] if cluster & set(groups[0]) else groups[1]
        assert cluster <= set(group)
        assert cluster & {3, 16}
        others |= cluster
    assert others == set(range(20)), "the others are drawn at random"


@pytest.mark.parametrize("size", [4, 7, 9])
def test_groups_in_part_have_their_down_members(size: int) -> None:
    """Also where spins that joined had to leave again, because they touched another cluster of the round."""
    side = 12
    problem = assignment(side)
    groups = [set(group.tolist()) for group in problem.groups]
    rule, marks = closed_over_groups(RULES["scattered"], problem, size), Marks.for_problem(problem)
    clusters = []
    for seed in range(60):
        spins = assigned(np.random.default_rng(seed).permutation(side).tolist())
        picked = rule.pick(problem, size, 4, seed, marks, View.of(problem, spins))
        check_apart(problem, picked)
        for cluster in (set(cluster.tolist()) for rows in picked for cluster in rows):
            clusters.append(cluster)
            for group in groups:
                assert not group & cluster or {spin for spin in group if spins[spin] < 0} <= cluster
    assert len(clusters) > 70, "many rounds have more than one"


def test_parts_of_an_assignment_can_move() -> None:
    """With the rest held, every cluster of nine has another assignment beside the present one, by enumeration."""
    side, size = 6, 9
    problem = assignment(side)
    groups = [set(group.tolist()) for group in problem.groups]
    rule = closed_over_groups(RULES["ball"], problem, size)
    assert rule.looks_at_spins
    counts = []
    for seed in range(40):
        spins = assigned(np.random.default_rng(seed).permutation(side).tolist())
        ((cluster,),) = rule.pick(problem, size, 1, seed, Marks.for_problem(problem), View.of(problem, spins))
        possible = 0
        for word in range(1 << len(cluster)):
            trial = spins.copy()
            trial[cluster] = [1 - 2 * (word >> place & 1) for place in range(len(cluster))]
            down = set(np.flatnonzero(trial < 0).tolist())
            possible += all(len(group & down) == 1 for group in groups)
        counts.append(possible)
    assert min(counts) >= 2
    assert np.mean(counts) >= 4
