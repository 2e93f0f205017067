"""Bounds and proofs: seconds to a proof, everything included but compiling, on fresh seeds; prints, asserts nothing.

    python tests/bench/bench_bounds.py                       the table of families, and scipy.optimize.milp beside it
    python tests/bench/bench_bounds.py "2D +-J 32" SK        families whose names begin so
    python tests/bench/bench_bounds.py --list                what families there are, and what was aimed at
    python tests/bench/bench_bounds.py 3D --count 3 --first-seed 201
    python tests/bench/bench_bounds.py --beyond              what is beyond the table, ten minutes each
    python tests/bench/bench_bounds.py --beyond --seconds 60
    python tests/bench/bench_bounds.py --clusters            which bound closes the gap of sparse problems

``seconds`` are of the wall, ``processor`` of this process, each least / median / largest; where they differ, the
machine was shared. A run is given three times the aim (``--seconds`` says otherwise).
"""

from __future__ import annotations

import argparse
import os
import statistics
import time
from collections.abc import Callable
from functools import partial
from pathlib import Path
from typing import NamedTuple

import networkx as nx
import numpy as np
from scipy import sparse
from scipy.optimize import Bounds, LinearConstraint, milp

from patchwalk.bounds.clusters import cluster_bound
from patchwalk.bounds.cut_graph import cut_graph
from patchwalk.bounds.dense import semidefinite_bound
from patchwalk.commands.bounding import bounds_for
from patchwalk.problem.families import make
from patchwalk.problem.files import read_problem
from patchwalk.problem.ising import Problem

FIRST_SEED = 101
DENSE = "SK 100 bound"


class Row(NamedTuple):
    """A family, how to make its instances, how many, and the seconds that were aimed at."""

    name: str
    problem: Callable[[int], Problem]
    count: int
    target: float


def from_file(name: str, _: int) -> Problem:
    return read_problem(Path(os.environ["PATCHWALK_INSTANCES"]) / name, kind="maxcut")


def made(family: str, size: int, couplings: str, seed: int) -> Problem:
    return make(family, size, couplings=couplings, seed=seed)


TABLE = (
    Row("2D +-J 32", partial(made, "lattice2d", 32, "pm1"), 10, 3.0),
    Row("2D +-J 50", partial(made, "lattice2d", 50, "pm1"), 10, 20.0),
    Row("2D Gaussian 32", partial(made, "lattice2d", 32, "gaussian"), 10, 3.0),
    Row("2D Gaussian 64", partial(made, "lattice2d", 64, "gaussian"), 10, 40.0),
    Row("G11", partial(from_file, "G11.txt"), 1, 3.0),
    Row("3D +-J 4", partial(made, "lattice3d", 4, "pm1"), 10, 3.0),
    Row("3D +-J 5", partial(made, "lattice3d", 5, "pm1"), 10, 3.0),
    Row("3D +-J 6", partial(made, "lattice3d", 6, "pm1"), 10, 20.0),
    Row("torusg3-8", partial(from_file, "torusg3-8.dat"), 1, 60.0),
    Row("SK 60", partial(made, "sk", 60, "gaussian"), 10, 15.0),
)
BEYOND = (
    Row("2D +-J 64", partial(made, "lattice2d", 64, "pm1"), 3, 600.0),
    Row("toruspm3-8-50", partial(from_file, "toruspm3-8-50.dat"), 1, 600.0),
    Row("SK 80", partial(made, "sk", 80, "gaussian"), 3, 600.0),
)


def measure(row: Row, count: int, first_seed: int, allowance: float) -> None:
    """A line: how many were proved, and the seconds that took; the gap of those that were not."""
    seconds, processor, gaps, nodes, proofs = [], [], [], [], []
    for seed in range(first_seed, first_seed + count):
        problem = row.problem(seed)
        compile_began = time.process_time()
        bounds_for(problem, 1e-3)
        began, compiled = time.process_time(), time.process_time() - compile_began
        found = bounds_for(problem, allowance)
        processor.append(time.process_time() - began - min(compiled, found.compile_seconds))
        seconds.append(found.seconds)
        nodes.append(found.nodes)
        proofs.append(found.status == "proved_optimal")
        if not proofs[-1]:
            gaps.append(found.gap)
    in_time = sum(proved and took <= row.target for proved, took in zip(proofs, seconds, strict=True))
    print(
        f"{row.name:16} proved {count - len(gaps)} of {count}, within {row.target:g} s: {in_time}; "
        f"seconds {spread(seconds)}; processor {spread(processor)}; nodes up to {max(nodes)}"
        + (f"; largest gap left {100 * max(gaps):.3f} %" if gaps else ""),
        flush=True,
    )


def spread(values: list[float]) -> str:
    """The smallest, the median and the largest."""
    return f"{min(values):.2f} / {statistics.median(values):.2f} / {max(values):.2f}"


def dense_bounds(count: int, first_seed: int) -> None:
    """The semidefinite bound of SK n = 100 alone: how far below the optimum of its program, and how soon."""
    seconds, apart = [], []
    semidefinite_bound(make("sk", 100, seed=1))
    for seed in range(first_seed, first_seed + count):
        problem = make("sk", 100, seed=seed)
        began = time.perf_counter()
        bound = semidefinite_bound(problem)
        seconds.append(time.perf_counter() - began)
        apart.append(100 * (bound.semidefinite_value - bound.lower_bound) / abs(bound.semidefinite_value))
    reached = sum(s <= 0.5 and far <= 0.1 for s, far in zip(seconds, apart, strict=True))
    print(
        f"{DENSE:16} within 0.1 % and 0.5 s: {reached} of {count}; seconds {spread(seconds)}; at most "
        f"{max(apart):.5f} % below the optimum of the program",
        flush=True,
    )


