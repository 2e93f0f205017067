"""A run gone through once more, for the whole configurations that stood before its calls.

The search itself runs again, from the run's own start and seed, with the proposals that the run file holds in the
place of the subsolver's answers: same sweeps, same trades of temperature, same restarts, to the same bits whatever the
couplings. It cannot begin at a later checkpoint, because only the newest one keeps all that decides. Calls without a
row, which are cheap, are asked again, which takes a deterministic subsolver. A state is shown only where energy and
cluster are those that the call's row tells of.
"""

from __future__ import annotations

import sqlite3
from collections.abc import Callable, Iterator
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
from pydantic import ValidationError

from patchwalk.commands.tasks import Task, policy_of
from patchwalk.cost import priced
from patchwalk.engine import Answered, answers, prepared
from patchwalk.evidence.cost_models import work_of
from patchwalk.evidence.layout import undamaged, unpacked_rows
from patchwalk.evidence.stored import StoredFile, StoredRun
from patchwalk.evidence.sweep_curves import CallName, StateBefore
from patchwalk.search.neighbourhood import NeighbourhoodSearch
from patchwalk.settings import SolveSettings
from patchwalk.settings_checks import SettingsError
from patchwalk.subsolvers.contract import F64, WORK_FIELDS, ClusterBatch, Proposals, Subsolver, Work
from patchwalk.workers import Serial, Workers

Row = sqlite3.Row


def retrace(
    stored: StoredFile,
    run: StoredRun,
    wanted: set[CallName],
    visit: Callable[[StateBefore], None],
    interrupted: Callable[[], bool],
) -> None:
    """Show ``visit`` the state before each of the calls wanted, in the order they were made.

    Raises :class:`SettingsError` for a run that cannot be gone through again, with the reason.
    """
    search = _Retraced(_task_of(stored, run), stored, run, wanted, visit, interrupted)
    for _ in search.rounds():
        pass


def _task_of(stored: StoredFile, run: StoredRun) -> Task:
    """What there was to do, as the run file tells."""
    place = f"{stored.path}: run {run.number}"
    if any(name in run.settings for name in ("burn_in", "command")):
        raise SettingsError([f"{place}: only runs of solve can be gone through again; leave the rival none out"])
    alone = {"workers": None, "scheduler": None, "engine": "threads", "run": stored.path, "bound": None}
    try:
        settings = SolveSettings.model_validate({**run.settings, **alone})
    except ValidationError as error:
        raise SettingsError([
            f"{place}: its settings are none of solve's ({error.error_count()} do not fit); leave the rival none out"
        ]) from error  # fmt: skip
    problem = stored.problem(run.problem)
    start = None
    if settings.start is not None:
        query = "SELECT spins FROM checkpoints WHERE run = ? AND round = 0"
        row = next(stored.rows(query, (run.number,)))
        with undamaged(stored.path, f"the start of run {run.number}"):
            start = unpacked_rows(row["spins"], len(problem))[-1]  # the coldest replica
    assert settings.cluster_size is not None
    return Task(
        problem=problem, source=run.source, settings=settings, policy=policy_of(settings, Path(), ""),
        cluster_size=settings.cluster_size, start=start, run_path=stored.path,
    )  # fmt: skip


