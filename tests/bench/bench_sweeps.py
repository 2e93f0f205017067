"""Carrier sweeps against a plain loop over the same lists, interleaved in one run, at equal energies. Prints only.

    python tests/bench/bench_sweeps.py

The plain loop carries local fields along, draws a float64 a decision and calls exp for every rise; its law of
acceptance is the same. Everything is timed over whole coolings (1 to 0.05 in units of the typical local field),
because hot sweeps flip much and cold ones little. Times are the thread's own, so that other work on the machine
counts little; only two threads are held against the clock. Aims, in multiples of the loop and in million updates a
second on one core: one replica at degree 4 / 6 / 48 at least 2.5 / 2 / 1.5 (150 / 120 / 45), 32 replicas together 12
/ 7 / 5 (700 / 400 / 150); two threads 1.8 times one; time per sweep on a cubic lattice as at most n^1.1 from 1e4 to
1e6 spins, and memory well within 2 GB.
"""

from __future__ import annotations

import json
import math
import resource
import subprocess
import sys
import threading
import time
from collections.abc import Callable

import numpy as np

from patchwalk.problem.families import make
from patchwalk.problem.ising import Problem
from patchwalk.search.carrying import Carrying
from patchwalk.search.replicas import Replicas
from patchwalk.search.sweeps import carrier_for, metropolis_sweep
from patchwalk.search.temperature import GeometricCooling
from patchwalk.subsolvers.compiled import compiled
from patchwalk.subsolvers.contract import F64, I8, I32, I64
from patchwalk.subsolvers.draws import call_seeds, seed_for, stream_for
from patchwalk.subsolvers.neighbours import TIE_CHANCE
from patchwalk.workers import Serial, Threads, Workers

RUNS = 6
REPLICAS = 32
EDGES = (22, 46, 100)


@compiled
def plain_sweeps(
    row_starts: I64, neighbours: I32, couplings: F64, spins: I8, local_fields: F64, temperature: float, sweeps: int
) -> None:
    for _ in range(sweeps):
        for spin in range(len(spins)):
            rise = -2.0 * spins[spin] * local_fields[spin]
            if rise < 0.0 or np.random.random() < (TIE_CHANCE if rise == 0.0 else np.exp(-rise / temperature)):
                spins[spin] = -spins[spin]
                for place in range(row_starts[spin], row_starts[spin + 1]):
                    local_fields[neighbours[place]] += 2.0 * spins[spin] * couplings[place]


