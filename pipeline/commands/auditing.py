"""``audit``: an answer recomputed, a certificate checked once more, with nothing of the search."""

from __future__ import annotations

import contextlib
import dataclasses
import sqlite3
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np

from patchwalk.bounds.certificate import Certificate, check
from patchwalk.bounds.certificate_error import CertificateError
from patchwalk.evidence.certificates import stored_certificate
from patchwalk.evidence.layout import RunFileError, undamaged
from patchwalk.evidence.stored import read_only
from patchwalk.problem.decoding import audit_answer, encoding_of, read_answer, verdict
from patchwalk.problem.files import read_problem
from patchwalk.problem.ising import Problem, ProblemError
from patchwalk.problem.sources import fail
from patchwalk.subsolvers.contract import I8

SQLITE_MAGIC = b"SQLite format 3\0"


@dataclass(frozen=True)
class Audit:
    """What holds. ``status`` is ``confirmed`` or ``refuted``, ``message`` says what was found.

    ``energy`` and ``objective`` of the answer, recomputed, and a sentence for every constraint in ``broken``, nothing
    mended: an answer that breaks any is refuted, a run only for what it claims. ``lower_bound`` as proved by the
    certificate, None where there is none; ``gap`` between them; ``proved_optimal`` where they meet within the tie
    tolerance.
    """

    status: str
    message: str
    energy: float
    objective: float
    objective_name: str
    feasible: bool
    broken: tuple[str, ...]
    lower_bound: float | None
    gap: float | None
    proved_optimal: bool
    method: str | None
    run: int | None

    def as_json(self) -> dict[str, Any]:
        """Plain values for ``--json``; the objective stands under its own name as well."""
        fields = dataclasses.asdict(self)
        fields[self.objective_name] = fields.pop("objective")
        return fields


def audit(
    problem: Problem | str | Path,
    evidence: str | Path,
    *,
    kind: str | None = None,
    field_file: str | Path | None = None,
    flip_sign: bool = False,
    colours: int | None = None,
    run: int | None = None,
) -> Audit:
    """An answer file (spins, what ``--json`` or ``--answer`` wrote) or a run file held against the problem.

    The keywords are those of :func:`patchwalk.read_problem`. Of a run file, the run numbered ``run`` (the best one with
    a certificate, else the best one). Raises ``ProblemError`` for a problem or an answer that cannot be read,
    ``RunFileError`` for a run file that cannot.
    """
    if not isinstance(problem, Problem):
        problem = read_problem(problem, kind, field_file=field_file, flip_sign=flip_sign, colours=colours)
    if not _is_run_file(Path(evidence)):
        return _audited_answer(problem, evidence)
    try:
        with contextlib.closing(read_only(Path(evidence))) as database:
            return _audited_run(problem, database, run, Path(evidence))
    except sqlite3.Error as error:
        raise RunFileError(f"{evidence}: cannot be read as a run file: {error}") from error


def _audited_answer(problem: Problem, path: str | Path) -> Audit:
    """An answer: valid, and worth what it says where it says so."""
    answer = read_answer(path, problem)
    try:
        objective, _, broken = audit_answer(problem, answer)
        spins = _spins_of(problem, answer)
    except ProblemError as error:
        fail(path, None, str(error))
    energy = problem.energy(spins)
    faults = [verdict(len(broken))] if broken else []
    if isinstance(answer, Mapping):
        faults += _false_statements(problem, answer, objective, energy)
    return Audit(
        status="refuted" if faults else "confirmed",
        message="; ".join(faults) or f"the answer is valid, of energy {energy:.12g}; a lower bound is not part of it",
        energy=energy, objective=objective, objective_name=problem.objective_name, feasible=not broken, broken=broken,
        lower_bound=None, gap=None, proved_optimal=False, method=None, run=None,
    )  # fmt: skip


def _spins_of(problem: Problem, answer: Mapping[str, Any] | I8) -> I8:
    """The configuration of an answer that :func:`audit_answer` has taken."""
    if not isinstance(answer, Mapping):
        return answer
    if "spins" in answer:
        return problem.spins_from(answer["spins"])
    said = answer["answer"] if isinstance(answer.get("answer"), Mapping) else answer
    return encoding_of(problem).encode(said)


def _false_statements(problem: Problem, answer: Mapping[str, Any], objective: float, energy: float) -> list[str]:
    """What an object of JSON states beside the answer itself and what is not so."""
    faults = []
    stated = answer.get("kind", problem.kind)
    if stated != problem.kind:
        faults.append(f"it answers a problem of kind {stated!s:.40}, this one is of kind {problem.kind}")
    for name, value in ((problem.objective_name, objective), ("energy", energy)):
        said = answer.get(name, value)
        if not isinstance(said, int | float) or not abs(said - value) <= problem.tie_tolerance + 1e-9 * abs(value):
            faults.append(f"it states {name} {said!s:.40}, but it is {value:.12g}")
    return faults


