"""``replay``: every rival on the very clusters of a run, and what each call was worth, into the same run file."""

from __future__ import annotations

import html
import math
import time
from collections.abc import Callable, Sequence
from dataclasses import asdict, dataclass
from pathlib import Path
from typing import Any, Literal, Protocol

from patchwalk.commands.crew import Crew
from patchwalk.commands.interrupts import listening
from patchwalk.commands.retracing import retrace
from patchwalk.evidence.drops import REPETITIONS
from patchwalk.evidence.layout import RunFileError
from patchwalk.evidence.profile_words import shown_names
from patchwalk.evidence.replaying import NONE, ReplayPlan, Watcher, replay_run
from patchwalk.evidence.runfile import RunFile
from patchwalk.evidence.stored import StoredFile, StoredRun, stored_file
from patchwalk.evidence.sweep_curves import CallName, StateBefore
from patchwalk.settings_checks import SettingsError
from patchwalk.subsolvers.contract import Status, Subsolver
from patchwalk.subsolvers.registry import spelled, subsolver_from
from patchwalk.workers import Workers

USUAL_RIVALS = ("enumeration", "elimination", NONE)
"""Who is replayed where nobody is named: the strongest classical answers, and plain sweeps."""


@dataclass(frozen=True)
class RivalReplayed:
    """What a run file says of one rival on the calls of one run, the run's own subsolver included.

    ``calls`` replayed, ``failed`` of them; of the others, weighted: ``mean_drop`` per call in energy units,
    ``improve_probability`` and ``hit_probability`` (nan where unknown), ``exact``, the share whose drop is exact, and
    ``call_seconds`` as measured here, simulator time.
    """

    run_path: str
    run: int
    seed: int
    rival: str
    own: bool
    calls: int
    failed: int
    exact: float
    mean_drop: float
    improve_probability: float
    hit_probability: float
    call_seconds: float


@dataclass(frozen=True, eq=False)
class Replayed:
    """All rivals of all runs. ``status`` is ``finished`` or ``interrupted``; the same command then goes on.

    ``notes`` say what could not be replayed. As text it is a table.
    """

    status: str
    rivals: tuple[RivalReplayed, ...]
    notes: tuple[str, ...]
    seconds: float

    def as_json(self) -> dict[str, Any]:
        """Plain values for ``--json``; what is unknown is null."""
        plain = [
            {
                key: None if isinstance(value, float) and math.isnan(value) else value
                for key, value in asdict(one).items()
            }
            for one in self.rivals
        ]
        return {"status": self.status, "seconds": self.seconds, "notes": self.notes, "rivals": plain}

    def _repr_html_(self) -> str:
        """What a notebook shows."""
        return f"<pre>{html.escape(str(self))}</pre>"

    def __str__(self) -> str:
        lines = []
        for path, run, seed in dict.fromkeys((one.run_path, one.run, one.seed) for one in self.rivals):
            lines.append(f"{path}, run {run}, seed {seed}")
            own = [one for one in self.rivals if (one.run_path, one.run) == (path, run)]
            shown = shown_names(one.rival for one in own)
            names = [f"{shown[one.rival]} (the run's own)" if one.own else shown[one.rival] for one in own]
            width = max(33, *map(len, names)) + 1
            lines.append(f"  {'rival':<{width}}{'calls':>8}{'failed':>8}{'exact':>7}{'drop':>12}{'improves':>10}"
                         f"{'hits':>8}{'seconds':>10}")  # fmt: skip
            lines.extend(f"  {name:<{width}}{_columns(one)}" for name, one in zip(names, own, strict=True))
        return "\n".join([*lines, *self.notes])


def _columns(one: RivalReplayed) -> str:
    hits = "-" if math.isnan(one.hit_probability) else f"{one.hit_probability:.4f}"
    return (
        f"{one.calls:>8,}{one.failed:>8,}{one.exact:>7.0%}{one.mean_drop:>12.5g}"
        f"{one.improve_probability:>10.4f}{hits:>8}{one.call_seconds:>10.2g}"
    )


class ReplayWatcher(Protocol):
    """Somebody who is told how a replay is going."""

    def began(self, path: Path, run: int, seed: int) -> None: ...

    def moved(self, rival: str, done: int, wanted: int) -> None: ...

    def stopping(self) -> None: ...


