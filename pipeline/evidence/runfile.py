"""The run file: one SQLite database that holds what happened, call by call, and that any tool can open.

Rows are gathered in memory and written group by group: one transaction closes a group of rounds (at most about a
second or 10 MB of rows) together with a checkpoint of the state behind it. A process killed at any moment therefore
leaves a file that holds every closed group, whole, and nothing of the open one. :mod:`patchwalk.evidence.layout` states
the tables, :mod:`patchwalk.evidence.stored` reads them.
"""

from __future__ import annotations

import contextlib
import json
import math
import sqlite3
import time
from collections.abc import Iterable, Iterator, Mapping
from dataclasses import dataclass
from datetime import UTC, datetime
from importlib.metadata import version
from pathlib import Path
from typing import Any

import numpy as np

from patchwalk.cost import DEAR_SECONDS, priced
from patchwalk.engine import forecast_of
from patchwalk.evidence.layout import (
    INSERT_CALL,
    LAYOUT,
    SCHEMA,
    RunFileError,
    follow_from_spins,
    packed,
    problem_blob,
)
from patchwalk.evidence.measured import Measured, MeasuredPart, write_part, write_series
from patchwalk.problem.ising import Problem
from patchwalk.records import Calls, Improvement, Round, Snapshot
from patchwalk.subsolvers.contract import WORK_FIELDS, ClusterBatch, Status, Subsolver
from patchwalk.subsolvers.draws import one_in
from patchwalk.subsolvers.registry import spelled
from patchwalk.workers import versions

GROUP_SECONDS = 1.0
GROUP_BYTES = 10_000_000
SHARE_OF_CHEAP_ROWS = 64
"""One cheap call in this many, chosen by its seed, has a row of its own."""

OK = int(Status.OK)
TallyKey = tuple[str, str, int, int]
"""Subsolver, rule, spins in a cluster, tenth of the run."""

SHARE_WORD = 0x7368617265000000


@dataclass(frozen=True, eq=False)
class RunFacts:
    """What is known of a run when it begins.

    ``subsolver`` is spelled as on a command line; ``settings`` are all of them, ``settings_table`` those of the file
    ``settings_file``, if there was one; ``rows`` says which calls get a row: ``all``, ``share`` or ``auto`` (by price).
    """

    problem: Problem
    source: str
    seed: int
    subsolver: str
    settings: Mapping[str, Any]
    settings_file: str
    settings_table: Mapping[str, Any]
    rows: str


class RunFile:
    """A run file being written: a new one, or with ``reopen`` one that is there. Call :meth:`begin` once per run."""

    def __init__(self, path: Path, reopen: bool = False) -> None:
        self.path = path
        if path.exists() != reopen:
            raise RunFileError(
                f"{path}: there is no such run file"
                if reopen
                else f"{path} is there already and is left as it is; give another name with --run"
            )
        try:
            path.parent.mkdir(parents=True, exist_ok=True)
            self.database = sqlite3.connect(path, isolation_level=None)
            self.database.execute("PRAGMA journal_mode = WAL")
            self.database.execute("PRAGMA synchronous = NORMAL")
            if not reopen:
                self.database.executescript(f"BEGIN; {SCHEMA} COMMIT;")
        except (OSError, sqlite3.Error) as error:
            raise RunFileError(
                f"cannot write the run file {path}: {error}; give a writable place with --run FILE"
            ) from error
        if not reopen:
            self._tell(layout=str(LAYOUT), made_by=f"patchwalk {version('patchwalk')}")

    def begin(self, facts: RunFacts, state: Snapshot) -> RunWriter:
        """A writer for one run, whose state before the first round is kept at once."""
        problem = facts.problem
        with self.database:
            self.database.execute("BEGIN")
            self.database.execute(
                "INSERT OR IGNORE INTO problems VALUES (?,?,?,?,?,?,?,?)",
                (
                    problem.fingerprint, facts.source, problem.kind, len(problem), problem.coupling_count,
                    problem.offset, problem.summary(), problem_blob(problem),
                ),
            )  # fmt: skip
            run = self.database.execute(
                "INSERT INTO runs (problem, seed, subsolver, settings, settings_file, settings_table, versions, "
                "rows_kept, begun, status) VALUES (?,?,?,?,?,?,?,?,?,'running')",
                (
                    problem.fingerprint, facts.seed, facts.subsolver, json.dumps(facts.settings, default=str),
                    facts.settings_file, json.dumps(facts.settings_table, default=str), json.dumps(versions()),
                    facts.rows, datetime.now(UTC).isoformat(timespec="seconds"),
                ),
            ).lastrowid  # fmt: skip
        assert run is not None
        writer = RunWriter(self, run, problem, facts.rows)
        writer.close_group(state)
        return writer

    def take_up(self, run: int, problem: Problem, rows: str, state: Snapshot) -> RunWriter:
        """A writer that goes on with a run from its last checkpoint; what was written of later rounds is forgotten."""
        with self.database:
            self.database.execute("BEGIN")
            for table in ("calls", "incumbents", "replays", "sweep_curves"):
                self.database.execute(f"DELETE FROM {table} WHERE run = ? AND round >= ?", (run, state.round))
            self.database.execute("UPDATE runs SET status = 'running', message = NULL WHERE run = ?", (run,))
        return RunWriter(self, run, problem, rows)

    def close(self) -> None:
        """Fold the write-ahead log into the file and let go of it; a file that holds no run is removed."""
        empty = self.database.execute("SELECT count(*) FROM runs").fetchone()[0] == 0
        # the last connection to close would do it, but not where that one may only read; on a full disk the log stays
        with contextlib.suppress(sqlite3.Error):
            self.database.execute("PRAGMA wal_checkpoint(TRUNCATE)")
        self.database.close()
        if empty:
            self.path.unlink(missing_ok=True)

    def _tell(self, **facts: str) -> None:
        with self.database:
            self.database.executemany("INSERT OR REPLACE INTO about VALUES (?,?)", facts.items())


