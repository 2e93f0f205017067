"""Whoever carries the work out, the bits are the same; order is kept, and what goes wrong is said."""

from __future__ import annotations

import os
import signal
import sqlite3
import threading
import time
from collections.abc import Iterator
from contextlib import closing
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from patchwalk import make, replay, scale, solve, workers
from patchwalk.engine import slice_bounds
from patchwalk.problem.ising import Problem
from patchwalk.search.carrying import Carrying
from patchwalk.search.replicas import Replicas
from patchwalk.settings_checks import SettingsError
from patchwalk.subsolvers.contract import ClusterBatch, Proposals, Subsolver, Work, all_well
from patchwalk.subsolvers.walk import Walk
from patchwalk.workers import DaskWorkers, Serial, Threads, Workers, WorkersError, workers_for

GLASS = make("lattice2d", 12, couplings="gaussian", seed=8)
COUNTED: dict[str, Any] = {"cluster_size": 8, "calls": 600, "clusters_per_round": 12, "record": "all"}
WAYS: dict[str, dict[str, Any]] = {
    "cooling": {"subsolver": "walk,shots=2", "rule": "ball=1,loose=1"},
    "ladder": {"tempering": "ladder", "replicas": 5, "sweeps": 1, "restart_after": 10},
}


@pytest.fixture(scope="module")
def cluster() -> Iterator[Any]:
    """A Dask cluster that was there before us: two processes of one thread."""
    distributed: Any = pytest.importorskip("distributed")
    with distributed.LocalCluster(
        n_workers=2, threads_per_worker=1, processes=True, dashboard_address="127.0.0.1:0", silence_logs=50
    ) as there:
        yield there


@pytest.fixture
def in_small_pieces(monkeypatch: pytest.MonkeyPatch) -> None:
    """However short a piece is, it is handed over."""
    monkeypatch.setattr(Threads, "smallest_task_seconds", 0.0)
    monkeypatch.setattr(DaskWorkers, "smallest_task_seconds", 0.0)


def bits(name: str, **way: Any) -> tuple[Any, ...]:
    """Everything about a run that must not depend on who did the work."""
    run = Path(f"{name}.sqlite")
    solution = solve(GLASS, **COUNTED, **way, run=run)
    assert solution.status == "budget", solution.message
    with closing(sqlite3.connect(run)) as database:
        rows = database.execute(
            "SELECT round, replica, place, seed, rule, proposal, change, accepted, energy_before FROM calls "
            "ORDER BY round, replica, place"
        ).fetchall()
        state = database.execute(
            "SELECT round, spins, local_fields, energies, elites, details FROM checkpoints WHERE details IS NOT NULL"
        ).fetchall()
    assert solution.alternatives is not None
    return solution.energy, solution.spins.tobytes(), solution.alternatives.tobytes(), solution.sweeps, rows, state


@pytest.mark.parametrize("way", WAYS)
def test_one_worker_threads_and_dask_give_the_same_bits(way: str, cluster: Any, in_small_pieces: None) -> None:
    settings = WAYS[way]
    alone = bits("serial", **settings, workers=1)
    assert bits("threads", **settings, workers=2) == alone
    assert bits("many", **settings, workers=5) == alone
    assert bits("dask", **settings, scheduler=cluster.scheduler_address) == alone


def test_a_local_cluster_is_started_where_none_is_named(in_small_pieces: None) -> None:
    settings = {**WAYS["cooling"], "subsolver": "metropolis"}
    assert bits("dask", **settings, workers=2, engine="dask") == bits("serial", **settings, workers=1)


REPLAYED = (
    "rival, round, replica, place, mean_drop, drop_error, hit_probability, amplitude_updates, spin_updates, weight"
)


def test_replays_have_the_same_bits_whoever_carries_them_out(cluster: Any, in_small_pieces: None) -> None:
    """Exact laws, a calibrated rival, and drops that are sampled from seeds."""
    run = solve(GLASS, **COUNTED | {"calls": 120}, subsolver="walk", run="run.sqlite").run_path
    found = {}
    ways: dict[str, dict[str, Any]] = {
        "serial": {"workers": 1}, "threads": {"workers": 3}, "dask": {"scheduler": cluster.scheduler_address},
    }  # fmt: skip
    for name, way in ways.items():
        copy = Path(f"{name}.sqlite")
        copy.write_bytes(run.read_bytes())
        replayed = replay(copy, ["walk,hopping=calibrated", "metropolis", "tabu", "none"], calls=60, **way)
        assert replayed.status == "finished"
        with closing(sqlite3.connect(copy)) as database:
            found[name] = database.execute(f"SELECT {REPLAYED} FROM replays ORDER BY 1, 2, 3, 4").fetchall()
    assert len(found["serial"]) >= 5 * 60
    assert found["threads"] == found["serial"]
    assert found["dask"] == found["serial"]