class SilentReplayWatcher:
    """Watches and says nothing."""

    def began(self, path: Path, run: int, seed: int) -> None:
        pass

    def moved(self, rival: str, done: int, wanted: int) -> None:
        pass

    def stopping(self) -> None:
        pass


def replay(
    runs: str | Path | Sequence[str | Path],
    rivals: Sequence[str | Subsolver] = USUAL_RIVALS,
    *,
    calls: int | None = None,
    seed: int = 1,
    repetitions: int = REPETITIONS,
    workers: int | None = None,
    engine: Literal["threads", "dask"] = "threads",
    scheduler: str | None = None,
    mixed_workers: bool = False,
) -> Replayed:
    """Run every rival, and the run's own subsolver, on the clusters that runs called for; rows go into the run files.

    ``rivals`` are subsolvers, spelled or made, and ``none``: carrier sweeps in the place of the call. ``calls`` is the
    size of a sample per run, stratified by stage, size and who was asked and drawn from ``seed``; by default all calls
    with rows are replayed. ``repetitions`` is how often those are asked whose drop is only sampled. What is in the
    files already is left as it is. ``workers``, ``engine``, ``scheduler`` and ``mixed_workers`` say who carries the
    work out, as for ``solve``; they change no bit. Sweeps for ``none`` stay here, with the states they begin from.

    Raises ``RunFileError``, ``SubsolverError`` or ``SettingsError`` with the reason. Ctrl-C ends after the slice in
    flight; the same call then goes on.
    """
    paths = [Path(runs)] if isinstance(runs, (str, Path)) else [Path(run) for run in runs]
    return carry_out(paths, rivals, SilentReplayWatcher(), calls, seed, repetitions,
                     Crew(workers, engine, scheduler, mixed_workers))  # fmt: skip


def carry_out(
    paths: Sequence[Path],
    rivals: Sequence[str | Subsolver],
    watcher: ReplayWatcher,
    calls: int | None = None,
    seed: int = 1,
    repetitions: int = REPETITIONS,
    crew: Crew | None = None,
) -> Replayed:
    """:func:`replay`, watched."""
    crew = crew or Crew()
    plan = _plan_from(paths, rivals, calls, seed, repetitions, crew)
    began = time.perf_counter()
    rows: list[RivalReplayed] = []
    notes: list[str] = []
    with listening(watcher.stopping) as interrupted:
        with crew.hired() as workers:
            for path in paths:
                _replay_file(path, plan, workers, watcher, interrupted, rows, notes)
        status = "interrupted" if interrupted() else "finished"
    if status == "interrupted":
        notes.append("interrupted; what is done is in the run file, and the same command goes on from there")
    return Replayed(status, tuple(rows), tuple(dict.fromkeys(notes)), time.perf_counter() - began)


def _plan_from(
    paths: Sequence[Path], rivals: Sequence[str | Subsolver], calls: int | None, seed: int, repetitions: int,
    crew: Crew,
) -> ReplayPlan:  # fmt: skip
    """What to do, checked before anything is opened for writing."""
    complaints = [] if paths else ["no run is named; give one run file or more"]
    complaints += crew.complaints()
    for name, value, least in (("calls", calls, 1), ("repetitions", repetitions, 2)):
        if value is not None and (not isinstance(value, int) or isinstance(value, bool) or value < least):
            complaints.append(f"{name}: is {value!r}; give a whole number of at least {least}")
    if isinstance(rivals, str):
        complaints.append(f"rivals: is the text {rivals!r}; give a list of subsolvers")
    if complaints:
        raise SettingsError(complaints)
    made = {}
    for rival in rivals:
        if rival != NONE:
            subsolver = subsolver_from(rival)
            made[spelled(subsolver)] = subsolver
    names = [*made, *([NONE] if NONE in rivals else [])]
    return ReplayPlan(names, made, calls, seed, repetitions)