class RunWriter:
    """Writes the rounds of one run, a group at a time."""

    def __init__(self, file: RunFile, run: int, problem: Problem, rows: str) -> None:
        self.path, self.run, self.rows_written = file.path, run, 0
        self._database, self._rows_asked = file.database, rows
        self._rows_wanted: dict[tuple[str, int], str] = {}
        self._spellings: dict[int, tuple[Subsolver, str]] = {}
        self._keep_local_fields = not follow_from_spins(problem)
        query = "SELECT coalesce(max(number) + 1, 0) FROM groups WHERE run = ?"
        self._group = self._database.execute(query, (run,)).fetchone()[0]
        self._tallies = _stored_tallies(self._database, run)
        self._start_group()

    def add(self, round_: Round) -> None:
        """Take one round in; nothing is written before the group closes."""
        if round_.whole:
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
            database.executemany(
                "INSERT OR REPLACE INTO tallies VALUES (?,?,?,?,?,?,?,?,?,?,?,?)",
                [(self.run, *key, *map(int, tally[:4]), *tally[4:].tolist()) for key, tally in self._tallies.items()],
            )
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
                self._group += 1
            for part in self._parts:
                write_part(database, self.run, part)
            self._checkpoint(state)
            database.execute("DELETE FROM kept_answers WHERE run = ?", (self.run,))
        self.rows_written += len(self._rows)
        self._start_group()

    def finish(self, state: Snapshot, **facts: Any) -> None:
        """Close the last group and write how the run ended; ``facts`` are columns of ``runs``."""
        self.close_group(state)
        columns = ", ".join(f"{name} = ?" for name in facts)
        with self._writing() as database:
            database.execute(f"UPDATE runs SET {columns} WHERE run = ?", (*facts.values(), self.run))

    def add_part(self, part: MeasuredPart) -> None:
        """Take in what was measured since the last group; it is written when the next one closes."""
        self._parts.append(part)

    def write_measurements(self, series: Iterable[Measured], ended: bool) -> None:
        """Write the series that a sampling run measured; unless it has ``ended``, their parts are kept for a resume."""
        with self._writing() as database:
            write_series(database, self.run, series, ended)

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
        self._parts: list[MeasuredPart] = []

    def _spelling(self, subsolver: Subsolver) -> str:
        """The subsolver as text, spelled once; the object is held so that its identity stays its own."""
        if id(subsolver) not in self._spellings:
            self._spellings[id(subsolver)] = (subsolver, spelled(subsolver))
        return self._spellings[id(subsolver)][1]

    def _take(self, round_: Round, calls: Calls) -> None:
        kept = np.ones(len(calls), np.bool_)
        if round_.whole and self._wanted(calls) == "share":
            kept = one_in(SHARE_OF_CHEAP_ROWS, calls.batch.seeds, SHARE_WORD) | (calls.proposals.status != OK)
            self._tally(round_, calls, ~kept)
        fresh = list(self._rows_of(round_, calls, np.flatnonzero(kept)))
        self._rows.extend(fresh)
        self._bytes += len(fresh) * (200 + 14 * calls.batch.size)

    def _wanted(self, calls: Calls) -> str:
        """Which calls of this subsolver and size get a row of their own: decided once, by price."""
        if self._rows_asked != "auto":
            return self._rows_asked
        key = (self._spelling(calls.subsolver), calls.batch.size)
        if key not in self._rows_wanted:
            self._rows_wanted[key] = "all" if _is_dear(calls.subsolver, calls.batch) else "share"
        return self._rows_wanted[key]

    def _rows_of(self, round_: Round, calls: Calls, kept: np.typing.NDArray[np.intp]) -> Iterable[tuple[Any, ...]]:
        batch, answer = calls.batch, calls.proposals
        size, count = batch.size, len(kept)
        seconds = calls.seconds / len(calls)
        proposal = np.ascontiguousarray(answer.outcomes[kept, calls.chosen[kept]])
        columns: list[Iterable[Any]] = [
            [self.run] * count,
            [round_.number] * count,
            calls.replicas[kept].tolist(),
            calls.places[kept].tolist(),
            batch.seeds[kept].tolist(),
            [round_.stage] * count,
            batch.temperature[kept].tolist(),
            [calls.rule] * count,
            [self._spelling(calls.subsolver)] * count,
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
        """Add the calls that get no row of their own to the exact tallies, which go on through the whole run."""
        key = (self._spelling(calls.subsolver), calls.rule, calls.batch.size, min(9, int(10 * round_.stage)))
        accepted, change = calls.accepted & rest, calls.change
        fall, rise = accepted & (change < 0), accepted & (change > 0)
        chosen = calls.proposals.outcomes[np.arange(len(calls)), calls.chosen]
        moved = accepted & np.any(chosen != calls.batch.spins, axis=1)
        tally = self._tallies.setdefault(key, np.zeros(7))
        tally[:4] += [rest.sum(), accepted.sum(), moved.sum(), fall.sum()]
        tally[4:6] = _added(tally[4], -change[fall]), _added(tally[5], change[rise])
        tally[6] += calls.seconds * rest.mean()

    def _checkpoint(self, state: Snapshot) -> None:
        """Keep the state; what only a resume needs is kept of the newest one alone."""
        self._database.execute(
            "UPDATE checkpoints SET local_fields = NULL, elites = NULL, counts = NULL, details = NULL "
            "WHERE run = ? AND details IS NOT NULL",
            (self.run,),
        )
        local_fields = state.local_fields.astype("<f8", copy=False).tobytes() if self._keep_local_fields else None
        self._database.execute(
            "INSERT OR REPLACE INTO checkpoints VALUES (?,?,?,?,?,?,?,?,?,?,?,?,?,?)",
            (
                self.run, state.round, state.calls, state.sweeps, state.seconds, len(state.spins),
                state.energies.astype("<f8", copy=False).tobytes(), packed(state.spins), local_fields,
                state.best_energy, packed(state.best_spins), packed(state.elites), _counts_blob(state.counts),
                json.dumps(state.details),
            ),
        )  # fmt: skip


def _stored_tallies(database: sqlite3.Connection, run: int) -> dict[TallyKey, np.typing.NDArray[np.float64]]:
    """The tallies of a run so far; those of one that begins are empty."""
    rows = database.execute(
        "SELECT subsolver, rule, k, tenth, calls, accepted, moved, improved, fall, rise, seconds FROM tallies "
        "WHERE run = ?",
        (run,),
    )
    return {row[:4]: np.array(row[4:], np.float64) for row in rows}


def _added(total: float, terms: np.typing.NDArray[np.float64]) -> float:
    """The sum, one term after the other: the same bits however calls come in slices, rounds and groups."""
    return float(np.add.accumulate(np.concatenate([[total], terms]))[-1])


def _counts_blob(counts: np.typing.NDArray[np.int64]) -> bytes:
    return counts.astype("<i8", copy=False).tobytes()


def _is_dear(subsolver: Subsolver, batch: ClusterBatch) -> bool:
    """Whether one call costs more than the limit at the fixed prices."""
    forecast = forecast_of(subsolver, batch)
    return forecast is None or bool(priced(forecast.work, len(batch)).mean() >= DEAR_SECONDS)


def _blobs(rows: np.typing.NDArray[Any]) -> list[bytearray]:
    """The bytes of every row: cut from those of all, several times as quick as asking row by row; as a type that goes
    to SQLite without being looked up among adapters first, as bytes would be.
    """
    together, length = bytearray(rows.tobytes()), rows.itemsize * rows.shape[1]
    return [together[first : first + length] for first in range(0, len(together), length)]


def _column(values: np.typing.NDArray[Any] | None, kept: np.typing.NDArray[np.intp]) -> list[int | float]:
    """A column of plain numbers; nan, which marks a call without a value, is stored as NULL by SQLite itself, and goes
    there far quicker than None.
    """
    if values is None:
        return [math.nan] * len(kept)
    column: list[int | float] = values[kept].tolist()
    return column
