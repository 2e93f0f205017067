"""What the outer loop costs beside the subsolver, two workers against two processes, and a million spins.

    python tests/bench/bench_outer.py [outside|workers|size]...

Prints figures and ratios; asserts nothing. Aims: at most 5 microseconds outside the subsolver per call at k = 12 in
batches of 64, and 10 more for writing rows; with two threads at least 95 % of what two independent processes reach
(walks, k = 14); a cubic lattice of a million spins within 2 GB, sweeps linear in the number of spins.
"""

from __future__ import annotations

import json
import resource
import subprocess
import sys
import tempfile
import time
from pathlib import Path
from typing import Any

import numpy as np

from patchwalk.clusters.mixture import mixture_of
from patchwalk.clusters.policy import policy_from
from patchwalk.evidence.runfile import RunFacts, RunFile
from patchwalk.problem.families import make
from patchwalk.problem.ising import Problem
from patchwalk.search.carrying import Carrying
from patchwalk.search.ends import Ends
from patchwalk.search.neighbourhood import NeighbourhoodSearch, Plan
from patchwalk.search.replicas import Replicas
from patchwalk.search.temperature import GeometricCooling
from patchwalk.subsolvers.contract import ClusterBatch, Proposals, Subsolver
from patchwalk.subsolvers.uniform import Uniform
from patchwalk.workers import Serial, Threads, Workers

EDGES = (22, 46, 100)


def search_on(
    problem: Problem, subsolver: str | Subsolver, size: int, seed: int = 1, workers: Workers | None = None, **plan: Any
) -> NeighbourhoodSearch:
    """A search with one subsolver and balls, ready to begin."""
    facts: dict[str, Any] = {"clusters_per_round": 64, "sweeps_per_round": 0, **plan}
    cooling = GeometricCooling(0.5, 0.05, problem.field_scale, replicas=facts.get("replicas", 1))
    rules = Plan(policy_from(subsolver), mixture_of("ball"), size, temperatures=cooling, **facts)
    search = NeighbourhoodSearch(problem, rules, seed, workers=workers or Serial())
    search.prepare()
    return search


class Timed(Uniform):
    """Uniform guesses that add up the processor seconds spent inside them."""

    inside = 0.0

    def propose(self, batch: ClusterBatch) -> Proposals:
        began = time.thread_time()
        answer = super().propose(batch)
        type(self).inside += time.thread_time() - began
        return answer


def time_outside(edge: int, calls: int = 64 * 400, repeats: int = 5) -> None:
    """Processor seconds of whole runs without those inside the subsolver, per call; then of writing every row."""
    problem, loops, rows = make("lattice2d", edge, seed=1), [], []
    for _ in range(repeats):
        search = search_on(problem, Timed(), 12, ends=Ends(calls=calls))
        began, Timed.inside = time.thread_time(), 0.0
        rounds = list(search.rounds())
        loops.append((time.thread_time() - began - Timed.inside) / calls)
        with tempfile.TemporaryDirectory() as folder:
            file = RunFile(Path(folder) / "run.sqlite")
            facts = RunFacts(problem=problem, source="", seed=1, subsolver="timed", settings={}, settings_file="",
                             settings_table={}, rows="all")  # fmt: skip
            writer = file.begin(facts, search.snapshot())
            began = time.thread_time()
            for round_ in rounds:
                writer.add(round_)
                if writer.due:
                    writer.close_group(search.snapshot())
            writer.close_group(search.snapshot())
            rows.append((time.thread_time() - began) / calls)
            file.close()
    print(
        f"{len(problem):>9,} spins, k = 12, batches of 64: {1e6 * min(loops):.2f} us a call outside the subsolver "
        f"(median {1e6 * float(np.median(loops)):.2f}; aim 5), {1e6 * min(rows):.2f} us more for its row "
        f"(median {1e6 * float(np.median(rows)):.2f}; aim 10)"
    )


