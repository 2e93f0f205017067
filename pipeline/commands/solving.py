"""``solve``: from a file or a problem to the best configuration the budget allows, every call recorded."""

from __future__ import annotations

import os
import re
import time
from collections.abc import Callable
from dataclasses import dataclass, replace
from datetime import datetime
from pathlib import Path
from typing import Any, Protocol

import numpy as np

from patchwalk.clusters.rules import cluster_rule
from patchwalk.commands.answers import answer_for
from patchwalk.commands.interrupts import listening
from patchwalk.engine import forecast_of
from patchwalk.evidence.runfile import RunFile
from patchwalk.problem.files import read_problem, read_start
from patchwalk.problem.ising import Problem
from patchwalk.records import Round
from patchwalk.search.neighbourhood import Ends, NeighbourhoodSearch, Plan
from patchwalk.search.temperature import GeometricCooling
from patchwalk.settings import SettingsError, SolveSettings, checked_settings, read_settings
from patchwalk.subsolvers.contract import I8, ClusterBatch, Subsolver
from patchwalk.subsolvers.registry import SubsolverError, spelled, subsolver_from


class MemoryForecastError(MemoryError):
    """A call would need more memory than the machine has; the message names the largest cluster that fits."""


@dataclass(frozen=True, eq=False)
class Solution:
    """What a run ended with.

    Always there: ``spins`` i8 (n,), ``energy`` (re-evaluated from the problem), ``objective`` in the user's terms
    under ``objective_name``, ``feasible``, ``answer``, ``status`` (``target_reached``, ``budget``, ``interrupted`` or
    ``error``), ``message``, ``seconds`` without and ``compile_seconds`` for compiling, ``calls``, ``failed_calls``,
    ``sweeps``, ``seed``, ``run_path``. None unless a bound was computed: ``lower_bound``, ``gap``. ``runs`` holds
    every run where several seeds were asked for, this one being the best.
    """

    spins: I8
    energy: float
    objective: float
    objective_name: str
    feasible: bool
    answer: dict[str, Any]
    status: str
    message: str
    seconds: float
    compile_seconds: float
    calls: int
    failed_calls: int
    sweeps: int
    seed: int
    run_path: Path
    start_energy: float | None = None
    lower_bound: float | None = None
    gap: float | None = None
    runs: tuple[Solution, ...] = ()

    def as_json(self) -> dict[str, Any]:
        """Plain values for ``--json``; the objective stands under its own name as well."""
        fields = {
            name: getattr(self, name)
            for name in (
                "energy", "lower_bound", "gap", "feasible", "status", "message", "seconds", "compile_seconds", "calls",
                "failed_calls", "sweeps", "seed", "start_energy", "answer",
            )
        }  # fmt: skip
        fields = {"spins": self.spins.tolist(), **fields, "run_path": str(self.run_path)}
        fields[self.objective_name] = self.objective
        if self.runs:
            fields["runs"] = [run.as_json() for run in self.runs]
        return fields


class Watcher(Protocol):
    """Somebody who is told how a solve is going."""

    def understood(self, lines: list[str]) -> None: ...

    def compiling(self) -> None: ...

    def compiled(self, seconds: float) -> None: ...

    def began(self, problem: Problem, seed: int, start_energy: float | None) -> None: ...

    def moved(self, search: NeighbourhoodSearch, round_: Round) -> None: ...

    def stopping(self) -> None: ...

    def ended(self, search: NeighbourhoodSearch) -> None: ...


class Silent:
    """Watches and says nothing."""

    def understood(self, lines: list[str]) -> None:
        pass

    def compiling(self) -> None:
        pass

    def compiled(self, seconds: float) -> None:
        pass

    def began(self, problem: Problem, seed: int, start_energy: float | None) -> None:
        pass

    def moved(self, search: NeighbourhoodSearch, round_: Round) -> None:
        pass

    def stopping(self) -> None:
        pass

    def ended(self, search: NeighbourhoodSearch) -> None:
        pass


