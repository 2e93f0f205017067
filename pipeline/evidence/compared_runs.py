"""Whole runs of a comparison in one run file: carried over from the file of one run, and what names them.

Every run is carried out into a file of its own, by whichever worker, and handed on as that file's bytes; the rows are
then taken over under a new run number, in one transaction. A run is named by the instance, the contender, the seed
and all its settings, so that a comparison that is begun again finds what is finished.
"""

from __future__ import annotations

import contextlib
import json
import sqlite3
import tempfile
from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from patchwalk.evidence.layout import RunFileError
from patchwalk.evidence.runfile import RunFile
from patchwalk.evidence.stored import stored_file

TABLE = """
CREATE TABLE IF NOT EXISTS compared_runs (
    run INTEGER PRIMARY KEY, instance TEXT, contender TEXT, seed INTEGER, identity TEXT UNIQUE, unit TEXT, budget REAL
);
"""
KEPT_APART = ("about", "problems", "compared_runs", "sqlite_sequence")
"""Tables that no run owns."""


@dataclass(frozen=True)
class ComparedRun:
    """One whole run: who, on what, from which seed; ``identity`` is a digest of all that decides it."""

    instance: str
    contender: str
    seed: int
    identity: str
    unit: str
    budget: float


@dataclass(frozen=True)
class FinishedRun:
    """What a comparison needs of a run that is over: energies of ``improvements`` and the share of work behind each.

    ``spins`` is the number of spins of its problem; ``shares`` run from 0 to 1 of the budget, or are seconds where
    the budget is in seconds.
    """

    run: ComparedRun
    problem: str
    spins: int
    energy: float
    calls: int
    failed_calls: int
    seconds: float
    improvements: tuple[float, ...]
    shares: tuple[float, ...]


@contextlib.contextmanager
def comparison_file(path: Path) -> Iterator[sqlite3.Connection]:
    """A run file for compared runs, made or gone on with, open within the block; one that stays empty is removed."""
    if path.exists():
        with stored_file(path):  # says in words what is wrong with a file that is none of ours
            pass
    file = RunFile(path, reopen=path.exists())
    try:
        file.database.executescript(TABLE)
        yield file.database
    finally:
        file.close()


def finished_identities(database: sqlite3.Connection) -> set[str]:
    """Which runs are there, whole."""
    return {row[0] for row in database.execute("SELECT identity FROM compared_runs")}


def take_over(database: sqlite3.Connection, compared: ComparedRun, bytes_of_file: bytes) -> None:
    """Add the one run of a run file, given as bytes, under a new number; all of it or nothing."""
    with tempfile.TemporaryDirectory() as folder:
        path = Path(folder) / "run.sqlite"
        path.write_bytes(bytes_of_file)
        try:
            database.execute("ATTACH ? AS one", (str(path),))
            try:
                with database:
                    _copy(database, compared)
            finally:
                database.execute("DETACH one")
        except sqlite3.Error as error:
            raise RunFileError(f"a finished run could not be written into the run file: {error}") from error


def _copy(database: sqlite3.Connection, compared: ComparedRun) -> None:
    database.execute("BEGIN")
    number = database.execute("SELECT coalesce(max(run), 0) + 1 FROM main.runs").fetchone()[0]
    database.execute("INSERT OR IGNORE INTO main.problems SELECT * FROM one.problems")
    schemas = dict(database.execute("SELECT name, sql FROM one.sqlite_master WHERE type = 'table'"))
    ours = {row[0] for row in database.execute("SELECT name FROM main.sqlite_master WHERE type = 'table'")}
    for table in sorted(set(schemas) - set(KEPT_APART)):
        if table not in ours:
            database.execute(schemas[table])
        columns = [row[1] for row in database.execute(f"PRAGMA one.table_info({table})")]
        others = ", ".join(column for column in columns if column != "run")
        database.execute(f"INSERT INTO main.{table} (run, {others}) SELECT ?, {others} FROM one.{table}", (number,))
    database.execute(
        "INSERT INTO compared_runs VALUES (?,?,?,?,?,?,?)",
        (
            number, compared.instance, compared.contender, compared.seed, compared.identity, compared.unit,
            compared.budget,
        ),
    )  # fmt: skip


def finished_runs(database: sqlite3.Connection, identities: Mapping[str, Any]) -> list[FinishedRun]:
    """The runs of these identities, in the order they were given."""
    query = (
        "SELECT compared_runs.*, problem, spins_of.spins AS size, energy, calls, failed_calls, sweeps, seconds "
        "FROM compared_runs JOIN runs USING (run) JOIN problems AS spins_of ON runs.problem = fingerprint "
        "WHERE identity = ?"
    )
    cursor = database.cursor()
    cursor.row_factory = sqlite3.Row
    found = (cursor.execute(query, (identity,)).fetchone() for identity in identities)
    return [_finished(database, row) for row in found if row is not None]


def _finished(database: sqlite3.Connection, row: sqlite3.Row) -> FinishedRun:
    rows = database.execute(
        "SELECT energy, calls, sweeps, seconds FROM incumbents WHERE run = ? ORDER BY energy DESC", (row["run"],)
    ).fetchall()
    in_seconds = row["unit"] == "seconds"
    spent = [(seconds if in_seconds else _share(calls, sweeps, row)) for _, calls, sweeps, seconds in rows]
    return FinishedRun(
        ComparedRun(*(row[name] for name in ("instance", "contender", "seed", "identity", "unit", "budget"))),
        row["problem"], row["size"], row["energy"], row["calls"], row["failed_calls"], row["seconds"],
        tuple(energy for energy, *_ in rows), tuple(spent),
    )  # fmt: skip


def _share(calls: int, sweeps: int, row: sqlite3.Row) -> float:
    """The share of a run's work that was done: by its calls, or by its sweeps where it made none."""
    total, done = (row["calls"], calls) if row["calls"] else (row["sweeps"], sweeps)
    return min(1.0, done / total) if total else 1.0


def digest_text(facts: Mapping[str, Any]) -> str:
    """Everything that decides a run as text, the same whatever order it was given in."""
    return json.dumps(facts, sort_keys=True, default=str)