def test_success_against_size_has_the_same_bits_whoever_measures_it(cluster: Any, in_small_pieces: None) -> None:
    settings: dict[str, Any] = {"sizes": [4, 5], "subsolvers": ["walk", "metropolis"], "instances": 12, "fields": True}
    alone = scale("sk", **settings, workers=1, run="serial.sqlite")
    shared = scale("sk", **settings, scheduler=cluster.scheduler_address, run="dask.sqlite")
    for one, other in zip(alone.curves, shared.curves, strict=True):
        assert one.name == other.name
        assert {size: own.tobytes() for size, own in one.success.items()} == {
            size: own.tobytes() for size, own in other.success.items()
        }


def test_a_crew_that_cannot_be_is_refused_before_any_work() -> None:
    with pytest.raises(SettingsError, match=r"(?s)workers: is 0;.*engine: is 'cloud'; it is one of: threads, dask"):
        replay("nowhere.sqlite", workers=0, engine="cloud")  # type: ignore[arg-type]
    with pytest.raises(SettingsError, match="workers: is 'many'"):
        scale("sk", [3, 4], workers="many")  # type: ignore[arg-type]


def all_workers(cluster: Any) -> list[Workers]:
    return [Serial(), Threads(3), DaskWorkers(scheduler=cluster.scheduler_address)]


def test_results_come_in_order_and_errors_travel(cluster: Any) -> None:
    def halved_late(number: int) -> float:  # in here, so that it travels by value
        time.sleep(0.02 * (number < 2))  # early items take longest
        if number == 13:
            raise ZeroDivisionError("thirteen")
        return number / 2

    for some in all_workers(cluster):
        assert list(some.ordered(halved_late, range(12))) == [number / 2 for number in range(12)]
        results = some.ordered(halved_late, range(20))
        assert [next(results) for _ in range(13)] == [number / 2 for number in range(13)]
        with pytest.raises(ZeroDivisionError, match="thirteen"):
            next(results)
        assert list(some.ordered(halved_late, [])) == []
        some.close()


def test_closing_early_forgets_what_has_not_begun() -> None:
    """And waits for what has: it reads arrays that the caller is about to change."""
    begun, ended = [], []
    gate = threading.Event()

    def work(number: int) -> int:
        begun.append(number)
        if number:
            gate.wait(10.0)
            time.sleep(0.05)
        ended.append(number)
        return number

    some = Threads(2)
    results = some.ordered(work, range(100))
    assert next(results) == 0
    gate.set()
    results.close()  # type: ignore[attr-defined]
    assert len(begun) < 10
    assert sorted(ended) == sorted(begun), "nothing is still at work"
    time.sleep(0.1)
    assert len(begun) < 10, "nothing begins later"
    some.close()


def fatal() -> Subsolver:
    """A walk during which the first Dask worker to come far enough dies, once."""

    class Fatal(Walk):  # in here, so that it travels by value
        name = "fatal"

        def propose(self, batch: ClusterBatch) -> Proposals:
            mark = Path(os.environ["PATCHWALK_TEST_MARK"])
            if os.getpid() != int(os.environ["PATCHWALK_TEST_PARENT"]) and 300 < mark.stat().st_size < 10_000:
                mark.write_bytes(b"x" * 20_000)
                os.kill(os.getpid(), signal.SIGKILL)
            with mark.open("ab") as file:
                file.write(b"x" * len(batch))
            return super().propose(batch)

    return Fatal()


def test_a_dask_worker_that_is_killed_changes_nothing(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, in_small_pieces: None
) -> None:
    mark = tmp_path / "mark"
    mark.touch()
    monkeypatch.setenv("PATCHWALK_TEST_MARK", str(mark))
    monkeypatch.setenv("PATCHWALK_TEST_PARENT", str(os.getpid()))
    undisturbed = bits("serial", subsolver=fatal(), workers=1)
    mark.write_bytes(b"")
    assert bits("dask", subsolver=fatal(), workers=2, engine="dask") == undisturbed
    assert mark.stat().st_size > 20_000, "a worker was killed, and others went on"


