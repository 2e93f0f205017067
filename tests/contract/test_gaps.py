"""The gap of replayed calls against closed forms: at the rate of the run's own walk, on a share of the calls."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
from click.testing import CliRunner

from patchwalk import make, profile, replay, solve
from patchwalk.clusters.landscape import GAP_LIMIT
from patchwalk.evidence.gaps import GAP_AMPLITUDES, MOST_GAPS, gap_sentence, gaps_of, share_of
from patchwalk.evidence.recalled import recalled_calls
from patchwalk.evidence.stored import stored_file
from patchwalk.interface.cli import program
from patchwalk.subsolvers.contract import F64, ClusterBatch


def free_spins(fields: F64) -> ClusterBatch:
    rows, size = fields.shape
    return ClusterBatch(
        fields, np.ones((rows, size), np.int8), np.ones(rows), np.arange(rows), np.zeros((rows, size, size))
    )


@pytest.mark.parametrize("size", [1, 4])
@pytest.mark.parametrize(
    ("factor", "spelling"), [(1.0, "walk,hopping=0.7"), (0.5, "walk,hopping=0.7,hopping_factor=0.5")]
)
def test_free_spins_have_the_gap_of_the_softest(size: int, factor: float, spelling: str) -> None:
    """A spin in a field h has levels +-sqrt(gamma^2 + h^2); several excite the one of the smallest field."""
    fields = np.random.default_rng(size).uniform(-2.0, 2.0, (5, size))
    expected = 2.0 * np.hypot(factor * 0.7, np.abs(fields).min(axis=1))
    assert gaps_of(spelling, free_spins(fields), [True] * 5) == pytest.approx(expected, rel=1e-10)


def test_the_heuristic_rate_of_one_spin_is_its_field() -> None:
    """For k = 1 the walk hops at |h|: the gap is 2 sqrt(2) |h|. A device that has no rate is judged by the same."""
    fields = np.array([[0.3], [-1.7]])
    expected = 2.0 * np.sqrt(2.0) * np.abs(fields[:, 0])
    for spelling in ("walk", "walk,shots=3", "metropolis", "nobody.knows:This"):
        assert gaps_of(spelling, free_spins(fields), [True, True]) == pytest.approx(expected, rel=1e-10), spelling


def test_only_what_was_chosen_and_is_small_enough() -> None:
    fields = np.full((3, 2), 0.5)
    assert np.isnan(gaps_of("walk", free_spins(fields), [False, True, False])).tolist() == [True, False, True]
    large = free_spins(np.full((1, GAP_LIMIT + 1), 0.5))
    assert np.isnan(gaps_of("walk", large, [True])).all()
    assert np.isnan(gaps_of("walk", None, [True, True])).all()


def test_a_share_is_seeded_and_smaller_for_larger_clusters() -> None:
    names = [(number, 0, place) for number in range(100) for place in range(5)]
    assert share_of(names, 10, seed=1) == share_of(names[::-1], 10, seed=1)
    assert share_of(names, 10, seed=1) != share_of(names, 10, seed=2)
    assert len(share_of(names, 8, seed=1)) == MOST_GAPS
    assert len(share_of(names, 14, seed=1)) == len(share_of(names, 20, seed=1)) == GAP_AMPLITUDES >> 14
    assert share_of(names[:7], 8, seed=1) == set(names[:7])
    assert "of 1 of the 2 calls" in gap_sentence(np.array([1.0, np.nan]))


def dense_gap(batch: ClusterBatch, row: int, hopping: float) -> float:
    """From a matrix written down configuration by configuration; bit i of a number is spin i, 1 for -1."""
    assert batch.couplings is not None
    size, count = batch.size, 1 << batch.size
    matrix = np.zeros((count, count))
    for number in range(count):
        spins = np.array([1.0 - 2.0 * ((number >> spin) & 1) for spin in range(size)])
        matrix[number, number] = batch.fields[row] @ spins + 0.5 * spins @ batch.couplings[row] @ spins
        for spin in range(size):
            matrix[number, number ^ (1 << spin)] = -hopping
    levels = np.linalg.eigvalsh(matrix)
    return float(levels[1] - levels[0])


def test_a_profile_has_the_table_where_it_is_asked_for(tmp_path: Path) -> None:
    """Every gap is that of the cluster as it was asked, boundary and all."""
    run = solve(
        make("lattice2d", 5, fields=True, couplings="gaussian", seed=1), subsolver="walk,hopping=0.6", cluster_size=3,
        calls=30, seed=1, record="all", run=tmp_path / "run.sqlite",
    ).run_path  # fmt: skip
    replay(run, ["none"])
    found = profile(run, gap=True)
    gaps = found.replayed.quantities["gap"]
    with stored_file(run) as stored:
        (calls,) = recalled_calls(stored, 1, stored.problem(stored.runs()[0].problem))
    assert gaps == pytest.approx([dense_gap(calls.batch, row, 0.6) for row in range(len(calls))], rel=1e-9)
    assert sum(one.calls for one in found.tables["gap"]) == len(gaps)
    assert "gap" not in profile(run).tables
    told = CliRunner().invoke(program, ["profile", str(run), "--gap"])
    assert told.exit_code == 0
    assert told.stdout.rstrip() == str(found)
    assert f"gap: of all {len(gaps)} calls, in energy units" in told.stdout.splitlines()
