"""``patchwalk replay`` from the command line: what it prints, how it stops and goes on, how it says what is wrong."""

from __future__ import annotations

import json
import signal
import sqlite3
import subprocess
import sys
import time
from contextlib import closing
from pathlib import Path

import pytest
from click.testing import CliRunner, Result

from patchwalk import make, solve
from patchwalk.interface.cli import program


def patchwalk(*words: object) -> Result:
    return CliRunner().invoke(program, [str(word) for word in words])


def count(path: Path) -> int:
    with closing(sqlite3.connect(path)) as database:
        return int(database.execute("SELECT count(*) FROM replays").fetchone()[0])


@pytest.fixture
def run(tmp_path: Path) -> Path:
    glass = make("lattice2d", 6, seed=4)
    return solve(
        glass, subsolver="walk", cluster_size=5, calls=40, seeds="1..2", record="all", run=tmp_path / "run.sqlite"
    ).run_path


def test_the_file_alone_holds_everything_whatever_its_name(run: Path) -> None:
    odd = run.rename(run.with_name("run #1? 100%.sqlite"))
    told = patchwalk("replay", odd, "--rival", "enumeration", "--workers", 1)
    assert told.exit_code == 0, told.output
    copied = odd.with_name("copied.sqlite")
    copied.write_bytes(odd.read_bytes())  # as if sent by mail, without a log beside it
    assert count(copied) == count(odd) == 2 * 80


def test_a_table_for_people(run: Path) -> None:
    told = patchwalk("replay", run, "--rival", "enumeration", "--rival", "none", "--workers", 1)
    assert told.exit_code == 0, told.output
    lines = told.stdout.splitlines()
    assert f"{run}, run 1, seed 1" in lines
    assert f"{run}, run 2, seed 2" in lines
    assert sum("walk (the run's own)" in line for line in lines) == 2
    assert sum(line.split()[:2] == ["none", "40"] for line in lines) == 2


def test_json_for_programs_and_the_usual_rivals(run: Path) -> None:
    told = patchwalk("replay", run, "--calls", 10, "--json", "--quiet", "--workers", 1)
    assert told.exit_code == 0
    assert told.stderr == ""
    value = json.loads(told.stdout)
    assert value["status"] == "finished"
    assert [one["rival"] for one in value["rivals"]][:4] == ["walk", "elimination", "enumeration", "none"]
    assert value["rivals"][3]["hit_probability"] is None
    assert value["rivals"][2]["mean_drop"] >= value["rivals"][0]["mean_drop"]


@pytest.mark.parametrize(
    ("words", "code", "sentence"),
    [
        (["nowhere.sqlite"], 1, "there is no such run file"),
        (["RUN", "--rival", "tabuu"], 2, "did you mean 'tabu'"),
        (["RUN", "--rival", "tabu,steps=-1"], 2, "steps is -1"),
        (["RUN", "--calls", "0"], 2, "0 is not in the range"),
    ],
)
def test_mistakes(run: Path, words: list[str], code: int, sentence: str) -> None:
    told = patchwalk("replay", *[str(run) if word == "RUN" else word for word in words])
    assert told.exit_code == code
    assert sentence in told.output


def test_stopped_it_goes_on(tmp_path: Path) -> None:
    """Ctrl-C in the middle leaves rows and exit code 130; the same command ends with what one in peace gives."""
    glass = make("lattice2d", 10, seed=4)
    paths = [tmp_path / "stopped.sqlite", tmp_path / "whole.sqlite"]
    for path in paths:
        solve(glass, subsolver="walk", cluster_size=13, calls=1000, run=path)
    words = ["--rival", "walk,shots=2", "--rival", "tabu,steps=20000", "--quiet", "--workers", "1"]
    executable = Path(sys.executable).with_name("patchwalk")
    process = subprocess.Popen([executable, "replay", paths[0], *words], stdout=subprocess.PIPE, text=True)
    began = time.monotonic()
    while count(paths[0]) == 0 and time.monotonic() - began < 120:
        time.sleep(0.02)
    process.send_signal(signal.SIGINT)
    output, _ = process.communicate(timeout=120)
    assert process.returncode == 130
    assert "the same command goes on" in output
    assert 0 < count(paths[0]) < 3000
    calls = ["--calls", "60"]
    for path in paths:
        told = patchwalk("replay", path, *words, *calls)
        assert told.exit_code == 0
    with closing(sqlite3.connect(paths[0])) as database:
        database.execute("ATTACH ? AS other", (str(paths[1]),))
        columns = (
            "rival, round, replica, place, mean_drop, drop_error, hit_probability, amplitude_updates, spin_updates"
        )
        missing = database.execute(f"SELECT {columns} FROM other.replays EXCEPT SELECT {columns} FROM main.replays")
        assert missing.fetchall() == []
        assert database.execute("SELECT count(*) FROM other.replays").fetchone()[0] >= 3 * 60
