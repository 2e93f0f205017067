"""What there is to do, checked before anything is written: problem, settings, subsolver, start, run file."""

from __future__ import annotations

import os
import re
from dataclasses import dataclass
from datetime import datetime
from pathlib import Path
from typing import Any

import numpy as np

from patchwalk.clusters.rules import cluster_rule
from patchwalk.engine import forecast_of
from patchwalk.problem.files import read_problem, read_start
from patchwalk.problem.ising import Problem
from patchwalk.search.neighbourhood import Ends, Plan
from patchwalk.search.temperature import GeometricCooling
from patchwalk.settings import DEFAULT_CLUSTER_SIZE, SettingsError, SolveSettings, checked_settings, read_settings
from patchwalk.subsolvers.contract import DENSE_LIMIT, I8, ClusterBatch, Edges, Subsolver
from patchwalk.subsolvers.registry import SubsolverError, subsolver_from


class MemoryForecastError(MemoryError):
    """A call would need more memory than the machine has; the message names the largest cluster that fits."""


@dataclass(frozen=True, eq=False)
class Task:
    """A problem and everything needed to work on it, checked and ready."""

    problem: Problem
    source: str
    settings: SolveSettings
    subsolver: Subsolver
    cluster_size: int
    start: I8 | None
    run_path: Path

    @property
    def plan(self) -> Plan:
        """The settings as the search understands them."""
        settings, problem = self.settings, self.problem
        target = None if settings.target is None else problem.energy_of(settings.target)
        return Plan(
            rule=cluster_rule(settings.rule),
            cluster_size=self.cluster_size,
            clusters_per_round=settings.clusters_per_round,
            sweeps_per_round=settings.sweeps,
            cooling=GeometricCooling(settings.hot, settings.cold, problem.field_scale, settings.coolings),
            ends=Ends(settings.calls, settings.total_sweeps, settings.time_limit, target),
            failures=settings.failures,
        )


def task_from(source: Problem | str | Path, given: dict[str, Any], spelled_as: str = "{}") -> Task:
    """Settings, problem, subsolver and start, read and checked; nothing is written yet."""
    table: dict[str, Any] = {}
    place, folder, input_path = "", Path(), source
    if source == "":
        raise SettingsError(["the input is empty; name a problem file or a settings TOML"])
    if not isinstance(source, Problem) and str(source).endswith(".toml"):
        place, folder = str(source), Path(source).parent
        input_path, table = read_settings(Path(source))
    settings = checked_settings(table, given, place, spelled_as)
    from_file = "subsolver" in table and "subsolver" not in given
    subsolver = _subsolver_of(settings, folder if from_file else Path(), place if from_file else "")
    problem, name = _problem_from(input_path, settings.kind)
    size = settings.cluster_size or min(DEFAULT_CLUSTER_SIZE, len(problem), subsolver.max_spins)
    _check_sizes(size, problem, subsolver)
    _check_memory(subsolver, size)
    start = None if settings.start is None else read_start(settings.start, problem)
    run_path = settings.run if settings.run is not None else _default_run_path(name)
    return Task(problem, name, settings, subsolver, size, start, run_path)


def _subsolver_of(settings: SolveSettings, folder: Path, place: str) -> Subsolver:
    """The subsolver of the settings; complaints name the file that spells it."""
    try:
        return subsolver_from(settings.subsolver, folder)
    except SubsolverError as error:
        if not place:
            raise
        raise SubsolverError("\n".join(f"{place}: {line}" for line in str(error).splitlines())) from error


def _problem_from(source: Problem | str | Path, kind: str | None) -> tuple[Problem, str]:
    if not isinstance(source, Problem):
        return read_problem(source, kind=kind), str(source)
    if kind is not None and kind != source.kind:
        raise SettingsError([f"kind is {kind!r}, but the problem given is of kind {source.kind!r}; leave kind out"])
    return source, "problem"


def _check_sizes(size: int, problem: Problem, subsolver: Subsolver) -> None:
    if size > len(problem):
        raise SettingsError(
            [f"cluster_size is {size}, the problem has {len(problem)} spins: --cluster-size {len(problem)} at most"]
        )
    if size > subsolver.max_spins:
        raise SubsolverError(
            f"{subsolver.name}: takes clusters of at most {subsolver.max_spins} spins, cluster_size is {size}; "
            "give a smaller --cluster-size or another --subsolver"
        )


def _check_memory(subsolver: Subsolver, size: int) -> None:
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


def _default_run_path(name: str) -> Path:
    stem = re.sub(r"[^A-Za-z0-9_-]+", "-", Path(name).name.split(".")[0]).strip("-") or "problem"
    base = f"patchwalk-{stem}-{datetime.now():%Y%m%d-%H%M%S}"
    path, number = Path(f"{base}.sqlite"), 2
    while path.exists():
        path, number = Path(f"{base}-{number}.sqlite"), number + 1
    return path
