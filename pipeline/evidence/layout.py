"""The layout of a run file, and how arrays are written into it.

Arrays are little-endian bytes: ``members`` int32, ``boundary_fields`` float64, ``spins_before`` and ``proposal`` int8
(the shot taken). Spins of checkpoints and answers are bits (1 for -1, first spin in the lowest bit of the first byte;
several configurations one after the other, each beginning with a byte of its own), ``energies`` and ``local_fields``
float64, ``counts`` int64, measured series float64 (rounds, copies). A problem's ``arrays`` are a zipped numpy archive.
"""

from __future__ import annotations

import contextlib
import io
import zipfile
import zlib
from collections.abc import Iterator
from pathlib import Path

import numpy as np

from patchwalk.problem.ising import Problem
from patchwalk.subsolvers.contract import F64, I8, WORK_FIELDS

LAYOUT = 2

WORK_COLUMNS = ", ".join(
    f"{name} REAL" if name.endswith(("_s", "_time")) else f"{name} INTEGER" for name in WORK_FIELDS
)

SCHEMA = f"""
CREATE TABLE about (key TEXT PRIMARY KEY, value TEXT) WITHOUT ROWID;
CREATE TABLE problems (
    fingerprint TEXT PRIMARY KEY, source TEXT, kind TEXT, spins INTEGER, couplings INTEGER, offset REAL, summary TEXT,
    arrays BLOB
);
CREATE TABLE runs (
    run INTEGER PRIMARY KEY, problem TEXT REFERENCES problems, seed INTEGER, subsolver TEXT, settings TEXT,
    settings_file TEXT, settings_table TEXT, versions TEXT, rows_kept TEXT, begun TEXT, status TEXT, message TEXT,
    energy REAL, objective REAL, lower_bound REAL, calls INTEGER, failed_calls INTEGER, skipped INTEGER,
    sweeps INTEGER, seconds REAL, compile_seconds REAL, spins BLOB
);
CREATE TABLE groups (
    run INTEGER, number INTEGER, first_round INTEGER, last_round INTEGER, calls INTEGER, rows INTEGER, stages BLOB,
    PRIMARY KEY (run, number)
) WITHOUT ROWID;
CREATE TABLE checkpoints (
    run INTEGER, round INTEGER, calls INTEGER, sweeps INTEGER, seconds REAL, replicas INTEGER, energies BLOB,
    spins BLOB, local_fields BLOB, best_energy REAL, best_spins BLOB, elites BLOB, counts BLOB, details TEXT,
    PRIMARY KEY (run, round)
);
CREATE TABLE incumbents (
    run INTEGER, energy REAL, finder TEXT, round INTEGER, calls INTEGER, sweeps INTEGER, seconds REAL
);
CREATE TABLE calls (
    run INTEGER, round INTEGER, replica INTEGER, place INTEGER, seed INTEGER, stage REAL, temperature REAL, rule TEXT,
    subsolver TEXT, k INTEGER, members BLOB, boundary_fields BLOB, spins_before BLOB, proposal BLOB, log_ratio REAL,
    energy_before REAL, change REAL, accepted INTEGER, hit_probability REAL, noiseless_hit REAL, seconds REAL,
    status INTEGER, message TEXT,
    {WORK_COLUMNS}
);
CREATE TABLE tallies (
    run INTEGER, subsolver TEXT, rule TEXT, k INTEGER, tenth INTEGER, calls INTEGER, accepted INTEGER, moved INTEGER,
    improved INTEGER, fall REAL, rise REAL, seconds REAL, PRIMARY KEY (run, subsolver, rule, k, tenth)
) WITHOUT ROWID;
CREATE TABLE measurements (
    run INTEGER, temperature REAL, copies INTEGER, energies BLOB, magnetisations BLOB, overlaps BLOB,
    PRIMARY KEY (run, temperature)
) WITHOUT ROWID;
CREATE TABLE replays (
    run INTEGER, rival TEXT, round INTEGER, replica INTEGER, place INTEGER, weight REAL, exact INTEGER,
    mean_drop REAL, drop_error REAL, mean_fall REAL, improve_probability REAL, hit_probability REAL, seconds REAL,
    status INTEGER, message TEXT, {WORK_COLUMNS}, PRIMARY KEY (run, rival, round, replica, place)
) WITHOUT ROWID;
CREATE TABLE sweep_curves (
    run INTEGER, round INTEGER, replica INTEGER, place INTEGER, budget_s REAL, sweeps REAL, mean_drop REAL,
    drop_error REAL, PRIMARY KEY (run, round, replica, place, budget_s)
) WITHOUT ROWID;
CREATE TABLE kept_answers (run INTEGER, seed INTEGER, answer BLOB, PRIMARY KEY (run, seed)) WITHOUT ROWID;
CREATE INDEX calls_by_run ON calls (run, round, replica, place);
"""

