"""Rivals run on the very clusters of a run, and what each call was worth, written beside the run's own rows.

For every call with a row, or a sample of them, the run's own subsolver and every rival are weighed by the same code
path (:mod:`patchwalk.evidence.drops`) under the call's own seed, so that a subsolver differs from itself by exactly
zero. Rows are written in transactions of about a second; those that are there already are left as they are, which is
how a replay that was stopped goes on. ``weight`` is how many calls with rows a replayed one stands for, recomputed from
what is there whenever rows are added.
"""

from __future__ import annotations

import sqlite3
import time
from collections.abc import Callable, Iterator, Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any, NamedTuple, get_args

import numpy as np

from patchwalk.acceptance import AcceptanceRule
from patchwalk.engine import failed, prepared, release, slice_bounds
from patchwalk.evidence.drops import REPETITIONS, Drops, drops_of
from patchwalk.evidence.layout import RunFileError
from patchwalk.evidence.recalled import RecalledCalls, recalled_calls
from patchwalk.evidence.runfile import RunFile
from patchwalk.evidence.selected_calls import Listed, listed_calls
from patchwalk.evidence.stored import StoredFile, StoredRun
from patchwalk.evidence.sweep_curves import CallName, StateBefore, SweepCurve, sweep_curve
from patchwalk.problem.ising import Problem
from patchwalk.subsolvers.contract import F64, WORK_FIELDS, ClusterBatch, Status, Subsolver, Work
from patchwalk.subsolvers.registry import NotReadyError, subsolver_from
from patchwalk.workers import Serial, Workers

NONE = "none"
"""The rival that calls nobody and sweeps instead."""

GROUP_SECONDS = 1.0
SAMPLE_CALLS = 16
REPLAY_COLUMNS = 15 + len(WORK_FIELDS)
INSERT_REPLAY = f"INSERT OR REPLACE INTO replays VALUES ({','.join('?' * REPLAY_COLUMNS)})"
INSERT_CURVE = "INSERT OR REPLACE INTO sweep_curves VALUES (?,?,?,?,?,?,?,?)"

Retrace = Callable[[set[CallName], Callable[[StateBefore], None], Callable[[], bool]], None]
"""Goes through a run again and shows the whole state before each of the calls wanted, until told to stop."""


@dataclass(frozen=True, eq=False)
class ReplayPlan:
    """``rivals`` by spelling, ``none`` among them or not; ``made`` holds those that are objects already.

    ``calls`` is the size of the sample, None for all calls with rows, drawn from ``seed``.
    """

    rivals: Sequence[str]
    made: Mapping[str, Subsolver] = field(default_factory=dict)
    calls: int | None = None
    seed: int = 1
    repetitions: int = REPETITIONS


class Watcher(NamedTuple):
    """Who is told how a replay goes: ``moved(rival, done, wanted)``; ``interrupted()`` asks it to stop."""

    moved: Callable[[str, int, int], None]
    interrupted: Callable[[], bool]


def replay_run(
    file: RunFile, stored: StoredFile, run: StoredRun, plan: ReplayPlan, workers: Workers, retrace: Retrace,
    watcher: Watcher,
) -> None:  # fmt: skip
    """Replay one run against every rival and itself; returns when all is written or an interrupt came.

    ``stored`` is the same file, open for reading. Raises ``SubsolverError`` for a subsolver that cannot be made and
    :class:`RunFileError` where the file cannot be written.
    """
    listed = listed_calls(stored, run, plan.calls, plan.seed)
    problem = stored.problem(run.problem)
    replay = _Replay(file, stored, run, plan, workers, watcher, problem, listed)
    replay.weigh_owners()
    for rival in plan.rivals:
        if rival != NONE and not watcher.interrupted():
            replay.weigh(rival, replay.missing(rival))
    if NONE in plan.rivals and not watcher.interrupted():
        replay.sweep(retrace)
    replay.reweigh()


