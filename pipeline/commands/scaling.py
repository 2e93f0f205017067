"""``scale``: success probability against size, its exponent with an interval, beside guessing and classical rivals.

Every subsolver is measured as it is given, on all instances. One that has a time to tune is measured once more: the
multiple of its times with the largest mean success on the even instances of each size is measured on the odd ones.
"""

from __future__ import annotations

import math
import sqlite3
from collections.abc import Callable, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any, Literal

import numpy as np

from patchwalk.commands.crew import Crew
from patchwalk.commands.interrupts import listening
from patchwalk.commands.scaling_instances import Instances
from patchwalk.commands.scaling_measurements import measured_rows, timed_variants
from patchwalk.evidence.scaling import ScalingFit, limit_sentence, scaling_fits
from patchwalk.evidence.scaling_rows import ScalingRow, add_rows, all_rows, scaling_file, stored_rows, write_csv
from patchwalk.evidence.time_to_solution import runs_unrounded
from patchwalk.settings_checks import SettingsError
from patchwalk.subsolvers.contract import F64, ClusterBatch, Subsolver
from patchwalk.subsolvers.registry import SubsolverError, spelled, subsolver_from
from patchwalk.workers import Workers

GUESSING = "guessing"

TIME_AVERAGED = "walk,time_in_hops=[1,20],times=40"
"""The walk measured at any of many times: its success is what is usually quoted, close to the endless average."""


@dataclass(frozen=True, eq=False)
class ScalingCurve:
    """One subsolver against size: ``success`` by size, f64 (instances,) each, with fits of it and of costs.

    ``costs`` maps a currency (``calls``, ``priced seconds``, ``amplitude updates``, ``spin updates``) to fits of what
    success at 99 % costs in it; their exponents are negative where the cost grows. ``chosen`` are the tuned spellings.
    """

    name: str
    success: dict[int, F64]
    exact: bool
    fits: list[ScalingFit]
    costs: dict[str, list[ScalingFit]] = field(default_factory=dict)
    chosen: dict[int, str] = field(default_factory=dict)

    def as_json(self) -> dict[str, Any]:
        """Plain values."""
        return {
            "name": self.name, "exact": self.exact, "chosen": self.chosen,
            "mean_success": {size: float(values.mean()) for size, values in self.success.items()},
            "fits": [fit.as_json() for fit in self.fits],
            "costs": {name: [fit.as_json() for fit in fits] for name, fits in self.costs.items()},
        }  # fmt: skip


@dataclass(frozen=True, eq=False)
class Scaled:
    """What ``scale`` found: a curve for each subsolver, tuned and not, and one for guessing."""

    what: str
    curves: tuple[ScalingCurve, ...]
    caution: str
    failed: int
    status: str
    run_path: Path

    def as_json(self) -> dict[str, Any]:
        """Plain values for ``--json``."""
        return {
            "what": self.what, "curves": [curve.as_json() for curve in self.curves], "caution": self.caution,
            "failed_calls": self.failed, "status": self.status, "run_path": str(self.run_path),
        }  # fmt: skip

    def curve(self, name: str) -> ScalingCurve:
        """The curve of this name."""
        return next(curve for curve in self.curves if curve.name == name)