def walks(seed: int, workers: Workers, calls: int = 64 * 24) -> float:
    """Seconds for so many walk calls of k = 14."""
    search = search_on(make("lattice3d", 16, seed=2), "walk", 14, seed, workers, ends=Ends(calls=calls))
    began = time.perf_counter()
    for _ in search.rounds():
        pass
    return time.perf_counter() - began


def throughput(repeats: int = 3) -> None:
    """Calls a second: two threads, and two processes at the same time, by turns."""
    ratios, calls = [], 64 * 24
    for repeat in range(repeats):
        pair = [
            subprocess.Popen([sys.executable, __file__, "walks", str(seed)], stdout=subprocess.PIPE,
                             stdin=subprocess.PIPE, text=True)
            for seed in (1, 2)
        ]  # fmt: skip
        for process in pair:  # both are compiled and warm before either begins
            assert process.stdout is not None
            process.stdout.readline()
        for process in pair:
            assert process.stdin is not None
            process.stdin.write("go\n")
            process.stdin.flush()
        apart = [calls / float(process.communicate()[0]) for process in pair]
        threads = Threads(2)
        together = calls / walks(3, threads)
        threads.close()
        alone = calls / walks(3, Serial())
        ratios.append(together / sum(apart))
        print(
            f"  run {repeat + 1}: two threads {together:.0f}, two processes {sum(apart):.0f}, one {alone:.0f} calls/s"
        )
    print(f"two threads reach {100 * float(np.median(ratios)):.0f} % of two processes (median of {repeats}; aim 95)")


def one_size(edge: int) -> None:
    """Seconds per sweep and per round, and peak memory, on a cubic lattice; run in a process of its own."""
    began = time.perf_counter()
    problem = make("lattice3d", edge, seed=1)
    made = time.perf_counter() - began
    search = search_on(problem, "walk", 12, sweeps_per_round=1, ends=Ends(calls=640))
    began = time.perf_counter()
    for _ in search.rounds():
        pass
    per_round = (time.perf_counter() - began) / 10
    replicas, carrying = Replicas.random(problem, 1, 1), Carrying(problem, 1, Serial())
    sweeps, times = max(2, 2_000_000 // len(problem)), []
    for repeat in range(4):
        began = time.perf_counter()
        carrying.sweep(replicas, np.full(1, problem.field_scale / 2), repeat, 0, sweeps)
        times.append((time.perf_counter() - began) / sweeps)
    peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss * 1024
    print(json.dumps({"spins": len(problem), "made": made, "sweep": min(times[1:]), "round": per_round, "peak": peak}))


def sizes() -> None:
    rows = []
    for edge in EDGES:
        run = subprocess.run([sys.executable, __file__, "edge", str(edge)], capture_output=True, text=True, check=True)
        rows.append(json.loads(run.stdout))
        row = rows[-1]
        print(
            f"{row['spins']:>9,} spins: {1e9 * row['sweep'] / row['spins']:6.2f} ns a spin update, "
            f"{1e3 * row['round']:7.2f} ms a round of 64 walks and a sweep, peak memory {row['peak'] / 1e6:5.0f} MB, "
            f"made in {row['made']:.2f} s"
        )
    exponent = np.polyfit(*np.log([[row["spins"] for row in rows], [row["sweep"] for row in rows]]), 1)[0]
    print(f"time per sweep grows as n^{exponent:.3f} (aim: at most 1.1)")


if __name__ == "__main__":
    words = sys.argv[1:]
    if words[:1] == ["edge"]:
        one_size(int(words[1]))
    elif words[:1] == ["walks"]:
        walks(9, Serial(), 64)
        print("ready", flush=True)
        sys.stdin.readline()
        print(walks(int(words[1]), Serial()))
    else:
        if not words or "outside" in words:
            for edge in (32, 100):
                time_outside(edge)
        if not words or "workers" in words:
            throughput()
        if not words or "size" in words:
            sizes()
