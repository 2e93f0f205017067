"""What ``report`` has to show: run files read and worked out, problem by problem; nothing is drawn here.

Runs of one problem make one chapter, whichever files hold them; compared runs make one for each budget, scaling
measurements one for each file.
"""

from __future__ import annotations

import contextlib
import itertools
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np

from patchwalk.commands.profiling import profile
from patchwalk.commands.scaling import Scaled
from patchwalk.commands.stored_comparisons import StoredComparison, stored_comparisons
from patchwalk.commands.stored_scaling import stored_scaling
from patchwalk.commands.told_runs import StageCount, ToldRun, has_table, stage_counts, told_run
from patchwalk.evidence.layout import RunFileError, as_f64, undamaged
from patchwalk.evidence.profiling import Profile
from patchwalk.evidence.stored import StoredFile, StoredRun, stored_file
from patchwalk.problem.decoding import answer_lines, encoding_of, verdict
from patchwalk.problem.files import read_problem
from patchwalk.problem.ising import Problem, ProblemError
from patchwalk.problem.kinds.plain import PlainSpins
from patchwalk.problem.meanings import Answer, Encoding
from patchwalk.settings import ProblemSettings
from patchwalk.statistics import Estimate, mean_of

SPOKEN_SPINS = 20_000
"""Problems of more spins have their answer in the run file alone."""

SPOKEN_LINES, BARE_LINES = 40, 6
"""Lines of an answer in words, and of one that is nothing but spins."""


@dataclass(frozen=True, eq=False)
class CallsWorth:
    """What the calls of some files were worth: a profile, or a sentence that says why there is none and what to do."""

    profile: Profile | None
    missing: str
    files: tuple[str, ...]


@dataclass(frozen=True, eq=False)
class RunsChapter:
    """All runs of one problem.

    ``best`` is the run with the answer, its lines in ``spoken`` (``left_out`` more are not there); ``checked`` tells
    whether the answer could be held against the original problem; ``averages`` are energies by temperature of sampling
    runs; ``notes`` what is to be said of how the problem was read.
    """

    problem: Problem
    source: str
    runs: tuple[ToldRun, ...]
    best: ToldRun
    answer: Answer
    checked: bool
    spoken: tuple[str, ...]
    left_out: int
    stages: tuple[StageCount, ...]
    averages: tuple[tuple[float, Estimate], ...]
    worth: CallsWorth
    notes: tuple[str, ...]

    @property
    def files(self) -> tuple[str, ...]:
        """The run files it rests on."""
        return tuple(dict.fromkeys(run.file for run in self.runs))

    @property
    def lower_bound(self) -> float | None:
        """The best bound that any of these runs proved."""
        return max((run.lower_bound for run in self.runs if run.lower_bound is not None), default=None)


@dataclass(frozen=True, eq=False)
class ComparedChapter:
    """Whole runs of several contenders at one budget."""

    compared: StoredComparison
    worth: CallsWorth


@dataclass(frozen=True, eq=False)
class ScalingChapter:
    """Success against size."""

    scaled: Scaled
    file: str


Chapter = RunsChapter | ComparedChapter | ScalingChapter


@dataclass(frozen=True)
class Asked:
    """How calls are to be priced, whose calls they are, and whom they are held against, as for ``profile``."""

    cost: str | Path | None = None
    subsolver: str | None = None
    against: str | None = None


def chapters_of(runs: Sequence[str | Path], asked: Asked) -> list[Chapter]:
    """Everything that these run files have to say.

    Raises :class:`RunFileError` for files that are none, hold nothing, or do not have what was asked for by name.
    """
    if not runs:
        raise RunFileError("no run file is given; name one or more")
    paths = list(dict.fromkeys(Path(run) for run in runs))
    with contextlib.ExitStack() as stack:
        files = [stack.enter_context(stored_file(path)) for path in paths]
        chapters = [*_runs_chapters(files, asked), *_other_chapters(files, asked)]
    if not chapters:
        raise RunFileError(f"{paths[0]}: holds no run that was begun")
    worths = [one.worth for one in chapters if not isinstance(one, ScalingChapter)]
    if (asked.subsolver or asked.against) and worths and all(worth.profile is None for worth in worths):
        raise RunFileError(worths[0].missing)
    return chapters


def _runs_chapters(files: Sequence[StoredFile], asked: Asked) -> Iterator[RunsChapter]:
    """Runs of one problem together, in the order in which problems come up."""
    found: dict[str, list[tuple[StoredFile, StoredRun]]] = {}
    for file in files:
        if not has_table(file, "compared_runs"):
            for run in file.runs():
                found.setdefault(run.problem, []).append((file, run))
    for fingerprint, members in found.items():
        chapter = _runs_chapter(fingerprint, members, asked)
        if chapter is not None:
            yield chapter


