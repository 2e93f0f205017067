"""The series that a sampling run measures, in its run file: part by part while it goes on, then one a temperature.

``measured_parts`` holds what was measured between two checkpoints, written together with the second one, so that a run
that was killed goes on from both; ``measurements`` holds the whole, once a run has come to an end.
"""

from __future__ import annotations

import sqlite3
from collections.abc import Iterable
from typing import NamedTuple

from patchwalk.evidence.stored import StoredFile

PARTS = """
CREATE TABLE IF NOT EXISTS measured_parts (
    run INTEGER, first INTEGER, energies BLOB, magnetisations BLOB, overlaps BLOB, PRIMARY KEY (run, first)
) WITHOUT ROWID
"""


class MeasuredPart(NamedTuple):
    """Measurements from number ``first`` on, as bytes of float64: (N, L, C) each, ``overlaps`` (N, L)."""

    first: int
    energies: bytes
    magnetisations: bytes
    overlaps: bytes


class Measured(NamedTuple):
    """The series measured at one temperature, as bytes of float64: energies and mean spins (rounds, copies)."""

    temperature: float
    copies: int
    energies: bytes
    magnetisations: bytes
    overlaps: bytes


def write_part(database: sqlite3.Connection, run: int, part: MeasuredPart) -> None:
    """Add what was measured since the last checkpoint, inside the transaction of the next one."""
    database.execute(PARTS)
    database.execute("INSERT OR REPLACE INTO measured_parts VALUES (?,?,?,?,?)", (run, *part))


def write_series(database: sqlite3.Connection, run: int, series: Iterable[Measured], ended: bool) -> None:
    """Write everything measured so far; the parts of a run that has ``ended`` are needed no longer."""
    database.executemany("INSERT OR REPLACE INTO measurements VALUES (?,?,?,?,?,?)", [(run, *one) for one in series])
    if ended:
        database.execute(PARTS)
        database.execute("DELETE FROM measured_parts WHERE run = ?", (run,))


def stored_parts(file: StoredFile, run: int) -> list[MeasuredPart]:
    """The parts of a run in order; none where it has ended, or never came to its first checkpoint."""
    if next(file.rows("SELECT 1 FROM sqlite_master WHERE name = 'measured_parts'"), None) is None:
        return []
    query = "SELECT first, energies, magnetisations, overlaps FROM measured_parts WHERE run = ? ORDER BY first"
    return [MeasuredPart(*row) for row in file.rows(query, (run,))]


def stored_series(file: StoredFile, run: int) -> list[Measured]:
    """The series of a run that has come to an end, hottest first."""
    query = (
        "SELECT temperature, copies, energies, magnetisations, overlaps FROM measurements WHERE run = ? "
        "ORDER BY temperature DESC"
    )
    return [Measured(*row) for row in file.rows(query, (run,))]
