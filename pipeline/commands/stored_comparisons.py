"""Compared runs as their file holds them, worked out anew: a comparison for each budget."""

from __future__ import annotations

import contextlib
import math
import sqlite3
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from patchwalk.commands.comparing import Comparison, outcome_of
from patchwalk.evidence.compared_runs import FinishedRun, finished_identities, finished_runs
from patchwalk.evidence.comparing import Duel, Outcome, duels, performance_curves, standings
from patchwalk.evidence.layout import RunFileError
from patchwalk.evidence.stored import StoredFile, read_only
from patchwalk.problem.files import read_problem
from patchwalk.problem.ising import Problem, ProblemError


@dataclass(frozen=True, eq=False)
class StoredComparison:
    """A comparison with the runs behind it, what they were told, and the versions that made them."""

    comparison: Comparison
    runs: tuple[FinishedRun, ...]
    settings: Mapping[str, Any]
    versions: Mapping[str, str]


def stored_comparisons(file: StoredFile) -> list[StoredComparison]:
    """Every comparison in a file of compared runs, nothing run again."""
    try:
        with contextlib.closing(read_only(file.path)) as database:
            runs = finished_runs(database, dict.fromkeys(sorted(finished_identities(database))))
    except sqlite3.Error as error:
        raise RunFileError(f"{file.path}: could not be read: {error}") from error
    runs.sort(key=lambda run: (run.run.instance, run.run.seed, run.run.contender))
    budgets = dict.fromkeys((run.run.unit, run.run.budget) for run in runs)
    return [_comparison(file, [run for run in runs if (run.run.unit, run.run.budget) == one]) for one in budgets]


def _comparison(file: StoredFile, runs: list[FinishedRun]) -> StoredComparison:
    instances = list(dict.fromkeys(run.run.instance for run in runs))
    contenders = list(dict.fromkeys(run.run.contender for run in runs))
    problems = {run.run.instance: file.problem(run.problem) for run in runs}
    planted = {name: _planted(name, problem) for name, problem in problems.items()}
    references = {
        name: min(run.energy for run in runs if run.run.instance == name) if energy is None else energy
        for name, energy in planted.items()
    }
    outcomes = [outcome_of(run, problems[run.run.instance], references[run.run.instance]) for run in runs]
    found, notes = _duels(outcomes, contenders)
    if None in planted.values():
        notes.append("the reference is the best energy of all these runs, not a proved minimum")
    failed = sum(run.failed_calls for run in runs)
    if failed:
        notes.append(f"{failed:,} calls FAILED and changed nothing; their rows hold the reasons")
    comparison = Comparison(
        "", runs[0].run.unit, runs[0].run.budget, tuple(instances), references, tuple(outcomes),
        tuple(standings(outcomes, contenders)), tuple(found), tuple(performance_curves(outcomes, contenders)),
        tuple(notes), "finished", file.path,
    )  # fmt: skip
    query = "SELECT run FROM compared_runs WHERE identity = ?"
    number = next(file.rows(query, (runs[0].run.identity,)))["run"]
    first = next(run for run in file.runs() if run.number == number)
    return StoredComparison(comparison, tuple(runs), first.settings, first.versions)


def _planted(instance: str, problem: Problem) -> float | None:
    """The energy that was planted, where the instance's own file is there and the same."""
    if not Path(instance).is_file():
        return None
    try:
        found = read_problem(instance, kind=problem.kind)
    except (ProblemError, OSError):
        return None
    energy = found.details.get("planted_energy")
    return None if energy is None or found.fingerprint != problem.fingerprint else float(energy)


def _duels(outcomes: Sequence[Outcome], contenders: Sequence[str]) -> tuple[list[Duel], list[str]]:
    """All pairs, or none and a note where two contenders share no seed."""
    try:
        return duels(outcomes, contenders), []
    except ValueError as error:
        return [], [str(error)]


def mean_residuals(comparison: StoredComparison, shares: Sequence[float]) -> dict[str, list[float]]:
    """Mean residual energy per spin of every contender when so much of the budget was spent; nan before every run of
    it has an energy."""
    found: dict[str, list[float]] = {}
    references = comparison.comparison.references
    for contender in dict.fromkeys(run.run.contender for run in comparison.runs):
        own = [run for run in comparison.runs if run.run.contender == contender]
        rows = [[_residual_at(run, references[run.run.instance], share) for share in shares] for run in own]
        found[contender] = [math.fsum(column) / len(own) for column in zip(*rows, strict=True)]
    return found


def _residual_at(run: FinishedRun, reference: float, share: float) -> float:
    reached = [energy for energy, at in zip(run.improvements, run.shares, strict=True) if at <= share]
    return (min(reached) - reference) / run.spins if reached else math.nan
