"""A program of the user's own: what it does right arrives, what it does wrong fails its calls and nothing else.

Real processes throughout: a small device that misbehaves on demand, and one in another language.
"""

from __future__ import annotations

import json
import os
import pickle
import re
import shlex
import shutil
import signal
import sqlite3
import subprocess
import sys
import tempfile
import time
import types
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any

import numpy as np
import pytest

import patchwalk
from patchwalk.subsolvers import ClusterBatch, Edges, Proposals, Status, make_subsolver
from patchwalk.subsolvers import external_process as process
from patchwalk.subsolvers.external import External
from patchwalk.subsolvers.registry import SubsolverError, spelled, subsolver_from

DEVICE = """
import json, os, signal, subprocess, sys, time

mode, hello, asked_before = sys.argv[1], json.loads(sys.argv[2]), 0


def send(text):
    sys.stdout.write(text)
    sys.stdout.flush()


def note(name, text):
    with open(name, "a") as file:
        file.write(text + "\\n")


note("pids", str(os.getpid()))
print("device started", file=sys.stderr, flush=True)
if mode == "stubborn":
    signal.signal(signal.SIGTERM, signal.SIG_IGN)
if mode == "parent":
    note("pids", str(subprocess.Popen(["sleep", "1000"]).pid))
if mode == "silent":
    time.sleep(1000)
if mode == "stillborn":
    sys.exit(7)
send("good morning\\n" if mode == "chatty" else json.dumps(hello) + "\\n")
for line in sys.stdin:
    note("requests", line.strip())
    asked, asked_before = json.loads(line), asked_before + 1
    spins = [[own] * asked["shots"] for own in asked["spins"]]
    good = {"answer": asked["request"], "spins": spins}
    if mode == "crash" or (mode == "second" and asked_before == 2):
        print("the magnet quenched", file=sys.stderr, flush=True)
        sys.exit(3)
    elif mode == "killed":
        os.kill(os.getpid(), signal.SIGKILL)
    elif mode == "hang":
        time.sleep(1000)
    elif mode == "dribble":
        while True:
            send(" ")
            time.sleep(0.02)
    elif mode == "garbage":
        send("energy -12.5 in 3 us\\n")
    elif mode == "binary":
        sys.stdout.buffer.write(b"\\xff\\xfe\\n")
        sys.stdout.flush()
    elif mode == "list":
        send("[1, -1]\\n")
    elif mode == "nested":
        send("[" * 100000 + "\\n")
    elif mode == "wrong":
        send(json.dumps({**good, "answer": asked["request"] + 1}) + "\\n")
    elif mode == "anonymous":
        send(json.dumps({"spins": spins}) + "\\n")
    elif mode == "half":
        send(json.dumps(good)[:20])
        sys.exit(0)
    elif mode == "empty":
        send("\\n")
    elif mode == "flood":
        for _ in range(1600):
            send(" " * 65536)
        note("flooded", "to the end")
        send("\\n")
    elif mode == "closed":
        os.close(1)
        time.sleep(1000)
    elif mode == "nan":
        send(json.dumps(good).replace("-1", "NaN").replace("1,", "NaN,") + "\\n")
    elif mode == "zero":
        spins[0][0][0] = 0
        send(json.dumps(good) + "\\n")
    elif mode == "two":
        spins[0][0][0] = 2
        send(json.dumps(good) + "\\n")
    elif mode == "true":
        spins[0][0][0] = True
        send(json.dumps(good) + "\\n")
    elif mode == "short":
        spins[0][0] = spins[0][0][1:]
        send(json.dumps(good) + "\\n")
    elif mode == "shots":
        spins[0].append(spins[0][0])
        send(json.dumps(good) + "\\n")
    elif mode == "rows":
        send(json.dumps({**good, "spins": spins + spins}) + "\\n")
    elif mode == "spinless":
        send(json.dumps({"answer": asked["request"]}) + "\\n")
    elif mode == "word":
        send(json.dumps({**good, "energy": [0.0] * len(spins)}) + "\\n")
    elif mode == "clock":
        send(json.dumps({**good, "read_s": [-1.0] * len(spins)}) + "\\n")
    elif mode == "sorry":
        send(json.dumps({**good, "failures": ["the chip is too warm"] + [None] * (len(spins) - 1)}) + "\\n")
    elif mode == "timed":
        times = [0.25] * len(spins)
        send(json.dumps({**good, "load_s": times, "read_s": times[:-1] + [None]}) + "\\n")
    else:
        time.sleep(0.2 if mode == "slow" else 0.0)
        send(json.dumps(good) + "\\n")
if mode == "stubborn":
    time.sleep(1000)
"""

