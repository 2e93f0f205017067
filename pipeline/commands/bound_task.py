"""What ``bound`` is asked to do, checked before anything is written."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path
from typing import Any

from patchwalk.bounds.certificate import Certificate
from patchwalk.commands.auditing import audit, stored_run
from patchwalk.commands.bound_settings import PARTS, BoundSettings
from patchwalk.commands.tasks import check_memory, check_sizes, default_run_path, problem_from
from patchwalk.problem.files import read_start
from patchwalk.problem.ising import Problem, known_kind
from patchwalk.search.bound_search import BranchPlan
from patchwalk.settings import DEFAULT_CLUSTER_SIZE, ProblemSettings, SolveSettings
from patchwalk.settings_checks import SettingsError, checked_settings, read_settings
from patchwalk.subsolvers.contract import I8, Subsolver
from patchwalk.subsolvers.registry import subsolver_from

SHARED = (*ProblemSettings.model_fields, "start")
"""What ``bound`` takes over from a settings TOML, which is written for ``solve``."""

DEFAULT_SECONDS = 60.0
DEFAULT_SUBSOLVER = "elimination"
SIZES = ((4.5, 140), (6.5, 45))
"""Spins in a cluster where couplings per spin are at most so many: elimination then takes milliseconds."""

DENSE_SIZE = 20


@dataclass(frozen=True, eq=False)
class BoundTask:
    """A problem and everything needed to bound it; ``written`` are the settings as the run file keeps them."""

    problem: Problem
    source: str
    subsolver: Subsolver
    plan: BranchPlan
    method: str
    seed: int
    start: I8 | None
    earlier: Certificate | None
    run_path: Path
    written: dict[str, Any]


def bound_task_from(source: Problem | str | Path, given: dict[str, Any], spelled_as: str = "{}") -> BoundTask:
    """Problem and settings, read and checked; ``spelled_as`` is ``--{}`` where values are text from a command line."""
    if source == "":
        raise SettingsError(["the input is empty; name a problem file or a settings TOML"])
    input_path, settings = _settings(source, given, spelled_as)
    problem, name = problem_from(input_path, settings)
    subsolver = subsolver_from(settings.subsolver)
    size = settings.cluster_size or default_size(problem, subsolver)
    check_sizes(size, problem, [subsolver])
    check_memory(subsolver, size)
    start = None if settings.start is None else read_start(settings.start, problem)
    method, earlier = settings.method, None
    if settings.earlier is not None:
        start, earlier = _earlier_run(settings.earlier, problem)
        method = "cycles"
    run_path = settings.run or default_run_path(name)
    plan = _plan(settings, size)
    written = {**settings.model_dump(mode="json", exclude={"subsolver"}), "cluster_size": size, "seconds": plan.seconds}
    return BoundTask(problem, name, subsolver, plan, method, settings.seed, start, earlier, run_path, written)


def _settings(
    source: Problem | str | Path, given: dict[str, Any], spelled_as: str
) -> tuple[Problem | str | Path, BoundSettings]:
    """The input and the settings; complaints about a TOML and about what is given come together."""
    if isinstance(source, Problem) or not str(source).endswith(".toml"):
        return source, checked_settings(BoundSettings, {}, given, "", spelled_as, {"kind": known_kind})
    complaints: list[str] = []
    input_path, whole = read_settings(Path(source))
    try:
        checked_settings(SolveSettings, whole, {}, str(source))
    except SettingsError as error:
        complaints, whole = error.complaints, {}
    table = {key: whole[key] for key in SHARED if key in whole}
    try:
        settings = checked_settings(BoundSettings, table, given, str(source), spelled_as, {"kind": known_kind})
    except SettingsError as error:
        raise SettingsError([*complaints, *error.complaints]) from error
    if complaints:
        raise SettingsError(complaints)
    return input_path, settings


def _plan(settings: BoundSettings, size: int) -> BranchPlan:
    on = {part: part not in (settings.without or ()) for part in PARTS}
    on["clusters"] &= settings.method == "auto" and settings.earlier is None
    seconds = settings.seconds
    if seconds is None and settings.nodes is None:
        seconds = DEFAULT_SECONDS
    return BranchPlan(seconds, settings.nodes, size, sweeps=settings.sweeps, **on)


def _earlier_run(path: Path, problem: Problem) -> tuple[I8, Certificate]:
    """Best configuration and tree of an earlier run on the same problem."""
    found = audit(problem, path)
    if found.status != "confirmed" or found.method is None or found.run is None:
        raise SettingsError([f"earlier: {path} holds no certificate to go on from: {found.message}"])
    if found.method not in ("cycles", "clusters"):
        raise SettingsError(
            [
                f"earlier: {path} holds a certificate of the method {found.method}; only trees of cycles and clusters "
                "are gone on with. Begin anew with its configuration: --start FILE takes what --json printed"
            ]
        )
    return stored_run(problem, path, found.run)


def default_size(problem: Problem, subsolver: Subsolver) -> int:
    """Spins in a cluster where nothing is said: by the couplings per spin for elimination, else up to 12.

    Clusters of more than half of a periodic lattice would meet themselves, too wide to be eliminated.
    """
    degree = 2 * problem.coupling_count / len(problem)
    size = next((size for most, size in SIZES if degree <= most), DENSE_SIZE)
    size = min(size, max(DENSE_SIZE, len(problem) // 2))
    if subsolver.name != DEFAULT_SUBSOLVER:
        size = DEFAULT_CLUSTER_SIZE
    return min(size, len(problem), subsolver.max_spins)
