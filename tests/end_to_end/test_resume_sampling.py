"""A sampling run that was stopped, killed or has crashed goes on to the averages it would have had, to the last bit."""

from __future__ import annotations

import json
import signal
import sqlite3
import subprocess
import sys
import time
from contextlib import closing
from pathlib import Path
from typing import Any

import pytest

from patchwalk import make, resume, sample, write_problem
from patchwalk.commands import sampling
from patchwalk.commands.tasks import sample_task_from
from patchwalk.evidence.layout import RunFileError
from patchwalk.evidence.runfile import RunWriter
from patchwalk.settings_checks import SettingsError

PROGRAM = Path(sys.executable).with_name("patchwalk")
PATIENCE = 240
GLASS = make("lattice2d", 6, couplings="gaussian", seed=3)
SETTINGS: dict[str, Any] = {
    "subsolver": "walk,start=incumbent", "cluster_size": 5, "rule": "ball=2,scattered=1",
    "temperatures": [2.0, 1.2, 0.7], "rounds": 60, "burn_in": 25, "copies": 2, "seed": 4, "record": "all", "workers": 1,
}  # fmt: skip


class CrashError(Exception):
    """Whatever may happen to a process."""


class Crash(sampling.SilentSampleWatcher):
    """Ends a run without a word after so many rounds."""

    def __init__(self, rounds: int) -> None:
        self.rounds = rounds

    def measured(self, sampling: sampling.BoltzmannSampling, elapsed: float) -> None:
        if sampling.round == self.rounds:
            raise CrashError


def kept(path: Path) -> dict[str, Any]:
    """All that a run file tells of a run but for what the clock says."""
    with closing(sqlite3.connect(path)) as database:
        calls = database.execute(
            "SELECT round, replica, place, seed, rule, proposal, change, accepted, energy_before FROM calls "
            "ORDER BY round, replica, place"
        ).fetchall()
        series = database.execute("SELECT * FROM measurements ORDER BY temperature").fetchall()
        ended = database.execute("SELECT status, message, calls, sweeps, energy, spins FROM runs").fetchall()
        state = database.execute("SELECT spins, energies FROM checkpoints ORDER BY round DESC LIMIT 1").fetchall()
    return {"calls": calls, "series": series, "ended": ended, "state": state}


@pytest.fixture
def seven_rounds_a_group(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(RunWriter, "due", property(lambda self: len(self._stages) == 7))


def crashed(path: Path, rounds: int, **changed: Any) -> Path:
    task = sample_task_from(GLASS, {**SETTINGS, **changed, "run": path})
    with pytest.raises(CrashError):
        sampling.carry_out(task, Crash(rounds))
    return path


@pytest.mark.usefixtures("seven_rounds_a_group")
@pytest.mark.parametrize(
    "rounds", [3, 20, 28, 40, 84], ids=["before the first group", "burn-in", "first", "middle", "last"]
)
def test_what_crashed_goes_on_to_the_same_bits(rounds: int, tmp_path: Path) -> None:
    straight = sample(GLASS, **SETTINGS, run=tmp_path / "straight.sqlite")
    crashed(tmp_path / "crashed.sqlite", rounds)
    went_on = resume(tmp_path / "crashed.sqlite", workers=2)
    assert went_on.status == "budget"
    assert went_on.levels == straight.levels
    assert kept(tmp_path / "crashed.sqlite") == kept(tmp_path / "straight.sqlite")


@pytest.mark.usefixtures("seven_rounds_a_group")
def test_several_crashes_and_then_an_end_that_is_given_back(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    straight = sample(GLASS, **SETTINGS, run=tmp_path / "straight.sqlite")
    run = crashed(tmp_path / "crashed.sqlite", 30)
    for rounds in (50, 77):
        with monkeypatch.context() as crashing:
            crashing.setattr("patchwalk.commands.resuming.SilentSampleWatcher", lambda rounds=rounds: Crash(rounds))
            with pytest.raises(CrashError):
                resume(run)
    assert resume(run).levels == straight.levels
    before = kept(run)
    assert resume(run).levels == straight.levels
    assert kept(run) == before
    with closing(sqlite3.connect(run)) as database:
        assert database.execute("SELECT count(*) FROM measured_parts").fetchone() == (0,)


def test_killed_at_any_moment_from_the_command_line(tmp_path: Path) -> None:
    write_problem(GLASS, tmp_path / "glass.txt")
    told = {**SETTINGS, "temperatures": "2.0,1.2,0.7", "rounds": 3000, "record": "share"}
    words = [f"--{name.replace('_', '-')}={value}" for name, value in told.items()]
    command = [PROGRAM, "sample", tmp_path / "glass.txt", *words, "--json", "--run"]
    whole = subprocess.run([*command, tmp_path / "straight.sqlite"], capture_output=True, timeout=PATIENCE, check=True)
    killed = subprocess.Popen([*command, tmp_path / "killed.sqlite"], stderr=subprocess.PIPE, text=True)
    assert killed.stderr is not None
    for line in killed.stderr:  # until it says that it is at work
        if " round " in line:
            break
    time.sleep(0.2)
    killed.send_signal(signal.SIGKILL)
    killed.communicate(timeout=PATIENCE)
    assert killed.returncode == -signal.SIGKILL
    done = subprocess.run(
        [PROGRAM, "resume", tmp_path / "killed.sqlite", "--json"], capture_output=True, timeout=PATIENCE, check=True
    )
    assert json.loads(done.stdout)["levels"] == json.loads(whole.stdout)["levels"]
    assert kept(tmp_path / "killed.sqlite") == kept(tmp_path / "straight.sqlite")


@pytest.mark.usefixtures("seven_rounds_a_group")
def test_what_does_not_belong_together_is_refused(tmp_path: Path) -> None:
    run = crashed(tmp_path / "crashed.sqlite", 50)
    with pytest.raises(SettingsError, match="rounds cannot be changed"):
        resume(run, rounds=100)
    with closing(sqlite3.connect(run)) as database, database:
        database.execute("DELETE FROM measured_parts WHERE first = (SELECT max(first) FROM measured_parts)")
    with pytest.raises(RunFileError, match=r"is damaged: 17 measurements are kept, 24 were taken by round 49"):
        resume(run)
    with closing(sqlite3.connect(run)) as database, database:
        database.execute("UPDATE checkpoints SET details = '{\"ladders\": []}' WHERE details IS NOT NULL")
    with pytest.raises(RunFileError, match="before sampling runs could be resumed"):
        resume(run)
