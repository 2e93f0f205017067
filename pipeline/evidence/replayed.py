"""Replayed calls of one or more runs, side by side: what each rival was worth on each cluster, and what it cost.

Everything after this is arithmetic on these arrays.
"""

from __future__ import annotations

import sqlite3
from collections import Counter
from collections.abc import Callable, Collection, Container, Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt

from patchwalk.clusters.features import cheap_features, exact_features
from patchwalk.cost import priced
from patchwalk.evidence.gaps import GAP, gaps_of, share_of
from patchwalk.evidence.layout import RunFileError
from patchwalk.evidence.recalled import COUNTED, RecalledCalls, recalled_calls
from patchwalk.evidence.stored import StoredFile, StoredRun
from patchwalk.subsolvers.contract import F64, I64, WORK_FIELDS, ClusterBatch, Status, Work

NONE = "none"
"""The rival that calls nobody: carrier sweeps for the same time."""

SURVEYED_SPINS = 16
"""Largest cluster whose exact features are recomputed: 2^16 energies for each call."""

EXACT_QUANTITIES = ("distance", "stable", "degeneracy")

Name = tuple[int, int, int]

Pricing = Callable[[str, ClusterBatch | None, Work, int], tuple[F64, F64]]
"""Seconds of so many calls of a subsolver (spelled), in all and for evolution alone; dense clusters or None."""


def fixed_prices(spelling: str, batch: ClusterBatch | None, work: Work, rows: int) -> tuple[F64, F64]:  # noqa: ARG001
    """The fixed prices of counted work, all of which a faster machine would shorten."""
    seconds = priced(work, rows)
    return seconds, seconds


@dataclass(frozen=True, eq=False)
class Answers:
    """What one rival was worth on ``N`` clusters, f64 (N,) each, nan where it was not replayed.

    ``drops`` and their ``errors`` in energy units; ``hits``, chances of a minimum; ``costs`` and of these ``evolving``
    in seconds; ``weights``, how many calls each stands for, 0 where not replayed; ``exact``, bool (N,).
    """

    drops: F64
    errors: F64
    hits: F64
    costs: F64
    evolving: F64
    weights: F64
    exact: npt.NDArray[np.bool_]


@dataclass(frozen=True, eq=False)
class Replayed:
    """``N`` calls of which the subsolver ``own`` was replayed, of runs named ``run_names``.

    ``runs`` i64 (N,) counts them from 0; ``quantities`` f64 (N,) each, nan where unknown; ``moved`` bool (N,), whether
    the call as made changed a spin; ``asked`` bool (N,), whether the run itself asked ``own``; ``answers`` by spelling;
    ``budgets`` and ``curves`` f64 (N, L), seconds in rising order and what carrier sweeps gained in them, nan where
    there are none; ``room`` f64 (N,), how far the configuration lay above the lowest energy that any run found.
    """

    own: str
    run_names: tuple[str, ...]
    runs: I64
    quantities: Mapping[str, F64]
    moved: npt.NDArray[np.bool_]
    asked: npt.NDArray[np.bool_]
    answers: Mapping[str, Answers]
    budgets: F64
    curves: F64
    room: F64

    def __len__(self) -> int:
        return len(self.runs)

    @property
    def rivals(self) -> tuple[str, ...]:
        """All that were replayed but the subsolver itself."""
        return tuple(name for name in self.answers if name != self.own)

    def swept(self, seconds: F64) -> F64:
        """What carrier sweeps gain in ``seconds`` (N,), f64 (N,), read off each call's curve along straight lines.

        Below the least budget the gain shrinks in proportion. Above the largest it grows in proportion up to the
        ``room``, more than curves that bend down would: an error in favour of not calling.
        """
        return swept(self.budgets, self.curves, seconds, self.room)


def swept(budgets: F64, curves: F64, seconds: F64, room: F64) -> F64:
    """Curves (N, L) over budgets (N, L), nan where shorter, read at ``seconds`` (N,); see :meth:`Replayed.swept`."""
    rows, nothing = np.arange(len(seconds)), np.zeros((len(seconds), 1))
    own = np.nan_to_num(np.concatenate([nothing, budgets], axis=1), nan=np.inf)
    gains = np.concatenate([nothing, curves], axis=1)
    last = np.count_nonzero(np.isfinite(own), axis=1) - 1
    upper = np.minimum(np.count_nonzero(own <= seconds[:, None], axis=1), last)
    lower = np.maximum(upper - 1, 0)
    low, high = own[rows, lower], own[rows, upper]
    share = np.divide(seconds - low, high - low, out=np.zeros(len(rows)), where=high > low)
    between = gains[rows, lower] + share * (gains[rows, upper] - gains[rows, lower])
    most, height = own[rows, last], gains[rows, last]
    beyond = height * np.maximum(1.0, np.divide(seconds, most, out=np.ones(len(rows)), where=most > 0.0))
    beyond = np.where(height > 0.0, np.minimum(beyond, np.maximum(height, room)), height)
    return np.where(last == 0, np.nan, np.where(seconds <= most, between, beyond))


