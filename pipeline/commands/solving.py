"""``solve``: from a file or a problem to the best configuration the budget allows, every call recorded."""

from __future__ import annotations

import contextlib
import time
from collections.abc import Callable, Iterable, Iterator
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any, Protocol

from patchwalk.commands.answers import answered
from patchwalk.commands.crew import Crew
from patchwalk.commands.interrupts import listening
from patchwalk.commands.tasks import Task, task_from
from patchwalk.evidence.certificates import store_certificate
from patchwalk.evidence.kept_answers import KeptAnswers
from patchwalk.evidence.layout import RunFileError, packed
from patchwalk.evidence.runfile import RunFacts, RunFile
from patchwalk.evidence.stored import StoredRun
from patchwalk.problem.decoding import Answer, write_answer
from patchwalk.problem.ising import Problem
from patchwalk.records import Round
from patchwalk.search.neighbourhood import NeighbourhoodSearch
from patchwalk.settings import SearchSettings
from patchwalk.subsolvers.contract import I8
from patchwalk.subsolvers.registry import spelled
from patchwalk.workers import Workers, WorkersError


@dataclass(frozen=True, eq=False)
class Solution:
    """What a run ended with.

    Always there: ``spins`` i8 (n,), ``energy`` (re-evaluated from the problem), ``objective`` in the user's terms
    under ``objective_name``, ``feasible``, ``answer``, ``decoded`` (the same, as it is written to files), ``status``
    (``target_reached``, ``budget``, ``stalled``, ``interrupted`` or ``error``), ``message``, ``seconds`` without and
    ``compile_seconds`` for compiling, ``calls``, ``failed_calls``, ``skipped`` (clusters for which nobody was called),
    ``sweeps``, ``seed``, ``run_path``, ``alternatives`` i8 (E, n), the best distinct configurations. None unless a
    bound was computed: ``lower_bound`` and ``gap``; where they meet, ``status`` is ``proved_optimal`` and ``message``
    names the certificate. ``spoken`` is the answer in words, for problems that were encoded; their ``spins`` are mended
    where a cheap repair makes them feasible. ``runs`` holds every run where several seeds were asked for, this one
    being the best.
    """

    spins: I8
    energy: float
    objective: float
    objective_name: str
    feasible: bool
    answer: dict[str, Any]
    decoded: Answer
    status: str
    message: str
    seconds: float
    compile_seconds: float
    calls: int
    failed_calls: int
    skipped: int
    sweeps: int
    seed: int
    run_path: Path
    start_energy: float | None = None
    notes: tuple[str, ...] = ()
    alternatives: I8 | None = None
    lower_bound: float | None = None
    gap: float | None = None
    bound_seconds: float = 0.0
    spoken: tuple[str, ...] = ()
    runs: tuple[Solution, ...] = ()

    def as_json(self) -> dict[str, Any]:
        """Plain values for ``--json``; the objective stands under its own name as well."""
        fields = {
            name: getattr(self, name)
            for name in (
                "energy", "lower_bound", "gap", "bound_seconds", "feasible", "status", "message", "seconds",
                "compile_seconds", "calls", "failed_calls", "skipped", "sweeps", "seed", "start_energy", "answer",
                "notes",
            )
        }  # fmt: skip
        fields = {"spins": self.spins.tolist(), **fields, "run_path": str(self.run_path)}
        fields[self.objective_name] = self.objective
        if self.alternatives is not None:
            fields["alternatives"] = self.alternatives.tolist()
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

    def bounding(self, seconds: float) -> None: ...

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

    def bounding(self, seconds: float) -> None:
        pass

    def ended(self, search: NeighbourhoodSearch) -> None:
        pass


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


def carry_out(task: Task, watcher: Watcher) -> Solution:
    """Every run of the task, into one run file: the best solution, with all in ``runs`` if there are several."""
    watcher.understood([task.problem.summary(), *task.problem.notes])
    runfile = RunFile(task.run_path)
    try:
        with listening(watcher.stopping) as interrupted, hired(task.settings) as workers:
            runs = runs_of(task, task.settings.every_seed, runfile, watcher, interrupted, workers)
            return delivered(task, best_of(task, runs))
    finally:
        runfile.close()  # also takes the file away again where no run came to be written


def hired(settings: SearchSettings) -> contextlib.AbstractContextManager[Workers]:
    """The workers that the settings ask for, let go at the end."""
    return Crew(settings.workers, settings.engine, settings.scheduler, settings.mixed_workers).hired()


def runs_of(
    task: Task,
    seeds: Iterable[int],
    runfile: RunFile,
    watcher: Watcher,
    interrupted: Callable[[], bool],
    workers: Workers,
) -> Iterator[Solution]:
    """One run after the other, until all are done or an interrupt comes."""
    for seed in seeds:
        search = NeighbourhoodSearch(task.problem, task.plan_for(seed), seed, task.start, interrupted, workers)
        yield carry_out_one(task, search, runfile, watcher)
        if interrupted():
            return