class _Retraced(NeighbourhoodSearch):
    """A search that is answered from a run file."""

    def __init__(
        self, task: Task, stored: StoredFile, run: StoredRun, wanted: set[CallName],
        visit: Callable[[StateBefore], None], interrupted: Callable[[], bool],
    ) -> None:  # fmt: skip
        plan = task.plan_for(run.seed)
        plan = replace(plan, ends=replace(plan.ends, seconds=None, stall=None, energy=None), failures=1 << 62)
        self._left, self._last = set(wanted), max((name.round for name in wanted), default=-1)
        super().__init__(task.problem, plan, run.seed, task.start, lambda: interrupted() or self._through, Serial())
        self._stored, self._run, self._visit = stored, run, visit
        self._stages = _stages(stored, run)
        self.caller.ask = self._answers

    @property
    def stage(self) -> float:
        """As the run file tells, whatever the clock said then."""
        return self._stages.get(self.round, super().stage)

    @property
    def _through(self) -> bool:
        return not self._left or self.round > self._last

    def _answers(self, subsolver: Subsolver, batch: ClusterBatch, workers: Workers) -> Iterator[Answered]:
        """The stored answers; a slice ends before every call whose state is wanted, so that it is shown as it was."""
        rows = self._rows_of_this_round()
        own = [rows.get(int(seed)) for seed in batch.seeds]
        if any(row is None for row in own):
            given = self._asked_again(subsolver, batch, workers)
        else:
            given = iter([Answered(0, batch, _stored_answer([row for row in own if row is not None]), 0.0)])
        for answered in given:
            first = 0
            for place in range(len(answered.batch)):
                row = own[answered.start + place]
                if row is None or _name(row) not in self._left:
                    continue
                if place > first:
                    yield _part(answered, first, place)
                first = place
                self._show(row)
            yield _part(answered, first, len(answered.batch))

    def _asked_again(self, subsolver: Subsolver, batch: ClusterBatch, workers: Workers) -> Iterator[Answered]:
        if not subsolver.deterministic:
            raise SettingsError([
                f"run {self._run.number}: round {self.round} has calls without rows, and {subsolver.name} does not "
                "answer the same twice; leave the rival none out, or solve with --record all"
            ])  # fmt: skip
        return answers(prepared(subsolver, batch), batch, workers)

    def _rows_of_this_round(self) -> dict[int, Row]:
        """Rows by the seeds of their calls; read at once, since an open query would hold on to the file as it was."""
        query = "SELECT * FROM calls WHERE run = ? AND round = ?"
        return {int(row["seed"]): row for row in self._stored.rows(query, (self._run.number, self.round))}

    def _show(self, row: Row) -> None:
        """Show the state before a call, if it is the one that the run was in."""
        name = _name(row)
        self._left.discard(name)
        spins = self.replicas.spins[name.replica]
        members = np.frombuffer(row["members"], "<i4")
        energy = float(self.replicas.energies[name.replica])
        same = abs(energy - row["energy_before"]) <= self.problem.tie_tolerance
        if not same or spins[members].tobytes() != row["spins_before"]:
            return
        work = _work([row])
        self._visit(StateBefore(
            name, spins, self.replicas.local_fields[name.replica], row["temperature"], row["seed"],
            float(priced(work, 1)[0]),
        ))  # fmt: skip


def _stages(stored: StoredFile, run: StoredRun) -> dict[int, float]:
    """The stage of every round, from the groups and, for one cut short, from its rows."""
    stages: dict[int, float] = {}
    query = "SELECT DISTINCT round, stage FROM calls WHERE run = ?"
    stages.update((row["round"], row["stage"]) for row in stored.rows(query, (run.number,)))
    for row in stored.rows("SELECT first_round, stages FROM groups WHERE run = ?", (run.number,)):
        stages.update(enumerate(np.frombuffer(row["stages"], "<f8").tolist(), row["first_round"]))
    return stages


def _name(row: Row) -> CallName:
    return CallName(row["round"], row["replica"], row["place"])


def _stored_answer(rows: list[Row]) -> Proposals:
    """The shots taken, a single one for each call; what was refused then is refused again."""
    size = rows[0]["k"]
    outcomes = np.stack([np.frombuffer(row["proposal"], np.int8) for row in rows]).reshape(len(rows), 1, size)
    status = np.array([row["status"] for row in rows], np.uint8)
    return Proposals(outcomes.copy(), _work(rows), status, tuple(row["message"] or "" for row in rows))


def _work(rows: list[Row]) -> Work:
    return work_of({name: [row[name] for row in rows] for name in WORK_FIELDS})


def _part(answered: Answered, first: int, stop: int) -> Answered:
    """Rows ``first`` to ``stop`` of an answered slice."""
    proposals, own = answered.proposals, slice(first, stop)
    if first == 0 and stop == len(answered.batch):
        return answered
    work = {name: _cut(getattr(proposals.work, name), own) for name in WORK_FIELDS}
    part = Proposals(
        proposals.outcomes[own].copy(), Work(**work), proposals.status[own], proposals.messages[own],
        log_ratio=_cut(proposals.log_ratio, own),
    )  # fmt: skip
    return Answered(answered.start + first, answered.batch.rows(first, stop), part, 0.0)


def _cut(values: F64 | Any | None, own: slice) -> Any:
    return None if values is None else values[own]