def crowded(size: int, seed: int) -> Problem:
    """Spins in a square, couplings of one sign to about eight near ones, fields."""
    draw = np.random.default_rng(seed)
    graph = nx.random_geometric_graph(size, (8.0 / (np.pi * size)) ** 0.5, seed=seed)
    heads, tails = np.array(graph.edges).T
    fields = 0.5 * draw.standard_normal(size)
    return Problem.from_arrays(heads, tails, draw.random(len(heads)), size=size, fields=fields)


def bounds_at_equal_time() -> None:
    """What each bound leaves of the gap in as long as overlapping clusters take; 0 where it is closed."""
    demo = Path(__file__).resolve().parents[2] / "configs" / "quillmere.csv"
    with_fields = {"couplings": "gaussian", "fields": True, "seed": FIRST_SEED}
    for name, problem in (
        ("demo", read_problem(demo)),
        ("beacons 150", make("beacons", 150, seed=FIRST_SEED)),
        ("crowded 400", crowded(400, FIRST_SEED)),
        ("crowded 1000", crowded(1000, FIRST_SEED)),
        ("2D 16, fields", make("lattice2d", 16, **with_fields)),
        ("3D 6, fields", make("lattice3d", 6, **with_fields)),
        ("regular 200", make("regular", 200, degree=3, **with_fields)),
    ):
        for method in ("cycles", "clusters"):
            bounds_for(problem, 1e-3, method=method)
        overlapping, taken = timed_clusters(problem)
        by_cycles = bounds_for(problem, taken, method="cycles")
        chosen = bounds_for(problem, taken)
        best = min(by_cycles.energy, chosen.energy)
        gaps = [100 * max(0.0, best - bound) / abs(best) for bound in (
            overlapping, by_cycles.lower_bound, chosen.lower_bound)]  # fmt: skip
        print(
            f"{name:14} in {taken:6.2f} s: clusters of 10 leave {gaps[0]:.4f} %, cycles {gaps[1]:.4f} %, "
            f"bound by itself {gaps[2]:.4f} % ({chosen.certificate.method}, {chosen.seconds:.2f} s)",
            flush=True,
        )


def timed_clusters(problem: Problem) -> tuple[float, float]:
    """The bound by overlapping clusters of ten, and its seconds."""
    began = time.perf_counter()
    return cluster_bound(problem).lower_bound, time.perf_counter() - began


def against_milp(size: int) -> None:
    """The same lattice by ``scipy.optimize.milp``: y_e <= x_u, y_e <= x_v, y_e >= x_u + x_v - 1."""
    problem = make("lattice2d", size, seed=FIRST_SEED)
    graph = cut_graph(problem)
    spins, count = len(problem), len(graph.heads)
    e, one = np.arange(count), np.ones(count)
    rows = np.concatenate([e, e, count + e, count + e, 2 * count + e, 2 * count + e, 2 * count + e])
    columns = np.concatenate([spins + e, graph.heads, spins + e, graph.tails, graph.heads, graph.tails, spins + e])
    values = np.concatenate([one, -one, one, -one, one, one, -one])
    matrix = sparse.csr_array((values, (rows, columns)), shape=(3 * count, spins + count))
    limits = np.concatenate([np.zeros(2 * count), one])
    costs = np.concatenate([-2.0 * np.asarray(problem.matrix.sum(axis=1)).ravel(), 4.0 * graph.weights])
    began = time.perf_counter()
    theirs = milp(costs, constraints=LinearConstraint(matrix, -np.inf, limits), bounds=Bounds(0, 1), integrality=1)
    taken = time.perf_counter() - began
    ours = bounds_for(problem, 60.0)
    agree = abs(theirs.fun + graph.weights.sum() - ours.energy) < 1e-6
    print(
        f"{size} x {size} +-J: milp {taken:.2f} s, here {ours.seconds:.3f} s, ratio {taken / ours.seconds:.0f}; "
        f"{'the same energy' if agree else 'ENERGIES DIFFER'}",
        flush=True,
    )


def main() -> None:
    reader = argparse.ArgumentParser(description="Seconds to a proof; prints, asserts nothing.")
    reader.add_argument("families", nargs="*", help="only families whose names begin so")
    reader.add_argument("--list", action="store_true", help="name the families and end")
    reader.add_argument("--beyond", action="store_true", help="what is beyond the table")
    reader.add_argument("--clusters", action="store_true", help="bounds of sparse problems at equal time")
    reader.add_argument("--count", type=int, help="so many instances of each family, 10 at most")
    reader.add_argument("--first-seed", type=int, default=FIRST_SEED, help="seeds from here on")
    reader.add_argument("--seconds", type=float, help="as long for each run, instead of three times the aim")
    told = reader.parse_args()
    if told.clusters:
        bounds_at_equal_time()
        return
    for row in BEYOND if told.beyond else TABLE:
        if told.families and not any(row.name.startswith(word) for word in told.families):
            continue
        count = min(row.count, told.count or row.count)
        if told.list:
            print(f"{row.name:16} {count} instances, aim {row.target:g} s")
            continue
        measure(row, count, told.first_seed, told.seconds or (1.0 if told.beyond else 3.0) * row.target)
    if told.list:
        print(f"{DENSE:16} 10 instances, aim 0.1 % below the optimum of the program in 0.5 s")
    if told.list or told.beyond:
        return
    if not told.families or any(DENSE.startswith(word) for word in told.families):
        dense_bounds(told.count or 10, told.first_seed)
    if not told.families:
        against_milp(8)
        against_milp(10)


if __name__ == "__main__":
    main()
