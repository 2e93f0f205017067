"""``resume``: a run goes on from its last checkpoint, to the bits it would have had without the break."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any

import numpy as np

from patchwalk.commands.answers import answered, settled
from patchwalk.commands.interrupts import listening
from patchwalk.commands.resuming_sampling import carry_on_sampling, holds_sampling
from patchwalk.commands.sampling import Sampled, SilentSampleWatcher
from patchwalk.commands.solving import Silent, Solution, Watcher, best_of, carry_out_one, delivered, hired, runs_of
from patchwalk.commands.stored_tasks import bits_may_differ, changes_allowed, check_settings_file, problem_of
from patchwalk.commands.tasks import Task, policy_of
from patchwalk.evidence.layout import RunFileError, undamaged, unpacked, unpacked_rows
from patchwalk.evidence.runfile import RunFile
from patchwalk.evidence.stored import StoredFile, StoredRun, stored_file
from patchwalk.problem.ising import Problem
from patchwalk.search.neighbourhood import NeighbourhoodSearch
from patchwalk.settings import SolveSettings
from patchwalk.subsolvers.contract import I8
from patchwalk.workers import Workers

UNFINISHED = ("running", "interrupted", "error")


def resume(run: str | Path, problem: Problem | None = None, **given: Any) -> Solution | Sampled:
    """Go on with the runs of a run file of ``solve`` or ``sample``; what has ended already is given back as it is.

    ``problem`` is needed only where the run began from a :class:`Problem` whose names matter for the answer; ``given``
    may hold ``workers``, ``engine``, ``scheduler`` and ``mixed_workers``. Raises ``RunFileError`` for a file that is
    none, ``SettingsError`` or ``ProblemError`` naming what has changed since.
    """
    if holds_sampling(Path(run)):
        return carry_on_sampling(Path(run), given, SilentSampleWatcher(), problem)
    return carry_on(Path(run), given, Silent(), problem)


def carry_on(path: Path, given: dict[str, Any], watcher: Watcher, problem: Problem | None = None) -> Solution:
    """:func:`resume` for runs of ``solve``, watched."""
    with stored_file(path) as stored:
        runs = stored.runs()
        if not runs:
            raise RunFileError(f"{path}: holds no run")
        task = _task_of(path, stored, runs[0], problem, given)
        ended = {run.seed: _solution_of(stored, run, task) for run in runs if run.status not in UNFINISHED}
        begun = {run.seed: (run, stored.last_checkpoint(run.number, task.problem)) for run in runs}
    watcher.understood([task.problem.summary(), *bits_may_differ(runs[-1])])
    seeds = task.settings.every_seed
    if all(seed in ended for seed in seeds):
        return delivered(task, best_of(task, [ended[seed] for seed in seeds]))
    runfile = RunFile(path, reopen=True)

    def solutions(interrupted: Callable[[], bool], workers: Workers) -> Iterator[Solution]:
        for seed in seeds:
            if seed in ended:
                yield ended[seed]
            elif seed in begun:
                run, state = begun[seed]
                search = NeighbourhoodSearch(task.problem, task.plan_for(seed), seed, None, interrupted, workers)
                search.go_on_from(state)
                yield carry_out_one(task, search, runfile, watcher, run)
            else:
                yield from runs_of(task, [seed], runfile, watcher, interrupted, workers)
            if interrupted():
                return

    try:
        with listening(watcher.stopping) as interrupted, hired(task.settings) as workers:
            return delivered(task, best_of(task, solutions(interrupted, workers)))
    finally:
        runfile.close()


def _task_of(
    path: Path, stored: StoredFile, run: StoredRun, given_problem: Problem | None, given: dict[str, Any]
) -> Task:
    """The task as it was when the run began; refuses where settings or problem have changed since."""
    _refuse_other_commands(path, stored, run)
    check_settings_file(run)
    settings = SolveSettings.model_validate({**run.settings, **changes_allowed(given), "run": path})
    kept = stored.problem(run.problem)
    problem = problem_of(run, kept, settings, given_problem)
    assert settings.cluster_size is not None
    return Task(
        problem=problem,
        source=run.source,
        settings=settings,
        policy=policy_of(settings, Path(), ""),
        cluster_size=settings.cluster_size,
        start=_start_of(stored, run, settings, kept),
        run_path=path,
        settings_file=run.settings_file,
        settings_table=run.settings_table,
    )


def _refuse_other_commands(path: Path, stored: StoredFile, run: StoredRun) -> None:
    """Runs of other commands say how they go on."""
    tables = {row["name"] for row in stored.rows("SELECT name FROM sqlite_master WHERE type = 'table'")}
    if "compared_runs" in tables:
        raise RunFileError(f"{path}: holds compared runs; the same patchwalk compare command goes on with them")
    if run.settings.get("command") == "bound":
        raise RunFileError(f"{path}: holds a bound; patchwalk bound INPUT --earlier {path} goes on with it")


def _start_of(stored: StoredFile, run: StoredRun, settings: SolveSettings, problem: Problem) -> I8 | None:
    """The start configuration, as the first run's first checkpoint holds it."""
    if settings.start is None:
        return None
    query = "SELECT spins FROM checkpoints WHERE run = ? AND round = 0"
    row = next(stored.rows(query, (run.number,)))
    with undamaged(stored.path, f"the start of run {run.number}"):
        return unpacked_rows(row["spins"], len(problem))[-1]  # the coldest replica


def _solution_of(stored: StoredFile, run: StoredRun, task: Task) -> Solution:
    """The solution of a run that has ended."""
    row = next(stored.rows("SELECT * FROM runs WHERE run = ?", (run.number,)))
    with undamaged(stored.path, f"the answer of run {run.number}"):
        spins = unpacked(row["spins"], len(task.problem))
    return Solution(
        **answered(task.problem, _found_by(stored, run, task.problem, spins)),
        status=row["status"], message=row["message"], seconds=row["seconds"], compile_seconds=row["compile_seconds"],
        calls=row["calls"], failed_calls=row["failed_calls"], skipped=row["skipped"], sweeps=row["sweeps"],
        seed=run.seed, run_path=task.run_path, notes=task.problem.notes, lower_bound=row["lower_bound"],
    )  # fmt: skip


def _found_by(stored: StoredFile, run: StoredRun, problem: Problem, spins: I8) -> I8:
    """What the search found before it was mended to ``spins``, so that the repair can be told once more."""
    query = "SELECT best_spins FROM checkpoints WHERE run = ? ORDER BY round DESC LIMIT 1"
    row = next(stored.rows(query, (run.number,)))
    with undamaged(stored.path, f"the last state of run {run.number}"):
        found = unpacked(row["best_spins"], len(problem))
    return found if np.array_equal(settled(problem, found), spins) else spins