def best_of(task: Task, solutions: Iterable[Solution]) -> Solution:
    """The best of several runs, with all of them in ``runs``; a single run is itself."""
    runs = list(solutions)
    best = min(runs, key=lambda run: (not run.feasible, run.energy))
    if len(task.settings.every_seed) == 1:
        return best
    if runs[-1].status == "interrupted":
        best = replace(best, status="interrupted", message=f"interrupted in run {len(runs)}; best of the runs so far")
    return replace(best, runs=tuple(runs))


def delivered(task: Task, solution: Solution) -> Solution:
    """The solution, after its answer was written to the file asked for."""
    if task.settings.answer is not None:
        write_answer(task.settings.answer, task.problem, solution.decoded)
    return solution


def carry_out_one(
    task: Task, search: NeighbourhoodSearch, runfile: RunFile, watcher: Watcher, run: StoredRun | None = None
) -> Solution:
    """One run from one seed, or the rest of a stored one: searched, recorded, answered."""
    watcher.compiling()
    began = time.perf_counter()
    search.prepare()
    compile_seconds = time.perf_counter() - began
    watcher.compiled(compile_seconds)
    start_energy = None if task.start is None else task.problem.energy(task.start)
    if run is None:
        writer = runfile.begin(facts_of(task, search), search.snapshot())
    else:
        writer = runfile.take_up(run.number, task.problem, run.rows, search.snapshot())
    kept = KeptAnswers(runfile, writer.run)
    search.caller.ask = kept.answers
    watcher.began(task.problem, search.seed, start_energy)
    try:
        for round_ in search.rounds():
            writer.add(round_)
            if round_.whole and writer.due:
                writer.close_group(search.snapshot())
            watcher.moved(search, round_)
    except (RunFileError, WorkersError) as error:  # the answer so far is worth more than what can no longer be had
        search.status, search.message = "error", str(error)
    seconds = search.elapsed
    writer.add_improvements(search.take_improvements())
    solution = _solution(task, search, start_energy, seconds, compile_seconds)
    if task.settings.bound is not None and search.status not in ("error", "interrupted"):
        watcher.bounding(task.settings.bound)
        solution = bounded(solution, task, runfile, writer.run, search.interrupted)
    with contextlib.suppress(*(() if search.status != "error" else (RunFileError,))):
        writer.finish(
            search.snapshot(), status=solution.status, message=solution.message, energy=solution.energy,
            objective=solution.objective, calls=solution.calls, failed_calls=solution.failed_calls,
            skipped=solution.skipped, lower_bound=solution.lower_bound, sweeps=solution.sweeps, seconds=seconds,
            compile_seconds=compile_seconds, spins=packed(solution.spins),
        )  # fmt: skip
    watcher.ended(search)
    return solution


def bounded(solution: Solution, task: Task, runfile: RunFile, run: int, interrupted: Callable[[], bool]) -> Solution:
    """The solution with a lower bound, whose certificate is kept in the run file; a better configuration is taken."""
    from patchwalk.commands.bounding import bounds_for

    found = bounds_for(task.problem, task.settings.bound, start=solution.spins, interrupted=interrupted)
    proof = found.certificate
    store_certificate(runfile.database, run, proof.fingerprint, proof.method, proof.bound, proof.arrays)
    proved = found.status == "proved_optimal"
    better = found.energy < solution.energy - task.problem.tie_tolerance
    if better:
        solution = replace(solution, **answered(task.problem, found.spins))
    return replace(
        solution,
        lower_bound=found.lower_bound,
        gap=max(0.0, solution.energy - found.lower_bound) / max(1.0, abs(solution.energy)),
        status="proved_optimal" if proved else solution.status,
        message=f"proved optimal by {found.proof}" if proved else solution.message,
        bound_seconds=found.seconds,
    )


def facts_of(task: Task, search: NeighbourhoodSearch) -> RunFacts:
    """What the run file is told of a run at its beginning; subsolvers as they are after getting ready."""
    cases = [
        {"subsolver": "nothing" if case.subsolver is None else spelled(case.subsolver)}
        | ({} if case.when is None else {"when": case.when.text})
        for case in search.caller.policy.cases
    ]
    alone = task.settings.callers is None
    settings = {
        **task.settings.model_dump(), "subsolver": cases[0]["subsolver"] if alone else None,
        "callers": None if alone else cases, "cluster_size": task.cluster_size, "seeds": task.settings.every_seed,
        "seed": None, "tempering": task.tempering, "replicas": task.replicas,
        "sweeps": task.sweeps,
    }  # fmt: skip
    callers = "; ".join(" when ".join(case.values()) for case in cases)
    return RunFacts(
        problem=task.problem, source=task.source, seed=search.seed, subsolver=callers, settings=settings,
        settings_file=task.settings_file, settings_table=task.settings_table, rows=task.settings.record,
    )  # fmt: skip


def _solution(
    task: Task, search: NeighbourhoodSearch, start_energy: float | None, seconds: float, compile_seconds: float
) -> Solution:
    return Solution(
        **answered(task.problem, search.best_spins), status=search.status, message=search.message, seconds=seconds,
        compile_seconds=compile_seconds, calls=search.calls, failed_calls=search.failures.total,
        skipped=search.skipped, sweeps=search.sweeps, seed=search.seed, run_path=task.run_path,
        start_energy=start_energy, notes=task.problem.notes, alternatives=search.elites.spins,
    )  # fmt: skip
