"""What a run file holds, read back: runs, their problems, their last checkpoints."""

from __future__ import annotations

import contextlib
import json
import sqlite3
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np

from patchwalk.evidence.layout import (
    LAYOUT,
    RunFileError,
    as_f64,
    problem_from_blob,
    undamaged,
    unpacked,
    unpacked_rows,
)
from patchwalk.problem.ising import Problem
from patchwalk.records import Snapshot


@dataclass(frozen=True, eq=False)
class StoredRun:
    """One run of a run file: its row of the table ``runs``, settings and versions as plain values.

    ``source`` is where the problem came from, ``settings_table`` what its settings file said.
    """

    number: int
    seed: int
    problem: str
    source: str
    subsolver: str
    settings: dict[str, Any]
    settings_file: str
    settings_table: dict[str, Any]
    versions: dict[str, str]
    rows: str
    status: str
    message: str | None


def read_only(path: Path) -> sqlite3.Connection:
    """A connection that can only read, whatever signs the name of the file holds."""
    return sqlite3.connect(f"{path.absolute().as_uri()}?mode=ro", uri=True, isolation_level=None)


class StoredFile:
    """A run file opened for reading; raises :class:`RunFileError` for anything that is none."""

    def __init__(self, path: Path) -> None:
        self.path = path
        if not path.exists():
            raise RunFileError(f"{path}: there is no such run file")
        try:
            self._database = read_only(path)
            self._database.row_factory = sqlite3.Row
            layout = self._database.execute("SELECT value FROM about WHERE key = 'layout'").fetchone()
        except sqlite3.Error as error:
            raise RunFileError(f"{path}: not a run file of Patchwalk: {error}") from error
        if layout is None or layout["value"] != str(LAYOUT):
            found = "none" if layout is None else layout["value"]
            raise RunFileError(
                f"{path}: has layout {found}, this Patchwalk reads layout {LAYOUT}; take the one that wrote it"
            )

    def close(self) -> None:
        """Let go of the file."""
        self._database.close()

    def rows(self, query: str, values: tuple[Any, ...] = ()) -> Iterator[sqlite3.Row]:
        """The rows of a query, one by one."""
        try:
            yield from self._database.execute(query, values)
        except sqlite3.Error as error:
            raise RunFileError(f"{self.path}: could not be read: {error}") from error

    def runs(self) -> list[StoredRun]:
        """All runs in the order they began."""
        query = "SELECT runs.*, problems.source FROM runs JOIN problems ON runs.problem = fingerprint ORDER BY run"
        rows = list(self.rows(query))
        with undamaged(self.path, "its table of runs"):
            return [_stored_run(row) for row in rows]

    def problem(self, fingerprint: str) -> Problem:
        """The problem as the run file holds it: without names, but to the last bit."""
        row = next(self.rows("SELECT arrays, kind FROM problems WHERE fingerprint = ?", (fingerprint,)))
        try:
            problem = problem_from_blob(row["arrays"], row["kind"])
        except RunFileError as error:
            raise RunFileError(f"{self.path}: {error}") from error
        if problem.fingerprint != fingerprint:
            raise RunFileError(f"{self.path}: the problem inside does not have the fingerprint {fingerprint[:12]}")
        return problem

    def last_checkpoint(self, run: int, problem: Problem) -> Snapshot:
        """The newest whole state of a run."""
        query = "SELECT * FROM checkpoints WHERE run = ? AND details IS NOT NULL ORDER BY round DESC LIMIT 1"
        row = next(self.rows(query, (run,)), None)
        if row is None:
            raise RunFileError(f"{self.path}: run {run} has no checkpoint")
        with undamaged(self.path, f"the last state of run {run}"):
            return _snapshot(row, problem)


def _stored_run(row: sqlite3.Row) -> StoredRun:
    return StoredRun(
        row["run"], row["seed"], row["problem"], row["source"], row["subsolver"], json.loads(row["settings"]),
        row["settings_file"], json.loads(row["settings_table"]), json.loads(row["versions"]), row["rows_kept"],
        row["status"], row["message"],
    )  # fmt: skip


def _snapshot(row: sqlite3.Row, problem: Problem) -> Snapshot:
    size = len(problem)
    spins = unpacked_rows(row["spins"], size)
    if row["local_fields"] is None:
        local_fields = np.stack([problem.local_fields(own) for own in spins])
    else:
        local_fields = as_f64(row["local_fields"]).reshape(spins.shape)
    return Snapshot(
        round=row["round"], calls=row["calls"], sweeps=row["sweeps"], seconds=row["seconds"], spins=spins,
        local_fields=local_fields, energies=as_f64(row["energies"]), best_energy=row["best_energy"],
        best_spins=unpacked(row["best_spins"], size), elites=unpacked_rows(row["elites"], size),
        counts=np.frombuffer(row["counts"], "<i8").astype(np.int64), details=json.loads(row["details"]),
    )  # fmt: skip


@contextlib.contextmanager
def stored_file(path: Path) -> Iterator[StoredFile]:
    """A run file open for reading within the block."""
    opened = StoredFile(path)
    try:
        yield opened
    finally:
        opened.close()