def replayed_calls(
    files: Sequence[StoredFile], own: str | None = None, pricing: Pricing = fixed_prices, gap: bool = False
) -> Replayed:
    """The replayed calls of all runs of these files, with the quantity ``gap`` where that is asked for.

    ``own`` is by default the subsolver replayed that made most calls. Raises :class:`RunFileError` where nothing was
    replayed.
    """
    owner = own or _most_called(files)
    parts: list[_Part] = []
    names: list[str] = []
    for file in files:
        for run in file.runs():
            found = _parts(file, run, owner, pricing, len(names), gap)
            if found:
                names.append(f"{file.path}, run {run.number}")
                parts.extend(found)
    if not parts:
        raise RunFileError(
            f"{files[0].path}: {owner} was not replayed by itself, so that there is nothing to compare; "
            f"patchwalk replay {files[0].path} --rival none"
        )
    return _joined(owner, tuple(names), parts)


def _most_called(files: Sequence[StoredFile]) -> str:
    calls: Counter[str] = Counter()
    query = (
        "SELECT subsolver, count(*) AS calls FROM calls WHERE subsolver IN (SELECT DISTINCT rival FROM replays) "
        "GROUP BY subsolver"
    )
    for file in files:
        calls.update({row["subsolver"]: row["calls"] for row in file.rows(query)})
    if not calls:
        path = files[0].path
        raise RunFileError(f"{path}: no call was replayed; patchwalk replay {path} --rival none --rival enumeration")
    return max(sorted(calls), key=lambda name: calls[name])


@dataclass(frozen=True, eq=False)
class _Part:
    """The calls of one run that were recalled together."""

    runs: I64
    quantities: dict[str, F64]
    moved: npt.NDArray[np.bool_]
    asked: npt.NDArray[np.bool_]
    answers: dict[str, Answers]
    curves: list[list[tuple[float, float]]]
    room: F64


def _parts(
    file: StoredFile, run: StoredRun, own: str, pricing: Pricing, number: int, gap: bool
) -> list[_Part]:  # fmt: skip
    tables: dict[str, dict[Name, sqlite3.Row]] = {}
    for row in file.rows("SELECT * FROM replays WHERE run = ? AND status != ?", (run.number, int(Status.FAILED))):
        if row["mean_drop"] is not None:
            tables.setdefault(row["rival"], {})[row["round"], row["replica"], row["place"]] = row
    if own not in tables:
        return []
    curves: dict[Name, list[tuple[float, float]]] = {}
    for row in file.rows("SELECT * FROM sweep_curves WHERE run = ? ORDER BY budget_s", (run.number,)):
        name = row["round"], row["replica"], row["place"]
        curves.setdefault(name, []).append((row["budget_s"], row["mean_drop"]))
    parts = []
    asked = _gap_calls(file, run, tables[own]) if gap else None
    problem = file.problem(run.problem)
    best = next(file.rows("SELECT min(energy) AS energy FROM runs WHERE problem = ?", (run.problem,)))["energy"]
    lowest = -np.inf if best is None else float(best)
    for calls in recalled_calls(file, run.number, problem, tables[own]):
        part = _part(calls, tables, curves, own, pricing, number, problem.field_scale, lowest, asked)
        if part is not None:
            parts.append(part)
    return parts


def _gap_calls(file: StoredFile, run: StoredRun, names: Collection[Name]) -> set[Name]:
    """The calls of a run whose gap is computed."""
    largest = next(file.rows("SELECT max(k) AS k FROM calls WHERE run = ?", (run.number,)))["k"]
    return share_of(names, int(largest), run.seed)


