"""The run file holds every call with all that a replay needs, and adds up."""

from __future__ import annotations

import itertools
import json
import resource
import sqlite3
from collections.abc import Iterator
from contextlib import closing, contextmanager
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from patchwalk import make, solve
from patchwalk.clusters.conditioning import condition
from patchwalk.evidence.layout import RunFileError, packed, unpacked
from patchwalk.evidence.runfile import RunFile
from patchwalk.evidence.stored import stored_file
from patchwalk.problem.ising import Problem
from patchwalk.subsolvers.contract import ClusterBatch
from patchwalk.subsolvers.registry import subsolver_from

GLASS = make("lattice2d", 12, couplings="gaussian", seed=6)


@contextmanager
def opened(path: Path) -> Iterator[sqlite3.Connection]:
    with closing(sqlite3.connect(path)) as database:
        database.row_factory = sqlite3.Row
        yield database


def test_a_row_is_enough_to_ask_again(tmp_path: Path) -> None:
    """Rebuild every call of a run from its row and the problem: same question, same answer, same change."""
    solution = solve(GLASS, subsolver="walk,shots=2", cluster_size=9, calls=60, run=tmp_path / "run.sqlite")
    with opened(solution.run_path) as database:
        rows = database.execute("SELECT * FROM calls ORDER BY round, place").fetchall()
        subsolver = subsolver_from(database.execute("SELECT subsolver FROM runs").fetchone()[0])
    assert len(rows) == solution.calls == 60
    for row in rows:
        members = np.frombuffer(row["members"], "<i4")
        fields = np.frombuffer(row["boundary_fields"], "<f8")
        spins = np.frombuffer(row["spins_before"], np.int8)
        proposal = np.frombuffer(row["proposal"], np.int8)
        couplings = GLASS.matrix[members][:, members].toarray()
        temperature, seed = np.array([row["temperature"]]), np.array([row["seed"]], np.uint64)
        batch = ClusterBatch(fields[None], spins[None], temperature, seed, couplings[None])
        again = subsolver.propose(batch)
        assert any(np.array_equal(shot, proposal) for shot in again.outcomes[0])
        assert again.hit_probability is not None
        assert again.hit_probability[0] == row["hit_probability"]
        inside = [fields @ s + 0.5 * s @ couplings @ s for s in (spins.astype(float), proposal.astype(float))]
        assert row["change"] == pytest.approx(inside[1] - inside[0], abs=1e-9)
        assert row["k"] == 9
        assert (row["status"], row["message"]) == (0, "")
        assert row["amplitude_updates"] > 0
        assert row["load_s"] is None


def test_energies_in_rows_follow_each_other(tmp_path: Path) -> None:
    solution = solve(GLASS, cluster_size=8, calls=200, sweeps=0, replicas=1, run=tmp_path / "run.sqlite")
    with opened(solution.run_path) as database:
        rows = database.execute("SELECT * FROM calls ORDER BY round, place").fetchall()
        incumbents = database.execute("SELECT energy, finder FROM incumbents ORDER BY calls").fetchall()
    for row, following in itertools.pairwise(rows):
        expected = row["energy_before"] + (row["change"] if row["accepted"] else 0.0)
        assert following["energy_before"] == pytest.approx(expected, abs=1e-8)
    energies = [row["energy"] for row in incumbents]
    assert energies == sorted(energies, reverse=True)
    assert energies[-1] == pytest.approx(solution.energy)
    assert incumbents[0]["finder"] == "start"
    assert {row["finder"] for row in incumbents[1:]} == {"clusters"}


