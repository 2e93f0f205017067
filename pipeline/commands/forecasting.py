"""``forecast``: how the input was understood and what working on it will need, before anything is allocated."""

from __future__ import annotations

import os
from dataclasses import asdict, dataclass
from pathlib import Path
from typing import Any

import networkx as nx
import numpy as np
from scipy import sparse
from scipy.sparse import csgraph

from patchwalk.commands.tasks import Task, task_from
from patchwalk.cost import priced
from patchwalk.engine import forecast_of
from patchwalk.problem.ising import Problem
from patchwalk.search.calling import Caller
from patchwalk.search.replicas import Replicas
from patchwalk.subsolvers.contract import ClusterBatch, Subsolver
from patchwalk.subsolvers.elimination_order import find_plan, width_of
from patchwalk.subsolvers.registry import OURS, SubsolverError, make_subsolver, spelled
from patchwalk.workers import Serial, cores

SIZES = (4, 6, 8, 10, 12, 14, 16, 18, 20, 22, 24)
WIDEST = 30
"""Elimination widths are told up to this; beyond it no machine has the memory."""

PLANARITY_LIMIT = 50_000
"""Planarity is looked at for problems of at most so many spins."""


@dataclass(frozen=True)
class Structure:
    """What the graph of couplings looks like.

    ``elimination_width`` is an upper bound found by greedy orders, None where it is above ``WIDEST``; ``planar`` is
    None where nobody looked; ``unit`` is the number of which all couplings and fields are whole multiples, if any.
    """

    spins: int
    couplings: int
    fields: int
    degree_least: int
    degree_mean: float
    degree_most: int
    components: int
    bipartite: bool
    planar: bool | None
    elimination_width: int | None
    unit: float | None
    groups: int
    spins_in_groups: int
    frustrated: bool


@dataclass(frozen=True)
class CallForecast:
    """One call of a subsolver on a cluster of ``size`` spins: peak ``bytes`` and simulator time at fixed prices."""

    subsolver: str
    size: int
    bytes: int
    seconds: float
    fits: bool


@dataclass(frozen=True)
class Outlook:
    """Everything that ``forecast`` tells."""

    summary: str
    notes: tuple[str, ...]
    structure: Structure
    problem_bytes: int
    search_bytes: int
    memory: int
    calls: tuple[CallForecast, ...]
    settings: tuple[str, ...]

    def as_json(self) -> dict[str, Any]:
        """Plain values for ``--json``."""
        return asdict(self)


def forecast(problem: Problem | str | Path, **settings: Any) -> Outlook:
    """How a problem is understood, and what its calls will need; keywords are those of :func:`patchwalk.solve`.

    >>> ring = Problem.from_arrays([0, 1, 2, 3, 4], [1, 2, 3, 4, 0], [1.0] * 5)
    >>> outlook = forecast(ring)
    >>> outlook.structure.elimination_width, outlook.structure.planar, outlook.structure.frustrated
    (2, True, True)
    """
    return outlook_for(task_from(problem, settings))


def outlook_for(task: Task) -> Outlook:
    """:func:`forecast` for settings that are read already."""
    problem = task.problem
    memory = os.sysconf("SC_PHYS_PAGES") * os.sysconf("SC_PAGE_SIZE")
    arrays = (problem.row_starts, problem.neighbours, problem.couplings, problem.fields)
    return Outlook(
        summary=problem.summary(),
        notes=problem.notes,
        structure=structure_of(problem),
        problem_bytes=sum(array.nbytes for array in arrays),
        search_bytes=_search_bytes(task),
        memory=memory,
        calls=tuple(_calls(task, memory)),
        settings=tuple(_settings(task)),
    )


def structure_of(problem: Problem) -> Structure:
    """The graph of couplings in numbers."""
    degrees = np.diff(problem.row_starts)
    grouped = np.unique(np.concatenate([np.empty(0, np.int32), *problem.groups]))
    return Structure(
        spins=len(problem),
        couplings=problem.coupling_count,
        fields=int(np.count_nonzero(problem.fields)),
        degree_least=int(degrees.min()),
        degree_mean=float(degrees.mean()),
        degree_most=int(degrees.max()),
        components=int(csgraph.connected_components(problem.matrix, directed=False)[0]),
        bipartite=_balanced(problem, np.ones(len(problem.couplings), np.bool_)),
        planar=_planar(problem),
        elimination_width=_elimination_width(problem),
        unit=_unit(problem),
        groups=len(problem.groups),
        spins_in_groups=len(grouped),
        frustrated=not _balanced(problem, problem.couplings > 0.0),
    )