@dataclass(frozen=True, eq=False)
class Task:
    """A problem and everything needed to work on it, checked and ready."""

    problem: Problem
    source: str
    settings: SolveSettings
    subsolver: Subsolver
    start: I8 | None
    run_path: Path

    @property
    def plan(self) -> Plan:
        """The settings as the search understands them."""
        settings, problem = self.settings, self.problem
        target = None if settings.target is None else problem.energy_of(settings.target)
        return Plan(
            rule=cluster_rule(settings.rule),
            cluster_size=settings.cluster_size,
            clusters_per_round=settings.clusters_per_round,
            sweeps_per_round=settings.sweeps,
            cooling=GeometricCooling(settings.hot, settings.cold, problem.field_scale),
            ends=Ends(settings.calls, settings.total_sweeps, settings.time_limit, target),
            failures=settings.failures,
        )


def solve(problem: Problem | str | Path, **settings: Any) -> Solution:
    """The best configuration found for a problem, a problem file or a settings TOML; keywords are the settings' names.

    Raises ``SettingsError``, ``ProblemError``, ``SubsolverError``, ``RunFileError`` or ``MemoryForecastError`` before
    any work is done. Ctrl-C ends the run and returns the best configuration so far.

    >>> import os, tempfile
    >>> ring = Problem.from_arrays([0, 1, 2, 3, 4], [1, 2, 3, 4, 0], [1.0] * 5, kind="maxcut")
    >>> with tempfile.TemporaryDirectory() as folder:
    ...     result = solve(ring, calls=20, cluster_size=3, run=os.path.join(folder, "ring.sqlite"))
    >>> result.answer["cut"]
    4.0
    """
    return carry_out(task_from(problem, settings), Silent())


def task_from(source: Problem | str | Path, given: dict[str, Any], spelled_as: str = "{}") -> Task:
    """Settings, problem, subsolver and start, read and checked; nothing is written yet."""
    table: dict[str, Any] = {}
    place, folder, input_path = "", Path(), source
    if not isinstance(source, Problem) and str(source).endswith(".toml"):
        place, folder = str(source), Path(source).parent
        input_path, table = read_settings(Path(source))
    settings = checked_settings(table, given, place, spelled_as)
    own_folder = folder if "subsolver" in table and "subsolver" not in given else Path()
    subsolver = subsolver_from(settings.subsolver, own_folder)
    problem, name = _problem_from(input_path, settings.kind)
    _check_sizes(settings.cluster_size, problem, subsolver)
    start = None if settings.start is None else read_start(settings.start, problem)
    run_path = settings.run if settings.run is not None else _default_run_path(name)
    return Task(problem, name, settings, subsolver, start, run_path)


def carry_out(task: Task, watcher: Watcher) -> Solution:
    """Every run of the task, into one run file; the best solution, with all of them in ``runs`` where there are
    several.
    """
    watcher.understood([task.problem.summary(), *task.problem.notes])
    runfile = RunFile(task.run_path)
    try:
        with listening(watcher.stopping) as interrupted:
            runs: list[Solution] = []
            for seed in task.settings.every_seed:
                runs.append(_one_run(task, seed, runfile, watcher, interrupted))
                if interrupted():
                    break
    finally:
        runfile.close()  # also takes the file away again where no run came to be written
    best = min(runs, key=lambda run: (not run.feasible, run.energy))
    if len(task.settings.every_seed) == 1:
        return best
    if runs[-1].status == "interrupted":
        best = replace(best, status="interrupted", message=f"interrupted in run {len(runs)}; best of the runs so far")
    return replace(best, runs=tuple(runs))


def _one_run(task: Task, seed: int, runfile: RunFile, watcher: Watcher, interrupted: Callable[[], bool]) -> Solution:
    settings = task.settings
    search = NeighbourhoodSearch(task.problem, task.subsolver, task.plan, seed, task.start, interrupted)
    _check_memory(search)
    watcher.compiling()
    began = time.perf_counter()
    search.prepare()
    compile_seconds = time.perf_counter() - began
    watcher.compiled(compile_seconds)
    start_energy = None if task.start is None else search.energy
    spelling = spelled(search.subsolver)
    written = {**settings.model_dump(exclude={"subsolver"}), "subsolver": spelling}
    writer = runfile.begin(
        task.problem, search.subsolver, spelling, settings.rule, seed, written, task.source, settings.record
    )
    watcher.began(task.problem, seed, start_energy)
    for round_ in search.rounds():
        writer.add(round_)
        if writer.due:
            writer.close_group(search.snapshot())
        watcher.moved(search, round_)
    seconds = search.elapsed
    writer.add_improvements(search.take_improvements())
    solution = _solution(task, search, start_energy, seconds, compile_seconds)
    writer.finish(
        search.snapshot(), status=solution.status, message=solution.message, energy=solution.energy,
        objective=solution.objective, calls=solution.calls, failed_calls=solution.failed_calls,
        sweeps=solution.sweeps, seconds=seconds, compile_seconds=compile_seconds,
    )  # fmt: skip
    watcher.ended(search)
    return solution


