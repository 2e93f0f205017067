"""The run file: one SQLite database that holds what happened, call by call, and that any tool can open.

Rows are gathered in memory and written group by group: one transaction closes a group of rounds (at most about a
second or 10 MB of rows) together with a checkpoint of the state behind it. A process killed at any moment therefore
leaves a file that holds every closed group, whole, and nothing of the open one.

Arrays are stored as little-endian bytes: ``members`` int32, ``boundary_fields`` float64, ``spins_before`` and
``proposal`` int8 (the shot taken), checkpointed spins as bits (1 for -1, first spin in the lowest bit of the first
byte).
"""

from __future__ import annotations

import contextlib
import json
import platform
import sqlite3
import sys
import time
from collections.abc import Iterable, Iterator, Mapping
from datetime import UTC, datetime
from importlib.metadata import version
from pathlib import Path
from typing import Any

import numpy as np

from patchwalk.cost import DEAR_SECONDS, priced
from patchwalk.engine import forecast_of
from patchwalk.problem.ising import Problem
from patchwalk.records import Calls, Improvement, Round, Snapshot
from patchwalk.subsolvers.contract import WORK_FIELDS, ClusterBatch, Status, Subsolver
from patchwalk.subsolvers.draws import one_in

LAYOUT = 1
GROUP_SECONDS = 1.0
GROUP_BYTES = 10_000_000
SHARE_OF_CHEAP_ROWS = 64
"""One cheap call in this many, chosen by its seed, has a row of its own."""

SHARE_WORD = 0x7368617265000000

SCHEMA = f"""
CREATE TABLE about (key TEXT PRIMARY KEY, value TEXT) WITHOUT ROWID;
CREATE TABLE problems (
    fingerprint TEXT PRIMARY KEY, source TEXT, kind TEXT, spins INTEGER, couplings INTEGER, offset REAL, summary TEXT
);
CREATE TABLE runs (
    run INTEGER PRIMARY KEY, problem TEXT REFERENCES problems, seed INTEGER, subsolver TEXT, settings TEXT,
    versions TEXT, rows_kept TEXT, begun TEXT, status TEXT, message TEXT, energy REAL, objective REAL, calls INTEGER,
    failed_calls INTEGER, sweeps INTEGER, seconds REAL, compile_seconds REAL, spins BLOB
);
CREATE TABLE groups (
    run INTEGER, number INTEGER, first_round INTEGER, last_round INTEGER, calls INTEGER, rows INTEGER, stages BLOB,
    PRIMARY KEY (run, number)
) WITHOUT ROWID;
CREATE TABLE checkpoints (
    run INTEGER, round INTEGER, calls INTEGER, sweeps INTEGER, energy REAL, best_energy REAL, spins BLOB,
    best_spins BLOB, local_fields BLOB, PRIMARY KEY (run, round)
);
CREATE TABLE incumbents (
    run INTEGER, energy REAL, finder TEXT, round INTEGER, calls INTEGER, sweeps INTEGER, seconds REAL
);
CREATE TABLE calls (
    run INTEGER, round INTEGER, place INTEGER, replica INTEGER, seed INTEGER, stage REAL, temperature REAL, rule TEXT,
    k INTEGER, members BLOB, boundary_fields BLOB, spins_before BLOB, proposal BLOB, log_ratio REAL, energy_before REAL,
    change REAL, accepted INTEGER, hit_probability REAL, noiseless_hit REAL, seconds REAL, status INTEGER, message TEXT,
    {", ".join(f"{name} REAL" if name.endswith(("_s", "_time")) else f"{name} INTEGER" for name in WORK_FIELDS)}
);
CREATE TABLE tallies (
    run INTEGER, rule TEXT, k INTEGER, tenth INTEGER, calls INTEGER, accepted INTEGER, moved INTEGER, improved INTEGER,
    fall REAL, rise REAL, seconds REAL, PRIMARY KEY (run, rule, k, tenth)
) WITHOUT ROWID;
CREATE INDEX calls_by_run ON calls (run, round, place);
"""

