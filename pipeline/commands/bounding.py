"""``bound``: how low the energy of a problem can be, with a certificate, and a proof of optimality where it is reached.

Narrow problems are eliminated exactly. Other sparse ones go to branch-and-bound with odd-cycle cuts, beside which a
cluster bound stands where it promises more, and which begins with the matching's ground state where the problem is
planar and has no fields; dense ones go to the tree of semidefinite bounds.
"""

from __future__ import annotations

import contextlib
import dataclasses
import math
import sqlite3
import time
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from typing import Any, Protocol

from patchwalk.bounds.certificate import Certificate, check
from patchwalk.bounds.narrow import narrow_order
from patchwalk.bounds.planar import MOST_FRUSTRATED, frustrated_faces, is_planar, planar_minimum
from patchwalk.commands.answers import answered
from patchwalk.commands.bound_task import DEFAULT_SUBSOLVER, BoundTask, bound_task_from, default_size
from patchwalk.commands.interrupts import listening
from patchwalk.evidence.certificates import store_certificate, store_node_log
from patchwalk.evidence.layout import RunFileError, packed
from patchwalk.evidence.runfile import RunFacts, RunFile, RunWriter
from patchwalk.problem.ising import Problem
from patchwalk.search.bound_search import BoundSearch, BranchPlan, NodeLine
from patchwalk.search.branch_dense import DenseBranching, is_dense
from patchwalk.search.branching import BranchAndBound
from patchwalk.search.cluster_bounding import ClusterBounding
from patchwalk.subsolvers.contract import I8, Subsolver
from patchwalk.subsolvers.registry import spelled, subsolver_from

SEARCHES: dict[str, type[BoundSearch]] = {
    "cycles": BranchAndBound, "semidefinite": DenseBranching, "clusters": ClusterBounding,
}  # fmt: skip


@dataclass(frozen=True, eq=False)
class Bound:
    """What is known of the lowest energy.

    ``lower_bound`` is true whatever the ``status``; ``proof`` says in words what proves it, ``certificate`` holds it as
    data. ``spins`` i8 (n,) is the best configuration known, with its ``energy``. ``status`` is ``proved_optimal`` only
    where the bound reaches that energy within the problem's tie tolerance, else ``budget`` or ``interrupted``.
    ``objective_bound`` is the bound in the user's own terms.
    """

    spins: I8
    energy: float
    lower_bound: float
    gap: float
    status: str
    message: str
    proof: str
    objective: float
    objective_bound: float
    objective_name: str
    feasible: bool
    answer: dict[str, Any]
    seconds: float
    compile_seconds: float
    nodes: int
    open_nodes: int
    calls: int
    failed_calls: int
    seed: int
    certificate: Certificate
    log: tuple[NodeLine, ...]
    run_path: Path | None = None

    def as_json(self) -> dict[str, Any]:
        """Plain values for ``--json``; the objective stands under its own name as well."""
        skipped = {"spins", "certificate", "log", "run_path", "objective", "objective_name"}
        fields = {f.name: getattr(self, f.name) for f in dataclasses.fields(self) if f.name not in skipped}
        fields = {"spins": self.spins.tolist(), **fields}
        fields["run_path"] = None if self.run_path is None else str(self.run_path)
        fields[self.objective_name] = self.objective
        return fields


class Watcher(Protocol):
    """Somebody who is told how it is going."""

    def understood(self, lines: list[str]) -> None: ...

    def compiling(self) -> None: ...

    def compiled(self, seconds: float) -> None: ...

    def moved(self, search: BoundSearch) -> None: ...

    def stopping(self) -> None: ...


class Silent:
    """Watches and says nothing."""

    def understood(self, lines: list[str]) -> None:
        pass

    def compiling(self) -> None:
        pass

    def compiled(self, seconds: float) -> None:
        pass

    def moved(self, search: BoundSearch) -> None:
        pass

    def stopping(self) -> None:
        pass


def bound(problem: Problem | str | Path, **settings: Any) -> Bound:
    """A lower bound on the energy of a problem, a problem file or a settings TOML, with its certificate in a run file.

    Keywords are the options of ``patchwalk bound``: ``kind, field_file, flip_sign, colours, method, seconds, nodes,
    subsolver, cluster_size, sweeps, seed, start, earlier, run, without``. Raises ``SettingsError``, ``ProblemError``,
    ``SubsolverError`` or ``RunFileError`` before any work is done.

    >>> import os, tempfile
    >>> ring = Problem.from_arrays([0, 1, 2, 3, 4], [1, 2, 3, 4, 0], [1.0] * 5, kind="maxcut")
    >>> with tempfile.TemporaryDirectory() as folder:
    ...     found = bound(ring, run=os.path.join(folder, "ring.sqlite"))
    >>> found.status, found.lower_bound, found.objective
    ('proved_optimal', -4.0, 4.0)
    """
    return carry_out(bound_task_from(problem, settings), Silent())


def bounds_for(
    problem: Problem,
    seconds: float | None,
    *,
    start: I8 | None = None,
    nodes: int | None = None,
    subsolver: Subsolver | None = None,
    cluster_size: int | None = None,
    method: str = "auto",
    seed: int = 1,
    interrupted: Callable[[], bool] = lambda: False,
) -> Bound:
    """A bound without a run file, for callers that have a configuration (``start``) and keep their own records.

    Clusters are answered by elimination where no ``subsolver`` is given. Ends after ``seconds`` (compiling apart),
    after ``nodes``, when ``interrupted()``, or with a proof.
    """
    chosen = subsolver if subsolver is not None else subsolver_from(DEFAULT_SUBSOLVER)
    size = cluster_size or default_size(problem, chosen)
    plan = BranchPlan(seconds, nodes, size, clusters=method == "auto")
    search = search_for(problem, method)(problem, chosen, plan, seed, start, interrupted)
    began = time.perf_counter()
    search.prepare()
    compile_seconds = time.perf_counter() - began
    offer_planar(search)
    for _ in search.rounds():
        pass
    return _result(search, compile_seconds, None)


