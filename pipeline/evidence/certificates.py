"""Certificates and node logs in the run file: plain tables beside those of the run.

``certificates`` has a row for each run that proved a bound; its numbers are in ``certificate_arrays``, by name, as
little-endian bytes with ``dtype`` and ``shape`` (:class:`patchwalk.bounds.certificate.Certificate` says what each
holds). ``nodes`` is the log of branch-and-bound. Functions here take an open connection and leave it open.
"""

from __future__ import annotations

import json
import sqlite3
from collections.abc import Iterable, Mapping
from typing import Any, NamedTuple

import numpy as np
import numpy.typing as npt

from patchwalk.evidence.layout import RunFileError

SCHEMA = """
CREATE TABLE IF NOT EXISTS certificates (
    run INTEGER PRIMARY KEY, fingerprint TEXT, method TEXT, bound REAL
);
CREATE TABLE IF NOT EXISTS certificate_arrays (
    run INTEGER, name TEXT, dtype TEXT, shape TEXT, data BLOB, PRIMARY KEY (run, name)
) WITHOUT ROWID;
CREATE TABLE IF NOT EXISTS nodes (
    run INTEGER, place INTEGER, node INTEGER, depth INTEGER, node_bound REAL, bound REAL, best REAL, gap REAL,
    open_nodes INTEGER, cuts INTEGER, seconds REAL, outcome TEXT, PRIMARY KEY (run, place)
) WITHOUT ROWID;
"""


class StoredCertificate(NamedTuple):
    """A certificate as it stands in the file."""

    fingerprint: str
    method: str
    bound: float
    arrays: dict[str, npt.NDArray[Any]]


def store_certificate(
    database: sqlite3.Connection,
    run: int,
    fingerprint: str,
    method: str,
    bound: float,
    arrays: Mapping[str, npt.NDArray[Any]],
) -> None:
    """Keep the certificate of a run, in place of an earlier one."""
    with database:
        database.executescript(SCHEMA)
        database.execute("INSERT OR REPLACE INTO certificates VALUES (?,?,?,?)", (run, fingerprint, method, bound))
        database.execute("DELETE FROM certificate_arrays WHERE run = ?", (run,))
        rows = []
        for name, array in arrays.items():
            little = np.ascontiguousarray(array, array.dtype.newbyteorder("<"))
            rows.append((run, name, little.dtype.str, json.dumps(array.shape), little.tobytes()))
        database.executemany("INSERT INTO certificate_arrays VALUES (?,?,?,?,?)", rows)


def stored_certificate(database: sqlite3.Connection, run: int) -> StoredCertificate | None:
    """The certificate of a run, or None where there is none.

    Raises :class:`~patchwalk.evidence.layout.RunFileError` where its bound is no number, or an array's bytes do not fit
    its type and shape.
    """
    if not _has_tables(database):
        return None
    row = database.execute("SELECT fingerprint, method, bound FROM certificates WHERE run = ?", (run,)).fetchone()
    if row is None:
        return None
    columns = database.execute(
        "SELECT name, dtype, shape, data FROM certificate_arrays WHERE run = ? ORDER BY name", (run,)
    )
    try:
        arrays = {name: _array(dtype, shape, data) for name, dtype, shape, data in columns}
        return StoredCertificate(row[0], row[1], float(row[2]), arrays)
    except (TypeError, ValueError) as error:
        path = database.execute("PRAGMA database_list").fetchone()[2]
        raise RunFileError(f"{path}: the certificate of run {run} is damaged: {error}") from error


def _array(dtype: str, shape: str, data: bytes) -> npt.NDArray[Any]:
    """An array of numbers from its bytes."""
    if np.dtype(dtype).kind not in "iuf":
        raise ValueError(f"an array of type {dtype} holds no plain numbers")
    return np.frombuffer(data, np.dtype(dtype)).reshape(json.loads(shape))


def store_node_log(database: sqlite3.Connection, run: int, lines: Iterable[tuple[Any, ...]]) -> None:
    """Keep the node log of a run: the columns of ``nodes`` from ``node`` on, in order."""
    with database:
        database.executescript(SCHEMA)
        rows = [(run, place, *line) for place, line in enumerate(lines)]
        database.executemany(f"INSERT OR REPLACE INTO nodes VALUES ({','.join('?' * 12)})", rows)


def _has_tables(database: sqlite3.Connection) -> bool:
    found = database.execute("SELECT count(*) FROM sqlite_master WHERE name = 'certificates'").fetchone()[0]
    return bool(found)