def test_a_share_of_cheap_calls_has_rows_and_the_rest_is_tallied_exactly(tmp_path: Path) -> None:
    counted = {}
    for record in ("all", "share", "auto"):
        solution = solve(
            GLASS, subsolver="uniform", cluster_size=6, calls=2000, record=record, run=tmp_path / f"{record}.sqlite"
        )
        with opened(solution.run_path) as database:
            rows = database.execute(
                "SELECT count(*), total(accepted), total(CASE WHEN accepted AND change < 0 THEN -change END) FROM calls"
            ).fetchone()
            tally = database.execute("SELECT total(calls), total(accepted), total(fall) FROM tallies").fetchone()
            groups = database.execute("SELECT total(calls), total(rows) FROM groups").fetchone()
        counted[record] = (rows[0], *(one + other for one, other in zip(rows, tally, strict=True)))
        assert tuple(groups) == (2000, rows[0])
    assert counted["all"][0] == 2000
    assert 5 <= counted["share"][0] <= 100
    assert counted["share"] == counted["auto"]
    assert counted["all"][1:] == pytest.approx(counted["share"][1:])


def test_tallies_have_the_same_bits_however_calls_are_grouped_and_sliced(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """The clock decides when a group closes, and the workers how a round is divided: neither may show in a sum."""
    found = []
    for number, (seconds, workers) in enumerate(((1e9, 1), (0.0, 1), (1e9, 3))):
        monkeypatch.setattr("patchwalk.evidence.runfile.GROUP_SECONDS", seconds)
        monkeypatch.setattr("patchwalk.workers.Threads.smallest_task_seconds", 0.0)
        solution = solve(
            GLASS, subsolver="uniform", cluster_size=6, calls=2000, record="share", workers=workers,
            run=tmp_path / f"{number}.sqlite",
        )  # fmt: skip
        with opened(solution.run_path) as database:
            rows = database.execute("SELECT * FROM tallies ORDER BY subsolver, rule, k, tenth").fetchall()
            groups = database.execute("SELECT count(*) FROM groups").fetchone()[0]
        assert (groups > 20) == (seconds == 0.0)
        found.append([tuple(row)[:-1] for row in rows])  # the last column is seconds
    assert sum(row[5] for row in found[0]) > 1500
    assert found[1] == found[0]
    assert found[2] == found[0]


def test_the_run_itself_is_described(tmp_path: Path) -> None:
    solution = solve(GLASS, cluster_size=7, calls=30, seeds=[3, 4], hot=0.9, replicas=1, run=tmp_path / "two.sqlite")
    with opened(solution.run_path) as database:
        runs = database.execute("SELECT * FROM runs ORDER BY run").fetchall()
        problem = database.execute("SELECT * FROM problems").fetchone()
        checkpoints = database.execute("SELECT * FROM checkpoints ORDER BY run, round").fetchall()
    assert [run["seed"] for run in runs] == [3, 4]
    assert [run["status"] for run in runs] == ["budget", "budget"]
    settings = json.loads(runs[0]["settings"])
    assert (settings["hot"], settings["subsolver"], settings["cluster_size"]) == (0.9, "walk", 7)
    assert set(json.loads(runs[0]["versions"])) >= {"patchwalk", "numpy", "numba", "python", "processor"}
    assert problem["fingerprint"] == GLASS.fingerprint == runs[0]["problem"]
    for run, own in zip(runs, solution.runs, strict=True):
        assert run["energy"] == own.energy == GLASS.energy(unpacked(run["spins"], len(GLASS)))
    last = checkpoints[-1]
    spins = unpacked(last["spins"], len(GLASS))
    assert np.frombuffer(last["energies"], "<f8")[0] == pytest.approx(GLASS.energy(spins))
    np.testing.assert_allclose(np.frombuffer(last["local_fields"], "<f8"), GLASS.local_fields(spins), atol=1e-9)


class Unreliable:
    """Fails every call of a cluster that holds spin 0."""

    name, max_spins, deterministic, balance = "unreliable", 20, True, "none"

    def __init__(self) -> None:
        self._inner = subsolver_from("walk")

    def prepare(self, sample: ClusterBatch) -> Unreliable:
        return self

    def forecast(self, batch: ClusterBatch) -> Any:
        return self._inner.forecast(batch)

    def propose(self, batch: ClusterBatch) -> Any:
        raise RuntimeError("the cooler is warm")


def test_failed_calls_are_rows_and_too_many_end_the_run_with_the_incumbent(tmp_path: Path) -> None:
    solution = solve(
        GLASS,
        subsolver=Unreliable(),
        cluster_size=6,
        calls=500,
        failures=20,
        replicas=1,
        run=tmp_path / "failed.sqlite",
    )
    assert solution.status == "error"
    assert "the cooler is warm" in solution.message
    assert 20 <= solution.failed_calls == solution.calls < 60
    assert solution.energy == pytest.approx(GLASS.energy(solution.spins))
    with opened(solution.run_path) as database:
        rows = database.execute("SELECT status, message, accepted, change FROM calls").fetchall()
    assert len(rows) == solution.calls
    assert {tuple(row) for row in rows} == {(2, "unreliable: RuntimeError: the cooler is warm", 0, 0.0)}


def test_an_existing_file_is_left_alone(tmp_path: Path) -> None:
    path = tmp_path / "run.sqlite"
    path.write_text("mine")
    with pytest.raises(RunFileError, match="is there already"):
        RunFile(path)
    assert path.read_text() == "mine"
    blocked = tmp_path / "run.sqlite" / "inside.sqlite"
    with pytest.raises(RunFileError, match="writable place"):
        RunFile(blocked)


def test_a_disk_that_is_full_at_the_end_loses_nothing(tmp_path: Path) -> None:
    """What cannot be folded into the file stays in its log, and is read from there."""
    path = solve(GLASS, cluster_size=4, calls=5, run=tmp_path / "run.sqlite").run_path
    file = RunFile(path, reopen=True)
    file.database.execute("CREATE TABLE filler (bytes BLOB)")
    file.database.execute("INSERT INTO filler VALUES (zeroblob(1000000))")
    limits = resource.getrlimit(resource.RLIMIT_FSIZE)
    resource.setrlimit(resource.RLIMIT_FSIZE, (path.stat().st_size, limits[1]))
    try:
        file.close()
    finally:
        resource.setrlimit(resource.RLIMIT_FSIZE, limits)
    assert path.with_name("run.sqlite-wal").stat().st_size > 1_000_000
    with stored_file(path) as stored:
        assert [row["size"] for row in stored.rows("SELECT length(bytes) AS size FROM filler")] == [1_000_000]


def test_spins_as_bits() -> None:
    spins = np.random.default_rng(1).choice(np.array([-1, 1], np.int8), 77)
    assert np.array_equal(unpacked(packed(spins), 77), spins)


def test_conditioning_again_gives_the_stored_fields(tmp_path: Path) -> None:
    """The first round's stored fields are those of the start configuration, conditioned afresh."""
    start = 1 - 2 * (np.arange(len(GLASS)) % 2)
    (tmp_path / "start.txt").write_text(" ".join(map(str, start)))
    solution = solve(
        GLASS, cluster_size=7, calls=5, replicas=1, start=tmp_path / "start.txt", run=tmp_path / "run.sqlite"
    )
    assert solution.start_energy == GLASS.energy(start)
    with opened(solution.run_path) as database:
        rows = database.execute("SELECT members, boundary_fields FROM calls WHERE round = 0 ORDER BY place").fetchall()
    members = np.array([np.frombuffer(row["members"], "<i4") for row in rows])
    spins = start.astype(np.int8)
    places = np.full(len(GLASS), -1, np.int32)
    seeds = np.zeros(len(members), np.uint64)
    batch = condition(GLASS, members, spins, GLASS.local_fields(spins), 1.0, seeds, places)
    assert batch.fields.tobytes() == b"".join(row["boundary_fields"] for row in rows)


def test_a_problem_object_needs_no_file(tmp_path: Path) -> None:
    ring = Problem.from_arrays(range(9), [*range(1, 9), 0], [1.0] * 9, kind="maxcut")
    solution = solve(ring, calls=40, cluster_size=4, run=tmp_path / "ring.sqlite")
    assert (solution.objective_name, solution.objective, solution.answer["cut"]) == ("cut", 8.0, 8.0)