CALL_COLUMNS = 22 + len(WORK_FIELDS)
INSERT_CALL = f"INSERT INTO calls VALUES ({','.join('?' * CALL_COLUMNS)})"


class RunFileError(Exception):
    """A run file that cannot be made or written; the message names it and the way out."""


class RunFile:
    """A run file being written. Make one, then call :meth:`begin` once per run."""

    def __init__(self, path: Path) -> None:
        self.path = path
        if path.exists():
            raise RunFileError(f"{path} is there already and is left as it is; give another name with --run")
        try:
            path.parent.mkdir(parents=True, exist_ok=True)
            self._database = sqlite3.connect(path, isolation_level=None)
            self._database.execute("PRAGMA journal_mode = WAL")
            self._database.execute("PRAGMA synchronous = NORMAL")
            self._database.executescript(f"BEGIN; {SCHEMA} COMMIT;")
        except (OSError, sqlite3.Error) as error:
            raise RunFileError(
                f"cannot write the run file {path}: {error}; give a writable place with --run FILE"
            ) from error
        self._tell(layout=str(LAYOUT), made_by=f"patchwalk {version('patchwalk')}")

    def begin(
        self,
        problem: Problem,
        subsolver: Subsolver,
        spelling: str,
        rule: str,
        seed: int,
        settings: Mapping[str, Any],
        source: str,
        rows: str,
    ) -> RunWriter:
        """A writer for one run; ``rows`` says which calls get a row: ``all``, ``share`` or ``auto`` (by price)."""
        database = self._database
        with database:
            database.execute("BEGIN")
            database.execute(
                "INSERT OR IGNORE INTO problems VALUES (?,?,?,?,?,?,?)",
                (
                    problem.fingerprint, source, problem.kind, len(problem), problem.coupling_count, problem.offset,
                    problem.summary(),
                ),
            )  # fmt: skip
            run = database.execute(
                "INSERT INTO runs (problem, seed, subsolver, settings, versions, rows_kept, begun, status) "
                "VALUES (?,?,?,?,?,?,?,'running')",
                (
                    problem.fingerprint, seed, spelling, json.dumps(settings, default=str), json.dumps(versions()),
                    rows, datetime.now(UTC).isoformat(timespec="seconds"),
                ),
            ).lastrowid  # fmt: skip
        assert run is not None
        return RunWriter(self.path, database, run, subsolver, rule, rows)

    def close(self) -> None:
        """Fold the write-ahead log into the file and let go of it; a file that holds no run is removed."""
        empty = self._database.execute("SELECT count(*) FROM runs").fetchone()[0] == 0
        self._database.close()
        if empty:
            self.path.unlink(missing_ok=True)

    def _tell(self, **facts: str) -> None:
        with self._database:
            self._database.executemany("INSERT OR REPLACE INTO about VALUES (?,?)", facts.items())