HELLO = {"protocol": 1, "name": "test bench", "largest_cluster": 60, "largest_batch": 4, "deterministic": True}

Made = Callable[..., External]


@pytest.fixture
def made(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Iterator[Made]:
    """Makes an external subsolver whose device runs in this mode; whatever it started is gone afterwards."""
    monkeypatch.setattr(tempfile, "tempdir", str(tmp_path))
    monkeypatch.setenv("TMPDIR", str(tmp_path))
    script = tmp_path / "device.py"
    script.write_text(DEVICE)
    all_of_them: list[External] = []

    def make(mode: str, hello: dict[str, Any] | None = None, **parameters: Any) -> External:
        command = [sys.executable, "-S", str(script), mode, json.dumps({**HELLO, **(hello or {})})]
        device = make_subsolver("external", command=command, **{"timeout": 20.0, **parameters})
        assert isinstance(device, External)
        all_of_them.append(device)
        return device

    yield make
    for device in all_of_them:
        device.close()
    assert not still_running(tmp_path)


def still_running(folder: Path, seconds: float = 8.0) -> list[int]:
    """The noted processes that are still there after at most so many seconds."""
    file, deadline = folder / "pids", time.monotonic() + seconds
    pids = [int(word) for word in file.read_text().split()] if file.exists() else []
    while (alive := [pid for pid in pids if is_alive(pid)]) and time.monotonic() < deadline:
        time.sleep(0.02)
    return alive


def is_alive(pid: int) -> bool:
    """Whether the process runs; one that only waits to be collected by its parent does not."""
    try:
        state = Path(f"/proc/{pid}/stat").read_text().rpartition(")")[2].split()[0]
    except OSError:
        return False
    return state not in "ZX"


def glass(rows: int, size: int, seed: int = 5) -> ClusterBatch:
    rng = np.random.default_rng(seed)
    upper = np.triu(rng.normal(size=(rows, size, size)), 1)
    return ClusterBatch(
        fields=rng.normal(size=(rows, size)),
        spins=rng.choice(np.array([-1, 1], np.int8), size=(rows, size)),
        temperature=np.full(rows, 0.8),
        seeds=rng.integers(2**63, 2**64, rows, dtype=np.uint64),
        couplings=upper + upper.transpose(0, 2, 1),
    )


def requests(folder: Path) -> list[dict[str, Any]]:
    return [json.loads(line) for line in (folder / "requests").read_text().splitlines()]


def all_failed(answer: Proposals, batch: ClusterBatch) -> bool:
    return answer.status.tolist() == [Status.FAILED] * len(batch) and bool(
        np.all(answer.outcomes == batch.spins[:, None])
    )


# what arrives


def test_every_shot_of_every_cluster_arrives(made: Made, tmp_path: Path) -> None:
    batch = glass(10, 6)
    device = made("good", shots=3).prepare(batch)
    answer = device.propose(batch)
    assert answer.status.tolist() == [Status.OK] * 10
    assert answer.messages == ("",) * 10
    assert answer.outcomes.dtype == np.int8
    assert np.array_equal(answer.outcomes, np.repeat(batch.spins[:, None], 3, axis=1))
    assert answer.work.shots is not None
    assert answer.work.shots.tolist() == [3] * 10
    assert answer.work.load_s is None
    assert [len(request["spins"]) for request in requests(tmp_path)] == [4, 4, 2]


def test_the_question_is_the_cluster(made: Made, tmp_path: Path) -> None:
    batch = glass(3, 5)
    made("good", shots=2).propose(batch)
    (request,) = requests(tmp_path)
    assert batch.couplings is not None
    assert request["shots"] == 2
    assert request["fields"] == batch.fields.tolist()
    assert request["spins"] == batch.spins.tolist()
    assert request["temperature"] == batch.temperature.tolist()
    assert request["seeds"] == [str(seed) for seed in batch.seeds.tolist()]
    for row, couplings in enumerate(request["couplings"]):
        assert len(couplings) == 10
        assert all(weight == batch.couplings[row, i, j] and i < j for i, j, weight in couplings)


def test_large_clusters_travel_as_edges(made: Made, tmp_path: Path) -> None:
    size = 80
    pairs = np.stack([np.arange(size - 1), np.arange(1, size)], axis=1)
    edges = Edges(np.array([0, 3, size + 2]), np.concatenate([pairs[:3], pairs]), np.arange(size + 2.0))
    batch = ClusterBatch(np.zeros((2, size)), np.ones((2, size)), np.ones(2), np.arange(2), edges=edges)
    answer = made("good", {"largest_cluster": 100}).propose(batch)
    assert answer.status.tolist() == [Status.OK] * 2
    (request,) = requests(tmp_path)
    assert request["couplings"][0] == [[0, 1, 0.0], [1, 2, 1.0], [2, 3, 2.0]]
    assert len(request["couplings"][1]) == size - 1


def test_lines_longer_than_any_pipe_get_through(made: Made) -> None:
    batch = glass(40, 48)
    device = made("good", {"largest_batch": 40}, shots=60)
    answer = device.propose(batch)
    assert answer.status.tolist() == [Status.OK] * 40


def test_prepare_holds_the_hello_and_is_spelled_with_it(made: Made) -> None:
    hello = {"coupling_range": 2.0, "field_range": 5.0, "precision_bits": 6, "call_s": 0.5}
    device = made("good", hello)
    assert (device.deterministic, device.device) == (False, "")
    ready = device.prepare(glass(1, 4))
    assert (ready.device, ready.max_spins, ready.largest_batch, ready.deterministic) == ("test bench", 60, 4, True)
    assert (ready.coupling_range, ready.field_range, ready.precision_bits, ready.call_s) == (2.0, 5.0, 6, 0.5)
    assert subsolver_from(spelled(ready)) == ready
    twin = pickle.loads(pickle.dumps(ready))
    assert twin == ready
    batch = glass(2, 4)
    assert np.array_equal(twin.propose(batch).outcomes, ready.propose(batch).outcomes)
    twin.close()


def test_a_command_may_be_a_list_in_a_settings_file(tmp_path: Path) -> None:
    (tmp_path / "mine.toml").write_text('name = "external"\ncommand = ["python3", "my device.py"]\nshots = 2\n')
    device = subsolver_from("@mine.toml", tmp_path)
    assert device == make_subsolver("external", command="python3 'my device.py'", shots=2)
    assert subsolver_from(spelled(device)) == device


def test_a_devices_own_times_are_kept(made: Made) -> None:
    work = made("timed").propose(glass(3, 4)).work
    assert work.load_s is not None
    assert work.read_s is not None
    assert work.load_s.tolist() == [0.25] * 3
    assert work.read_s[:2].tolist() == [0.25] * 2
    assert np.isnan(work.read_s[2])
    assert work.evolve_s is None


# ranges and precision


def energies(fields: Any, couplings: Any, size: int) -> np.ndarray:
    """Energies of all configurations, plainly."""
    states = 1 - 2 * (np.arange(1 << size)[:, None] >> np.arange(size) & 1)
    result = states @ np.array(fields, float)
    for i, j, weight in couplings:
        result = result + weight * states[:, i] * states[:, j]
    return result


@pytest.mark.parametrize("bits", [4, 8, 16])
def test_rounding_is_bounded_by_what_the_call_says(made: Made, tmp_path: Path, bits: int) -> None:
    batch = glass(4, 7)
    device = made("good", {"coupling_range": 1.0, "field_range": 3.0, "precision_bits": bits})
    answer = device.propose(batch)
    assert answer.status.tolist() == [Status.TRUNCATED] * 4
    (request,) = requests(tmp_path)
    assert batch.couplings is not None
    steps = 2 ** (bits - 1) - 1
    for row in range(4):
        fields = np.array(request["fields"][row])
        weights = np.array([weight for _, _, weight in request["couplings"][row]])
        assert np.abs(weights).max() <= 1.0
        assert np.abs(fields).max() <= 3.0
        assert max(np.abs(weights).max(), np.abs(fields).max() / 3) == pytest.approx(1.0)
        assert np.allclose(weights * steps, np.rint(weights * steps))
        assert np.allclose(fields * steps / 3, np.rint(fields * steps / 3))
        triples = [(i, j, batch.couplings[row, i, j]) for i in range(7) for j in range(i + 1, 7)]
        unit = batch.temperature[row] / request["temperature"][row]
        true = energies(batch.fields[row], triples, 7)
        sent = energies(fields, request["couplings"][row], 7) * unit
        stated = float(answer.messages[row].split("off by up to ")[1].split(",")[0])
        assert f"rounded to {bits} bits" in answer.messages[row]
        assert np.abs(true - sent).max() <= stated * 1.01
        assert stated <= (7 * 3 + 21) * unit / (2 * steps) * 1.01


def test_what_fits_the_precision_loses_nothing(made: Made) -> None:
    couplings = np.ones((1, 3, 3)) - np.eye(3)
    batch = ClusterBatch(np.array([[1.0, 0.0, -1.0]]), np.ones((1, 3)), np.ones(1), np.ones(1), couplings=couplings)
    answer = made("good", {"coupling_range": 0.7, "precision_bits": 5}).propose(batch)
    assert answer.status.tolist() == [Status.OK]


def test_a_scaled_question_does_not_know_the_unit(made: Made, tmp_path: Path) -> None:
    batch, scale = glass(2, 5), 2.0**20
    assert batch.couplings is not None
    scaled = ClusterBatch(
        batch.fields * scale, batch.spins, batch.temperature * scale, batch.seeds, batch.couplings * scale
    )
    device = made("good", {"coupling_range": 1.0})
    device.propose(batch)
    device.propose(scaled)
    one, other = requests(tmp_path)
    assert {**one, "request": 0} == {**other, "request": 0}


# what goes wrong

BROKEN_ANSWERS = {
    "crash": r"test bench: ended, with exit code 3; its standard error, kept in .*\.log, ends: .*the magnet quenched",
    "killed": "ended, by signal 9",
    "garbage": "not JSON .*energy -12.5",
    "binary": "not JSON",
    "list": "no JSON object",
    "nested": "not JSON",
    "wrong": "answered 2, request 1 was asked",
    "anonymous": "answered None, request 1 was asked",
    "half": "ended in the middle of a line, with exit code 0",
    "empty": "an empty line where its answer was due",
    "flood": "a line longer than 1,0.* bytes",
    "nan": "NaN is no number",
    "rows": "its spins holds 4 entries where 2 clusters were asked about",
    "spinless": "holds no spins",
    "word": "'energy', which the protocol does not know",
    "clock": "read_s is -1.0",
}
BROKEN_ROWS = {
    "zero": "a shot holds the spin 0",
    "two": "a shot holds the spin 2",
    "true": "a shot holds the spin True",
    "short": "a shot holds 4 spins, the cluster has 5",
    "shots": "hold 2 shots of a cluster, 1 were asked for",
    "sorry": "it says: the chip is too warm",
}
BROKEN_HELLOS = {
    "silent": ({}, "no hello within 0.4 s"),
    "stillborn": ({}, "ended, with exit code 7"),
    "chatty": ({}, "not JSON .*good morning"),
    "good": ({"protocol": 2}, "speaks protocol 2, this is protocol 1"),
}
WRONG_CLAIMS: list[tuple[dict[str, Any], str]] = [
    ({"largest_cluster": 0}, "says largest_cluster '0'; it must be a whole number"),
    ({"largest_batch": True}, "largest_batch 'True'"),
    ({"largest_bach": 3}, "'largest_bach'; 'largest_batch' was meant"),
    ({"precision_bits": 8}, "together with coupling_range"),
    ({"precision_bits": 1, "coupling_range": 1}, "from 2 to 52"),
    ({"coupling_range": -1.0}, "a positive number"),
    ({"deterministic": 1}, "true or false"),
    ({"name": ""}, "1 to 80 printable letters"),
    ({"call_s": "fast"}, "call_s 'fast'"),
]


@pytest.mark.parametrize("mode", BROKEN_ANSWERS)
def test_an_answer_that_breaks_the_protocol_fails_its_calls(made: Made, tmp_path: Path, mode: str) -> None:
    batch = glass(2, 5)
    answer = made(mode).propose(batch)
    assert all_failed(answer, batch)
    assert re.search(BROKEN_ANSWERS[mode], answer.messages[0]), answer.messages[0]
    assert not (tmp_path / "flooded").exists()


@pytest.mark.parametrize("mode", ["hang", "dribble", "closed"])
def test_a_device_that_does_not_answer_is_timed_out(made: Made, mode: str) -> None:
    batch = glass(2, 5)
    answer = made(mode, timeout=0.4).propose(batch)
    assert all_failed(answer, batch)
    words = "closed its standard output and runs on" if mode == "closed" else "no answer within 0.4 s"
    assert words in answer.messages[0]


@pytest.mark.parametrize("mode", BROKEN_ROWS)
def test_a_wrong_cluster_fails_alone(made: Made, tmp_path: Path, mode: str) -> None:
    batch = glass(2, 5)
    device = made(mode)
    answer = device.propose(batch)
    assert answer.status.tolist() == [Status.FAILED, Status.OK]
    assert BROKEN_ROWS[mode] in answer.messages[0]
    assert np.array_equal(answer.outcomes, batch.spins[:, None])
    device.propose(batch)
    assert len((tmp_path / "pids").read_text().split()) == 1, "a device in step is not started again"


@pytest.mark.parametrize("mode", BROKEN_HELLOS)
def test_a_device_that_does_not_introduce_itself_fails_its_calls(made: Made, mode: str) -> None:
    batch, (hello, words) = glass(2, 5), BROKEN_HELLOS[mode]
    device = made(mode, hello, timeout=0.4 if mode == "silent" else 20.0, restarts=1)
    ready = device.prepare(batch)
    answer = ready.propose(batch)
    assert all_failed(answer, batch)
    assert re.search(words, answer.messages[0]), answer.messages[0]


@pytest.mark.parametrize(("hello", "words"), WRONG_CLAIMS)
def test_a_wrong_hello_is_named(made: Made, hello: dict[str, Any], words: str) -> None:
    batch = glass(1, 3)
    answer = made("good", hello).propose(batch)
    assert all_failed(answer, batch)
    assert words in answer.messages[0]


def test_a_crashed_device_is_started_again(made: Made, tmp_path: Path) -> None:
    batch = glass(1, 5)
    device = made("second", restarts=1)
    statuses = [int(device.propose(batch).status[0]) for _ in range(6)]
    assert statuses == [Status.OK, Status.FAILED] * 3
    assert len((tmp_path / "pids").read_text().split()) == 3


def test_restarts_in_a_row_are_bounded(made: Made, tmp_path: Path) -> None:
    batch = glass(1, 5)
    device = made("crash", restarts=2)
    messages = [device.propose(batch).messages[0] for _ in range(6)]
    assert len((tmp_path / "pids").read_text().split()) == 3
    assert "not started again after 3 failures in a row (restarts=2)" in messages[-1]
    assert "the magnet quenched" in messages[-1]


def test_a_device_that_changes_its_mind_is_not_believed(made: Made) -> None:
    batch = glass(1, 5)
    ready = made("good").prepare(batch)
    other = made("good", {"largest_cluster": 30})
    object.__setattr__(ready, "_process", other._process)
    answer = ready.propose(batch)
    assert all_failed(answer, batch)
    assert "other limits than when it was prepared" in answer.messages[0]


def test_an_interrupt_in_mid_call_leaves_no_stale_answer(made: Made, monkeypatch: pytest.MonkeyPatch) -> None:
    batch, device = glass(1, 5), made("good")
    device.propose(batch)
    read = process._Child._read

    def interrupted(*_: Any) -> None:
        raise KeyboardInterrupt

    monkeypatch.setattr(process._Child, "_read", interrupted)
    with pytest.raises(KeyboardInterrupt):
        device.propose(batch)
    monkeypatch.setattr(process._Child, "_read", read)
    assert device.propose(batch).status.tolist() == [Status.OK]


def test_mistakes_are_told_before_the_run(made: Made) -> None:
    with pytest.raises(SubsolverError, match="test bench stops at 60"):
        made("good").prepare(glass(1, 61))
    with pytest.raises(SubsolverError, match="cannot start no-such-program"):
        make_subsolver("external", command="no-such-program").prepare(glass(1, 3))
    with pytest.raises(SubsolverError, match="cannot write the log"):
        made("good", log="no/such/folder/log").prepare(glass(1, 3))
    for parameters, words in (
        ({"command": "python3 'x"}, "No closing quotation"),
        ({"command": ""}, "give a program"),
        ({"command": "x", "timeout": 0}, "timeout is 0"),
        ({"command": "x", "restarts": -1}, "restarts is -1"),
        ({}, "command"),
    ):
        with pytest.raises(SubsolverError, match=words):
            make_subsolver("external", **parameters)


def test_a_dask_worker_is_refused(made: Made, monkeypatch: pytest.MonkeyPatch) -> None:
    worker = types.SimpleNamespace(get_worker=lambda: object())
    monkeypatch.setitem(sys.modules, "distributed.worker", worker)
    batch = glass(1, 3)
    answer = made("good").propose(batch)
    assert all_failed(answer, batch)
    assert "Dask worker" in answer.messages[0]


# what is left behind


def test_the_log_is_kept_where_it_was_asked_for(made: Made, tmp_path: Path) -> None:
    device = made("good", log=str(tmp_path / "device.log"))
    device.propose(glass(1, 3))
    device.close()
    assert (tmp_path / "device.log").read_text() == "device started\n"


@pytest.mark.parametrize("mode", ["good", "parent", "stubborn"])
def test_closing_ends_the_device_and_whatever_it_started(
    made: Made, tmp_path: Path, mode: str, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(process, "GRACE_SECONDS", 0.2)
    device = made(mode)
    device.propose(glass(1, 3))
    device.close()
    assert not still_running(tmp_path, seconds=1.0)


def test_dropping_the_subsolver_ends_the_device(made: Made, tmp_path: Path) -> None:
    device = External(made("good").command)
    device.propose(glass(1, 3))
    del device
    assert not still_running(tmp_path)


def test_a_coordinator_that_is_killed_leaves_no_device(made: Made, tmp_path: Path) -> None:
    code = f"""
import os, signal, numpy as np
from patchwalk.subsolvers import ClusterBatch, make_subsolver
device = make_subsolver("external", command={made("stubborn").command!r})
device.propose(ClusterBatch(np.zeros((1, 2)), np.ones((1, 2)), np.zeros(1), np.zeros(1), np.zeros((1, 2, 2))))
os.kill(os.getpid(), signal.SIGKILL)
"""
    run = subprocess.run([sys.executable, "-c", code], check=False)
    assert run.returncode == -signal.SIGKILL
    assert len((tmp_path / "pids").read_text().split()) == 1
    assert not still_running(tmp_path)


# whole runs


@pytest.mark.parametrize("mode", ["crash", "garbage", "zero", "half", "second"])
def test_a_run_with_a_broken_device_ends_with_its_incumbent(made: Made, tmp_path: Path, mode: str) -> None:
    lattice = patchwalk.make("lattice2d", 6, seed=3)
    hello = {"largest_batch": 1}
    device = made(mode, hello, restarts=2)
    solution = patchwalk.solve(
        lattice, subsolver=device, calls=24, cluster_size=5, clusters_per_round=3, run=tmp_path / "run.sqlite"
    )
    failed = 12 if mode == "second" else 24
    assert (solution.status, solution.calls, solution.failed_calls) == ("budget", 24, failed)
    assert solution.energy == pytest.approx(lattice.energy(solution.spins))
    with sqlite3.connect(tmp_path / "run.sqlite") as database:
        rows = database.execute("SELECT message FROM calls WHERE status = 2").fetchall()
    database.close()
    assert len(rows) == failed
    assert all(message.startswith("external: test bench: ") for (message,) in rows)
    assert not still_running(tmp_path)


def test_a_device_that_only_hangs_is_given_up(made: Made, tmp_path: Path) -> None:
    device = made("hang", timeout=0.3, restarts=0)
    solution = patchwalk.solve(
        patchwalk.make("lattice2d", 6), subsolver=device, calls=1000, cluster_size=5, failures=10,
        run=tmp_path / "run.sqlite",
    )  # fmt: skip
    assert solution.status == "error"
    assert solution.failed_calls >= 10
    assert "calls failed in a row; the last said: external: test bench: not started again" in solution.message


def test_the_first_interrupt_lets_the_device_finish(made: Made, tmp_path: Path) -> None:
    patchwalk.write_problem(patchwalk.make("lattice2d", 6), tmp_path / "lattice.txt")
    device = made("slow", {"largest_batch": 1}, log=str(tmp_path / "log"))
    words = [
        str(Path(sys.executable).with_name("patchwalk")), "solve", "lattice.txt", "--subsolver", spelled(device),
        "--cluster-size", "4", "--seconds", "100", "--json", "--quiet",
    ]  # fmt: skip
    run = subprocess.Popen(words, cwd=tmp_path, stdout=subprocess.PIPE, start_new_session=True)
    deadline = time.monotonic() + 100
    while not (tmp_path / "requests").exists() or len(requests(tmp_path)) < 2:
        assert time.monotonic() < deadline
        time.sleep(0.05)
    os.killpg(run.pid, signal.SIGINT)  # as a terminal does: to everybody in the group
    printed = json.loads(run.communicate(timeout=100)[0])
    assert run.returncode == 130
    assert (printed["status"], printed["failed_calls"]) == ("interrupted", 0)
    assert printed["calls"] == len(requests(tmp_path)) < 10
    assert not still_running(tmp_path)


# another language

NODE_DEVICE = """
const lines = require("readline").createInterface({ input: process.stdin });
const say = (message) => console.log(JSON.stringify(message));
say({ protocol: 1, name: "node greedy", largest_cluster: 30, largest_batch: 8, deterministic: true });
lines.on("line", (line) => {
  const asked = JSON.parse(line);
  const spins = asked.spins.map((start, b) => {
    const s = [...start];
    for (let pass = 0, moved = true; moved && pass < 100; pass++) {
      moved = false;
      for (let i = 0; i < s.length; i++) {
        let local = asked.fields[b][i];
        for (const [p, q, J] of asked.couplings[b]) if (p === i) local += J * s[q]; else if (q === i) local += J * s[p];
        if (s[i] * local > 1e-12) { s[i] = -s[i]; moved = true; }
      }
    }
    return Array(asked.shots).fill(s);
  });
  say({ answer: asked.request, spins });
});
"""


def test_a_device_in_another_language(tmp_path: Path) -> None:
    node = shutil.which("node")
    if node is None:
        pytest.skip("node is not installed here")
    (tmp_path / "device.js").write_text(NODE_DEVICE)
    device = External(shlex.join([node, str(tmp_path / "device.js")]), shots=2)
    batch = glass(10, 8)
    ready = device.prepare(batch)
    assert (ready.device, ready.max_spins, ready.largest_batch) == ("node greedy", 30, 8)
    answer = ready.propose(batch)
    assert answer.status.tolist() == [Status.OK] * 10
    assert batch.couplings is not None
    local = batch.fields + np.einsum("bij,bj->bi", batch.couplings, answer.outcomes[:, 0])
    assert np.all(answer.outcomes[:, 0] * local <= 1e-9), "no single flip lowers a greedy answer"
    device.close()
