"""Calls come back from a run file as they were asked, to the last bit."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

from patchwalk import make, solve
from patchwalk.evidence.recalled import recalled_calls
from patchwalk.evidence.stored import stored_file
from patchwalk.subsolvers.registry import subsolver_from


@pytest.mark.parametrize("size", [9, 70])
def test_asked_again_the_answers_are_the_same(tmp_path: Path, size: int) -> None:
    glass = make("lattice2d", 14, couplings="gaussian", seed=3)
    name = "walk,shots=3" if size == 9 else "descent"
    solution = solve(glass, subsolver=name, cluster_size=size, calls=90, replicas=2, record="all",
                     run=tmp_path / "run.sqlite")  # fmt: skip
    with stored_file(solution.run_path) as file:
        pieces = list(recalled_calls(file, 1, file.problem(glass.fingerprint)))
    assert sum(map(len, pieces)) == 90
    for calls in pieces:
        again = subsolver_from(calls.subsolver).propose(calls.batch)
        assert np.all((again.outcomes == calls.proposals[:, None, :]).all(axis=2).any(axis=1))
        if again.hit_probability is not None:
            assert again.hit_probability.tobytes() == calls.hits.tobytes()
        assert again.work.shots is None or np.array_equal(again.work.shots, calls.work.shots)
        inside = glass.matrix[calls.members[0]][:, calls.members[0]].toarray()
        before, after = calls.batch.spins[0].astype(float), calls.proposals[0].astype(float)
        change = calls.batch.fields[0] @ (after - before) + 0.5 * (after @ inside @ after - before @ inside @ before)
        assert calls.changes[0] == pytest.approx(change, abs=1e-9)


def test_only_the_calls_wanted_come_back(tmp_path: Path) -> None:
    glass = make("lattice2d", 6, seed=3)
    solution = solve(glass, subsolver="uniform", cluster_size=4, calls=30, record="all", run=tmp_path / "run.sqlite")
    with stored_file(solution.run_path) as file:
        everything = next(recalled_calls(file, 1, file.problem(glass.fingerprint)))
        names = list(
            zip(everything.rounds.tolist(), everything.replicas.tolist(), everything.places.tolist(), strict=True)
        )
        (piece,) = recalled_calls(file, 1, file.problem(glass.fingerprint), set(names[7:9]))
    assert len(piece) == 2
    assert np.array_equal(piece.batch.seeds, everything.batch.seeds[7:9])
