"""What there is to do, checked before anything is written: problem, settings, subsolver, start, run file."""

from __future__ import annotations

import os
import re
import tempfile
from collections.abc import Mapping
from dataclasses import dataclass, field
from datetime import datetime
from pathlib import Path
from typing import Any, Generic, TypeVar

import numpy as np

from patchwalk.clusters.mixture import Mixture, mixture_of
from patchwalk.clusters.policy import Policy, PolicyError, policy_from
from patchwalk.cost import priced, sweep_seconds
from patchwalk.engine import forecast_of
from patchwalk.problem.decoding import encoding_of, write_answer
from patchwalk.problem.files import read_problem, read_start
from patchwalk.problem.ising import Problem, ProblemError, known_kind
from patchwalk.search.ends import Ends
from patchwalk.search.ladder import Ladder
from patchwalk.search.neighbourhood import Plan
from patchwalk.search.sampling import SamplingPlan
from patchwalk.search.temperature import AdaptiveCooling, GeometricCooling, Temperatures
from patchwalk.settings import (
    DEFAULT_CLUSTER_SIZE,
    DEFAULT_RUNGS,
    FEWEST_SWEEPS,
    LADDER_LIMIT,
    MOST_SWEEPS,
    ProblemSettings,
    SamplingSettings,
    SearchSettings,
    SolveSettings,
)
from patchwalk.settings_checks import SettingsError, checked_settings, read_settings
from patchwalk.subsolvers.contract import DENSE_LIMIT, I8, ClusterBatch, Edges, Subsolver
from patchwalk.subsolvers.registry import SubsolverError

Told = TypeVar("Told", bound=SearchSettings)


class MemoryForecastError(MemoryError):
    """A call would need more memory than the machine has; the message names the largest cluster that fits."""


@dataclass(frozen=True, eq=False)
class Errand(Generic[Told]):
    """A problem, the settings of a command, and everything needed to work on it, checked and ready."""

    problem: Problem
    source: str
    settings: Told
    policy: Policy
    cluster_size: int
    start: I8 | None
    run_path: Path
    settings_file: str = ""
    settings_table: Mapping[str, Any] = field(default_factory=dict)

    @property
    def rules(self) -> Mixture:
        """The rules that cut clusters."""
        return mixture_of(self.settings.rule, self.settings.rule_weights == "adaptive")