def random_graph(size: int, degree: int, couplings: str) -> Problem:
    """Every spin with ``degree`` neighbours, less a few doubled ones."""
    draws = np.random.default_rng(1)
    ends = np.concatenate([draws.permutation(size) for _ in range(degree)])
    heads, tails = ends[: len(ends) // 2], ends[len(ends) // 2 :]
    keys = np.minimum(heads, tails) * size + np.maximum(heads, tails)
    _, first = np.unique(keys, return_index=True)
    first = first[heads[first] != tails[first]]
    weights = draws.normal(size=len(first)) if couplings == "gaussian" else draws.choice([-1.0, 1.0], len(first))
    return Problem.from_arrays(heads[first], tails[first], weights, size=size)


def start(problem: Problem, run: int) -> tuple[I8, F64]:
    spins = np.random.default_rng(run).choice(np.array([-1, 1], np.int8), len(problem))
    return spins, problem.local_fields(spins)


def one_by_one(problem: Problem) -> None:
    """One replica, each way in turn, over whole coolings; then 32 replicas together.

    Small problems are swept several times a call, all ways alike, so that it is not Python that is timed.
    """
    per_call = max(1, 10_000 // len(problem))
    calls = max(50, 1_000_000 // len(problem) // per_call)
    cooling = GeometricCooling(1.0, 0.05, problem.field_scale)
    temperatures = [float(cooling.at(call / (calls - 1))[0]) for call in range(calls)]
    graph, carrier = (problem.row_starts, problem.neighbours, problem.couplings), carrier_for(problem)

    def plainly(spins: I8, local: F64, run: int) -> None:
        for temperature in temperatures:
            plain_sweeps(*graph, spins, local, temperature, per_call)

    def listed(spins: I8, local: F64, run: int) -> None:
        for call, temperature in enumerate(temperatures):
            stream = stream_for(run, call)
            for _ in range(per_call):
                metropolis_sweep(*graph, spins, local, temperature, stream)

    def carried(spins: I8, local: F64, run: int) -> None:
        for call, temperature in enumerate(temperatures):
            carrier.sweep(spins, local, temperature, seed_for(run, call), per_call)

    ways: dict[str, Callable[[I8, F64, int], None]] = {
        "plain loop": plainly, "lists": listed, f"one, {carrier.representation}": carried,
    }  # fmt: skip
    seconds, energies = {way: [] for way in ways}, {way: [] for way in ways}
    for run in range(-1, RUNS):
        for way, sweep in ways.items():
            spins, local = start(problem, run + 1)
            began = time.thread_time()
            sweep(spins, local, run)
            if run >= 0:  # the first compiles
                seconds[way].append(time.thread_time() - began)
                energies[way].append(problem.energy(spins))
    for way in ways:
        show(problem, way, len(problem) * calls * per_call, seconds[way], energies[way], seconds["plain loop"])
    together(problem, temperatures, per_call, seconds["plain loop"])


def together(problem: Problem, temperatures: list[float], per_call: int, plain_seconds: list[float]) -> None:
    """All replicas along the same cooling, at least ten sweeps a call, with and without their local fields."""
    carrier, updates = carrier_for(problem), len(problem) * len(temperatures) * per_call
    steps = max(1, 10 // per_call)
    for fields_too in (False, True):
        seconds, energies = [], np.empty(0)
        for run in range(3):
            spins = np.stack([start(problem, 100 * run + row)[0] for row in range(REPLICAS)])
            local = np.stack([problem.local_fields(row) for row in spins]) if fields_too else None
            seeds = [call_seeds(np.uint64(seed_for(run, call)), REPLICAS) for call in range(len(temperatures))]
            carrier.sweep_replicas(spins, local, np.ones(REPLICAS), seeds[0], 0)
            began = time.thread_time()
            for call in range(0, len(temperatures), steps):
                sweeps = per_call * min(steps, len(temperatures) - call)
                carrier.sweep_replicas(spins, local, np.full(REPLICAS, temperatures[call]), seeds[call], sweeps)
            seconds.append((time.thread_time() - began) / REPLICAS)
            energies = np.append(energies, [problem.energy(row) for row in spins])
        words = f"{REPLICAS} together, {steps * per_call} sweeps a call" + ", local fields too" * fields_too
        show(problem, words, updates, seconds, list(energies), plain_seconds)


def show(
    problem: Problem, way: str, updates: int, seconds: list[float], energies: list[float], plain: list[float]
) -> None:
    found = np.array(energies) / len(problem)
    print(
        f"  {way:48} {updates / min(seconds) / 1e6:6.0f} million updates a second, {min(plain) / min(seconds):5.2f} "
        f"times the loop; energy {found.mean():.4f} +- {found.std() / math.sqrt(max(1, len(found) - 1)):.4f}",
        flush=True,
    )


def threads(problem: Problem, sweeps: int = 400) -> None:
    """64 replicas in one thread, and as two halves in two."""
    carrier = carrier_for(problem)
    spins = np.stack([start(problem, row)[0] for row in range(64)])
    seeds, temperatures = np.arange(64, dtype=np.uint64), np.full(64, problem.field_scale)

    def work(own: slice) -> None:
        carrier.sweep_replicas(spins[own], None, temperatures[own], seeds[own], sweeps)

    def spread_over(parts: list[slice]) -> float:
        workers = [threading.Thread(target=work, args=(own,)) for own in parts]
        began = time.perf_counter()
        for worker in workers:
            worker.start()
        for worker in workers:
            worker.join()
        return time.perf_counter() - began

    spread_over([slice(0, 32)])
    ratios = []
    for _ in range(5):
        alone = spread_over([slice(0, 64)])
        ratios.append(alone / spread_over([slice(0, 32), slice(32, 64)]))
    print(f"two threads: {max(ratios):.2f} times one (five tries: {', '.join(f'{ratio:.2f}' for ratio in ratios)})")


def searched(problem: Problem, sweeps: int = 400) -> None:
    """32 replicas, as a search carries them, with one worker and with two threads."""
    temperatures, seconds = np.full(32, problem.field_scale), []
    pools: tuple[Workers, Workers] = (Serial(), Threads(2))
    for number in range(6):
        seconds.append([])
        for workers in pools:
            replicas, carrying = Replicas.random(problem, 32, 1), Carrying(problem, 1, workers)
            carrying.sweep(replicas, temperatures, 0, 0, 1)
            began = time.perf_counter()
            carrying.sweep(replicas, temperatures, number, 0, sweeps)
            seconds[-1].append(time.perf_counter() - began)
    ratios = [alone / shared for alone, shared in seconds[1:]]
    pools[1].close()
    print(f"a search's 32 replicas: two threads {max(ratios):.2f} times one (aim 1.8; "
          f"five tries: {', '.join(f'{ratio:.2f}' for ratio in ratios)})")  # fmt: skip


def one_size(edge: int) -> None:
    """Seconds per sweep and peak memory on a cubic lattice, at equal acceptance; run in a process of its own."""
    problem = make("lattice3d", edge, seed=1)
    began = time.thread_time()
    carrier = carrier_for(problem)
    made = time.thread_time() - began
    (spins, local), temperature = start(problem, 1), 0.5 * problem.field_scale
    carrier.sweep(spins, local, temperature, 0, 50)
    sweeps = max(3, 1_000_000 // len(problem))
    one = least_seconds(lambda seed: carrier.sweep(spins, local, temperature, seed, sweeps)) / sweeps
    peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss * 1024
    many = np.repeat(spins[None], REPLICAS, axis=0)
    warmth, seeds, few = np.full(REPLICAS, temperature), np.arange(REPLICAS, dtype=np.uint64), max(3, sweeps // 8)
    carrier.sweep_replicas(many, None, warmth, seeds, 1)
    lanes = least_seconds(lambda seed: carrier.sweep_replicas(many, None, warmth, seeds + np.uint64(seed), few)) / few
    in_all = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss * 1024
    found = {"spins": len(problem), "made": made, "one": one, "lanes": lanes, "peak": peak, "in_all": in_all}
    print(json.dumps(found))


def least_seconds(work: Callable[[int], object]) -> float:
    """The least of five times."""
    seconds = []
    for attempt in range(5):
        began = time.thread_time()
        work(attempt)
        seconds.append(time.thread_time() - began)
    return min(seconds)


def sizes() -> None:
    rows = []
    for edge in EDGES:
        run = subprocess.run([sys.executable, __file__, str(edge)], capture_output=True, text=True, check=True)
        rows.append(json.loads(run.stdout))
        row = rows[-1]
        print(
            f"{row['spins']:>9,} spins: {1e9 * row['one'] / row['spins']:5.2f} ns an update, in 32 lanes "
            f"{1e9 * row['lanes'] / row['spins'] / 32:5.2f}; carrier made in {row['made']:.2f} s; peak memory "
            f"{row['peak'] / 1e6:.0f} MB, with 32 replicas {row['in_all'] / 1e6:.0f} MB",
            flush=True,
        )
    logs = np.log([[row["spins"], row["one"], row["lanes"]] for row in rows])
    one, lanes = (np.polyfit(logs[:, 0], logs[:, column], 1)[0] for column in (1, 2))
    print(f"time per sweep grows as n^{one:.3f}, in 32 lanes as n^{lanes:.3f}")


CASES: dict[str, Callable[[], Problem]] = {
    "degree 4, square lattice 100 x 100, +-1": lambda: make("lattice2d", 100),
    "degree 4, random graph, 10,000 spins, +-1": lambda: random_graph(10_000, 4, "pm1"),
    "degree 4, random graph, 10,000 spins, Gaussian": lambda: random_graph(10_000, 4, "gaussian"),
    "degree 6, cubic lattice 22^3, +-1": lambda: make("lattice3d", 22),
    "degree 6, cubic lattice 22^3, Gaussian": lambda: make("lattice3d", 22, couplings="gaussian"),
    "degree 48, random graph, 800 spins, +-1": lambda: random_graph(800, 48, "pm1"),
    "degree 48, random graph, 800 spins, Gaussian": lambda: random_graph(800, 48, "gaussian"),
    "all coupled, 500 spins, Gaussian": lambda: make("sk", 500),
}

if __name__ == "__main__":
    if len(sys.argv) > 1:
        one_size(int(sys.argv[1]))
    else:
        for words, problem in CASES.items():
            print(words)
            one_by_one(problem())
        threads(make("lattice3d", 22))
        searched(make("lattice3d", 22))
        searched(make("sk", 500), 40)
        sizes()
