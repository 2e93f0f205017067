"""A run that was stopped or killed goes on to the very bits of the run that was not."""

from __future__ import annotations

import json
import os
import signal
import sqlite3
import subprocess
import sys
import time
from contextlib import closing
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from patchwalk import bound, make, resume, solve, write_problem
from patchwalk.evidence.layout import RunFileError, unpacked_rows
from patchwalk.problem.ising import Problem, ProblemError
from patchwalk.settings_checks import SettingsError
from patchwalk.subsolvers.contract import ClusterBatch, Proposals
from patchwalk.subsolvers.registry import subsolver_from

PROGRAM = Path(sys.executable).with_name("patchwalk")
GLASS = make("lattice2d", 16, couplings="gaussian", seed=6)
SETTINGS: dict[str, Any] = {"cluster_size": 10, "calls": 12_000, "tempering": "ladder", "replicas": 3,
                            "rule": "ball=2,loose=1,stale=1,disputed=1", "restart_after": 40}  # fmt: skip


def last_state(path: Path) -> tuple[Any, ...]:
    """Everything of the last checkpoint that decides, and the answer."""
    with closing(sqlite3.connect(path)) as database:
        state = database.execute(
            "SELECT round, calls, sweeps, energies, spins, local_fields, best_energy, best_spins, elites, counts, "
            "details FROM checkpoints WHERE details IS NOT NULL"
        ).fetchall()
        rows = database.execute(
            "SELECT round, replica, place, seed, rule, proposal, change, accepted FROM calls ORDER BY 1, 2, 3, seed"
        ).fetchall()
        tallies = database.execute(
            "SELECT subsolver, rule, k, tenth, calls, accepted, moved, improved, fall, rise FROM tallies "
            "ORDER BY run, subsolver, rule, k, tenth"
        ).fetchall()
        answer = database.execute("SELECT status, message, energy, calls, sweeps, spins FROM runs").fetchall()
    return state, rows, tallies, answer


def command(*words: object) -> list[str]:
    return [str(PROGRAM), *map(str, words), "--json", "--quiet"]


def killed_and_resumed(words: list[object], path: Path, kills: int, seed: int) -> int:
    """Run the command, kill it at random moments and resume it, until it ends; returns how often it was killed."""
    rng = np.random.default_rng(seed)
    line, done = command(*words, "--run", path), 0
    for attempt in range(40):
        log = path.with_suffix(".log")
        with log.open("w") as errors:
            process = subprocess.Popen(line, stdout=subprocess.DEVNULL, stderr=errors)
        began, patience = time.monotonic(), rng.uniform(0.3, 4.0) if done < kills else 300.0
        while process.poll() is None and time.monotonic() - began < patience:
            time.sleep(0.01)
        if process.poll() is not None:
            assert process.returncode == 0, log.read_text()
            return done
        process.send_signal(signal.SIGKILL)
        process.wait()
        done += 1
        begun = path.exists() and resumable(path)
        line = command("resume", path) if begun else line
        if not begun:
            path.unlink(missing_ok=True)
        assert attempt < 39
    return done


def resumable(path: Path) -> bool:
    """Whether the file is there and holds a checkpoint; looking must not make it."""
    try:
        with closing(sqlite3.connect(f"file:{path}?mode=ro", uri=True)) as database:
            return bool(database.execute("SELECT count(*) FROM checkpoints").fetchone()[0])
    except sqlite3.Error:
        return False


def words_of(problem: Path, settings: dict[str, Any]) -> list[object]:
    return ["solve", problem, *(word for key, value in settings.items()
                                for word in (f"--{key.replace('_', '-')}", value))]  # fmt: skip


def test_killed_and_resumed_is_the_straight_run(tmp_path: Path) -> None:
    write_problem(GLASS, tmp_path / "glass.txt")
    straight = solve(tmp_path / "glass.txt", **SETTINGS, run=tmp_path / "straight.sqlite")
    kills = killed_and_resumed(words_of(tmp_path / "glass.txt", SETTINGS), tmp_path / "broken.sqlite", 3, 1)
    assert kills >= 1
    assert last_state(tmp_path / "broken.sqlite") == last_state(tmp_path / "straight.sqlite")
    again = resume(tmp_path / "broken.sqlite")
    assert (again.energy, again.calls, again.status) == (straight.energy, straight.calls, "budget")


