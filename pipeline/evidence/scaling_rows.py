"""The table of scaling measurements in a run file: one row per instance, size and subsolver, all numbers raw."""

from __future__ import annotations

import contextlib
import csv
import sqlite3
from collections.abc import Iterable, Iterator, Sequence
from dataclasses import astuple, dataclass, fields
from pathlib import Path
from typing import Any

from patchwalk.evidence.layout import RunFileError
from patchwalk.evidence.runfile import RunFile
from patchwalk.evidence.stored import stored_file

TABLE = """
CREATE TABLE IF NOT EXISTS scaling_setup (key TEXT PRIMARY KEY, value TEXT) WITHOUT ROWID;
CREATE TABLE IF NOT EXISTS scaling_rows (
    size INTEGER, instance INTEGER, subsolver TEXT, origin TEXT, success REAL, exact INTEGER, shots INTEGER,
    guess REAL, seconds_priced REAL, amplitude_updates REAL, spin_updates REAL, energies REAL, table_entries REAL,
    status INTEGER, message TEXT, PRIMARY KEY (size, instance, subsolver)
) WITHOUT ROWID;
"""


@dataclass(frozen=True)
class ScalingRow:
    """One call on one instance.

    ``success`` is the probability that one shot lands in any minimum: exact, or the share of ``shots`` that did.
    ``guess`` is the share of minima among all configurations, g/2^k. Work is counted per shot; ``seconds_priced`` is
    its price at the fixed prices of cost.py. ``origin`` names the problem it was cut from.
    """

    size: int
    instance: int
    subsolver: str
    origin: str
    success: float
    exact: bool
    shots: int
    guess: float
    seconds_priced: float
    amplitude_updates: float
    spin_updates: float
    energies: float
    table_entries: float
    status: int
    message: str


COLUMNS = tuple(field.name for field in fields(ScalingRow))


@contextlib.contextmanager
def scaling_file(path: Path, setup: dict[str, str]) -> Iterator[sqlite3.Connection]:
    """A run file for measurements, made or gone on with, open within the block."""
    if path.exists():
        with stored_file(path):  # says in words what is wrong with a file that is none of ours
            pass
    file = RunFile(path, reopen=path.exists())
    try:
        open_rows(file.database, path, setup)
        yield file.database
    finally:
        file.database.close()


def open_rows(database: sqlite3.Connection, path: Path, setup: dict[str, str]) -> None:
    """Make the tables, or check that those there were made by the same setup; raises :class:`RunFileError`."""
    with database:
        database.executescript(TABLE)
        kept = dict(database.execute("SELECT key, value FROM scaling_setup"))
        for key in sorted(setup):
            if kept and kept.get(key) != setup[key]:
                raise RunFileError(
                    f"{path}: was measured with {key} {kept.get(key, 'left out')}, not {setup[key]}; give the same, or "
                    "another --run"
                )
        database.executemany("INSERT OR IGNORE INTO scaling_setup VALUES (?,?)", setup.items())


def add_rows(database: sqlite3.Connection, rows: Iterable[ScalingRow]) -> None:
    """Keep measured rows, in one transaction."""
    marks = ",".join("?" * len(COLUMNS))
    with database:
        database.executemany(f"INSERT OR REPLACE INTO scaling_rows VALUES ({marks})", [astuple(row) for row in rows])


def stored_rows(database: sqlite3.Connection, size: int, subsolver: str) -> dict[int, ScalingRow]:
    """Rows measured already, by instance."""
    query = f"SELECT {', '.join(COLUMNS)} FROM scaling_rows WHERE size = ? AND subsolver = ? ORDER BY instance"
    return {row[1]: _row(row) for row in database.execute(query, (size, subsolver))}


def all_rows(database: sqlite3.Connection) -> list[ScalingRow]:
    """Everything measured, by size, instance and subsolver."""
    query = f"SELECT {', '.join(COLUMNS)} FROM scaling_rows ORDER BY size, instance, subsolver"
    return [_row(row) for row in database.execute(query)]


def write_csv(path: Path, rows: Sequence[ScalingRow]) -> None:
    """The raw numbers as a table with a header."""
    with path.open("w", newline="", encoding="utf-8") as file:
        writer = csv.writer(file)
        writer.writerow(COLUMNS)
        writer.writerows([astuple(row) for row in rows])


def _row(values: Sequence[Any]) -> ScalingRow:
    """Numbers that SQLite kept as NULL are nan again."""
    row = dict(zip(COLUMNS, values, strict=True))
    numbers = ("success", "guess", "seconds_priced", "amplitude_updates", "spin_updates", "energies", "table_entries")
    row.update({name: float("nan") if row[name] is None else row[name] for name in numbers})
    return ScalingRow(**{**row, "exact": bool(row["exact"])})