@dataclass(frozen=True, eq=False)
class Task(Errand[SolveSettings]):
    """What ``solve`` has to do."""

    @property
    def replicas(self) -> int:
        """How many configurations are searched side by side."""
        if self.settings.replicas is not None:
            return self.settings.replicas
        return DEFAULT_RUNGS if self.tempering == "ladder" else 1

    @property
    def sweeps(self) -> int:
        """Sweeps after each round: as asked for, else as many as cost about half of the calls, at fixed prices."""
        if self.settings.sweeps is not None:
            return self.settings.sweeps
        size, degree = len(self.problem), 2.0 * self.problem.coupling_count / len(self.problem)
        apart = self.replicas * max(1, int(size / (self.cluster_size * (1.0 + degree))))  # clusters that do not touch
        asked = [case.subsolver for case in self.policy.cases if case.subsolver is not None]
        dearest = max((_call_seconds(subsolver, self.cluster_size) for subsolver in asked), default=0.0)
        calls = min(self.settings.clusters_per_round, apart) * dearest
        wanted = 0.5 * calls / sweep_seconds(size, degree, self.replicas)
        return int(min(MOST_SWEEPS, max(FEWEST_SWEEPS, wanted)))

    @property
    def tempering(self) -> str:
        """How hot the replicas are: as asked for, else a ladder where it pays and is possible."""
        settings = self.settings
        if settings.tempering is not None:
            return settings.tempering
        small = 2 <= len(self.problem) <= LADDER_LIMIT and self.problem.field_scale > 0.0
        fit = settings.replicas != 1 and settings.cold > 0.0 and "coolings" not in settings.model_fields_set
        return "ladder" if small and fit else "cooling"

    def plan_for(self, seed: int) -> Plan:
        """The settings as the search understands them, for the run with this seed."""
        settings, problem = self.settings, self.problem
        target = None if settings.target is None else problem.energy_of(settings.target)
        return Plan(
            policy=self.policy,
            rules=self.rules,
            cluster_size=self.cluster_size,
            clusters_per_round=settings.clusters_per_round,
            sweeps_per_round=self.sweeps,
            temperatures=self._temperatures(seed),
            ends=Ends(settings.calls, settings.total_sweeps, settings.time_limit, target, settings.stall),
            acceptance=settings.acceptance,
            replicas=self.replicas,
            restart_after=settings.restart_after,
            keep=settings.keep,
            distance=settings.distance or max(1, len(problem) // 20),
            failures=settings.failures,
        )

    def _temperatures(self, seed: int) -> Temperatures:
        settings, scale = self.settings, self.problem.field_scale
        if self.tempering == "ladder" and scale > 0.0:
            rungs = scale * np.geomspace(settings.hot, settings.cold, self.replicas)
            return Ladder(rungs, seed, adapting=1.0)
        cooling = GeometricCooling(settings.hot, settings.cold, scale, settings.coolings, self.replicas)
        return AdaptiveCooling(cooling) if self.tempering == "adaptive" else cooling


@dataclass(frozen=True, eq=False)
class SamplingTask(Errand[SamplingSettings]):
    """What ``sample`` has to do."""

    @property
    def plan(self) -> SamplingPlan:
        """The settings as the sampling understands them."""
        settings = self.settings
        return SamplingPlan(
            policy=self.policy,
            rules=self.rules,
            cluster_size=self.cluster_size,
            clusters_per_round=settings.clusters_per_round,
            sweeps_per_round=FEWEST_SWEEPS if settings.sweeps is None else settings.sweeps,
            temperatures=np.array(sorted(settings.temperatures, reverse=True)),
            copies=settings.copies,
            burn_in=settings.burn_in_rounds,
            rounds=settings.rounds,
        )


def task_from(source: Problem | str | Path, given: dict[str, Any], spelled_as: str = "{}") -> Task:
    """What ``solve`` is told, read and checked; nothing is written yet."""
    task = Task(**_read(SolveSettings, source, given, spelled_as))
    if task.settings.answer is not None:
        _check_answer(task.settings.answer, task.problem)
    return task


def sample_task_from(source: Problem | str | Path, given: dict[str, Any], spelled_as: str = "{}") -> SamplingTask:
    """What ``sample`` is told, read and checked; nothing is written yet."""
    return SamplingTask(**_read(SamplingSettings, source, given, spelled_as))


def _read(
    model: type[SearchSettings], source: Problem | str | Path, given: dict[str, Any], spelled_as: str
) -> dict[str, Any]:
    """Settings, problem, subsolvers and start, as the fields of an :class:`Errand`."""
    table: dict[str, Any] = {}
    place, folder, input_path, settings_file = "", Path(), source, ""
    if source == "":
        raise SettingsError(["the input is empty; name a problem file or a settings TOML"])
    if not isinstance(source, Problem) and str(source).endswith(".toml"):
        place, folder, settings_file = str(source), Path(source).parent, str(Path(source).absolute())
        input_path, table = read_settings(Path(source))
    settings = checked_settings(model, table, given, place, spelled_as, {"rule": mixture_of, "kind": known_kind})
    key = "subsolver" if settings.callers is None else "callers"
    from_file = key in table and key not in given
    policy = policy_of(settings, folder if from_file else Path(), place if from_file else "")
    problem, name = problem_from(input_path, settings)
    subsolvers = [case.subsolver for case in policy.cases if case.subsolver is not None]
    size = settings.cluster_size or min(DEFAULT_CLUSTER_SIZE, len(problem), *(one.max_spins for one in subsolvers))
    check_sizes(size, problem, subsolvers)
    for subsolver in subsolvers:
        check_memory(subsolver, size)
    start = None if settings.start is None else read_start(settings.start, problem)
    run_path = settings.run if settings.run is not None else default_run_path(name)
    return {
        "problem": problem, "source": name, "settings": settings, "policy": policy, "cluster_size": size,
        "start": start, "run_path": run_path, "settings_file": settings_file, "settings_table": table,
    }  # fmt: skip


def policy_of(settings: SearchSettings, folder: Path, place: str) -> Policy:
    """Who is called when, by the settings; complaints name the file that spells it."""
    try:
        return policy_from(settings.subsolver if settings.callers is None else settings.callers, folder)
    except (SubsolverError, PolicyError) as error:
        prefix = f"{place}: " if place else ""
        lines = [f"{prefix}{line}" for line in str(error).splitlines()]
        if isinstance(error, PolicyError):
            raise SettingsError([f"{prefix}callers: {line}" for line in str(error).splitlines()]) from error
        raise SubsolverError("\n".join(lines)) from error


def problem_from(source: Problem | str | Path, settings: ProblemSettings) -> tuple[Problem, str]:
    if not isinstance(source, Problem):
        return read_again(source, settings), str(Path(source).absolute())
    for key in ProblemSettings.model_fields:
        given = getattr(settings, key)
        if given and given != getattr(source, key, None):
            raise SettingsError([f"{key} is {given!r}, but the problem is given as it is; leave {key} out"])
    return source, "problem"


def read_again(source: str | Path, settings: ProblemSettings) -> Problem:
    """The problem of a file, read as the settings say."""
    return read_problem(source, **{key: getattr(settings, key) for key in ProblemSettings.model_fields})


def check_sizes(size: int, problem: Problem, subsolvers: list[Subsolver]) -> None:
    if not subsolvers:
        raise SettingsError(["callers: every case calls nobody; name a subsolver in one of them"])
    if size > len(problem):
        raise SettingsError(
            [f"cluster_size is {size}, the problem has {len(problem)} spins: --cluster-size {len(problem)} at most"]
        )
    for subsolver in subsolvers:
        if size > subsolver.max_spins:
            raise SubsolverError(
                f"{subsolver.name}: takes clusters of at most {subsolver.max_spins} spins, cluster_size is {size}; "
                "give a smaller --cluster-size or another --subsolver"
            )


def _check_answer(path: Path, problem: Problem) -> None:
    """Refuse, before anything is searched, a place or a form in which the answer could not be written."""
    if not path.parent.is_dir():
        raise SettingsError([f"answer: the folder {path.parent} is not there; make it, or name another file"])
    if ".csv" not in path.suffixes:
        return
    with tempfile.TemporaryDirectory() as folder:
        try:
            anything = encoding_of(problem).decode(np.ones(len(problem), np.int8))
            write_answer(Path(folder) / path.name, problem, anything)
        except ProblemError as error:
            raise SettingsError([f"answer: {error}"]) from error


def check_memory(subsolver: Subsolver, size: int) -> None:
    """Refuse, before anything is allocated, a cluster size whose forecast goes beyond the machine's memory."""
    memory = os.sysconf("SC_PHYS_PAGES") * os.sysconf("SC_PAGE_SIZE")
    needed = _bytes_needed(subsolver, size)
    if needed <= memory:
        return
    fitting = next((k for k in range(size, 0, -1) if _bytes_needed(subsolver, k) <= memory), 1)
    raise MemoryForecastError(
        f"{subsolver.name}: a cluster of {size} spins needs {needed / 1e9:.1f} GB, this machine has "
        f"{memory / 1e9:.1f} GB; the largest cluster that fits has {fitting} spins (--cluster-size {fitting})"
    )


def _call_seconds(subsolver: Subsolver, size: int) -> float:
    """What one call costs at the fixed prices; nothing where the subsolver cannot tell."""
    forecast = forecast_of(subsolver, _blank_batch(size))
    return 0.0 if forecast is None else float(priced(forecast.work, 1)[0])


def _bytes_needed(subsolver: Subsolver, size: int) -> int:
    forecast = forecast_of(subsolver, _blank_batch(size))
    return 0 if forecast is None else forecast.bytes


def _blank_batch(size: int) -> ClusterBatch:
    dense = size <= DENSE_LIMIT
    nothing = Edges(np.zeros(2, np.int64), np.empty((0, 2), np.int32), np.empty(0))
    return ClusterBatch(
        fields=np.zeros((1, size)), spins=np.ones((1, size), np.int8), temperature=np.zeros(1),
        seeds=np.zeros(1, np.uint64), couplings=np.zeros((1, size, size)) if dense else None,
        edges=None if dense else nothing,
    )  # fmt: skip


def default_run_path(name: str) -> Path:
    stem = re.sub(r"[^A-Za-z0-9_-]+", "-", Path(name).name.split(".")[0]).strip("-") or "problem"
    base = f"patchwalk-{stem}-{datetime.now():%Y%m%d-%H%M%S}"
    path, number = Path(f"{base}.sqlite"), 2
    while path.exists():
        path, number = Path(f"{base}-{number}.sqlite"), number + 1
    return path
