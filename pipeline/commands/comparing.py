"""``compare``: whole runs of several contenders at equal budget, paired by instance and seed, in one run file.

Runs are carried out by the workers, each serial inside, and taken over into the run file as they finish; what is
there already is not run again. An interrupted run is dropped, and begun anew next time.
"""

from __future__ import annotations

import math
import tempfile
from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any, NamedTuple, Protocol

from patchwalk.commands.comparing_tasks import Entry, Question, contender_name, entries_of, question_from
from patchwalk.commands.interrupts import listening
from patchwalk.commands.solving import Silent, carry_out_one, hired
from patchwalk.evidence.compared_runs import (
    FinishedRun,
    comparison_file,
    finished_identities,
    finished_runs,
    take_over,
)
from patchwalk.evidence.comparing import Duel, Outcome, PerformanceCurve, Standing, duels, performance_curves, standings
from patchwalk.evidence.runfile import RunFile
from patchwalk.problem.ising import Problem
from patchwalk.search.neighbourhood import NeighbourhoodSearch
from patchwalk.settings import SearchSettings
from patchwalk.settings_checks import SettingsError
from patchwalk.subsolvers.registry import NotReadyError

UNFINISHED = ("interrupted", "error")


class Carried(NamedTuple):
    """A run that was carried out: the bytes of its run file, or the sentence with which it ended early."""

    bytes_of_file: bytes | None
    message: str


@dataclass(frozen=True, eq=False)
class Comparison:
    """What whole runs at equal budget showed.

    ``references`` are the energies that residuals are measured from, by instance; ``outcomes`` every run.
    ``sentences`` say, pair by pair, whether the difference can be told from none; ``notes`` what to bear in mind.
    """

    question: str
    unit: str
    budget: float
    instances: tuple[str, ...]
    references: dict[str, float]
    outcomes: tuple[Outcome, ...]
    standings: tuple[Standing, ...]
    duels: tuple[Duel, ...]
    curves: tuple[PerformanceCurve, ...]
    notes: tuple[str, ...]
    status: str
    run_path: Path

    @property
    def sentences(self) -> tuple[str, ...]:
        """One for each pair of contenders."""
        return tuple(duel.verdict for duel in self.duels)

    def as_json(self) -> dict[str, Any]:
        """Plain values for ``--json``."""
        return {
            "question": self.question, "unit": self.unit, "budget": self.budget, "instances": self.instances,
            "references": self.references, "standings": [one.as_json() for one in self.standings],
            "duels": [duel.as_json() for duel in self.duels], "curves": [vars(curve) for curve in self.curves],
            "outcomes": [
                vars(one) | {"reached": one.reached if math.isfinite(one.reached) else None} for one in self.outcomes
            ],
            "sentences": self.sentences, "notes": self.notes, "status": self.status, "run_path": str(self.run_path),
        }  # fmt: skip


class CompareWatcher(Protocol):
    """Somebody who is told how a comparison is going."""

    def begun(self, there: int, runs: int) -> None: ...

    def finished(self, entry: Entry, number: int) -> None: ...

    def stopping(self) -> None: ...


class SilentCompareWatcher:
    """Watches and says nothing."""

    def begun(self, there: int, runs: int) -> None:
        pass

    def finished(self, entry: Entry, number: int) -> None:
        pass

    def stopping(self) -> None:
        pass


def compare(
    inputs: Problem | str | Path | Sequence[Problem | str | Path],
    subsolvers: Sequence[Any] = (),
    *,
    target: float | None = None,
    run: str | Path = "patchwalk-comparison.sqlite",
    **settings: Any,
) -> Comparison:
    """Whole runs of every subsolver on every input from every seed, at a budget of calls, model seconds or seconds.

    ``subsolvers`` are spelled as for ``solve``; ``none`` sweeps and calls nobody. An input may be a TOML with
    ``[[contenders]]``, tables that may differ in any setting. ``target`` (an objective, one input) is what residual
    energies and times to target are measured from; else it is the planted energy, else the best of all these runs.
    Other keywords are those of ``solve``. Raises what ``solve`` raises before any run begins.

    >>> import os, tempfile
    >>> ring = Problem.from_arrays([0, 1, 2, 3, 4], [1, 2, 3, 4, 0], [1.0] * 5)
    >>> with tempfile.TemporaryDirectory() as folder:
    ...     found = compare(ring, ["uniform", "enumeration"], calls=30, cluster_size=3, seeds=[1, 2],
    ...                     run=os.path.join(folder, "ring.sqlite"))
    >>> found.references
    {'problem 1': -3.0}
    """
    many = [inputs] if isinstance(inputs, Problem | str | Path) else list(inputs)
    question = question_from(many, subsolvers, settings)
    return carry_out(question, Path(run), target, SilentCompareWatcher())