def _runs_chapter(
    fingerprint: str, members: list[tuple[StoredFile, StoredRun]], asked: Asked
) -> RunsChapter | None:  # fmt: skip
    source = members[0][1].source
    problem, notes = _problem_of(members[0][1], members[0][0].problem(fingerprint))
    told = [(file, run, one) for file, run in members if (one := told_run(file, run, problem)) is not None]
    if not told:
        return None
    runs = [one for _, _, one in told]
    best, answer = _best(problem, runs)
    lines = _spoken(problem, answer)
    most = BARE_LINES if answer.value.get(_meaning(problem).main) is None else SPOKEN_LINES
    stages = [count for file, run, one in told if one.command != "bound" for count in stage_counts(file, run.number)]
    paths = list(dict.fromkeys(file.path for file, _, _ in told))
    return RunsChapter(
        problem, source, tuple(runs), best, answer, _can_be_checked(problem), tuple(lines[:most]),
        max(0, len(lines) - most), tuple(stages), tuple(_averages(told)), _worth_of(paths, asked),
        (*problem.notes, *notes),
    )  # fmt: skip


def _other_chapters(files: Sequence[StoredFile], asked: Asked) -> Iterator[Chapter]:
    for file in files:
        if has_table(file, "compared_runs"):
            worth = _worth_of([file.path], asked)
            yield from (ComparedChapter(one, worth) for one in stored_comparisons(file))
        if has_table(file, "scaling_rows"):
            yield ScalingChapter(stored_scaling(file), str(file.path))


def _worth_of(paths: Sequence[Path], asked: Asked) -> CallsWorth:
    names = tuple(map(str, paths))
    try:
        return CallsWorth(profile(paths, asked.cost, subsolver=asked.subsolver, against=asked.against), "", names)
    except RunFileError as error:
        return CallsWorth(None, str(error), names)


def _problem_of(run: StoredRun, kept: Problem) -> tuple[Problem, list[str]]:
    """The problem with its names, if its file is still there and the same; else as the run file holds it."""
    bare = "answers are in spins, without names" + ("" if _can_be_checked(kept) else ", and not checked")
    if not Path(run.source).is_file():
        return kept, [f"the problem's own file is not there: {bare}"]
    try:
        told = {key: run.settings.get(key) for key in ProblemSettings.model_fields}
        found = read_problem(run.source, **{key: value for key, value in told.items() if value is not None})
    except (ProblemError, OSError):
        return kept, [f"the problem's own file can no longer be read: {bare}"]
    if found.fingerprint != kept.fingerprint:
        return kept, [f"the problem's own file has changed since: {bare}"]
    return found, []


def _best(problem: Problem, runs: Sequence[ToldRun]) -> tuple[ToldRun, Answer]:
    """The feasible run of lowest energy, else the lowest, with its answer."""
    lowest: tuple[ToldRun, Answer] | None = None
    for run in sorted(runs, key=lambda run: run.energy):
        answer = _meaning(problem).decode(run.spins)
        if answer.feasible:
            return run, answer
        lowest = lowest or (run, answer)
    assert lowest is not None
    return lowest


def _spoken(problem: Problem, answer: Answer) -> list[str]:
    """The answer in words, without the verdict and the objective, which are said elsewhere."""
    if len(problem) > SPOKEN_SPINS or not _can_be_checked(problem):
        return []
    told = (verdict(len(answer.broken), len(answer.mended)), f"{problem.objective_name} {answer.objective:.12g}")
    return [line for line in answer_lines(problem, answer) if line not in told]


def _can_be_checked(problem: Problem) -> bool:
    """Whether the problem still knows what its spins mean: encodings and maps stand in its own file alone."""
    if problem.kind == "beacons":
        return "beacons" in problem.details
    return problem.encoding is not None or problem.kind in ("ising", "maxcut")


def _meaning(problem: Problem) -> Encoding:
    """What spins mean, bare spins where nothing else is known."""
    return encoding_of(problem) if _can_be_checked(problem) else PlainSpins(problem)


def _averages(told: Sequence[tuple[StoredFile, StoredRun, ToldRun]]) -> Iterator[tuple[float, Estimate]]:
    """Mean energies that sampling runs measured, by temperature; of several runs each for itself."""
    for file, run, _ in told:
        query = "SELECT temperature, copies, energies FROM measurements WHERE run = ? ORDER BY temperature"
        for row in file.rows(query, (run.number,)):
            with undamaged(file.path, f"a measured series of run {run.number}"):
                series = as_f64(row["energies"]).reshape(-1, row["copies"])
            if len(series) > 1:
                yield row["temperature"], mean_of(np.ascontiguousarray(series))


def settings_told(runs: Sequence[ToldRun]) -> list[tuple[str, list[Any]]]:
    """Every setting that some run gives a value, with its different values."""
    keys = dict.fromkeys(itertools.chain.from_iterable(run.settings for run in runs))
    table = []
    for key in keys:
        values = [run.settings.get(key) for run in runs]
        given = [value for value in values if value is not None]
        different = [value for place, value in enumerate(given) if value not in given[:place]]
        if different:
            table.append((key, different))
    return table