def stored_run(problem: Problem, path: Path, run: int) -> tuple[I8, Certificate]:
    """Best configuration and certificate of a run, as they stand in the file: check them before use."""
    with contextlib.closing(read_only(path)) as database:
        (blob,) = database.execute("SELECT spins FROM runs WHERE run = ?", (run,)).fetchone()
        certificate = _certificate(database, run, path)
        if certificate is None:
            raise RunFileError(f"{path}: run {run} has no certificate")
        return _unpacked(blob, problem, run, path), certificate


def _certificate(database: sqlite3.Connection, run: int, path: Path) -> Certificate | None:
    with undamaged(path, f"the certificate of run {run}"):
        stored = stored_certificate(database, run)
    return None if stored is None else Certificate(*stored)


def _unpacked(blob: bytes, problem: Problem, run: int, path: Path) -> I8:
    with undamaged(path, f"the answer of run {run}"):
        words = np.frombuffer(blob, np.uint8, count=-(-len(problem) // 8))
    bits = np.unpackbits(words, count=len(problem), bitorder="little")
    return np.where(bits == 1, -1, 1).astype(np.int8)


def _is_run_file(path: Path) -> bool:
    try:
        with path.open("rb") as file:
            return file.read(len(SQLITE_MAGIC)) == SQLITE_MAGIC
    except OSError:
        return False  # the reader of answers says what is wrong with the path


def _audited_run(problem: Problem, database: sqlite3.Connection, wanted: int | None, path: Path) -> Audit:
    rows = database.execute("SELECT run, problem, energy, spins, status FROM runs ORDER BY energy, run").fetchall()
    if wanted is not None:
        rows = [row for row in rows if row[0] == wanted]
    rows = [row for row in rows if isinstance(row[2], float) and row[3] is not None]
    if not rows:
        raise RunFileError(f"{path}: holds no finished run" + (f" numbered {wanted}" if wanted is not None else ""))
    proved = [row for row in rows if _certificate(database, row[0], path) is not None]
    run, fingerprint, energy, blob, status = (proved or rows)[0]
    if fingerprint != problem.fingerprint:
        raise RunFileError(f"{path}: run {run} was made on another problem; the fingerprints differ")
    certificate = _certificate(database, run, path)
    return _audited(problem, _unpacked(blob, problem, run, path), certificate, run, energy, status)


def _audited(
    problem: Problem, spins: I8, certificate: Certificate | None, run: int, stated: float, status: str
) -> Audit:
    energy = problem.energy(spins)
    objective, broken = encoding_of(problem).judge_spins(spins)
    faults, lower_bound = [], None
    if abs(stated - energy) > problem.tie_tolerance:
        faults.append(f"the run states the energy {stated:.12g}, the configuration has {energy:.12g}")
    if certificate is not None:
        try:
            lower_bound = check(problem, certificate)
        except CertificateError as error:
            faults.append(str(error))
    reached = lower_bound is not None and lower_bound >= energy - problem.tie_tolerance
    if lower_bound is not None and lower_bound > energy + problem.tie_tolerance:
        faults.append(f"the bound {lower_bound:.12g} lies above the energy {energy:.12g} of a configuration")
    if status == "proved_optimal" and not reached:
        faults.append("the run says proved_optimal, but nothing that holds proves it")
    return Audit(
        status="refuted" if faults else "confirmed",
        message="; ".join(faults) or _good_news(energy, broken, lower_bound, reached, certificate),
        energy=energy, objective=objective, objective_name=problem.objective_name, feasible=not broken, broken=broken,
        lower_bound=lower_bound, gap=None if lower_bound is None else (energy - lower_bound) / max(1.0, abs(energy)),
        proved_optimal=reached and not faults, method=None if certificate is None else certificate.method, run=run,
    )  # fmt: skip


def _good_news(
    energy: float, broken: Sequence[str], lower_bound: float | None, reached: bool, certificate: Certificate | None
) -> str:
    answer = f"the best configuration is {verdict(len(broken))}; " if broken else ""
    if lower_bound is None or certificate is None:
        return f"{answer}it has the energy {energy:.12g}, as stated; there is no certificate of a lower bound to check"
    if reached:
        return f"{answer}the certificate ({certificate.method}) holds: no energy lies below its own, {energy:.12g}"
    return f"{answer}the certificate ({certificate.method}) holds: no energy lies below {lower_bound:.12g}"