def _balanced(problem: Problem, opposite: np.typing.NDArray[np.bool_]) -> bool:
    """Whether spins can be set so that coupled spins differ exactly where ``opposite`` says: no odd cycle of those.

    The doubled graph, one node for either sign of a spin, then falls into twice as many pieces.
    """
    size = len(problem)
    rows = np.repeat(np.arange(size), np.diff(problem.row_starts))
    heads = np.concatenate([rows, rows + size])
    shifts = np.where(opposite, size, 0)
    tails = np.concatenate([problem.neighbours + shifts, problem.neighbours + size - shifts])

    doubled = sparse.csr_array((np.ones(len(heads), np.int8), (heads, tails)), shape=(2 * size, 2 * size))
    single = csgraph.connected_components(problem.matrix, directed=False)[0]
    return bool(csgraph.connected_components(doubled, directed=False)[0] == 2 * single)


def _planar(problem: Problem) -> bool | None:
    size = len(problem)
    if problem.coupling_count > 3 * size - 6 and size >= 3:
        return False
    if size > PLANARITY_LIMIT:
        return None
    rows = np.repeat(np.arange(size), np.diff(problem.row_starts))
    graph = nx.Graph(zip(rows.tolist(), problem.neighbours.tolist(), strict=True))
    return bool(nx.check_planarity(graph)[0])


def _elimination_width(problem: Problem) -> int | None:
    width = int(width_of(find_plan(problem.row_starts.copy(), problem.neighbours.copy(), WIDEST)))
    return width if width <= WIDEST else None


def _unit(problem: Problem) -> float | None:
    """The largest power of two of which all couplings and fields are whole multiples below 2^40, if there is one."""
    values = np.concatenate([problem.couplings, problem.fields])
    values = values[values != 0.0]
    for exponent in range(20, -21, -1):
        scaled = values / 2.0**exponent
        if np.all(scaled == np.round(scaled)) and float(np.abs(scaled).max(initial=0.0)) < 2.0**40:
            return float(2.0**exponent)
    return None


def _search_bytes(task: Task) -> int:
    """What the search keeps of its own: replicas twice over, good configurations, marks and counts."""
    size = len(task.problem)
    return size * (2 * 9 * task.replicas + task.settings.keep + 40)


def _calls(task: Task, memory: int) -> list[CallForecast]:
    """Calls of the subsolvers that the settings name at their size, and of every one of ours at all sizes."""
    named = [case.subsolver for case in task.policy.cases if case.subsolver is not None]
    known = {one.name for one in named}
    others = []
    for name in OURS:
        try:
            others.extend([make_subsolver(name)] if name not in known else [])
        except SubsolverError:  # one that cannot be made from its name alone
            continue
    found = []
    for subsolver in [*named, *others]:
        sizes = sorted({task.cluster_size, *SIZES}) if subsolver in named else SIZES
        for size in sizes:
            if size <= min(subsolver.max_spins, len(task.problem)):
                found.extend(_one_call(task, subsolver, size, memory))
    return found


def _one_call(task: Task, subsolver: Subsolver, size: int, memory: int) -> list[CallForecast]:
    batch = _sample(task, size)
    told = forecast_of(subsolver, batch)
    if told is None:
        return []
    seconds = float(priced(told.work, len(batch)).max())
    return [CallForecast(spelled(subsolver), batch.size, told.bytes, seconds, told.bytes <= memory)]


def _sample(task: Task, size: int) -> ClusterBatch:
    """A cluster cut from a random configuration, as the first round would cut it."""
    caller = Caller(task.problem, task.policy, size, task.settings.acceptance, 1, Serial())
    replicas = Replicas.random(task.problem, 1, 1)
    nothing = np.zeros(len(task.problem), np.int64)
    cut = caller.cuts(task.rules.closed(task.problem, size).rules[0], replicas, 0, 1, nothing, replicas.spins[:0])[0]
    return caller.question(cut, replicas, np.zeros(1))


def _settings(task: Task) -> list[str]:
    """What the settings would do, in sentences."""
    settings, ends = task.settings, task.plan_for(1).ends
    callers = "; ".join(
        ("nothing" if case.subsolver is None else spelled(case.subsolver))
        + ("" if case.when is None else f" when {case.when.text}")
        for case in task.policy.cases
    )
    budgets = {
        "calls": ends.calls, "sweeps": ends.sweeps, "seconds": ends.seconds, "rounds without gain": ends.stall
    }  # fmt: skip
    until = ", ".join(f"{value:,g} {name}" for name, value in budgets.items() if value is not None)
    target = "" if settings.target is None else f" or an objective of {settings.target:g}"
    return [
        f"clusters of {task.cluster_size} spins picked by {task.rules.name}, answered by {callers}",
        f"up to {settings.clusters_per_round} clusters and {task.sweeps} sweeps a round, until {until}{target}",
        f"{task.replicas} replica{'s' if task.replicas > 1 else ''}, {task.tempering}, temperatures "
        f"{settings.hot * task.problem.field_scale:.4g} to {settings.cold * task.problem.field_scale:.4g}",
        f"work shared by {settings.workers or cores()} {settings.engine}",
    ]