CALL_COLUMNS = 23 + len(WORK_FIELDS)
INSERT_CALL = f"INSERT INTO calls VALUES ({','.join('?' * CALL_COLUMNS)})"


class RunFileError(Exception):
    """A run file that cannot be made, written or read; the message names it and the way out."""


@contextlib.contextmanager
def undamaged(path: Path, what: str) -> Iterator[None]:
    """Bytes of a run file are read within the block; raises :class:`RunFileError` where they are not as written."""
    try:
        yield
    except (ValueError, TypeError, IndexError) as error:
        raise RunFileError(f"{path}: {what} is damaged: {error}") from error


def packed(spins: I8) -> bytes:
    """Spins (n,) or (R, n) as bits, 1 for -1.

    >>> packed(np.array([1, -1, -1], np.int8))
    b'\\x06'
    """
    return np.packbits(spins < 0, axis=-1, bitorder="little").tobytes()


def unpacked(blob: bytes, size: int) -> I8:
    """The ``size`` spins behind :func:`packed`."""
    return unpacked_rows(blob, size)[0]


def unpacked_rows(blob: bytes, size: int) -> I8:
    """The configurations (R, size) behind :func:`packed`."""
    words = np.frombuffer(blob, np.uint8).reshape(-1, -(-size // 8))
    bits = np.unpackbits(words, axis=-1, count=size, bitorder="little")
    return 1 - 2 * bits.astype(np.int8)


def problem_blob(problem: Problem) -> bytes:
    """Couplings, fields, offset and groups of a problem, zipped."""
    memory = io.BytesIO()
    np.savez_compressed(
        memory, row_starts=problem.row_starts, neighbours=problem.neighbours, couplings=problem.couplings,
        fields=problem.fields, offset=np.array(problem.offset),
        group_sizes=np.array([len(group) for group in problem.groups], np.int64),
        group_members=np.concatenate([np.empty(0, np.int32), *problem.groups]),
    )  # fmt: skip
    return memory.getvalue()


def problem_from_blob(blob: bytes, kind: str) -> Problem:
    """The problem behind :func:`problem_blob`, without names; raises :class:`RunFileError` for a damaged one."""
    try:
        with np.load(io.BytesIO(blob), allow_pickle=False) as arrays:
            bounds = np.cumsum(arrays["group_sizes"])[:-1]
            groups = np.split(arrays["group_members"], bounds) if len(arrays["group_sizes"]) else []
            return Problem(
                row_starts=arrays["row_starts"], neighbours=arrays["neighbours"], couplings=arrays["couplings"],
                fields=arrays["fields"], offset=float(arrays["offset"]), kind=kind,
                groups=tuple(groups),
            )  # fmt: skip
    except (ValueError, TypeError, KeyError, OSError, EOFError, zlib.error, zipfile.BadZipFile) as error:
        raise RunFileError(f"the problem inside is damaged: {error}") from error


def follow_from_spins(problem: Problem) -> bool:
    """Whether local fields follow from the spins to the last bit, because every sum of couplings is exact.

    That is so where couplings and fields are multiples of one power of two and their sums stay far below 2^53 of it.
    """
    values = np.concatenate([problem.couplings, problem.fields])
    largest = float(np.abs(values).max(initial=0.0)) * (len(problem) + 1)
    return largest < 2.0**40 and bool(np.all(values * 1024.0 == np.round(values * 1024.0)))


def as_f64(blob: bytes) -> F64:
    """A writable f64 array from its bytes."""
    return np.frombuffer(blob, "<f8").astype(np.float64)
