"""What ``bound`` is asked to do, checked before anything is written."""

from __future__ import annotations

import difflib
import math
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from patchwalk.bounds.certificate import Certificate
from patchwalk.commands.auditing import audit, stored_run
from patchwalk.commands.tasks import check_memory, check_sizes, default_run_path, problem_from
from patchwalk.problem.files import read_start
from patchwalk.problem.ising import Problem
from patchwalk.search.bound_search import BranchPlan
from patchwalk.settings import DEFAULT_CLUSTER_SIZE, SearchSettings, SolveSettings
from patchwalk.settings_checks import SettingsError, checked_settings, read_settings
from patchwalk.subsolvers.contract import I8, Subsolver
from patchwalk.subsolvers.registry import subsolver_from

SETTINGS = {
    "kind": "word", "method": "method", "seconds": "number", "nodes": "whole", "subsolver": "spelling",
    "cluster_size": "whole", "sweeps": "whole", "seed": "whole", "start": "file", "earlier": "file", "run": "file",
    "without": "words",
}  # fmt: skip
SHARED = ("kind", "start")
"""What ``bound`` takes over from a settings TOML, which is written for ``solve``."""

METHODS = ("auto", "cycles", "semidefinite", "clusters")
PARTS = ("cuts", "heuristic", "branching", "clusters")
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
    table: dict[str, Any] = {}
    input_path = source
    if not isinstance(source, Problem) and str(source).endswith(".toml"):
        input_path, whole = read_settings(Path(source))
        checked_settings(SolveSettings, whole, {}, str(source))
        table = {key: whole[key] for key in SHARED if key in whole}
    values = {**table, **_converted(given, spelled_as)}
    problem, name = problem_from(input_path, SearchSettings.model_validate({"kind": values.get("kind")}))
    subsolver = subsolver_from(values.get("subsolver", DEFAULT_SUBSOLVER))
    size = values.get("cluster_size") or default_size(problem, subsolver)
    check_sizes(size, problem, [subsolver])
    check_memory(subsolver, size)
    nodes, seconds = values.get("nodes"), values.get("seconds")
    if seconds is None and nodes is None:
        seconds = DEFAULT_SECONDS
    off, method = values.get("without", ()), values.get("method", "auto")
    parts = {part: part not in off for part in PARTS}
    parts["clusters"] &= method == "auto"
    plan = BranchPlan(
        seconds,
        nodes,
        size,
        sweeps=values.get("sweeps", BranchPlan.sweeps),
        **parts,
    )
    start = None if values.get("start") is None else read_start(values["start"], problem)
    earlier = None
    if values.get("earlier"):
        start, earlier = _earlier_run(Path(values["earlier"]), problem)
        method = "cycles"
    run_path = Path(values["run"]) if values.get("run") else default_run_path(name)
    written = {**values, "cluster_size": size, "seconds": seconds, "without": list(off)}
    return BoundTask(problem, name, subsolver, plan, method, values.get("seed", 1), start, earlier, run_path, written)


def _earlier_run(path: Path, problem: Problem) -> tuple[I8, Certificate]:
    """Best configuration and tree of an earlier run on the same problem."""
    found = audit(problem, path)
    if found.status != "confirmed" or found.method not in ("cycles", "clusters") or found.run is None:
        raise SettingsError([f"earlier: {path} holds no tree of odd-cycle cuts to go on from: {found.message}"])
    return stored_run(problem, path, found.run)


def default_size(problem: Problem, subsolver: Subsolver) -> int:
    """Spins in a cluster where nothing is said: by the couplings per spin for elimination, else up to 12."""
    degree = 2 * problem.coupling_count / len(problem)
    size = next((size for most, size in SIZES if degree <= most), DENSE_SIZE)
    if subsolver.name != DEFAULT_SUBSOLVER:
        size = DEFAULT_CLUSTER_SIZE
    return min(size, len(problem), subsolver.max_spins)


def _converted(given: dict[str, Any], spelled_as: str) -> dict[str, Any]:
    """The settings in their types; raises :class:`SettingsError` with every complaint at once."""
    values, complaints = {}, []
    for key, value in given.items():
        place = spelled_as.format(key.replace("_", "-") if "-" in spelled_as else key)
        if key not in SETTINGS:
            near = difflib.get_close_matches(key, SETTINGS, n=1)
            complaints.append(f"{place}: there is no such setting" + (f"; did you mean {near[0]!r}?" if near else ""))
            continue
        try:
            values[key] = _value(key, value)
        except ValueError as error:
            complaints.append(f"{place}: {error} (given: {value!r})")
    if complaints:
        raise SettingsError(complaints)
    return values


def _value(key: str, value: Any) -> Any:
    """One setting in its type; raises ``ValueError`` with the reason."""
    what = SETTINGS[key]
    if what == "whole":
        lowest = 0 if key in ("seed", "sweeps") else 1
        number = _number(value)
        if number != int(number) or not lowest <= number < 2**63:
            raise ValueError(f"must be a whole number from {lowest} on")
        return int(value) if isinstance(value, str) else int(number)
    if what == "number":
        number = _number(value)
        if not number > 0:
            raise ValueError("must be a number above 0")
        return number
    if what == "file" and str(value) == "":
        raise ValueError("is empty; give the name of a file")
    if what == "method" and value not in METHODS:
        raise ValueError(f"is one of: {', '.join(METHODS)}")
    if what == "words":
        words = [word.strip() for word in value.split(",")] if isinstance(value, str) else list(value)
        unknown = [word for word in words if word not in PARTS]
        if unknown:
            raise ValueError(f"{unknown[0]!r} cannot be switched off; {', '.join(PARTS)} can")
        return tuple(words)
    return value


def _number(value: Any) -> float:
    if isinstance(value, bool):
        raise ValueError("must be a number")
    try:
        number = float(value)
    except (TypeError, ValueError):
        raise ValueError("must be a number") from None
    if not math.isfinite(number):
        raise ValueError("must be a finite number")
    return number