def test_versions_that_differ_are_refused_unless_allowed(cluster: Any, monkeypatch: pytest.MonkeyPatch) -> None:
    home = os.getpid()

    def two_versions() -> dict[str, str]:
        return {"python": "3", "numpy": "2.0" if os.getpid() == home else "1.9"}

    monkeypatch.setattr(workers, "versions", two_versions)
    with pytest.raises(WorkersError, match=r"tcp://.* has numpy 1\.9, here it is 2\.0, .*--mixed-workers"):
        DaskWorkers(scheduler=cluster.scheduler_address)
    allowed = DaskWorkers(scheduler=cluster.scheduler_address, mixed=True)
    assert allowed.count == 2
    allowed.close()


def test_a_cluster_that_is_not_there_is_said(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(workers, "PATIENCE_SECONDS", 0.5)
    with pytest.raises(WorkersError, match=r"the Dask cluster at tcp://127\.0\.0\.1:9 could not be reached"):
        DaskWorkers(scheduler="tcp://127.0.0.1:9")


def test_settings_choose_the_workers() -> None:
    assert isinstance(workers_for(1, None, False, False), Serial)
    threads = workers_for(3, None, False, False)
    assert isinstance(threads, Threads)
    assert threads.count == 3
    threads.close()


def test_a_stranger_who_is_not_concurrent_is_asked_here(cluster: Any, in_small_pieces: None) -> None:
    here = Here()
    solution = solve(GLASS, subsolver=here, **COUNTED, scheduler=cluster.scheduler_address, run="here.sqlite")
    assert solution.failed_calls == 0
    assert here.places == {(os.getpid(), threading.main_thread().ident)}


class Here:
    """Leaves everything as it is, and remembers where it was asked."""

    name, max_spins, deterministic, balance = "here", 64, True, "symmetric"

    def __init__(self) -> None:
        self.places: set[tuple[int, int | None]] = set()
        self._inner = Walk()

    def prepare(self, sample: ClusterBatch) -> Here:
        return self

    def forecast(self, batch: ClusterBatch) -> Any:
        return self._inner.forecast(batch)

    def propose(self, batch: ClusterBatch) -> Proposals:
        self.places.add((os.getpid(), threading.get_ident()))
        return Proposals(np.array(batch.spins)[:, None, :], Work(), *all_well(len(batch)))


def test_replicas_are_dealt_out_in_whole_groups(in_small_pieces: None) -> None:
    """More replicas than are swept at once, so that threads really share them."""
    problem: Problem = GLASS
    settings: dict[str, Any] = {"tempering": "ladder", "replicas": 40, "calls": 120, "cluster_size": 6, "sweeps": 2}
    runs = [solve(problem, **settings, workers=count, run=f"{count}.sqlite") for count in (1, 2, 3)]
    assert len({run.spins.tobytes() for run in runs}) == 1
    assert len({run.energy for run in runs}) == 1


@pytest.mark.parametrize(("family", "parts"), [("sk", [(0, 8), (8, 16)]), ("lattice2d", [(0, 16)])])
def test_a_default_ladder_is_divided_where_that_gains_anything(family: str, parts: list[tuple[int, int]]) -> None:
    """Small dense problems are swept one replica after the other, all others sixteen at a time."""
    problem = make(family, 64 if family == "sk" else 8, seed=1)
    ends: list[bytes] = []
    for pool in (Serial(), Threads(2)):
        carrying, replicas = Carrying(problem, 5, pool), Replicas.random(problem, 16, 2)
        carrying.sweep(replicas, np.full(16, 0.5), 0, 0, 10)
        ends.append(replicas.spins.tobytes() + replicas.energies.tobytes() + replicas.local_fields.tobytes())
        assert carrying.parts(16) == (parts if pool.count == 2 else [(0, 16)])
        pool.close()
    assert ends[0] == ends[1]


def test_slices_for_several_workers_grow_shorter() -> None:
    """A quarter of the rows first for two workers, one row at last; never shorter than is worth handing over."""
    fields = np.zeros((64, 10))
    batch = ClusterBatch(fields, np.ones((64, 10), np.int8), fields[:, 0], np.arange(64).astype(np.uint64),
                         couplings=np.zeros((64, 10, 10)))  # fmt: skip
    asked, threads = Walk(), Threads(2)
    threads.smallest_task_seconds = 0.0
    assert slice_bounds(asked, batch) == [(0, 64)]
    bounds = slice_bounds(asked, batch, threads)
    assert (bounds[0], bounds[-1]) == ((0, 16), (63, 64))
    assert [stop for _, stop in bounds[:-1]] == [start for start, _ in bounds[1:]]
    lengths = [stop - start for start, stop in bounds]
    assert lengths == sorted(lengths, reverse=True)
    assert len(lengths) <= 16
    threads.smallest_task_seconds = 60.0
    assert slice_bounds(asked, batch, threads) == [(0, 64)]
    threads.close()