def search_for(problem: Problem, method: str, clusters: bool = True) -> type[BoundSearch]:
    """The search by this method; ``auto`` decides by the couplings alone, and whether ``clusters`` may be taken."""
    if method == "auto":
        method = "cycles"
        if is_dense(problem):
            method = "semidefinite"
        elif clusters and narrow_order(problem) is not None:
            method = "clusters"
    return SEARCHES[method]


def offer_planar(search: BoundSearch) -> None:
    """Where the problem is planar and small enough for matching, let the search begin with its ground state."""
    problem = search.problem
    if is_planar(problem) and frustrated_faces(problem) <= MOST_FRUSTRATED:
        search.incumbent.offer(planar_minimum(problem).spins, "matching")


def carry_out(task: BoundTask, watcher: Watcher) -> Bound:
    """The task into its run file: rows of all cluster calls, the node log and the certificate."""
    problem = task.problem
    watcher.understood([problem.summary(), *problem.notes])
    runfile = RunFile(task.run_path)
    try:
        with listening(watcher.stopping) as interrupted:
            kind = search_for(problem, task.method, task.plan.clusters)
            search = kind(problem, task.subsolver, task.plan, task.seed, task.start, interrupted)
            if task.earlier is not None and isinstance(search, BranchAndBound):
                search.take_up(task.earlier)
            search.told = lambda: watcher.moved(search)
            watcher.compiling()
            began = time.perf_counter()
            search.prepare()
            compile_seconds = time.perf_counter() - began
            watcher.compiled(compile_seconds)
            writer = _begin(task, search, runfile)
            result = _searched(task, search, writer, compile_seconds)
            run = writer.run
    finally:
        runfile.close()
    lost = (sqlite3.Error,) if result.status == "error" else ()
    with contextlib.suppress(*lost), contextlib.closing(sqlite3.connect(task.run_path)) as database:
        proof = result.certificate
        store_certificate(database, run, proof.fingerprint, proof.method, proof.bound, proof.arrays)
        store_node_log(database, run, [dataclasses.astuple(line) for line in result.log])
    return result


def _begin(task: BoundTask, search: BoundSearch, runfile: RunFile) -> RunWriter:
    subsolver = search.subsolver or task.subsolver
    spelling = spelled(subsolver)
    settings = {**task.written, "subsolver": spelling, "command": "bound"}
    facts = RunFacts(
        problem=task.problem, source=task.source, seed=task.seed, subsolver=spelling, settings=settings,
        settings_file="", settings_table={}, rows="all",
    )  # fmt: skip
    return runfile.begin(facts, search.snapshot())


def _searched(task: BoundTask, search: BoundSearch, writer: RunWriter, compile_seconds: float) -> Bound:
    if task.plan.heuristic:
        offer_planar(search)
    try:
        for round_ in search.rounds():
            writer.add(round_)
            if writer.due:
                writer.close_group(search.snapshot())
    except RunFileError as error:  # bound and answer so far are worth more than the record that could not be kept
        search.status, search.message = "error", str(error)
    writer.add_improvements(search.take_improvements())
    result = _result(search, compile_seconds, task.run_path)
    with contextlib.suppress(*((RunFileError,) if search.status == "error" else ())):
        writer.finish(
            search.snapshot(), status=result.status, message=result.message, energy=result.energy,
            objective=result.objective, calls=result.calls, failed_calls=result.failed_calls,
            sweeps=search.incumbent.sweeps, seconds=result.seconds, compile_seconds=compile_seconds, skipped=0,
            lower_bound=result.lower_bound, spins=packed(result.spins),
        )  # fmt: skip
    return result


def _result(search: BoundSearch, compile_seconds: float, run_path: Path | None) -> Bound:
    """What the search ended with. Its certificate is checked here once more, and what it states is the bound."""
    problem, seconds = search.problem, search.elapsed
    certificate = search.certificate()
    proved = check(problem, certificate)
    told = answered(problem, search.best_spins)
    energy = told["energy"]
    status, message = search.status, search.message
    if status == "proved_optimal" and proved < energy - problem.tie_tolerance:
        status, message = "budget", "the certificate proves less than the search took it for"
    return Bound(
        spins=told["spins"], energy=energy, lower_bound=proved,
        gap=max(0.0, energy - proved) / max(1.0, abs(energy)),
        status=status, message=message, proof=search.proof,
        objective=told["objective"], objective_bound=problem.objective(proved),
        objective_name=problem.objective_name, feasible=told["feasible"], answer=told["answer"], seconds=seconds,
        compile_seconds=compile_seconds, nodes=search.node_count, open_nodes=search.open_count,
        calls=search.incumbent.calls, failed_calls=search.incumbent.failed_calls, seed=search.seed,
        certificate=certificate, log=tuple(_finite(line) for line in search.log), run_path=run_path,
    )  # fmt: skip


def _finite(line: NodeLine) -> NodeLine:
    """Empty nodes have no lowest energy; the log says the best one instead."""
    return line if math.isfinite(line.node_bound) else dataclasses.replace(line, node_bound=line.best)