class _Replay:
    """The replay of one run, rival after rival."""

    def __init__(
        self, file: RunFile, stored: StoredFile, run: StoredRun, plan: ReplayPlan, workers: Workers, watcher: Watcher,
        problem: Problem, listed: Listed,
    ) -> None:  # fmt: skip
        self.file, self.stored, self.run, self.plan = file, stored, run, plan
        self.workers, self.watcher, self.problem, self.listed = workers, watcher, problem, listed
        rule = run.settings.get("acceptance", "hastings" if "burn_in" in run.settings else "metropolis")
        self._samples: dict[int, ClusterBatch] = {}
        self.acceptance: AcceptanceRule = rule if rule in get_args(AcceptanceRule) else "metropolis"

    def missing(self, rival: str) -> set[CallName]:
        """The calls wanted that this rival has no row for yet."""
        query = "SELECT round, replica, place FROM replays WHERE run = ? AND rival = ?"
        return self.listed.selected - {CallName(*row) for row in self.stored.rows(query, (self.run.number, rival))}

    def weigh_owners(self) -> None:
        """Every call by the subsolver that was asked."""
        missing = {rival: self.missing(rival) for rival in set(self.listed.owners)}
        wanted = {name for name, own in zip(self.listed.names, self.listed.owners, strict=True) if name in missing[own]}
        self.weigh(None, wanted)

    def weigh(self, named: str | None, wanted: set[CallName]) -> None:
        """What a rival, or whoever was asked, is worth on the calls wanted, row by row into the file."""
        done, opened = 0, time.perf_counter()
        rows: list[tuple[Any, ...]] = []
        if not wanted:
            return
        for calls in recalled_calls(self.stored, self.run.number, self.problem, wanted):
            rival = calls.subsolver if named is None else named
            for start, drops in self._drops(rival, calls.batch):
                rows.extend(_rows(self.run.number, rival, calls, start, drops))
                done += len(drops)
                self.watcher.moved(rival, done, len(wanted))
                if time.perf_counter() - opened > GROUP_SECONDS:
                    self._write(INSERT_REPLAY, rows)
                    rows, opened = [], time.perf_counter()
                if self.watcher.interrupted():
                    break
            self._write(INSERT_REPLAY, rows)
            rows = []
            if self.watcher.interrupted():
                return

    def _drops(self, rival: str, batch: ClusterBatch) -> Iterator[tuple[int, Drops]]:
        """Slice by slice; a cluster that is too large for the rival is a failed row with its sentence."""
        subsolver = self.plan.made.get(rival) or subsolver_from(rival)
        sentence = _too_large(subsolver, batch)
        try:
            ready = subsolver if sentence else prepared(subsolver, self._sample(batch.size))
            bounds = [] if sentence else slice_bounds(ready, batch, self.workers)
        except NotReadyError:
            raise
        except Exception as error:  # a stranger's forecast
            sentence = f"{rival}: its forecast failed: {type(error).__name__}: {error}"
        if sentence:
            yield 0, drops_of(_Refusing(sentence), batch, self.acceptance)
            return
        try:
            workers = self.workers if getattr(ready, "concurrent", False) else Serial()
            tasks = [(ready, batch.rows(*own), self.acceptance, self.plan.repetitions) for own in bounds]
            for (start, _), drops in zip(bounds, workers.ordered(_measured, tasks), strict=False):
                yield start, drops
        finally:
            release(ready)

    def _sample(self, size: int) -> ClusterBatch:
        """The first calls of this size: what rivals get ready on, so that calibration depends on the run alone."""
        if size not in self._samples:
            query = (
                "SELECT round, replica, place FROM calls WHERE run = ? AND k = ? ORDER BY round, replica, place LIMIT ?"
            )
            first = {CallName(*row) for row in self.stored.rows(query, (self.run.number, size, SAMPLE_CALLS))}
            self._samples[size] = next(recalled_calls(self.stored, self.run.number, self.problem, first)).batch
        return self._samples[size]

    def sweep(self, retrace: Retrace) -> None:
        """The rival that calls nobody: curves of sweeps from the states that the run went through."""
        wanted = self.missing(NONE)
        replays: list[tuple[Any, ...]] = []
        curves: list[tuple[Any, ...]] = []
        opened, done = time.perf_counter(), 0

        def visit(state: StateBefore) -> None:
            nonlocal opened, done
            began = time.perf_counter()
            curve = sweep_curve(self.problem, state)
            seconds = (time.perf_counter() - began) / len(curve.drops)
            replays.append(_none_row(self.run.number, state, curve, seconds, self.problem.tie_tolerance))
            curves.extend(_curve_rows(self.run.number, state, curve, len(self.problem)))
            done += 1
            if time.perf_counter() - opened > GROUP_SECONDS:
                write()
                opened = time.perf_counter()
                self.watcher.moved(NONE, done, len(wanted))

        def write() -> None:
            self._write(INSERT_CURVE, curves)
            self._write(INSERT_REPLAY, replays)
            curves.clear()
            replays.clear()

        if wanted:
            retrace(wanted, visit, self.watcher.interrupted)
            write()
            self.watcher.moved(NONE, done, len(wanted))

    def reweigh(self) -> None:
        """Weights from what is there: calls of a stratum with rows over those of them that are replayed."""
        place = {name: index for index, name in enumerate(self.listed.names)}
        by_rival: dict[str, list[CallName]] = {}
        for row in self.stored.rows(
            "SELECT rival, round, replica, place FROM replays WHERE run = ?", (self.run.number,)
        ):
            by_rival.setdefault(row["rival"], []).append(CallName(*tuple(row)[1:]))
        totals, updates = np.bincount(self.listed.strata), []
        for rival, there in by_rival.items():
            known = [name for name in there if name in place]
            strata = self.listed.strata[[place[name] for name in known]]
            weights = totals[strata] / np.bincount(strata, minlength=len(totals))[strata]
            updates += [(w, self.run.number, rival, *name) for w, name in zip(weights.tolist(), known, strict=True)]
        self._write(
            "UPDATE replays SET weight = ? WHERE run = ? AND rival = ? AND round = ? AND replica = ? AND place = ?",
            updates,
        )

    def _write(self, statement: str, rows: Sequence[tuple[Any, ...]]) -> None:
        if not rows:
            return
        try:
            with self.file.database as database:
                database.execute("BEGIN")
                database.executemany(statement, rows)
        except sqlite3.Error as error:
            raise RunFileError(f"the run file {self.file.path} could not be written any further: {error}") from error