def _solution(
    task: Task, search: NeighbourhoodSearch, start_energy: float | None, seconds: float, compile_seconds: float
) -> Solution:
    problem, spins = task.problem, search.best_spins
    energy = problem.energy(spins)
    feasible, answer = answer_for(problem, spins)
    return Solution(
        spins=spins, energy=energy, objective=problem.objective(energy), objective_name=problem.objective_name,
        feasible=feasible, answer=answer, status=search.status, message=search.message, seconds=seconds,
        compile_seconds=compile_seconds, calls=search.calls, failed_calls=search.failed_calls, sweeps=search.sweeps,
        seed=search.seed, run_path=task.run_path, start_energy=start_energy,
    )  # fmt: skip


def _problem_from(source: Problem | str | Path, kind: str | None) -> tuple[Problem, str]:
    if not isinstance(source, Problem):
        return read_problem(source, kind=kind), str(source)
    if kind is not None and kind != source.kind:
        raise SettingsError([f"kind is {kind!r}, but the problem given is of kind {source.kind!r}; leave kind out"])
    return source, "problem"


def _check_sizes(size: int, problem: Problem, subsolver: Subsolver) -> None:
    if size > len(problem):
        raise SettingsError(
            [f"cluster_size is {size}, the problem has {len(problem)} spins; a cluster can hold no more than those"]
        )
    if size > subsolver.max_spins:
        raise SubsolverError(
            f"{subsolver.name}: takes clusters of at most {subsolver.max_spins} spins, cluster_size is {size}; "
            "give a smaller --cluster-size or another --subsolver"
        )


def _check_memory(search: NeighbourhoodSearch) -> None:
    """Refuse, before anything is allocated, a cluster size whose forecast goes beyond the machine's memory."""
    memory = os.sysconf("SC_PHYS_PAGES") * os.sysconf("SC_PAGE_SIZE")
    size = search.plan.cluster_size
    needed = _bytes_needed(search.subsolver, size)
    if needed <= memory:
        return
    fitting = next((k for k in range(size, 0, -1) if _bytes_needed(search.subsolver, k) <= memory), 1)
    raise MemoryForecastError(
        f"{search.subsolver.name}: a cluster of {size} spins needs {needed / 1e9:.1f} GB, this machine has "
        f"{memory / 1e9:.1f} GB; the largest cluster that fits has {fitting} spins (--cluster-size {fitting})"
    )


def _bytes_needed(subsolver: Subsolver, size: int) -> int:
    forecast = forecast_of(subsolver, _blank_batch(size))
    return 0 if forecast is None else forecast.bytes


def _blank_batch(size: int) -> ClusterBatch:
    from patchwalk.subsolvers.contract import DENSE_LIMIT, Edges

    dense = size <= DENSE_LIMIT
    nothing = Edges(np.zeros(2, np.int64), np.empty((0, 2), np.int32), np.empty(0))
    return ClusterBatch(
        fields=np.zeros((1, size)), spins=np.ones((1, size), np.int8), temperature=np.zeros(1),
        seeds=np.zeros(1, np.uint64), couplings=np.zeros((1, size, size)) if dense else None,
        edges=None if dense else nothing,
    )  # fmt: skip


def _default_run_path(name: str) -> Path:
    stem = re.sub(r"[^A-Za-z0-9_-]+", "-", Path(name).name.split(".")[0]).strip("-") or "problem"
    base = f"patchwalk-{stem}-{datetime.now():%Y%m%d-%H%M%S}"
    path, number = Path(f"{base}.sqlite"), 2
    while path.exists():
        path, number = Path(f"{base}-{number}.sqlite"), number + 1
    return path