def _part(
    calls: RecalledCalls, tables: Mapping[str, Mapping[Name, sqlite3.Row]],
    curves: Mapping[Name, list[tuple[float, float]]], own: str, pricing: Pricing, number: int, scale: float,
    lowest: float, gap_calls: Container[Name] | None,
) -> _Part | None:  # fmt: skip
    """The calls of this piece that ``own`` was replayed on, None where there are none."""
    names = list(zip(calls.rounds.tolist(), calls.replicas.tolist(), calls.places.tolist(), strict=True))
    rows = np.array([row for row, name in enumerate(names) if name in tables[own]], np.int64)
    if len(rows) == 0:
        return None
    names = [names[row] for row in rows]
    batch = calls.batch
    some = None
    if batch.couplings is not None:
        some = ClusterBatch(
            fields=batch.fields[rows], spins=batch.spins[rows], temperature=batch.temperature[rows],
            seeds=batch.seeds[rows], couplings=batch.couplings[rows],
        )  # fmt: skip
    quantities = {
        "stage": calls.stages[rows],
        "temperature": batch.temperature[rows] / (scale if scale > 0.0 else 1.0),
        "k": np.full(len(rows), float(batch.size)),
        **{name: values[rows] for name, values in cheap_features(batch).items()},
    }
    exact = exact_features(some) if some is not None and some.size <= SURVEYED_SPINS else {}
    quantities |= {name: exact.get(name, np.full(len(rows), np.nan)) for name in EXACT_QUANTITIES}
    if gap_calls is not None:
        quantities[GAP] = gaps_of(own, some, [name in gap_calls for name in names])
    answers = {rival: _answers(rival, some, [table.get(name) for name in names], pricing)
               for rival, table in tables.items()}  # fmt: skip
    return _Part(
        np.full(len(rows), number, np.int64), quantities,
        (calls.accepted & np.any(calls.proposals != batch.spins, axis=1))[rows],
        np.full(len(rows), calls.subsolver == own), answers,
        [_curve(name, curves, tables.get(NONE, {}), answers[own].costs[row]) for row, name in enumerate(names)],
        calls.energies_before[rows] - lowest,
    )  # fmt: skip


def _curve(
    name: Name, curves: Mapping[Name, list[tuple[float, float]]], swept_rows: Mapping[Name, sqlite3.Row], cost: float
) -> list[tuple[float, float]]:
    """The curve of a call, or the one point of it that stands among the rivals."""
    if name in curves:
        return curves[name]
    return [(cost, swept_rows[name]["mean_drop"])] if name in swept_rows and cost > 0.0 else []


def _answers(rival: str, batch: ClusterBatch | None, rows: list[sqlite3.Row | None], pricing: Pricing) -> Answers:
    there = np.array([row is not None for row in rows])
    work = Work(**{name: column for name in WORK_FIELDS if (column := _counted(rows, name)) is not None})
    costs, evolving = pricing(rival, batch, work, len(rows))
    return Answers(
        drops=_column(rows, "mean_drop"), errors=_column(rows, "drop_error"), hits=_column(rows, "hit_probability"),
        costs=np.where(there, costs, np.nan), evolving=np.where(there, evolving, np.nan),
        weights=np.nan_to_num(_column(rows, "weight")), exact=_column(rows, "exact") == 1.0,
    )  # fmt: skip


def _counted(rows: list[sqlite3.Row | None], name: str) -> Any:
    column = _column(rows, name)
    if np.isnan(column).all():
        return None
    return np.nan_to_num(column).astype(np.int64 if name in COUNTED else np.float64)


def _column(rows: list[sqlite3.Row | None], name: str) -> F64:
    return np.array([np.nan if row is None or row[name] is None else float(row[name]) for row in rows])


def _joined(own: str, names: tuple[str, ...], parts: list[_Part]) -> Replayed:
    rivals = dict.fromkeys(rival for part in parts for rival in part.answers)
    curves = [curve for part in parts for curve in part.curves]
    points = np.full((2, len(curves), max(map(len, curves), default=0)), np.nan)
    for row, curve in enumerate(curves):
        points[:, row, : len(curve)] = np.array(curve).reshape(-1, 2).T
    return Replayed(
        own=own, run_names=names, runs=np.concatenate([part.runs for part in parts]),
        quantities={name: np.concatenate([part.quantities[name] for part in parts]) for name in parts[0].quantities},
        moved=np.concatenate([part.moved for part in parts]), asked=np.concatenate([part.asked for part in parts]),
        answers={rival: _joined_answers([(part.answers.get(rival), len(part.runs)) for part in parts])
                 for rival in rivals},
        budgets=points[0], curves=points[1], room=np.concatenate([part.room for part in parts]),
    )  # fmt: skip


def _joined_answers(parts: list[tuple[Answers | None, int]]) -> Answers:
    columns = [
        np.concatenate([np.full(n, np.nan) if one is None else getattr(one, name) for one, n in parts])
        for name in ("drops", "errors", "hits", "costs", "evolving")
    ]
    weights = np.concatenate([np.zeros(n) if one is None else one.weights for one, n in parts])
    exact = np.concatenate([np.zeros(n, np.bool_) if one is None else one.exact for one, n in parts])
    drops, errors, hits, costs, evolving = columns
    return Answers(drops, errors, hits, costs, evolving, weights, exact)