@pytest.mark.slow
def test_twenty_kills_change_no_bit(tmp_path: Path) -> None:
    write_problem(GLASS, tmp_path / "glass.txt")
    settings = {**SETTINGS, "calls": 120_000}
    solve(tmp_path / "glass.txt", **settings, run=tmp_path / "straight.sqlite")
    kills = killed_and_resumed(words_of(tmp_path / "glass.txt", settings), tmp_path / "broken.sqlite", 20, 2)
    assert kills == 20
    assert last_state(tmp_path / "broken.sqlite") == last_state(tmp_path / "straight.sqlite")


def test_defaults_stay_what_they_were(tmp_path: Path) -> None:
    """What a run chose by itself is written down, so that its resume does not choose anew."""
    straight = solve(GLASS, calls=300, cluster_size=6, run=tmp_path / "straight.sqlite")
    run = broken_off(tmp_path, GLASS, calls=300, cluster_size=6)
    with closing(sqlite3.connect(run)) as database:
        settings = json.loads(database.execute("SELECT settings FROM runs").fetchone()[0])
    assert (settings["tempering"], settings["replicas"]) == ("ladder", 16)
    assert resume(run).spins.tobytes() == straight.spins.tobytes()


def test_an_interrupted_run_goes_on_to_the_same_bits(tmp_path: Path) -> None:
    write_problem(GLASS, tmp_path / "glass.txt")
    solve(tmp_path / "glass.txt", **SETTINGS, run=tmp_path / "straight.sqlite")
    line = command(*words_of(tmp_path / "glass.txt", SETTINGS), "--run", tmp_path / "broken.sqlite")
    process = subprocess.Popen(line, stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True)
    while process.poll() is None and not resumable(tmp_path / "broken.sqlite"):
        time.sleep(0.02)
    time.sleep(0.7)
    process.send_signal(signal.SIGINT)
    output, errors = process.communicate(timeout=120)
    assert process.returncode == 130, errors
    assert json.loads(output)["status"] == "interrupted"
    again = resume(tmp_path / "broken.sqlite", workers=1)
    assert again.status == "budget"
    assert last_state(tmp_path / "broken.sqlite") == last_state(tmp_path / "straight.sqlite")


class Fickle:
    """Answers that are never the same twice, a list of what was asked, and one Ctrl-C when patience is at its end."""

    name, max_spins, deterministic, balance = "fickle", 20, False, "none"
    asked: list[int]
    interrupted = False

    def __init__(self, patience: int) -> None:
        self._inner, self._patience, self.asked = subsolver_from("uniform"), patience, []

    def prepare(self, sample: ClusterBatch) -> Fickle:
        return self

    def forecast(self, batch: ClusterBatch) -> Any:
        return self._inner.forecast(batch)

    def propose(self, batch: ClusterBatch) -> Proposals:
        if len(self.asked) > self._patience and not self.interrupted:
            self.interrupted = True  # a second one would end the whole process
            os.kill(os.getpid(), signal.SIGINT)
        self.asked.extend(batch.seeds.tolist())
        answer = self._inner.propose(batch)
        answer.outcomes[:] = np.random.default_rng().choice(np.array([-1, 1], np.int8), answer.outcomes.shape)
        return answer


