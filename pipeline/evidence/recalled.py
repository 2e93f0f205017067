"""The calls of a run as they were asked: batches that any rival can be given, with what became of them beside.

Couplings come from the problem, boundary fields and spins from the rows, so that a batch is that of the run to the last
bit. Calls that have no row of their own (see ``tallies``) cannot be recalled.
"""

from __future__ import annotations

import sqlite3
from collections.abc import Container, Iterator
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt

from patchwalk.clusters.conditioning import condition
from patchwalk.evidence.layout import undamaged
from patchwalk.evidence.stored import StoredFile
from patchwalk.problem.ising import Problem
from patchwalk.subsolvers.contract import F64, I8, I32, I64, U8, WORK_FIELDS, ClusterBatch, Work

COUNTED = {"shots", "amplitude_updates", "spin_updates", "energies", "table_entries"}
ROWS_AT_ONCE = 4096


@dataclass(frozen=True, eq=False)
class RecalledCalls:
    """``B`` calls of one run, one subsolver (spelled) and one size ``k``, in the order they were made.

    ``batch`` is the question; ``members`` i32 (B, k); ``rounds``, ``replicas`` and ``places`` i64 (B,) name a call;
    ``stages`` f64 (B,); ``rules``, who picked each; ``proposals`` i8 (B, k), the shot taken; ``changes`` f64 (B,), its
    energy change; ``accepted`` bool (B,); ``energies_before`` f64 (B,), of the whole configuration; ``hits`` and
    ``noiseless_hits`` f64 (B,), nan where unknown; ``seconds`` f64 (B,) as measured; ``work`` as counted; ``status`` u8
    (B,).
    """

    run: int
    subsolver: str
    batch: ClusterBatch
    members: I32
    rounds: I64
    replicas: I64
    places: I64
    stages: F64
    rules: tuple[str, ...]
    proposals: I8
    changes: F64
    accepted: npt.NDArray[np.bool_]
    energies_before: F64
    hits: F64
    noiseless_hits: F64
    seconds: F64
    work: Work
    status: U8

    def __len__(self) -> int:
        return len(self.changes)


def recalled_calls(
    file: StoredFile, run: int, problem: Problem, wanted: Container[tuple[int, int, int]] | None = None
) -> Iterator[RecalledCalls]:
    """The calls of a run that have rows, in pieces of at most 4096, by subsolver and size.

    All of them, or those whose (round, replica, place) are ``wanted``.
    """
    kinds = file.rows("SELECT DISTINCT subsolver, k FROM calls WHERE run = ? ORDER BY subsolver, k", (run,))
    for kind in list(kinds):
        query = "SELECT * FROM calls WHERE run = ? AND subsolver = ? AND k = ? ORDER BY round, replica, place"
        piece: list[sqlite3.Row] = []
        for row in file.rows(query, (run, kind["subsolver"], kind["k"])):
            if wanted is not None and (row["round"], row["replica"], row["place"]) not in wanted:
                continue
            piece.append(row)
            if len(piece) == ROWS_AT_ONCE:
                yield _recalled(file, piece, problem)
                piece = []
        if piece:
            yield _recalled(file, piece, problem)


def _recalled(file: StoredFile, rows: list[sqlite3.Row], problem: Problem) -> RecalledCalls:
    first, last = rows[0], rows[-1]
    what = f"a call of run {first['run']}, one of those of rounds {first['round']} to {last['round']},"
    with undamaged(file.path, what):
        members = _stacked(rows, "members", "<i4").astype(np.int32)
        if members.min() < 0 or members.max() >= len(problem):
            raise ValueError(f"its members are no spins of the problem, which has {len(problem):,}")
        return _as_arrays(rows, members, problem)


def _as_arrays(rows: list[sqlite3.Row], members: I32, problem: Problem) -> RecalledCalls:
    return RecalledCalls(
        run=rows[0]["run"],
        subsolver=rows[0]["subsolver"],
        batch=_question(rows, members, problem),
        members=members,
        rounds=_column(rows, "round", np.int64),
        replicas=_column(rows, "replica", np.int64),
        places=_column(rows, "place", np.int64),
        stages=_column(rows, "stage", np.float64),
        rules=tuple(row["rule"] for row in rows),
        proposals=_stacked(rows, "proposal", np.int8),
        changes=_column(rows, "change", np.float64),
        accepted=_column(rows, "accepted", np.bool_),
        energies_before=_column(rows, "energy_before", np.float64),
        hits=_column(rows, "hit_probability", np.float64),
        noiseless_hits=_column(rows, "noiseless_hit", np.float64),
        seconds=_column(rows, "seconds", np.float64),
        work=_work(rows),
        status=_column(rows, "status", np.uint8),
    )


def _question(rows: list[sqlite3.Row], members: I32, problem: Problem) -> ClusterBatch:
    """The batch of the run: couplings folded from the problem, all else from the rows."""
    size = len(problem)
    seeds = np.array([row["seed"] for row in rows], np.uint64)
    temperatures = _column(rows, "temperature", np.float64)
    blank = condition(
        problem, members, np.ones(size, np.int8), np.zeros(size), temperatures, seeds, np.full(size, -1, np.int32)
    )
    return ClusterBatch(
        fields=_stacked(rows, "boundary_fields", "<f8"),
        spins=_stacked(rows, "spins_before", np.int8),
        temperature=temperatures,
        seeds=seeds,
        couplings=blank.couplings,
        edges=blank.edges,
    )


def _stacked(rows: list[sqlite3.Row], name: str, dtype: Any) -> npt.NDArray[Any]:
    """The blobs of a column, k values each, as (B, k)."""
    return np.stack([np.frombuffer(row[name], dtype, count=row["k"]) for row in rows])


def _column(rows: list[sqlite3.Row], name: str, dtype: Any) -> npt.NDArray[Any]:
    values = [row[name] for row in rows]
    if dtype is np.float64:
        values = [np.nan if value is None else value for value in values]
    return np.array(values, dtype)


def _work(rows: list[sqlite3.Row]) -> Work:
    known = [name for name in WORK_FIELDS if rows[0][name] is not None]
    columns: dict[str, Any] = {
        name: np.array([row[name] or 0 for row in rows], np.int64 if name in COUNTED else np.float64) for name in known
    }
    return Work(**columns)