class RunWriter:
    """Writes the rounds of one run, a group at a time."""

    def __init__(
        self, path: Path, database: sqlite3.Connection, run: int, subsolver: Subsolver, rule: str, rows: str
    ) -> None:
        self.path = path
        self.run, self.rows_written = run, 0
        self._database, self._subsolver, self._rule = database, subsolver, rule
        self._rows_wanted: str | None = None if rows == "auto" else rows
        self._group = 0
        self._start_group()

    def add(self, round_: Round) -> None:
        """Take one round in; nothing is written before the group closes."""
        if not self._stages:
            self._first_round = round_.number
        self._last_round = round_.number
        self._stages.append(round_.stage)
        self._improvements.extend(round_.improvements)
        for calls in round_.calls:
            self._calls += len(calls)
            self._take(round_, calls)

    def add_improvements(self, improvements: Iterable[Improvement]) -> None:
        """Take in new best energies found outside a round."""
        self._improvements.extend(improvements)

    @property
    def due(self) -> bool:
        """Whether the open group has lasted long enough or grown large enough to be closed."""
        return self._bytes > GROUP_BYTES or time.perf_counter() - self._opened > GROUP_SECONDS

    def close_group(self, state: Snapshot) -> None:
        """Write everything taken in since the last group, and the state behind it, in one transaction.

        Raises :class:`RunFileError` where the disk is full or gone; what was closed before stays.
        """
        with self._writing() as database:
            database.execute("BEGIN")
            database.executemany(INSERT_CALL, self._rows)
            for key, tally in self._tallies.items():
                self._add_tally(key, tally)
            database.executemany(
                "INSERT INTO incumbents VALUES (?,?,?,?,?,?,?)",
                [(self.run, i.energy, i.finder, i.round, i.calls, i.sweeps, i.seconds) for i in self._improvements],
            )
            if self._stages:
                stages = np.array(self._stages, "<f8").tobytes()
                database.execute(
                    "INSERT INTO groups VALUES (?,?,?,?,?,?,?)",
                    (self.run, self._group, self._first_round, self._last_round, self._calls, len(self._rows), stages),
                )
            self._checkpoint(state)
        self.rows_written += len(self._rows)
        self._group += 1
        self._start_group()

    def finish(self, state: Snapshot, **facts: Any) -> None:
        """Close the last group and write how the run ended; ``facts`` are columns of ``runs``."""
        self.close_group(state)
        columns = ", ".join(f"{name} = ?" for name in facts)
        with self._writing() as database:
            database.execute(
                f"UPDATE runs SET {columns}, spins = ? WHERE run = ?",
                (*facts.values(), packed(state.best_spins), self.run),
            )

    @contextlib.contextmanager
    def _writing(self) -> Iterator[sqlite3.Connection]:
        try:
            with self._database:
                yield self._database
        except sqlite3.Error as error:
            raise RunFileError(f"the run file {self.path} could not be written any further: {error}") from error

    def _start_group(self) -> None:
        self._opened, self._bytes, self._calls = time.perf_counter(), 0, 0
        self._first_round = self._last_round = 0
        self._rows: list[tuple[Any, ...]] = []
        self._stages: list[float] = []
        self._improvements: list[Improvement] = []
        self._tallies: dict[tuple[str, int, int], np.typing.NDArray[np.float64]] = {}

    def _take(self, round_: Round, calls: Calls) -> None:
        if self._rows_wanted is None:
            self._rows_wanted = "all" if _is_dear(self._subsolver, calls.batch) else "share"
        kept = np.ones(len(calls), np.bool_)
        if self._rows_wanted == "share":
            kept = one_in(SHARE_OF_CHEAP_ROWS, calls.batch.seeds, SHARE_WORD) | (calls.proposals.status != Status.OK)
            self._tally(round_, calls, ~kept)
        fresh = list(self._rows_of(round_, calls, np.flatnonzero(kept)))
        self._rows.extend(fresh)
        self._bytes += len(fresh) * (200 + 14 * calls.batch.size)

    def _rows_of(self, round_: Round, calls: Calls, kept: np.typing.NDArray[np.intp]) -> Iterable[tuple[Any, ...]]:
        batch, answer = calls.batch, calls.proposals
        size, count = batch.size, len(kept)
        seconds = calls.seconds / len(calls)
        proposal = np.ascontiguousarray(answer.outcomes[kept, calls.chosen[kept]])
        columns: list[Iterable[Any]] = [
            [self.run] * count,
            [round_.number] * count,
            (kept + calls.first_index).tolist(),
            [0] * count,
            batch.seeds[kept].tolist(),
            [round_.stage] * count,
            batch.temperature[kept].tolist(),
            [self._rule] * count,
            [size] * count,
            _blobs(calls.members[kept].astype("<i4", copy=False)),
            _blobs(batch.fields[kept].astype("<f8", copy=False)),
            _blobs(batch.spins[kept]),
            _blobs(proposal),
            _column(answer.log_ratio, kept),
            calls.energy_before[kept].tolist(),
            calls.change[kept].tolist(),
            calls.accepted[kept].astype(int).tolist(),
            _column(answer.hit_probability, kept),
            _column(answer.noiseless_hit, kept),
            [seconds] * count,
            answer.status[kept].tolist(),
            [answer.messages[row] for row in kept],
        ]
        columns.extend(_column(getattr(answer.work, name), kept) for name in WORK_FIELDS)
        return zip(*columns, strict=True)

    def _tally(self, round_: Round, calls: Calls, rest: np.typing.NDArray[np.bool_]) -> None:
        """Add the calls that get no row of their own to the exact tallies."""
        key = (self._rule, calls.batch.size, min(9, int(10 * round_.stage)))
        accepted, change = calls.accepted & rest, calls.change
        fall, rise = accepted & (change < 0), accepted & (change > 0)
        chosen = calls.proposals.outcomes[np.arange(len(calls)), calls.chosen]
        moved = accepted & np.any(chosen != calls.batch.spins, axis=1)
        tally = self._tallies.setdefault(key, np.zeros(7))
        tally += [
            rest.sum(), accepted.sum(), moved.sum(), fall.sum(), -change[fall].sum(), change[rise].sum(),
            calls.seconds * rest.mean(),
        ]  # fmt: skip

    def _add_tally(self, key: tuple[str, int, int], tally: np.typing.NDArray[np.float64]) -> None:
        counts = [int(count) for count in tally[:4]]
        self._database.execute(
            "INSERT INTO tallies VALUES (?,?,?,?,?,?,?,?,?,?,?) ON CONFLICT DO UPDATE SET "
            "calls = calls + excluded.calls, accepted = accepted + excluded.accepted, moved = moved + excluded.moved, "
            "improved = improved + excluded.improved, fall = fall + excluded.fall, rise = rise + excluded.rise, "
            "seconds = seconds + excluded.seconds",
            (self.run, *key, *counts, *tally[4:].tolist()),
        )

    def _checkpoint(self, state: Snapshot) -> None:
        """Keep the state; local fields, bit for bit, only of the newest one."""
        self._database.execute(
            "UPDATE checkpoints SET local_fields = NULL WHERE run = ? AND local_fields IS NOT NULL", (self.run,)
        )
        self._database.execute(
            "INSERT OR REPLACE INTO checkpoints VALUES (?,?,?,?,?,?,?,?,?)",
            (
                self.run, state.round, state.calls, state.sweeps, state.energy, state.best_energy, packed(state.spins),
                packed(state.best_spins), state.local_fields.astype("<f8", copy=False).tobytes(),
            ),
        )  # fmt: skip