def _replay_file(
    path: Path,
    plan: ReplayPlan,
    workers: Workers,
    watcher: ReplayWatcher,
    interrupted: Callable[[], bool],
    rows: list[RivalReplayed],
    notes: list[str],
) -> None:
    with stored_file(path) as stored:
        runs = stored.runs()
        if not runs:
            raise RunFileError(f"{path}: holds no run")
        file = RunFile(path, reopen=True)
        try:
            for run in runs:
                if interrupted():
                    return
                watcher.began(path, run.number, run.seed)
                _replay_one(file, stored, run, plan, workers, watcher, interrupted)
                rows.extend(_summaries(stored, run))
                if not interrupted():
                    notes.extend(_notes(stored, run, plan))
        finally:
            file.close()


def _replay_one(
    file: RunFile,
    stored: StoredFile,
    run: StoredRun,
    plan: ReplayPlan,
    workers: Workers,
    watcher: ReplayWatcher,
    interrupted: Callable[[], bool],
) -> None:
    def again(wanted: set[CallName], visit: Callable[[StateBefore], None], stop: Callable[[], bool]) -> None:
        retrace(stored, run, wanted, visit, stop)

    replay_run(file, stored, run, plan, workers, again, Watcher(watcher.moved, interrupted))


SUMMARY = f"""
SELECT rival, rival IN (SELECT DISTINCT subsolver FROM calls WHERE run = ?1) AS own, count(*) AS calls,
    sum(well = 0) AS failed, sum(share * exact) / sum(share) AS exact, sum(share * mean_drop) / sum(share) AS mean_drop,
    sum(share * improve_probability) / sum(share) AS improves,
    sum(share * hit_probability) / sum(share * (hit_probability IS NOT NULL)) AS hits, avg(seconds) AS spent
FROM (
    SELECT *, status != {int(Status.FAILED)} AS well, weight * (status != {int(Status.FAILED)}) AS share
    FROM replays WHERE run = ?1
)
GROUP BY rival ORDER BY own DESC, rival = '{NONE}', rival
"""

FAILURES = (
    "SELECT rival, count(*) AS calls, min(message) AS said FROM replays WHERE run = ? AND status = ? GROUP BY rival"
)

UNSWEPT = f"""
SELECT count(*) AS calls FROM replays AS own JOIN calls USING (run, round, replica, place)
WHERE run = ? AND own.rival = calls.subsolver AND NOT EXISTS (
    SELECT 1 FROM replays AS swept WHERE swept.rival = '{NONE}' AND swept.run = own.run AND swept.round = own.round
    AND swept.replica = own.replica AND swept.place = own.place
)
"""
"""Calls that were replayed, but not against sweeps."""


def _summaries(stored: StoredFile, run: StoredRun) -> list[RivalReplayed]:
    """Weighted means over the rows that are there, rival by rival."""

    def number(value: float | None) -> float:
        return math.nan if value is None else float(value)

    return [
        RivalReplayed(
            str(stored.path), run.number, run.seed, row["rival"], bool(row["own"]), row["calls"], row["failed"],
            number(row["exact"]), number(row["mean_drop"]), number(row["improves"]), number(row["hits"]),
            number(row["spent"]),
        )
        for row in stored.rows(SUMMARY, (run.number,))
    ]  # fmt: skip


def _notes(stored: StoredFile, run: StoredRun, plan: ReplayPlan) -> list[str]:
    """What a reader must know of the rows that are, or are not, there."""
    place, found = f"{stored.path}, run {run.number}", []
    without = next(stored.rows("SELECT coalesce(sum(calls), 0) AS calls FROM tallies WHERE run = ?", (run.number,)))
    if without["calls"]:
        found.append(
            f"{place}: {without['calls']:,} cheap calls have no row and cannot be replayed; solve with --record all to "
            "keep every one"
        )
    found.extend(
        f"{place}: {row['rival']} FAILED on {row['calls']:,} calls: {row['said']}"
        for row in stored.rows(FAILURES, (run.number, int(Status.FAILED)))
    )
    if NONE in plan.rivals and stored.problem(run.problem).groups:
        found.append(
            f"{place}: {NONE} sweeps single spins only; the carrier's moves inside groups of spins are left out"
        )
    unswept = next(stored.rows(UNSWEPT, (run.number,)))["calls"] if NONE in plan.rivals else 0
    if unswept:
        found.append(f"{place}: for {unswept:,} calls the state before was not recomputed, so {NONE} has no row there")
    return found