def carry_out(
    question: Question, run_path: Path, target: float | None, watcher: CompareWatcher, spelled_as: str = "{}"
) -> Comparison:
    """:func:`compare`, watched."""
    entries = entries_of(question, spelled_as)
    if target is not None and len(question.inputs) > 1:
        raise SettingsError(["target belongs to one input; leave it out, and the best of all runs takes its place"])
    wanted = {entry.compared.identity: entry for entry in entries}
    failures: list[str] = []
    with comparison_file(run_path) as database, listening(watcher.stopping) as interrupted:
        there = finished_identities(database)
        left = [entry for identity, entry in wanted.items() if identity not in there]
        watcher.begun(len(wanted) - len(left), len(wanted))
        with hired(_shared(entries)) as workers:
            stop = interrupted if workers.same_memory else None
            results = workers.ordered(carried_out, [(entry, stop) for entry in left])
            for number, (entry, carried) in enumerate(zip(left, results, strict=True)):
                if carried.bytes_of_file is not None:
                    take_over(database, entry.compared, carried.bytes_of_file)
                    watcher.finished(entry, len(wanted) - len(left) + number + 1)
                elif not interrupted():
                    failures.append(f"{entry.compared.contender}, seed {entry.compared.seed}: {carried.message}")
                if interrupted():
                    break
        runs = finished_runs(database, wanted)
        status = "interrupted" if interrupted() else "finished"
    return _concluded(question, entries, runs, run_path, target, status, failures)


def _shared(entries: Sequence[Entry]) -> SearchSettings:
    """Who carries the runs out: one at a time where the clock is the budget or somebody cannot be shared."""
    settings = entries[0].task.settings
    alone = entries[0].compared.unit == "seconds" and settings.workers is None
    cases = [case.subsolver for entry in entries for case in entry.task.policy.cases if case.subsolver is not None]
    if alone or not all(getattr(subsolver, "concurrent", False) for subsolver in cases):
        return settings.model_copy(update={"workers": 1, "engine": "threads", "scheduler": None})
    return settings


def carried_out(work: tuple[Entry, Callable[[], bool] | None]) -> Carried:
    """One run, serial inside, into a file of its own."""
    entry, interrupted = work
    with tempfile.TemporaryDirectory() as folder:
        task = replace(entry.task, run_path=Path(folder) / "run.sqlite")
        runfile = RunFile(task.run_path)
        try:
            seed = entry.compared.seed
            search = NeighbourhoodSearch(task.problem, task.plan_for(seed), seed, None, interrupted or _never)
            solution = carry_out_one(task, search, runfile, Silent())
        finally:
            runfile.close()
        if solution.status in UNFINISHED:
            return Carried(None, solution.message)
        return Carried(task.run_path.read_bytes(), solution.message)


def _never() -> bool:
    return False


def _concluded(
    question: Question, entries: Sequence[Entry], runs: Sequence[FinishedRun], run_path: Path, target: float | None,
    status: str, failures: list[str],
) -> Comparison:  # fmt: skip
    problems = {entry.compared.instance: entry.task.problem for entry in entries}
    references = {name: _reference(problem, name, runs, target) for name, problem in problems.items()}
    outcomes = [outcome_of(run, problems[run.run.instance], references[run.run.instance]) for run in runs]
    contenders = [contender_name(one) for one in question.contenders]
    idle = next((name for name in contenders if all(one.contender != name for one in outcomes)), None)
    if idle is not None and status != "interrupted":
        raise NotReadyError(f"no run of {idle} came to its end; {failures[0] if failures else 'nothing was run'}")
    met = [name for name in contenders if any(one.contender == name for one in outcomes)]
    notes = [*failures, *_notes(entries[0], runs, target, problems)]
    return Comparison(
        question.text, entries[0].compared.unit, entries[0].compared.budget, tuple(problems), references,
        tuple(outcomes), tuple(standings(outcomes, met)), tuple(duels(outcomes, met)),
        tuple(performance_curves(outcomes, met)) if met else (), tuple(notes), status, run_path,
    )  # fmt: skip


def _reference(problem: Problem, name: str, runs: Sequence[FinishedRun], target: float | None) -> float:
    """The energy that is to be reached: the target, else the planted one, else the best of these runs."""
    if target is not None:
        return problem.energy_of(target)
    planted = problem.details.get("planted_energy")
    if planted is not None:
        return float(planted)
    return min((run.energy for run in runs if run.run.instance == name), default=math.inf)


def outcome_of(run: FinishedRun, problem: Problem, reference: float) -> Outcome:
    """Measured from the reference; a run that lost it again in mending its answer counts by what it ended with."""
    ceiling = reference + problem.tie_tolerance
    scale = 1.0 if run.run.unit == "seconds" else run.run.budget
    reached = [scale * share for energy, share in zip(run.improvements, run.shares, strict=True) if energy <= ceiling]
    ended = run.energy <= ceiling
    first = min(reached, default=run.run.budget if ended else math.inf)
    return Outcome(
        run.run.instance, run.run.contender, run.run.seed, (run.energy - reference) / run.spins, first, run.run.budget
    )


def _notes(first: Entry, runs: Sequence[FinishedRun], target: float | None, problems: dict[str, Problem]) -> list[str]:
    notes = []
    if target is None and any(problem.details.get("planted_energy") is None for problem in problems.values()):
        notes.append("the reference is the best energy of all these runs, not a proved minimum")
    if first.compared.unit == "model seconds":
        notes.append("model seconds are forecast work at fixed prices, turned into a number of calls before the run")
    if first.compared.unit == "seconds":
        notes.append("a budget in seconds depends on this machine and on what else it is doing")
    failed = sum(run.failed_calls for run in runs)
    if failed:
        notes.append(f"{failed:,} calls FAILED and changed nothing; their rows hold the reasons")
    return notes
