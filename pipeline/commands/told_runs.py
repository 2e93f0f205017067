"""What a run file tells of each of its runs: how it ended, how it came there, and what became of its calls."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any, NamedTuple

from patchwalk.evidence.layout import undamaged, unpacked
from patchwalk.evidence.stored import StoredFile, StoredRun
from patchwalk.problem.ising import Problem
from patchwalk.subsolvers.contract import I8, Status

CUT_SHORT = "killed, or not yet over: this is the last state that was written"


class Incumbent(NamedTuple):
    """A new best energy, after so much work, and who found it."""

    seconds: float
    calls: int
    sweeps: int
    energy: float
    finder: str


class BoundStep(NamedTuple):
    """The lower bound that was known after so many seconds."""

    seconds: float
    bound: float


class StageCount(NamedTuple):
    """All calls of a subsolver (spelled) in one tenth of the budget of a run, counted by what became of them.

    ``run`` names file and number, for numbers begin anew in every file. ``moved`` changed a spin, ``improved`` lowered
    the energy; ``hits`` is the sum of the hit probabilities of the ``surveyed`` calls for which one is known.
    """

    run: str
    subsolver: str
    tenth: int
    calls: int
    accepted: int
    moved: int
    improved: int
    failed: int
    hits: float
    surveyed: int


@dataclass(frozen=True, eq=False)
class ToldRun:
    """One run. ``energy`` and ``spins`` i8 (n,) are those of its answer, or the last ones written if it was killed."""

    file: str
    number: int
    seed: int
    command: str
    subsolver: str
    status: str
    message: str
    energy: float
    spins: I8
    lower_bound: float | None
    calls: int
    failed_calls: int
    skipped: int
    sweeps: int
    seconds: float
    begun: str
    incumbents: tuple[Incumbent, ...]
    bounds: tuple[BoundStep, ...]
    settings: Mapping[str, Any]
    versions: Mapping[str, str]

    @property
    def name(self) -> str:
        """How the run is called among others."""
        return f"bound, seed {self.seed}" if self.command == "bound" else f"seed {self.seed}"


def told_run(file: StoredFile, run: StoredRun, problem: Problem) -> ToldRun | None:
    """The run, or None where not even its beginning was written."""
    row = next(file.rows("SELECT * FROM runs WHERE run = ?", (run.number,)))
    query = "SELECT * FROM checkpoints WHERE run = ? ORDER BY round DESC LIMIT 1"
    state = next(file.rows(query, (run.number,)), None)
    ended = row["spins"] is not None and row["energy"] is not None
    if not ended and state is None:
        return None
    known = row if ended or state is None else state
    with undamaged(file.path, f"the answer of run {run.number}"):
        spins = unpacked(row["spins"] if ended or state is None else state["best_spins"], len(problem))
    proved = _proved(file, run.number) if row["lower_bound"] is None else row["lower_bound"]
    return ToldRun(
        file=str(file.path), number=run.number, seed=run.seed, command=_command(run), subsolver=run.subsolver,
        status=run.status if ended else "unfinished", message=(run.message or "") if ended else CUT_SHORT,
        energy=problem.energy(spins), spins=spins, lower_bound=proved,
        calls=known["calls"] or 0, failed_calls=row["failed_calls"] or 0, skipped=row["skipped"] or 0,
        sweeps=known["sweeps"] or 0, seconds=known["seconds"] or 0.0, begun=row["begun"],
        incumbents=_incumbents(file, run.number), bounds=_bounds(file, run.number), settings=run.settings,
        versions=run.versions,
    )  # fmt: skip


def stage_counts(file: StoredFile, run: int) -> list[StageCount]:
    """Calls that have rows and calls that were only tallied, together."""
    rows = file.rows(
        "SELECT subsolver, min(9, CAST(10 * stage AS INTEGER)) AS tenth, count(*) AS calls, sum(accepted) AS accepted, "
        "sum(accepted AND proposal != spins_before) AS moved, sum(accepted AND change < 0) AS improved, "
        "sum(status = ?) AS failed, total(hit_probability) AS hits, count(hit_probability) AS surveyed "
        "FROM calls WHERE run = ? GROUP BY subsolver, tenth",
        (int(Status.FAILED), run),
    )
    counted = file.rows(
        "SELECT subsolver, tenth, sum(calls) AS calls, sum(accepted) AS accepted, sum(moved) AS moved, "
        "sum(improved) AS improved, 0 AS failed, 0.0 AS hits, 0 AS surveyed FROM tallies WHERE run = ? "
        "GROUP BY subsolver, tenth",
        (run,),
    )
    found: dict[tuple[str, int], list[float]] = {}
    for row in [*rows, *counted]:
        sums = found.setdefault((row["subsolver"], row["tenth"]), [0.0] * 7)
        for place, value in enumerate(tuple(row)[2:]):
            sums[place] += value
    return [
        StageCount(f"{file.path}, run {run}", who, tenth, int(n), int(a), int(m), int(i), int(f), hits, int(surveyed))
        for (who, tenth), (n, a, m, i, f, hits, surveyed) in sorted(found.items())
    ]


def has_table(file: StoredFile, name: str) -> bool:
    """Whether a command that makes this table wrote into the file."""
    return next(file.rows("SELECT 1 FROM sqlite_master WHERE name = ?", (name,)), None) is not None


def _command(run: StoredRun) -> str:
    """Which command made the run."""
    return "bound" if run.settings.get("command") == "bound" else "sample" if "burn_in" in run.settings else "solve"


def _incumbents(file: StoredFile, run: int) -> tuple[Incumbent, ...]:
    query = "SELECT seconds, calls, sweeps, energy, finder FROM incumbents WHERE run = ? ORDER BY energy DESC"
    return tuple(Incumbent(*row) for row in file.rows(query, (run,)))


def _bounds(file: StoredFile, run: int) -> tuple[BoundStep, ...]:
    if not has_table(file, "nodes"):
        return ()
    steps: list[BoundStep] = []
    for row in file.rows("SELECT seconds, bound FROM nodes WHERE run = ? ORDER BY place", (run,)):
        if row["bound"] is not None and (not steps or row["bound"] > steps[-1].bound):
            steps.append(BoundStep(*row))
    return tuple(steps)


def _proved(file: StoredFile, run: int) -> float | None:
    """The bound of a certificate where the run itself states none."""
    if not has_table(file, "certificates"):
        return None
    row = next(file.rows("SELECT bound FROM certificates WHERE run = ?", (run,)), None)
    return None if row is None else float(row["bound"])
