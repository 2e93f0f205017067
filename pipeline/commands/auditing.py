"""``audit``: an answer recomputed, a certificate checked once more, with nothing of the search."""

from __future__ import annotations

import contextlib
import dataclasses
import sqlite3
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np

from patchwalk.bounds.certificate import Certificate, check
from patchwalk.bounds.certificate_error import CertificateError
from patchwalk.commands.answers import answer_for
from patchwalk.evidence.certificates import stored_certificate
from patchwalk.evidence.layout import RunFileError
from patchwalk.problem.files import read_problem, read_start
from patchwalk.problem.ising import Problem
from patchwalk.subsolvers.contract import I8

SQLITE_MAGIC = b"SQLite format 3\0"


@dataclass(frozen=True)
class Audit:
    """What holds. ``status`` is ``confirmed`` or ``refuted``, ``message`` says what was found.

    ``energy`` and ``objective`` of the stored configuration, recomputed; ``lower_bound`` as proved by the certificate,
    None where there is none; ``gap`` between them; ``proved_optimal`` where they meet within the tie tolerance.
    """

    status: str
    message: str
    energy: float
    objective: float
    objective_name: str
    feasible: bool
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
    problem: Problem | str | Path, evidence: str | Path, *, kind: str | None = None, run: int | None = None
) -> Audit:
    """An answer file (spins, or what ``--json`` printed) or a run file held against the problem.

    Of a run file, the run numbered ``run`` (the best one with a certificate, else the best one). Raises
    ``ProblemError`` for a problem or an answer that cannot be read, ``RunFileError`` for a run file that cannot.
    """
    known = problem if isinstance(problem, Problem) else read_problem(problem, kind=kind)
    if not _is_run_file(Path(evidence)):
        return _audited(known, read_start(evidence, known), None, None, None, "")
    try:
        with contextlib.closing(sqlite3.connect(f"file:{evidence}?mode=ro", uri=True)) as database:
            return _audited_run(known, database, run, Path(evidence))
    except sqlite3.Error as error:
        raise RunFileError(f"{evidence}: cannot be read as a run file: {error}") from error


def stored_run(problem: Problem, path: Path, run: int) -> tuple[I8, Certificate]:
    """Best configuration and certificate of a run, as they stand in the file: check them before use."""
    with contextlib.closing(sqlite3.connect(f"file:{path}?mode=ro", uri=True)) as database:
        (blob,) = database.execute("SELECT spins FROM runs WHERE run = ?", (run,)).fetchone()
        stored = stored_certificate(database, run)
        if stored is None:
            raise RunFileError(f"{path}: run {run} has no certificate")
        return _unpacked(blob, problem), Certificate(*stored)


def _unpacked(blob: bytes, problem: Problem) -> I8:
    bits = np.unpackbits(np.frombuffer(blob, np.uint8), count=len(problem), bitorder="little")
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
    rows = [row for row in rows if row[3] is not None]
    if not rows:
        raise RunFileError(f"{path}: holds no finished run" + (f" numbered {wanted}" if wanted is not None else ""))
    proved = [row for row in rows if stored_certificate(database, row[0]) is not None]
    run, fingerprint, energy, blob, status = (proved or rows)[0]
    if fingerprint != problem.fingerprint:
        raise RunFileError(f"{path}: run {run} was made on another problem; the fingerprints differ")
    size = len(problem)
    spins = (
        1 - 2 * np.unpackbits(np.frombuffer(blob, np.uint8), count=size, bitorder="little").astype(np.int8)
    ).astype(np.int8)
    stored = stored_certificate(database, run)
    certificate = None if stored is None else Certificate(*stored)
    return _audited(problem, spins, certificate, run, energy, status)


def _audited(
    problem: Problem, spins: I8, certificate: Certificate | None, run: int | None, stated: float | None, status: str
) -> Audit:
    energy = problem.energy(spins)
    feasible, _ = answer_for(problem, spins)
    faults, lower_bound = [], None
    if stated is not None and abs(stated - energy) > problem.tie_tolerance:
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
        message="; ".join(faults) or _good_news(energy, lower_bound, reached, certificate),
        energy=energy, objective=problem.objective(energy), objective_name=problem.objective_name, feasible=feasible,
        lower_bound=lower_bound, gap=None if lower_bound is None else (energy - lower_bound) / max(1.0, abs(energy)),
        proved_optimal=reached and not faults, method=None if certificate is None else certificate.method, run=run,
    )  # fmt: skip


def _good_news(energy: float, lower_bound: float | None, reached: bool, certificate: Certificate | None) -> str:
    if lower_bound is None or certificate is None:
        return f"the configuration has the energy {energy:.12g}; there is no certificate of a lower bound to check"
    if reached:
        return f"the certificate ({certificate.method}) holds: the configuration is optimal, energy {energy:.12g}"
    return f"the certificate ({certificate.method}) holds: no configuration lies below {lower_bound:.12g}"