def test_what_cannot_be_asked_again_is_not(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("patchwalk.evidence.runfile.GROUP_SECONDS", 1e9)  # no checkpoint but the first
    moody = Fickle(300)
    first = solve(
        GLASS, subsolver=moody, cluster_size=8, calls=40_000, clusters_per_round=8, run=tmp_path / "run.sqlite"
    )
    assert first.status == "interrupted"
    with closing(sqlite3.connect(tmp_path / "run.sqlite")) as database:
        asked_before = {row[0] for row in database.execute("SELECT seed FROM calls")}
    assert asked_before <= set(moody.asked)


def test_kept_answers_come_back_to_the_last_bit(tmp_path: Path) -> None:
    from patchwalk.evidence.kept_answers import KeptAnswers
    from patchwalk.evidence.runfile import RunFile
    from patchwalk.workers import Serial

    file = RunFile(tmp_path / "kept.sqlite")
    kept, moody = KeptAnswers(file, 1), Fickle(10**9)
    rng = np.random.default_rng(3)
    batch = ClusterBatch(rng.normal(size=(5, 4)), np.ones((5, 4), np.int8), np.ones(5), np.arange(5, dtype=np.uint64),
                         np.zeros((5, 4, 4)))  # fmt: skip
    first = list(kept.answers(moody, batch.rows(0, 3), Serial()))
    second = list(kept.answers(moody, batch, Serial()))
    assert moody.asked == [0, 1, 2, 3, 4]
    before = np.concatenate([answered.proposals.outcomes for answered in first])
    after = np.concatenate([answered.proposals.outcomes for answered in second])
    assert np.array_equal(after[:3], before)
    assert [answered.start for answered in second] == [0, 1, 2, 3]
    file.close()


def broken_off(tmp_path: Path, source: Path | Problem, **settings: Any) -> Path:
    """A run file whose run has a checkpoint and no end."""
    run = tmp_path / "run.sqlite"
    solve(source, **settings, run=run)
    with closing(sqlite3.connect(run)) as database:
        database.execute("UPDATE runs SET status = 'running'")
        database.commit()
    return run


def test_what_has_changed_is_named(tmp_path: Path) -> None:
    write_problem(GLASS, tmp_path / "glass.txt")
    toml = tmp_path / "glass.toml"
    toml.write_text('input = "glass.txt"\ncluster_size = 8\ncalls = 50\n')
    run = broken_off(tmp_path, toml)
    toml.write_text('input = "glass.txt"\ncluster_size = 9\ncalls = 50\n')
    with pytest.raises(SettingsError, match=r"glass\.toml: cluster_size is 9 now, the run began with 8"):
        resume(run)
    toml.unlink()
    assert resume(run).calls == 50
    other = make("lattice2d", 16, couplings="gaussian", seed=7)
    run.unlink()
    run = broken_off(tmp_path, tmp_path / "glass.txt", cluster_size=8, calls=50)
    (tmp_path / "glass.txt").unlink()
    write_problem(other, tmp_path / "glass.txt")
    with pytest.raises(ProblemError, match=r"glass.txt: the couplings are not those the run began with"):
        resume(run)
    (tmp_path / "glass.txt").unlink()
    assert resume(run).energy == pytest.approx(GLASS.energy(resume(run).spins))
    with pytest.raises(SettingsError, match="calls cannot be changed"):
        resume(run, calls=100)


def test_runs_of_other_commands_say_how_they_go_on(tmp_path: Path) -> None:
    ring = Problem.from_arrays(range(9), [*range(1, 9), 0], [1.0] * 9)
    bound(ring, run=tmp_path / "bound.sqlite")
    with pytest.raises(RunFileError, match="holds a bound; patchwalk bound INPUT --earlier"):
        resume(tmp_path / "bound.sqlite")


def test_what_is_no_run_file_is_refused(tmp_path: Path) -> None:
    with pytest.raises(RunFileError, match="there is no such run file"):
        resume(tmp_path / "nowhere.sqlite")
    (tmp_path / "text.sqlite").write_text("not a database at all, just some words " * 50)
    with pytest.raises(RunFileError, match="not a run file of Patchwalk"):
        resume(tmp_path / "text.sqlite")


def test_seeds_that_had_not_begun_are_run(tmp_path: Path) -> None:
    ring = Problem.from_arrays(range(30), [*range(1, 30), 0], [1.0] * 30)
    whole = solve(ring, seeds=[1, 2, 3], calls=60, cluster_size=5, run=tmp_path / "whole.sqlite")
    solve(ring, seeds=[1, 2, 3], calls=60, cluster_size=5, run=tmp_path / "part.sqlite")
    with closing(sqlite3.connect(tmp_path / "part.sqlite")) as database:
        for table in ("runs", "calls", "checkpoints", "incumbents", "groups", "tallies"):
            database.execute(f"DELETE FROM {table} WHERE run = 3")
        database.execute("UPDATE runs SET status = 'interrupted' WHERE run = 2")
        database.commit()
    again = resume(tmp_path / "part.sqlite")
    assert [run.seed for run in again.runs] == [1, 2, 3]
    for one, other in zip(again.runs, whole.runs, strict=True):
        assert one.spins.tobytes() == other.spins.tobytes()
    assert last_state(tmp_path / "part.sqlite")[0] == last_state(tmp_path / "whole.sqlite")[0]


def test_replicas_are_stored_one_after_the_other() -> None:
    from patchwalk.evidence.layout import packed

    spins = np.random.default_rng(1).choice(np.array([-1, 1], np.int8), (3, 13))
    assert np.array_equal(unpacked_rows(packed(spins), 13), spins)