def scale(
    source: str | Path | Sequence[str | Path],
    sizes: Sequence[int],
    *,
    subsolvers: Sequence[str | Subsolver] = ("walk", TIME_AVERAGED),
    instances: int = 200,
    within: int | None = None,
    rule: str = "ball",
    boundary: Literal["frozen", "none"] = "frozen",
    kind: str | None = None,
    tune: bool = True,
    shots: int = 200,
    seed: int = 1,
    workers: int | None = None,
    engine: Literal["threads", "dask"] = "threads",
    scheduler: str | None = None,
    mixed_workers: bool = False,
    run: str | Path = "patchwalk-scaling.sqlite",
    csv: str | Path | None = None,
    **options: Any,
) -> Scaled:
    """Success probability against size for a family (``options`` are those of ``make``) or for clusters of files.

    What the run file ``run`` holds already is not measured again; ``workers``, ``engine``, ``scheduler`` and
    ``mixed_workers`` say who measures, as for ``solve``, and change no bit. Raises ``SettingsError``,
    ``SubsolverError``, ``ProblemError`` or ``RunFileError`` naming what cannot be used.

    >>> import os, tempfile
    >>> with tempfile.TemporaryDirectory() as folder:
    ...     found = scale("sk", [3, 4, 5], instances=4, fields=True, tune=False, run=os.path.join(folder, "a.sqlite"))
    >>> round(found.curve("guessing").fits[0].exponent, 9)
    1.0
    """
    made = [one if isinstance(one, Subsolver) else subsolver_from(one) for one in subsolvers]
    many = [source] if isinstance(source, str | Path) else list(source)
    is_family = len(many) == 1 and isinstance(many[0], str) and not Path(many[0]).exists()
    chosen = str(many[0]) if is_family else tuple(Path(one) for one in many)
    found = Instances(chosen, instances, seed, within, rule, boundary, kind, options)
    _check(list(sizes), made)
    setup = {"instances": found.described(), "seed": str(seed)}
    crew = Crew(workers, engine, scheduler, mixed_workers)
    with crew.hired() as hands, listening() as interrupted, scaling_file(Path(run), setup) as database:
        survey = _Survey(found, sorted(sizes), shots, database, hands, interrupted)
        curves = [curve for one in made for curve in survey.curves(one, tune)]
        if csv is not None:
            write_csv(Path(csv), all_rows(database))
        return Scaled(
            found.described(), (*curves, survey.guessing()), limit_sentence(sizes), survey.failed,
            "interrupted" if interrupted() else "finished", Path(run),
        )  # fmt: skip


def _check(sizes: list[int], subsolvers: Sequence[Subsolver]) -> None:
    if not sizes or len(set(sizes)) < len(sizes) or min(sizes) < 1:
        raise SettingsError([f"sizes are {sizes}; give different whole numbers, as 6..14 or 6,8,10"])
    if not subsolvers:
        raise SubsolverError("name at least one --subsolver")


