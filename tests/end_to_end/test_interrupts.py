"""A run that is stopped or killed, at whatever moment: the best answer comes back, and the run file holds."""

from __future__ import annotations

import contextlib
import json
import os
import random
import signal
import sqlite3
import subprocess
import sys
import threading
import time
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt
import pytest

import patchwalk
from patchwalk.subsolvers.contract import ClusterBatch, Proposals
from patchwalk.subsolvers.uniform import Uniform

PROGRAM = Path(sys.executable).with_name("patchwalk")
PATIENCE = 240  # seconds until something that must happen counts as never happening
SIDE = 12

STALLING = """
import pathlib, time
from patchwalk.subsolvers.uniform import Uniform

class Stalling(Uniform):
    '''Answers as usual for some calls, then hangs in the middle of one.'''
    name = 'stalling'
    answered = 0

    def prepare(self, sample):
        return self

    def propose(self, batch):
        type(self).answered += 1
        if self.answered > 3:
            pathlib.Path('hangs').touch()
            time.sleep(3600)
        return super().propose(batch)
"""


@pytest.fixture(scope="module")
def glass(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A periodic lattice; solving it once leaves the kernels compiled for everything below."""
    folder = tmp_path_factory.mktemp("glass")
    words = ["make", "lattice2d", "--size", str(SIDE), "--seed", "1", "-o", folder / "glass.txt"]
    subprocess.run([PROGRAM, *words], check=True, capture_output=True)
    subprocess.run([PROGRAM, "solve", "glass.txt", "--calls", "20"], cwd=folder, check=True, capture_output=True)
    return folder / "glass.txt"


class Running:
    """A ``solve`` at work: its process, and what it has said so far."""

    def __init__(self, glass: Path, *words: object, **environment: str) -> None:
        Path("said.txt").write_text("")
        with open("said.txt", "w") as said, open("printed.txt", "w") as printed:
            self.process = subprocess.Popen(
                [PROGRAM, "solve", glass, "--run", "run.sqlite", "--json", *map(str, words)],
                stdout=printed, stderr=said, env={**os.environ, **environment},
            )  # fmt: skip

    @property
    def said(self) -> str:
        return Path("said.txt").read_text()

    def wait_until(self, happened: Callable[[], bool]) -> None:
        """Returns once ``happened()``; fails where the process ends before, or where it never does."""
        deadline = time.monotonic() + PATIENCE
        while not happened():
            assert self.process.poll() is None, f"ended too early, saying: {self.said}"
            assert time.monotonic() < deadline, f"nothing happened; it said: {self.said}"
            time.sleep(0.01)

    def end(self) -> tuple[int, str]:
        """The exit code, and what stands on standard output."""
        code = self.process.wait(PATIENCE)
        return code, Path("printed.txt").read_text()


@pytest.fixture
def running(glass: Path) -> Iterator[Callable[..., Running]]:
    """Starts solves, and lets none outlive the test."""
    started: list[Running] = []

    def start(*words: object, **environment: str) -> Running:
        started.append(Running(glass, *words, **environment))
        return started[-1]

    yield start
    for each in started:
        with contextlib.suppress(ProcessLookupError):
            each.process.kill()
        each.process.wait()


def query(text: str, path: str = "run.sqlite") -> list[sqlite3.Row]:
    """Rows of a run file, which another process may be writing at the same time."""
    with contextlib.closing(sqlite3.connect(path)) as database:
        database.row_factory = sqlite3.Row
        return database.execute(text).fetchall()


def closed_groups() -> int:
    """How many groups of rounds the run file holds by now."""
    if not Path("run.sqlite").exists():
        return 0
    try:
        return int(query("SELECT count(*) AS n FROM groups")[0]["n"])
    except sqlite3.OperationalError:  # no tables yet
        return 0


def couplings_of(glass: Path) -> npt.NDArray[np.float64]:
    """The dense coupling matrix of the file."""
    couplings = np.zeros((SIDE**2, SIDE**2))
    lines = [line.split() for line in glass.read_text().splitlines() if not line.startswith("#")]
    for i, j, weight in lines[1:]:
        couplings[int(i) - 1, int(j) - 1] = couplings[int(j) - 1, int(i) - 1] = float(weight)
    return couplings


def energy_in(couplings: npt.NDArray[np.float64], spins: npt.ArrayLike) -> float:
    values = np.asarray(spins, float)
    return float(values @ couplings @ values / 2)


def unpacked(blob: bytes) -> npt.NDArray[np.int64]:
    """Spins of a checkpoint: one bit each, 1 for -1, the first in the lowest bit of the first byte."""
    bits = np.unpackbits(np.frombuffer(blob, np.uint8), count=SIDE**2, bitorder="little")
    return 1 - 2 * bits.astype(np.int64)


def holds_every_closed_group(glass: Path) -> int:
    """Checks what a killed run leaves behind, and returns how many groups that is."""
    couplings = couplings_of(glass)
    assert query("PRAGMA integrity_check")[0][0] == "ok"
    groups = query("SELECT * FROM groups ORDER BY run, number")
    calls = query("SELECT * FROM calls ORDER BY run, round, place")
    assert [group["number"] for group in groups] == list(range(len(groups)))
    next_round = 0
    for group in groups:
        assert group["first_round"] == next_round, "rounds follow one another without a hole"
        next_round = group["last_round"] + 1
        own = [row for row in calls if group["first_round"] <= row["round"] <= group["last_round"]]
        assert len(own) == group["rows"] == group["calls"]
        assert {row["round"] for row in own} == set(range(group["first_round"], next_round))
        assert len(group["stages"]) == 8 * (next_round - group["first_round"])
    assert len(calls) == sum(group["rows"] for group in groups), "nothing of the open group"
    if groups:
        (newest,) = query("SELECT * FROM checkpoints ORDER BY round DESC LIMIT 1")
        assert (newest["round"], newest["calls"]) == (next_round, len(calls))
        spins, best = unpacked(newest["spins"]), unpacked(newest["best_spins"])
        assert np.frombuffer(newest["energies"], "<f8").tolist() == [energy_in(couplings, spins)]
        assert newest["best_energy"] == energy_in(couplings, best)
        assert newest["local_fields"] is None, "whole couplings: they follow from the spins"
        assert np.array_equal(spins, spins_after(calls)), "the calls lead from the start to the checkpoint"
        (lowest,) = query("SELECT min(energy) AS energy FROM incumbents")
        assert lowest["energy"] == newest["best_energy"]
    return len(groups)


def spins_after(calls: list[sqlite3.Row]) -> npt.NDArray[np.int64]:
    """Where the recorded calls of a run without sweeps lead, from all spins up."""
    spins = np.ones(SIDE**2, np.int64)
    for row in calls:
        members = np.frombuffer(row["members"], "<i4")
        assert np.array_equal(np.frombuffer(row["spins_before"], np.int8), spins[members])
        if row["accepted"]:
            spins[members] = np.frombuffer(row["proposal"], np.int8)
    return spins


def check_interrupted(glass: Path, code: int, printed: str) -> dict[str, Any]:
    """What must be true of every run that was asked to stop, once it began to search."""
    assert code == 130
    result: dict[str, Any] = json.loads(printed)
    assert result["status"] == "interrupted"
    assert result["energy"] == energy_in(couplings_of(glass), result["spins"])
    stored = query("SELECT * FROM runs ORDER BY energy LIMIT 1")[0]
    assert stored["energy"] == result["energy"]
    assert unpacked(stored["spins"]).tolist() == result["spins"]
    assert query("PRAGMA integrity_check")[0][0] == "ok"
    return result


# ---------------------------------------------------------------- asked to stop


@pytest.mark.parametrize("number", [signal.SIGINT, signal.SIGTERM])
def test_the_first_signal_brings_the_incumbent_back(
    running: Callable[..., Running], glass: Path, number: signal.Signals
) -> None:
    solve = running("--seconds", 600, "--cluster-size", 10, "--record", "all")
    solve.wait_until(lambda: closed_groups() >= 1)
    solve.process.send_signal(number)
    result = check_interrupted(glass, *solve.end())
    (run,) = query("SELECT * FROM runs")
    assert (run["status"], run["calls"]) == ("interrupted", result["calls"])
    assert len(query("SELECT * FROM calls")) == result["calls"], "the last group was closed as well"
    assert run["energy"] < query("SELECT energy FROM incumbents")[0]["energy"]
    assert "Traceback" not in solve.said


def test_one_signal_ends_all_the_seeds(running: Callable[..., Running], glass: Path) -> None:
    solve = running("--seconds", 600, "--seeds", "1..50")
    solve.wait_until(lambda: closed_groups() >= 1)
    solve.process.send_signal(signal.SIGINT)
    result = check_interrupted(glass, *solve.end())
    assert len(result["runs"]) == len(query("SELECT * FROM runs")) == 1


def test_the_first_waits_for_the_call_in_flight_and_the_second_does_not(
    running: Callable[..., Running], tmp_path: Path
) -> None:
    (tmp_path / "bench.py").write_text(STALLING)
    search_path = os.pathsep.join(filter(None, [os.environ.get("PYTHONPATH"), str(tmp_path)]))
    solve = running("--subsolver", "bench:Stalling", "--seconds", 600, PYTHONPATH=search_path)
    solve.wait_until(Path("hangs").exists)
    said = len(solve.said)
    solve.process.send_signal(signal.SIGINT)
    solve.wait_until(lambda: "Ctrl-C" in solve.said[said:])
    assert solve.process.poll() is None, "the call in flight is waited for"
    solve.process.send_signal(signal.SIGINT)
    code, printed = solve.end()  # an hour before the call would have ended
    assert (code, printed) == (130, "")
    assert "Traceback" not in solve.said
    assert query("PRAGMA integrity_check")[0][0] == "ok"


@pytest.mark.parametrize("signals", [1, 2])
def test_stopping_while_kernels_are_compiled(
    running: Callable[..., Running], glass: Path, tmp_path: Path, signals: int
) -> None:
    solve = running("--subsolver", "uniform", "--seconds", 600, NUMBA_CACHE_DIR=str(tmp_path / "kernels"))
    solve.wait_until(lambda: "compiling" in solve.said)
    solve.process.send_signal(signal.SIGINT)
    solve.wait_until(lambda: "Ctrl-C" in solve.said)
    assert "compiled" not in solve.said, "it was compiling when it was asked to stop"
    if signals == 1:
        result = check_interrupted(glass, *solve.end())
        assert result["calls"] == 0
    else:
        solve.process.send_signal(signal.SIGINT)
        assert solve.end() == (130, "")
        assert "compiled" not in solve.said, "nothing more was waited for"
    assert "Traceback" not in solve.said


def test_stopping_while_the_problem_is_read(running: Callable[..., Running]) -> None:
    os.mkfifo("slow.txt")
    solve = running("--start", "slow.txt", "--seconds", 600)
    writer = os.open("slow.txt", os.O_WRONLY)  # returns when the other side has begun to read
    try:
        solve.process.send_signal(signal.SIGINT)
        code, _ = solve.end()
    finally:
        os.close(writer)
    assert code == 130
    assert "Traceback" not in solve.said
    assert not Path("run.sqlite").exists()


class Interrupting(Uniform):
    """Presses Ctrl-C itself while it answers its tenth batch."""

    answered = 0

    def propose(self, batch: ClusterBatch) -> Proposals:
        type(self).answered += 1
        if self.answered == 10:
            os.kill(os.getpid(), signal.SIGINT)
        return super().propose(batch)


def test_python_gets_its_answer_and_its_signal_handlers_back(glass: Path) -> None:
    before = [signal.getsignal(number) for number in (signal.SIGINT, signal.SIGTERM)]
    threads = threading.active_count()
    Interrupting.answered = 0
    result = patchwalk.solve(glass, subsolver=Interrupting(), seconds=PATIENCE, run="run.sqlite")
    assert result.status == "interrupted"
    assert result.energy == energy_in(couplings_of(glass), result.spins)
    assert [signal.getsignal(number) for number in (signal.SIGINT, signal.SIGTERM)] == before
    assert threading.active_count() == threads


def test_python_solves_outside_the_main_thread(glass: Path) -> None:
    found: list[patchwalk.Solution] = []
    thread = threading.Thread(target=lambda: found.append(patchwalk.solve(glass, calls=20, run="run.sqlite")))
    thread.start()
    thread.join(PATIENCE)
    assert [result.status for result in found] == ["budget"]


# ---------------------------------------------------------------- killed


def killable(running: Callable[..., Running]) -> Running:
    """A run whose calls alone lead from all spins up to wherever it is."""
    Path("up.txt").write_text("1 " * SIDE**2)
    return running(
        "--start", "up.txt", "--sweeps", 0, "--record", "all", "--cluster-size", 10, "--seconds", 600,
        "--hot", 2, "--cold", 2, "--replicas", 1,
    )  # fmt: skip


@pytest.mark.parametrize("moment", range(4))
def test_killed_at_any_moment_the_file_holds_every_closed_group(
    running: Callable[..., Running], glass: Path, moment: int
) -> None:
    solve = killable(running)
    solve.wait_until(lambda: closed_groups() >= 1)
    time.sleep(random.Random(moment).uniform(0, 1.5))
    solve.process.kill()
    assert solve.end() == (-signal.SIGKILL, "")
    assert holds_every_closed_group(glass) >= 1
    assert [run["status"] for run in query("SELECT status FROM runs")] == ["running"]


@pytest.mark.parametrize("moment", range(4))
def test_killed_at_the_very_beginning_nothing_is_broken(
    running: Callable[..., Running], glass: Path, moment: int
) -> None:
    solve = killable(running)
    if moment:
        solve.wait_until(Path("run.sqlite").exists)
    time.sleep(random.Random(moment).uniform(0, 0.3))
    solve.process.kill()
    assert solve.end() == (-signal.SIGKILL, "")
    if not Path("run.sqlite").exists():
        assert moment == 0
        return
    assert query("PRAGMA integrity_check")[0][0] == "ok"
    if query("SELECT name FROM sqlite_master"):  # all the tables or none
        holds_every_closed_group(glass)


def test_a_full_disk_loses_neither_the_answer_nor_the_closed_groups(glass: Path) -> None:
    """As far as the run file can tell, files that may not grow are a full disk."""
    Path("up.txt").write_text("1 " * SIDE**2)
    done = subprocess.run(
        [
            "sh", "-c", 'ulimit -f 2000; exec "$@"', "sh", PROGRAM, "solve", glass, "--start", "up.txt",
            "--sweeps", "0", "--replicas", "1", "--record", "all", "--cluster-size", "10", "--calls", "200000",
            "--run", "run.sqlite", "--json",
        ],
        capture_output=True, text=True, timeout=PATIENCE, check=False,
    )  # fmt: skip
    assert "Traceback" not in done.stderr
    assert done.returncode == 1
    result = json.loads(done.stdout)
    assert result["status"] == "error"
    assert "run.sqlite" in result["message"]
    assert result["energy"] == energy_in(couplings_of(glass), result["spins"]) < result["start_energy"]
    assert result["calls"] < 200_000, "a search that cannot be recorded is not gone on with"
    holds_every_closed_group(glass)