@dataclass(frozen=True)
class _Refusing:
    """Stands for a rival that cannot take these clusters."""

    sentence: str

    name = "refusing"
    max_spins = 0
    deterministic = True
    balance: Any = "none"

    def prepare(self, sample: ClusterBatch) -> _Refusing:  # noqa: ARG002
        return self

    def forecast(self, batch: ClusterBatch) -> Any:  # noqa: ARG002
        return None

    def propose(self, batch: ClusterBatch) -> Any:
        return failed(batch, self.sentence)


def _too_large(subsolver: Subsolver, batch: ClusterBatch) -> str:
    if batch.size <= subsolver.max_spins:
        return ""
    return f"{subsolver.name}: takes clusters of at most {subsolver.max_spins} spins, this one has {batch.size}"


def _measured(task: tuple[Subsolver, ClusterBatch, AcceptanceRule, int]) -> Drops:
    """One slice, wherever this is carried out."""
    return drops_of(*task)


def _rows(run: int, rival: str, calls: RecalledCalls, start: int, drops: Drops) -> Iterator[tuple[Any, ...]]:
    own = slice(start, start + len(drops))
    work = [_counted(drops.work, name, len(drops)) for name in WORK_FIELDS]
    columns: list[Sequence[Any]] = [
        [run] * len(drops), [rival] * len(drops), calls.rounds[own].tolist(), calls.replicas[own].tolist(),
        calls.places[own].tolist(), [1.0] * len(drops), drops.exact.astype(int).tolist(), drops.mean_drop.tolist(),
        drops.drop_error.tolist(), drops.mean_fall.tolist(), drops.improve_probability.tolist(),
        drops.hit_probability.tolist(), drops.seconds.tolist(), drops.status.tolist(), drops.messages, *work,
    ]  # fmt: skip
    return zip(*columns, strict=True)


def _counted(work: Work, name: str, rows: int) -> list[Any]:
    values = getattr(work, name)
    return [None] * rows if values is None else list(values.tolist())


def _none_row(run: int, state: StateBefore, curve: SweepCurve, seconds: float, tolerance: float) -> tuple[Any, ...]:
    drops, (mean, error) = curve.drops[:, 0], (values[0] for values in _means(curve))
    message = "" if curve.whole else (
        f"the call's cost is worth {state.cost:.3g} s of sweeps, swept for {curve.budgets[0]:.3g} s only"
    )  # fmt: skip
    work = {"spin_updates": int(curve.updates[0])}
    return (
        run, NONE, *state.call, 1.0, 0, float(mean), float(error), float(np.maximum(0.0, drops).mean()),
        float((drops > tolerance).mean()), None, seconds, int(Status.OK if curve.whole else Status.TRUNCATED), message,
        *(work.get(name) for name in WORK_FIELDS),
    )  # fmt: skip


def _curve_rows(run: int, state: StateBefore, curve: SweepCurve, spins: int) -> list[tuple[Any, ...]]:
    return [
        (run, *state.call, float(budget), float(updates) / spins, float(mean), float(error))
        for budget, updates, mean, error in zip(curve.budgets, curve.updates, *_means(curve), strict=True)
    ]


def _means(curve: SweepCurve) -> tuple[F64, F64]:
    """Mean drops and their standard errors, f64 (J,) each."""
    return curve.drops.mean(axis=0), curve.drops.std(axis=0, ddof=1) / np.sqrt(len(curve.drops))