def packed(spins: np.typing.NDArray[np.int8]) -> bytes:
    """Spins as bits, 1 for -1.

    >>> packed(np.array([1, -1, -1], np.int8))
    b'\\x06'
    """
    return np.packbits(spins < 0, bitorder="little").tobytes()


def unpacked(blob: bytes, size: int) -> np.typing.NDArray[np.int8]:
    """The ``size`` spins behind :func:`packed`."""
    bits = np.unpackbits(np.frombuffer(blob, np.uint8), count=size, bitorder="little")
    return 1 - 2 * bits.astype(np.int8)


def versions() -> dict[str, str]:
    """What the bits of a run depend on beside its seed: library versions and the kind of processor."""
    names = ("patchwalk", "numpy", "scipy", "numba", "llvmlite")
    import llvmlite.binding as llvm

    found = {name: version(name) for name in names}
    return {
        **found, "python": platform.python_version(), "system": sys.platform, "processor": llvm.get_host_cpu_name()
    }  # fmt: skip


def _is_dear(subsolver: Subsolver, batch: ClusterBatch) -> bool:
    """Whether one call costs more than the limit at the fixed prices: decided once per run, on its first batch."""
    forecast = forecast_of(subsolver, batch)
    return forecast is None or bool(priced(forecast.work, len(batch)).mean() >= DEAR_SECONDS)


def _blobs(rows: np.typing.NDArray[Any]) -> list[bytes]:
    return [row.tobytes() for row in rows]


def _column(values: np.typing.NDArray[Any] | None, kept: np.typing.NDArray[np.intp]) -> list[int | float | None]:
    """A column of plain numbers; nan, which marks a call without a value, is stored as NULL by SQLite itself."""
    if values is None:
        return [None] * len(kept)
    column: list[int | float | None] = values[kept].tolist()
    return column