class _Survey:
    """Rows measured, or found in the run file, size by size."""

    def __init__(
        self, instances: Instances, sizes: list[int], shots: int, database: sqlite3.Connection, workers: Workers,
        interrupted: Callable[[], bool],
    ) -> None:  # fmt: skip
        self.instances, self.sizes, self.shots, self.workers = instances, sizes, shots, workers
        self.database, self.interrupted = database, interrupted
        self._failures: set[tuple[int, str, int]] = set()
        self._made: dict[int, tuple[ClusterBatch, list[str]]] = {}
        self._guesses: dict[int, dict[int, float]] = {}
        self._spins: dict[int, int] = {}

    def curves(self, subsolver: Subsolver, tune: bool) -> list[ScalingCurve]:
        """As given, on all instances; and tuned on the even ones, measured on the odd ones."""
        everyone = range(self.instances.count)
        plain = {size: self._rows(size, subsolver, everyone) for size in self.sizes}
        curves = [self._curve(spelled(subsolver), plain)]
        variants = timed_variants(subsolver) if tune else []
        if variants:
            chosen = {size: self._best_of(size, variants) for size in self.sizes}
            tuned = {size: self._rows(size, chosen[size], everyone[1::2]) for size in self.sizes}
            spellings = {size: spelled(one) for size, one in chosen.items()}
            curves.append(self._curve(f"{spelled(subsolver)}, times tuned", tuned, spellings))
        return curves

    @property
    def failed(self) -> int:
        """Calls that failed, each once, however many curves asked for it."""
        return len(self._failures)

    def guessing(self) -> ScalingCurve:
        """The share of minima among all configurations, as a curve of its own."""
        return guessing_curve(
            {self._spins[size]: np.array(list(own.values())) for size, own in self._guesses.items() if own}
        )

    def _best_of(self, size: int, variants: Sequence[Subsolver]) -> Subsolver:
        tuning = range(0, self.instances.count, 2)
        means = [np.nanmean([row.success for row in self._rows(size, one, tuning)] or [0.0]) for one in variants]
        return variants[int(np.argmax(means))]

    def _rows(self, size: int, subsolver: Subsolver, numbers: Sequence[int]) -> list[ScalingRow]:
        """Rows of these instances; after an interrupt only those that are there."""
        spelling = spelled(subsolver)
        there = stored_rows(self.database, size, spelling)
        missing = [number for number in numbers if number not in there]
        batch, origins = self._of_size(size)
        if missing and not self.interrupted():
            if batch.size > subsolver.max_spins:
                raise SubsolverError(
                    f"{subsolver.name}: takes at most {subsolver.max_spins} spins, instances of size {size} have "
                    f"{batch.size}; give smaller --sizes"
                )
            fresh = list(
                measured_rows(
                    subsolver, spelling, _chosen(batch, missing), [origins[number] for number in missing], missing,
                    size, self.shots, self.workers,
                )
            )  # fmt: skip
            add_rows(self.database, fresh)
            there |= {row.instance: row for row in fresh}
        rows = [there[number] for number in numbers if number in there]
        self._failures |= {(size, spelling, row.instance) for row in rows if math.isnan(row.success)}
        self._guesses.setdefault(size, {}).update({row.instance: row.guess for row in rows})
        return [row for row in rows if not np.isnan(row.success)]

    def _of_size(self, size: int) -> tuple[ClusterBatch, list[str]]:
        if size not in self._made:
            self._made[size] = self.instances.of_size(size)
            self._spins[size] = self._made[size][0].size
        return self._made[size]

    def _curve(
        self, name: str, rows: dict[int, list[ScalingRow]], chosen: dict[int, str] | None = None
    ) -> ScalingCurve:
        return curve_of(name, {self._spins[size]: own for size, own in rows.items() if own}, chosen)


def curve_of(name: str, by_spins: dict[int, list[ScalingRow]], chosen: dict[int, str] | None = None) -> ScalingCurve:
    """The curve through rows measured, by their number of spins; ``chosen`` are the tuned spellings by size."""
    success = {size: np.array([row.success for row in own]) for size, own in by_spins.items()}
    costs = {"calls": _cost_fits(success)}
    for word in ("seconds_priced", "amplitude_updates", "spin_updates"):
        prices = {size: np.array([getattr(row, word) for row in own]) for size, own in by_spins.items()}
        if prices and all(np.all(np.nan_to_num(values) > 0.0) for values in prices.values()):
            costs[word.replace("_", " ")] = _cost_fits(success, prices)
    exact = all(row.exact for own in by_spins.values() for row in own)
    return ScalingCurve(name, success, exact, scaling_fits(success), costs, chosen or {})


def guessing_curve(shares: dict[int, F64]) -> ScalingCurve:
    """The share of minima among all configurations, f64 (instances,) by number of spins, as a curve of its own."""
    return ScalingCurve(GUESSING, shares, True, scaling_fits(shares), {"calls": _cost_fits(shares)})


def _cost_fits(success: dict[int, F64], prices: dict[int, F64] | None = None) -> list[ScalingFit]:
    """Fits of the cost of success at 99 %, with runs neither rounded nor fewer than one."""
    costs = {
        size: np.maximum(1.0, runs_unrounded(np.minimum(values, 1.0))) * (1.0 if prices is None else prices[size])
        for size, values in success.items()
    }
    return scaling_fits(costs)


def _chosen(batch: ClusterBatch, numbers: Sequence[int]) -> ClusterBatch:
    assert batch.couplings is not None
    picks = np.array(numbers)
    return ClusterBatch(
        batch.fields[picks], batch.spins[picks], batch.temperature[picks], batch.seeds[picks], batch.couplings[picks]
    )
