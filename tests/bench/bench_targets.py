"""Whether walk clusters reach the known cuts of open instances, how soon, and what the cluster calls contributed.

    python tests/bench/bench_targets.py --seeds 1..5 --seconds 60 [--only G1,G11] [--mode default|half|none]

Every run has default settings but for its target, at which it ends. ``half``: as many sweeps a round as leave at least
half of the wall time to cluster calls, by a short run before; ``none``: no sweeps at all. Prints figures; asserts
nothing. Instances are found through PATCHWALK_INSTANCES.

Two figures go with every run. *In calls*: wall seconds of picking clusters, asking and settling, over those of the
search, writing rows included. *By calls*: of the fall of the best energy, from one incumbent to the next, the part
whose finder is ``clusters``; first of the whole fall, then of what was left after the first round, which begins with
calls and takes most of it; then how many of the incumbents after the first round the calls found.
"""

from __future__ import annotations

import argparse
import itertools
import os
import sqlite3
import tempfile
import time
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from patchwalk.commands.solving import Silent, Solution, carry_out_one, hired
from patchwalk.commands.tasks import task_from
from patchwalk.evidence.runfile import RunFile
from patchwalk.search.neighbourhood import NeighbourhoodSearch

TARGETS = {
    "G1": 11624, "G11": 564, "G43": 6660, "toruspm3-8-50": 458, "torusg3-8": 41684814, "bqp250-1": 45607,
    "G14": 3063, "G22": 13358, "G48": 6000,
}  # fmt: skip
"""Cuts to reach: the best known or the optimum (Benlic & Hao, Eng. Appl. Artif. Intell. 26 (2013) 1162; the torus
problems of the 7th DIMACS challenge; Beasley's bqp250-1 as MaxCut), one less on G14 and G22."""

Incumbent = tuple[float, str, int]
"""Energy, finder and round."""


@dataclass
class Clock:
    """Wall seconds spent in cluster calls and in sweeps."""

    calls: float = 0.0
    sweeps: float = 0.0
    rounds: int = 0

    def watch(self, search: NeighbourhoodSearch) -> None:
        """Stand between the search and its calls and sweeps."""
        search.caller.cuts = self._timed(search.caller.cuts, "calls")  # type: ignore[method-assign]
        search.caller.carry_out = self._timed_steps(search.caller.carry_out)  # type: ignore[method-assign]
        search.carrying.sweep = self._timed(search.carrying.sweep, "sweeps")  # type: ignore[method-assign]

    def _timed(self, function: Callable[..., Any], which: str) -> Callable[..., Any]:
        def timed(*arguments: Any) -> Any:
            began = time.perf_counter()
            result = function(*arguments)
            setattr(self, which, getattr(self, which) + time.perf_counter() - began)
            return result

        return timed

    def _timed_steps(self, function: Callable[..., Iterator[Any]]) -> Callable[..., Iterator[Any]]:
        def timed(*arguments: Any) -> Iterator[Any]:
            self.rounds += 1
            steps, began = function(*arguments), time.perf_counter()
            for step in steps:
                self.calls += time.perf_counter() - began
                yield step
                began = time.perf_counter()
            self.calls += time.perf_counter() - began

        return timed


def run_once(path: Path, seed: int, **settings: Any) -> tuple[Solution, list[Incumbent], Clock, int]:
    """One run: its solution, its incumbents, where the time went, and the sweeps that follow a round."""
    clock = Clock()
    with tempfile.TemporaryDirectory() as folder:
        given = {"kind": "maxcut", "run": Path(folder) / "run.sqlite", **settings}
        task = task_from(path, given)
        file = RunFile(task.run_path)
        with hired(task.settings) as workers:
            search = NeighbourhoodSearch(task.problem, task.plan_for(seed), seed, workers=workers)
            prepare = search.prepare

            def prepared() -> None:
                prepare()
                clock.watch(search)

            search.prepare = prepared  # type: ignore[method-assign]
            solution = carry_out_one(task, search, file, Silent())
        file.close()
        with sqlite3.connect(task.run_path) as database:
            incumbents = database.execute("SELECT energy, finder, round FROM incumbents ORDER BY rowid").fetchall()
    return solution, incumbents, clock, task.sweeps


def by_calls(incumbents: list[Incumbent]) -> str:
    """The share of the fall of the best energy that calls found, whole and after the first round, and how often."""
    falls = [
        (before[0] - after[0], after[1] == "clusters", after[2]) for before, after in itertools.pairwise(incumbents)
    ]
    whole = _share(falls)
    later = [fall for fall in falls if fall[2] > 0]
    found = sum(by_call for _, by_call, _ in later)
    return f"{whole}, {_share(later)} after the first round ({found} of {len(later)} incumbents)"


def _share(falls: list[tuple[float, bool, int]]) -> str:
    whole = sum(fall for fall, _, _ in falls)
    return f"{100 * sum(fall for fall, by_call, _ in falls if by_call) / whole:.1f} %" if whole > 0 else "no fall"


def settings_for(mode: str, path: Path) -> dict[str, Any]:
    """What a mode sets; for ``half`` by what rounds and sweeps cost in a run of two seconds."""
    if mode == "default":
        return {}
    if mode == "none":
        return {"sweeps": 0}
    _, _, clock, sweeps = run_once(path, 1, seconds=2.0)
    affordable = 0.8 * clock.calls / max(1e-9, clock.sweeps / sweeps)
    if affordable >= 1.0:
        return {"sweeps": min(sweeps, int(affordable))}
    return {"sweeps": 1, "clusters_per_round": int(64 / affordable) + 1}


def instance(folder: Path, name: str) -> Path | None:
    """The file of this name, whatever it ends with."""
    return next((path for path in sorted(folder.glob(f"{name}.*"))), None)


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--seeds", default="1..5")
    parser.add_argument("--seconds", type=float, default=60.0)
    parser.add_argument("--only", default=",".join(TARGETS), help="names, with commas")
    parser.add_argument("--mode", choices=("default", "half", "none"), default="default")
    parser.add_argument("--workers", type=int, default=None)
    asked = parser.parse_args()
    first, _, last = asked.seeds.partition("..")
    seeds, folder = range(int(first), int(last or first) + 1), Path(os.environ.get("PATCHWALK_INSTANCES", "."))
    for name in asked.only.split(","):
        path = instance(folder, name)
        if path is None:
            print(f"{name}: not in {folder}; set PATCHWALK_INSTANCES to the folder of the open instances")
            continue
        settings, reached = settings_for(asked.mode, path), 0
        print(f"{name}, target {TARGETS[name]}, mode {asked.mode} {settings or ''}", flush=True)
        for seed in seeds:
            solution, incumbents, clock, sweeps = run_once(
                path, seed, target=TARGETS[name], seconds=asked.seconds, workers=asked.workers, **settings
            )
            reached += solution.objective >= TARGETS[name]
            print(
                f"  seed {seed}: {solution.objective:.0f} in {solution.seconds:.2f} s, {solution.calls} calls, "
                f"{sweeps} sweeps a round; in calls {100 * clock.calls / solution.seconds:.0f} % of the time, "
                f"in sweeps {100 * clock.sweeps / solution.seconds:.0f} %; by calls {by_calls(incumbents)}",
                flush=True,
            )
        print(f"  reached by {reached} of {len(seeds)} seeds within {asked.seconds:g} s", flush=True)


if __name__ == "__main__":
    main()
